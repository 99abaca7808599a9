from __future__ import annotations

import asyncio
from collections.abc import Callable
from dataclasses import replace
from typing import Any

import pytest

from benchkit.errors import InstrumentError
from benchkit.events import (
    Closed,
    Decided,
    Event,
    Judged,
    Noted,
    OutputOff,
    ReadingMissed,
    ReadingTaken,
    Resumed,
    StopAsked,
    SupplySet,
    Waited,
)
from benchkit.keeper.protocol import KeeperDied, Push
from benchkit.procedure.actions import Question
from benchkit.session.front import Reply
from benchkit.session.job import only_done
from tests.procedure.driver import OPENED, small
from tests.session.fakes import TROUBLE, FakeFront, Run, hang_at, on, quick_predictions, well


@pytest.fixture(autouse=True)
def quick(monkeypatch: pytest.MonkeyPatch) -> None:
    quick_predictions(monkeypatch)


def replayed(run: Run) -> None:
    """The record gives the same state again, times aside."""
    state, _ = small().replay([(event, 0.0) for event in run.keeper.kept])
    assert replace(state, since_s=0.0) == replace(run.session.state, since_s=0.0)


async def until(true: Callable[[], bool]) -> None:
    for _ in range(5000):
        if true():
            return
        await asyncio.sleep(0.002)
    raise AssertionError("it never came to that")


# -- well -----------------------------------------------------------------------------------------------------------


def test_a_whole_walk() -> None:
    run = Run()
    closed = run.go()
    assert (closed.verdict, closed.exit_status) == ("pass", 0)
    assert closed == run.keeper.kept[-1]
    assert closed.count == len(run.keeper.kept) - 1
    assert not run.keeper.on
    assert run.front.views[-1].exit_status == 0
    assert run.front.views[-1].kept == len(run.keeper.kept)
    assert run.keeper.log[0] == "arm"
    assert run.keeper.beats >= 1
    replayed(run)


def test_what_is_shown_is_kept() -> None:
    """No picture counts a line, or shows a result, that is not in the record yet."""
    run = Run()
    behind: list[str] = []

    class Front(FakeFront):
        def show(self, view: Any) -> None:
            super().show(view)
            judged = [event for event in run.keeper.kept if isinstance(event, Judged)]
            if view.kept > len(run.keeper.kept) or len(view.results) > len(judged):
                behind.append(view.item)

    run.front = Front()
    run.go()
    assert behind == []
    counts = [view.kept for view in run.front.views]
    assert counts == sorted(counts)


def test_hands_do_what_they_are_told() -> None:
    run = Run()
    run.go()
    leads = [("connect", False), ("short", True), ("short", False), ("connect", True)]
    assert run.bench.acts == [("trimmer", "least"), *leads]
    assert run.bench.seconds > 60.0


def test_the_truth_of_a_rehearsal_stands_before_the_last_line() -> None:
    run = Run()
    run.go()
    noted = run.keeper.kept[-2]
    assert isinstance(noted, Noted)
    assert noted.figures == {"highest_rail_v": 10.0}


def test_ramps_rise_together_under_watch_and_never_above_the_step() -> None:
    run = Run()
    run.go()
    log = run.keeper.log
    assert log[1:5] == ["no watch", "set", "set", "no watch"]  # the limit check: not watched, it is meant to limit
    first_ramp = log.index("watch")
    assert log[first_ramp - 2 : first_ramp] == ["no watch", "set"]
    sets = run.keeper.sets
    assert all(positive == pytest.approx(-negative) for positive, negative, _ in sets)
    items = {item.id: item for item in small().plan.items}
    kept = [event for event in run.keeper.kept if isinstance(event, SupplySet)]
    assert [event.item for event in kept] == [
        "limit.check", "power.on", "power.full", "bias.clip.again.power", "bias.room",
    ]  # fmt: skip
    most_v = max(positive for positive, _, _ in sets)
    assert most_v == pytest.approx(max(items[event.item].positive_v for event in kept))
    start = sets.index((0.0, 0.0, 0.02))
    rising = [positive for positive, _, limit_a in sets[start:] if limit_a == 0.02]
    end = next(i for i, volts in enumerate(rising) if volts == pytest.approx(10.0))
    assert rising[: end + 1] == sorted(rising[: end + 1])
    assert len(rising[: end + 1]) > 4


def test_the_limit_is_there_before_the_volts() -> None:
    run = Run()
    run.go()
    assert run.keeper.sets[0][:2] == (0.0, 0.0)
    assert run.keeper.sets[0][2] == pytest.approx(0.05)


# -- off ------------------------------------------------------------------------------------------------------------


def test_off_goes_to_the_keeper_at_once() -> None:
    run = Run()
    seen: list[bool] = []

    def press() -> None:
        run.session.off_now("F9")
        seen.append(run.keeper.offs[-1] == "F9" and not run.keeper.on)

    run.front.answer = hang_at("power.output-first.output", press)
    closed = run.go()
    assert seen == [True]
    assert (closed.exit_status, closed.verdict) == (4, "undecided")
    assert run.front.taken_back == ["power.output-first.output"]
    assert any(isinstance(event, StopAsked) for event in run.keeper.kept)
    assert not run.keeper.on
    replayed(run)


def test_off_in_the_middle_of_a_wait() -> None:
    run = Run()

    def press() -> None:
        if run.session.state.phase == "waiting" and run.keeper.on:
            run.session.off_now()

    run.keeper.on_sample = press
    closed = run.go()
    assert closed.exit_status == 4
    assert not any(isinstance(event, Waited) and event.item == "bias.soak" for event in run.keeper.kept)


def test_off_in_the_middle_of_a_ramp_sets_nothing_after_it() -> None:
    run = Run()
    sets_at_off: list[int] = []

    def press() -> None:
        if run.session.state.phase == "setting" and run.keeper.positive_v > 5.0 and not sets_at_off:
            sets_at_off.append(len(run.keeper.sets))
            run.session.off_now()

    run.keeper.on_sample = press
    closed = run.go()
    assert closed.exit_status == 4
    assert len(run.keeper.sets) == sets_at_off[0]


@pytest.mark.parametrize("times", [2, 5])
def test_pressing_again_and_again_ends_too(times: int) -> None:
    run = Run()
    pressed = 0

    async def answer(question: Question, refused: str) -> Reply | None:
        nonlocal pressed
        if run.keeper.on or (pressed and pressed < times):
            pressed += 1
            run.session.off_now()
        return None

    run.front.answer = answer
    assert run.go().exit_status == 4
    assert pressed >= 2


def test_an_off_that_crosses_an_answer_asks_again() -> None:
    """The answer was not kept, because the keeper wrote "output off" first, which changes nothing on the way out."""
    run = Run()
    crossed: list[Event] = []

    def cross(event: Event) -> None:
        if event.name == "answered" and getattr(event, "item", "") == "made-safe.unplug" and not crossed:
            crossed.append(event)
            run.keeper.off("pressed a second time")

    run.keeper.before_append = cross
    assert run.go().exit_status == 0
    assert crossed
    assert [question.item for question in run.front.questions].count("made-safe.unplug") == 2
    replayed(run)


def test_make_safe_as_an_answer() -> None:
    run = Run()
    run.front.answer = on("power.ready", Reply(choice="make safe"))
    closed = run.go()
    assert closed.exit_status == 4
    assert "Ready?" in closed.stopped
    assert all(limit_a == pytest.approx(0.05) for _, _, limit_a in run.keeper.sets)  # never beyond the limit check


def test_an_off_that_nobody_confirmed_is_asked_for_by_hand() -> None:
    run = Run()
    run.keeper.confirmed = False

    def press() -> None:
        run.session.off_now()

    run.front.answer = hang_at("power.ready", press)
    run.go()
    titles = [question.title for question in run.front.questions if question.kind == "by hand"]
    assert titles
    assert all("switch it off by hand" in title for title in titles)


# -- the keeper's own events ----------------------------------------------------------------------------------------


def test_a_trip_takes_the_question_back() -> None:
    run = Run()
    run.front.answer = hang_at("bias.trim.emitter.upper.1", run.keeper.trip)
    closed = run.go()
    assert closed.exit_status == 4
    assert closed.stopped == "tripped: rail+ in its limit"
    assert run.front.taken_back == ["bias.trim.emitter.upper.1"]
    names = run.names()
    assert names.index("tripped") < names.index("output off", names.index("tripped"))
    replayed(run)


def test_a_trip_while_a_reading_is_being_kept_comes_first() -> None:
    run = Run()
    tripped: list[int] = []

    def trip(event: Event) -> None:
        if isinstance(event, ReadingTaken) and event.item == "power.output-first.output" and not tripped:
            tripped.append(1)
            run.keeper.trip()

    run.keeper.before_append = trip
    closed = run.go()
    assert closed.exit_status == 4
    items = {getattr(event, "item", "") for event in run.keeper.kept if isinstance(event, ReadingTaken | Judged)}
    assert "power.output-first.output" not in items
    replayed(run)


def test_a_supply_that_is_lost_while_it_is_watched() -> None:
    run = Run()

    def lose() -> None:
        if run.session.state.phase == "waiting" and "sample" not in run.keeper.fail:
            run.keeper.fail["sample"] = TROUBLE
            run.keeper.confirmed = False
            run.keeper.lose_supply()

    run.keeper.on_sample = lose
    closed = run.go()
    assert closed.exit_status == 3
    assert "the supply" in closed.stopped
    replayed(run)


def test_an_event_that_could_not_be_kept_ends_the_run_with_off() -> None:
    run = Run()

    def lose_disk() -> None:
        event = OutputOff(reason="r", confirmed=True, how="h")
        run.session.on_push(Push(event=event, seq=None, problem="no space left"))

    run.front.answer = hang_at("power.output-first.output", lose_disk)
    with pytest.raises(InstrumentError, match="no space left"):
        run.go()
    assert not run.keeper.on


@pytest.mark.parametrize(("confirmed", "words"), [(True, "read it back as off"), (False, "OUTPUT STATE UNKNOWN")])
def test_a_keeper_that_dies(confirmed: bool, words: str) -> None:
    run = Run()

    def die() -> None:
        run.keeper.confirmed = confirmed
        run.session.on_push(KeeperDied(problem="gone"))

    run.front.answer = hang_at("power.output-first.output", die)
    with pytest.raises(InstrumentError, match=words) as caught:
        run.go()
    assert "after death" in run.keeper.log
    assert "--resume" in str(caught.value)


@pytest.mark.parametrize("told", [True, False])
def test_a_request_that_outruns_the_news_of_the_keepers_death_says_the_same(told: bool) -> None:
    """The reading fails before anybody says why; the person hears of the keeper and of the supply all the same."""
    run = Run()

    def before(event: Event) -> None:
        if event.name == "reading taken":
            run.keeper.alive = False
            if told:
                run.session.pushed.append(KeeperDied(problem="killed"))
            raise InstrumentError("link lost", "The keeper of the instruments has gone")

    run.keeper.before_append = before
    with pytest.raises(InstrumentError, match="keeper of the instruments has ended") as caught:
        run.go()
    assert ("killed" in str(caught.value)) == told
    assert "read it back as off" in str(caught.value)
    assert "--resume" in str(caught.value)


def test_whatever_goes_wrong_the_supply_is_asked_to_switch_off() -> None:
    run = Run()

    async def answer(question: Question, refused: str) -> Reply | None:
        if question.item == "power.output-first.output":
            raise ZeroDivisionError
        return None

    run.front.answer = answer
    with pytest.raises(ZeroDivisionError):
        run.go()
    assert "ZeroDivisionError" in run.keeper.offs[-1]
    assert not run.keeper.on


def test_a_run_that_is_cancelled_switches_off() -> None:
    run = Run()

    async def whole() -> None:
        task = asyncio.create_task(run.run())
        await until(lambda: run.keeper.on and run.session.state.phase == "placing")
        task.cancel()
        with pytest.raises(asyncio.CancelledError):
            await task

    run.front.answer = hang_at("power.output-first.output", lambda: None)
    asyncio.run(whole())
    assert not run.keeper.on


# -- answers that can't be used -------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("item", "reply", "words"),
    [
        ("look.parts", Reply(choice="maybe"), "'maybe' is no answer here"),
        ("power.ready", Reply(choice="yes", text="y"), "type the word yes"),
        ("power.ready", Reply(choice="yes"), "type the word yes"),
        ("cold.least", Reply(choice="yes"), "no answer here"),
    ],
)
def test_an_answer_that_is_none_is_asked_for_again(item: str, reply: Reply, words: str) -> None:
    run = Run()
    run.front.answer = on(item, reply)
    assert run.go().exit_status == 0
    (refused,) = run.front.refused
    assert words in refused
    replayed(run)


def test_going_on_wants_a_reason() -> None:
    run = Run()
    run.keeper.values["emitter.upper.1"] = 0.1
    run.front.answer = on(
        "bias.trim.emitter.upper.1", Reply(choice="take"), Reply(choice="go on"), Reply(choice="go on", text="known")
    )
    closed = run.go()
    assert (closed.verdict, closed.exit_status) == ("fail", 1)
    assert run.front.refused == ["A reason in words is needed to go on."]
    decided = [event for event in run.keeper.kept if isinstance(event, Decided)]
    assert [(event.choice, event.reason) for event in decided] == [("go on", "known")]


def test_what_the_walk_does_not_take_never_reaches_the_record() -> None:
    run = Run()

    async def whole() -> None:
        session = run.make()
        session.state, _ = small().handle(session.state, OPENED, 0.0)
        session.seq = 1
        assert await session._keep(Waited(item="bench", seconds=1.0)) == ()
        assert "was told 'waited'" in session.moment.message

    asyncio.run(whole())
    assert run.names() == ["walk opened"]


# -- instruments ----------------------------------------------------------------------------------------------------


def test_a_meter_that_is_mute_is_no_crash() -> None:
    run = Run()
    run.keeper.fail["read"] = TROUBLE

    async def answer(question: Question, refused: str) -> Reply | None:
        if question.kind == "decide":
            run.keeper.fail.pop("read", None)
        return None

    run.front.answer = answer
    assert run.go().exit_status == 0
    missed = [event for event in run.keeper.kept if isinstance(event, ReadingMissed)]
    assert len(missed) == 1
    assert "did not answer" in missed[0].problem


def test_instruments_that_are_not_there() -> None:
    run = Run()
    run.keeper.fail["connect"] = TROUBLE
    run.front.answer = on("bench", Reply(choice="again"), Reply(choice="make safe"))
    closed = run.go()
    assert closed.exit_status == 3
    assert run.names().count("bench missing") == 2


def test_a_supply_that_refuses() -> None:
    run = Run()
    run.keeper.fail["set"] = InstrumentError("refused", "The supply says -222")
    closed = run.go()
    assert closed.exit_status == 3
    assert "-222" in closed.stopped


# -- the trim -------------------------------------------------------------------------------------------------------


def test_a_trim_shows_what_the_screw_does() -> None:
    run = Run()
    run.keeper.values["emitter.upper.1"] = 0.01
    turns: list[float] = []

    async def answer(question: Question, refused: str) -> Reply | None:
        if question.kind != "trim":
            return None
        live = run.front.views[-1].live
        assert live is not None
        assert live.inside == (live.low <= run.keeper.values["emitter.upper.1"] <= live.high)
        if live.inside:
            return Reply(choice="take")
        turns.append(0.5)
        run.keeper.values["emitter.upper.1"] += 0.0123
        return Reply(choice="turn", turns=0.5)

    run.front.answer = answer
    assert run.go().exit_status == 0
    assert run.bench.turned == pytest.approx(sum(turns))
    assert len(turns) == 3
    assert len([view for view in run.front.views if view.live is not None]) >= 4


def test_a_trim_that_cannot_be_reached() -> None:
    run = Run()
    run.keeper.values["emitter.upper.1"] = 0.01
    trim = "bias.trim.emitter.upper.1"
    run.front.answer = on(trim, Reply(choice="end", text="click"), Reply(choice="make safe"))
    closed = run.go()
    assert (closed.verdict, closed.exit_status) == ("fail", 1)


# -- by hand --------------------------------------------------------------------------------------------------------


def by_hand(run: Run, typed: dict[str, list[str]]) -> None:
    left = {item: iter(texts) for item, texts in typed.items()}
    volts = {item.id: item for item in small().plan.items}

    async def answer(question: Question, refused: str) -> Reply | None:
        if question.kind != "by hand" or ("by hand" not in question.title and "Type what" not in question.title):
            if question.kind == "by hand":
                return Reply(choice="take", text="47 mV")
            return None
        if only_done(question):
            return Reply(choice="done")
        text = next(left.get(question.item, iter(())), None)
        item = volts[question.item]
        if text is None and question.title.startswith("Set the supply"):
            if item.kind == "limit check":
                text = "0.1 V 50 mA -0.1 V 50 mA limit"
            else:
                text = f"{item.positive_v} V 12 mA {item.negative_v} V 12 mA"
        if text is None:
            text = {"ohm.rails": "0.5 ohm", "ohm.spreader.lower": "0.5 ohm"}.get(
                question.point, "12 mA" if "current" in question.point else "0 V"
            )
        return Reply(choice="done", text=text)

    run.front.answer = answer


def test_a_walk_by_hand() -> None:
    run = Run(manual=True, opened=replace(OPENED, supply="manual", meter="manual"))
    by_hand(run, {})
    closed = run.go()
    assert (closed.verdict, closed.exit_status) == ("pass", 0)
    assert run.keeper.offs == []
    assert run.keeper.sets == []
    offs = [event for event in run.keeper.kept if isinstance(event, OutputOff)]
    assert offs
    assert not any(event.confirmed for event in offs)
    cautions = " ".join(question.caution for question in run.front.questions)
    assert "Nothing switches this supply off but your hand" in cautions
    asked = [question for question in run.front.questions if question.kind == "by hand"]
    rails = [question for question in asked if question.title.startswith("Set the supply")]
    assert {question.do.split(". ")[0].split(",")[0] for question in rails} == {"Output off", "The output stays on"}
    currents = [question for question in asked if question.point.endswith(".current")]
    assert currents
    for question in currents:
        assert "the supply's own display" in question.title
        assert "Meter" not in question.do
        assert not question.red
    replayed(run)


def test_a_wrong_entry_is_asked_for_again() -> None:
    run = Run(manual=True, opened=replace(OPENED, supply="manual", meter="manual"))
    by_hand(run, {"cold.rails.ohm.rails": ["many", "5 V", "0.5 ohm"], "power.full": ["10 V", "10 V 12 mA -10 V 12 mA"]})
    assert run.go().exit_status == 0
    assert len(run.front.refused) == 3
    assert "many" in run.front.refused[0]


def test_off_by_hand_is_a_stop_without_a_keeper() -> None:
    run = Run(manual=True, opened=replace(OPENED, supply="manual", meter="manual"))
    by_hand(run, {})
    answer = run.front.answer
    pressed: list[str] = []

    async def press(question: Question, refused: str) -> Reply | None:
        if question.item == "power.output-first.output" and not pressed:
            pressed.append("F9")
            run.session.off_now("F9")
            await asyncio.sleep(60)
        assert answer is not None
        return await answer(question, refused)

    run.front.answer = press
    assert run.go().exit_status == 4
    assert any("Switch the supply off by hand" in question.title for question in run.front.questions)


# -- going on -------------------------------------------------------------------------------------------------------


def test_a_walk_that_was_cut_off_goes_on() -> None:
    first = Run()

    async def cut_off() -> None:
        task = asyncio.create_task(first.run())
        await until(lambda: first.keeper.on and first.session.state.phase == "waiting")
        task.cancel()
        with pytest.raises(asyncio.CancelledError):
            await task

    asyncio.run(cut_off())
    kept = first.keeper.kept

    async def go_on() -> Closed:
        again = Run()
        again.keeper.kept = list(kept)
        session = again.make()
        session.state, _ = small().replay([(event, 0.0) for event in kept])
        session.seq = session.state.count
        closed = await asyncio.wait_for(session.run(Resumed(operator="Ida")), 20.0)
        names = again.names()[len(kept) :]
        assert names[:3] == ["resumed", "bench found", "output off"]
        before = [view for view in again.front.views if any(result.from_before for result in view.results)]
        assert before
        assert again.front.questions[0].item == "cold.least"
        return closed

    closed = asyncio.run(go_on())
    assert (closed.verdict, closed.exit_status) == ("pass", 0)


def test_the_fake_front_answers_every_kind() -> None:
    run = Run()
    run.go()
    kinds = {question.kind for question in run.front.questions}
    assert kinds == {"confirm", "tell", "text", "probes", "hold", "trim"}
    assert all(
        well(question).choice in {choice.value for choice in question.choices} for question in run.front.questions
    )


@pytest.mark.parametrize("on_at_first", [False, True])
def test_a_supply_that_was_found_on_is_told_of_as_long_as_the_walk_goes_on(on_at_first: bool) -> None:
    run = Run()
    run.keeper.on = on_at_first
    run.go()
    told = [view for view in run.front.views if "output was ON when benchkit found it" in view.message]
    assert bool(told) == on_at_first
    if on_at_first:
        assert {"look.parts", "bias.soak"} <= {view.item for view in told}
