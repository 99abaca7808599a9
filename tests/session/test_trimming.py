from __future__ import annotations

import asyncio
from collections.abc import Callable
from dataclasses import replace
from typing import Any

import pytest

from benchkit.events import Event, ReadingTaken, SupplyState, TrimEnded, Tripped
from benchkit.instruments.meter import RawReading
from benchkit.judge.trust import RailLine
from benchkit.procedure.actions import Question, Trim
from benchkit.procedure.questions import END, STOP, TAKE
from benchkit.session import advising, predictions, trimming
from benchkit.session.front import LiveView, Reply
from benchkit.session.hands import Hands
from benchkit.session.predictions import Screw
from benchkit.stage.conditions import Condition
from tests.session.fakes import Answer, FakeFront, Run, done, quick_predictions

POINT = "emitter.upper.1"
TARGET_V = 0.022
SCREW = Screw(per_turn=0.016, full=TARGET_V, knee=0.03, settled_share=1.0, more_way="anticlockwise", turns=12.0)
WARM = Condition(positive_v=15.0, negative_v=-15.0, trimmer="target", when="warm")
QUESTION = Question(item="bias.trim", kind="trim", title="Trim", do="Turn.", choices=(TAKE, END, STOP))
TRIM = Trim(
    item="bias.trim", question=QUESTION, point=POINT, function="dc volts", unit="V", target=TARGET_V, low=0.0198,
    high=0.0242, condition=WARM,
)  # fmt: skip


@pytest.fixture(autouse=True)
def no_model(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(predictions, "screw_of", lambda *arguments: SCREW)
    monkeypatch.setattr(predictions, "time_constants", lambda design: (60.0, 8.0))
    monkeypatch.setattr(trimming, "INTERVAL_S", 0.02)
    monkeypatch.setattr(predictions, "rail_line", lambda *arguments: None)


@pytest.fixture
def agreeing(monkeypatch: pytest.MonkeyPatch) -> None:
    """The model's line goes through the supply's 12 mA at what these benches read."""
    line = RailLine(standing_a=0.007, per_unit=0.005 / 0.0221)
    monkeypatch.setattr(predictions, "rail_line", lambda *arguments: line)


async def waits(question: Question, refused: str) -> Reply | None:
    await asyncio.sleep(60.0)
    return None


class Bench(Run):
    """A trim over the fakes; `value` gives the drop at a time (s), or None for an overload."""

    def __init__(self, value: Callable[[float], float | None], answer: Answer = waits, **changes: Any) -> None:
        super().__init__(manual=changes.pop("manual", False))
        self.value = value
        self.front = FakeFront(answer)
        self.action = replace(TRIM, **changes)
        self.keeper.read = self.read  # type: ignore[method-assign]
        self.keeper.on = True

    def read(self, function: str, range: float | None = None, samples: int = 1) -> Any:
        shown = self.value(self.bench.seconds)
        if shown is None:
            return done(RawReading(value=None, function=function, meter="a meter", values=(), overload=True))
        return done(RawReading(value=shown, function=function, meter="a meter", values=(shown,) * samples))

    def trim(self, prepare: Callable[[Any], None] = lambda session: None) -> Event | None:
        async def whole() -> Event | None:
            session = self.make()
            session.job.narrow_rarely = True
            prepare(session)
            event = await asyncio.wait_for(trimming.trim(session, self.action), 30.0)
            await asyncio.sleep(0)
            return event

        return asyncio.run(whole())

    @property
    def lives(self) -> list[LiveView]:
        return [view.live for view in self.front.views if view.live is not None]


def takes_after(bench: Bench, seconds: float) -> Answer:
    """A hand that takes the reading when so much time (s) has passed."""

    async def answer(question: Question, refused: str) -> Reply | None:
        while bench.bench.seconds < seconds:
            await asyncio.sleep(0.001)
        return Reply(choice="take")

    return answer


@pytest.fixture(autouse=True)
def quicker(monkeypatch: pytest.MonkeyPatch) -> None:
    """In simulated time nothing has to wait for a person who says nothing."""
    monkeypatch.setattr(asyncio, "wait", _impatient(asyncio.wait))


def _impatient(wait: Any) -> Any:
    async def impatient(tasks: Any, *, timeout: float | None = None, **more: Any) -> Any:
        return await wait(tasks, timeout=None if timeout is None else min(timeout, 0.002), **more)

    return impatient


# -- without a hand on the keyboard -----------------------------------------------------------------------------------


@pytest.mark.usefixtures("agreeing")
def test_a_reading_at_rest_in_the_middle_is_taken_by_itself() -> None:
    bench = Bench(lambda t_s: 0.0221, samples=4)
    event = bench.trim()
    assert isinstance(event, ReadingTaken)
    assert event.how == "by itself, at rest for 2.0 s"
    assert event.reading.samples == 4
    assert 1.7 <= bench.bench.seconds <= 15.0  # warm: what it will rest at has to be known too
    assert bench.session.captured == 1
    assert [live.captured for live in bench.lives][-1] == 1
    assert any(live.capture.startswith("at rest ") for live in bench.lives)
    assert len(bench.front.taken_back) == 1


@pytest.mark.parametrize(
    ("value", "why"),
    [
        (lambda t_s: 0.0221 + 2e-4 * t_s if t_s < 9.0 else 0.03, "it drifts"),
        (lambda t_s: 0.0201, "it is inside, but far from the middle"),
        (lambda t_s: 0.0300, "it is outside"),
        (lambda t_s: None, "there is no number"),
        (lambda t_s: 0.0221 + 0.004 * (-1) ** round(t_s / 0.25), "it jumps like a lead in the air"),
    ],
)
def test_nothing_is_taken_by_itself_while(value: Callable[[float], float | None], why: str) -> None:
    bench = Bench(value)

    async def answer(question: Question, refused: str) -> Reply | None:
        while bench.bench.seconds < 8.0:
            await asyncio.sleep(0.001)
        return Reply(choice="end", text=why)

    bench.front.answer = answer
    event = bench.trim()
    assert isinstance(event, TrimEnded), why
    assert bench.session.captured == 0


@pytest.mark.parametrize(
    ("value", "rested", "words"),
    [
        (lambda t_s: 0.0198, None, "2.2 mV below the target: "),
        (lambda t_s: 0.0206, None, "1.4 mV below the target: "),
        (lambda t_s: 0.0199 + 1e-6 * t_s, 0.0154, "hold: it is still rising"),
        (lambda t_s: 0.0221, 0.0195, "will rest 1"),
    ],
    ids=["at the limit", "inside", "rises to the target", "will rest elsewhere"],
)
def test_nothing_is_taken_by_itself_away_from_the_target(
    monkeypatch: pytest.MonkeyPatch, value: Callable[[float], float], rested: float | None, words: str
) -> None:
    screw = replace(SCREW, settled_share=1.9)
    monkeypatch.setattr(predictions, "screw_of", lambda *arguments: screw)
    bench = Bench(value)

    bench.front.answer = takes_after(bench, 8.0)
    event = bench.trim(lambda session: setattr(session, "rested", None if rested is None else (POINT, rested)))
    assert isinstance(event, ReadingTaken)
    assert event.how == "by key"
    assert any(words in live.advice for live in bench.lives), bench.lives[-1].advice


def test_a_meter_that_leaves_the_tolerance_open_takes_nothing_by_itself() -> None:
    bench = Bench(lambda t_s: 0.0221, low=0.02199, high=0.02201, target=0.022)
    bench.value = lambda t_s: 0.022

    bench.front.answer = takes_after(bench, 5.0)
    event = bench.trim()
    assert isinstance(event, ReadingTaken)
    assert event.how == "by key"
    assert "too near the limit for this meter: space takes it" in {live.capture for live in bench.lives}


@pytest.mark.usefixtures("agreeing")
def test_no_hands_free_and_no_bell() -> None:
    async def answer(question: Question, refused: str) -> Reply | None:
        while bench.bench.seconds < 6.0:
            await asyncio.sleep(0.001)
        return Reply(choice="take")

    bench = Bench(lambda t_s: 0.0221, answer)

    def prepare(session: Any) -> None:
        session.job.hands_free = False

    event = bench.trim(prepare)
    assert isinstance(event, ReadingTaken)
    assert event.how == "by key"
    assert {live.capture for live in bench.lives} == {""}
    quiet = Bench(lambda t_s: 0.0221)

    def no_bell(session: Any) -> None:
        session.job.bell = False

    quiet.trim(no_bell)
    assert quiet.session.captured == 0


def test_a_key_takes_it_at_once_whatever_it_is() -> None:
    async def answer(question: Question, refused: str) -> Reply | None:
        return Reply(choice="take")

    bench = Bench(lambda t_s: 0.0400, answer)
    event = bench.trim()
    assert isinstance(event, ReadingTaken)
    assert event.reading.value == pytest.approx(0.04)
    assert bench.bench.seconds <= 0.5


def test_a_slip_is_told_and_the_reading_taken_when_it_is_back() -> None:
    bench = Bench(lambda t_s: None if 1.0 <= t_s < 3.0 else 0.0221)
    event = bench.trim()
    assert isinstance(event, ReadingTaken)
    assert bench.bench.seconds > 4.0
    gone = [live for live in bench.lives if live.mood == "gone"]
    assert gone
    assert {live.capture for live in gone} == {"probe not on the point"}


# -- advice -----------------------------------------------------------------------------------------------------------


def test_a_hand_that_turns_by_the_number_on_the_screen_arrives() -> None:
    from benchkit.judge.screw import Scale

    scale = Scale(target=TARGET_V, knee=0.03, floor=1e-9)
    drop = [6e-5]
    bench = Bench(lambda t_s: drop[0])
    seen = [0]

    async def answer(question: Question, refused: str) -> Reply | None:
        live = bench.lives[-1]
        if live.advised_turns is None or len(bench.lives) == seen[0]:
            return Reply(choice="turn", turns=0.0)
        seen[0] = len(bench.lives)
        u = scale.even(drop[0]) + 1.2 * live.advised_turns * 0.016 * scale.steepness(TARGET_V)
        drop[0] = scale.value_at(u)
        return Reply(choice="turn", turns=live.advised_turns)

    bench.front.answer = answer
    event = bench.trim()
    assert isinstance(event, ReadingTaken)
    assert abs(drop[0] - TARGET_V) < 0.0012
    assert max(live.value or 0.0 for live in bench.lives) < 0.0242
    assert "anticlockwise" in bench.lives[2].advice


def test_supply_folded_back_is_said() -> None:
    bench = Bench(lambda t_s: 0.015)

    def sample(elapsed_s: float) -> Any:
        return done(SupplyState(output_on=True, positive_a=0.05, positive_in_limit=True))

    bench.keeper.sample = sample  # type: ignore[method-assign]

    async def answer(question: Question, refused: str) -> Reply | None:
        while not any(live.mood == "folded back" for live in bench.lives):
            await asyncio.sleep(0.001)
        return Reply(choice="end")

    bench.front.answer = answer
    bench.trim()
    assert "the supply is in its limit" in bench.lives[-1].advice


def test_what_had_come_to_rest_is_not_turned_all_the_way_at_once(monkeypatch: pytest.MonkeyPatch) -> None:
    """A warm move does more once all has come to rest; the hand stops short of the target, and it creeps there."""
    monkeypatch.setattr(predictions, "screw_of", lambda *arguments: replace(SCREW, settled_share=1.45))
    drop = [0.0153]
    bench = Bench(lambda t_s: drop[0])

    async def answer(question: Question, refused: str) -> Reply | None:
        live = bench.lives[-1]
        if live.advised_turns is not None:
            drop[0] += 0.010 * live.advised_turns
        return Reply(choice="turn", turns=live.advised_turns or 0.0)

    bench.front.answer = answer

    def prepare(session: Any) -> None:
        session.rested = (POINT, 0.0153)

    event = bench.trim(prepare)
    assert isinstance(event, ReadingTaken)
    assert event.reading.value is not None
    assert 0.0198 < event.reading.value < 0.0217
    assert bench.session.rested is None


@pytest.mark.parametrize(("settled", "rested"), [(1.0, 0.01), (1.45, 0.0), (1.45, 0.022), (2.0, 0.03)])
def test_a_move_settles_between_what_it_does_at_once_and_what_the_model_says(settled: float, rested: float) -> None:
    share = advising.settled_share(replace(SCREW, settled_share=settled), rested)
    assert 1.0 <= share <= settled


@pytest.mark.usefixtures("agreeing")
def test_a_cold_pre_set_is_right_as_it_reads_now() -> None:
    bench = Bench(lambda t_s: 0.0221, condition=replace(WARM, when="cold"))
    event = bench.trim(lambda session: setattr(session, "rested", (POINT, 0.010)))
    assert isinstance(event, ReadingTaken)


# -- other ends -------------------------------------------------------------------------------------------------------


def test_a_drop_that_runs_away_trips() -> None:
    import math

    bench = Bench(lambda t_s: 0.0225 + 0.0012 * math.expm1(t_s / 12.0))

    def prepare(session: Any) -> None:
        session.job.hands_free = False

    event = bench.trim(prepare)
    assert event is None
    assert "rises by itself" in bench.keeper.offs[0]
    assert any(isinstance(push, Tripped) for push in bench.session.pushed)


def test_a_trip_stands_in_the_record_and_ends_the_walk(monkeypatch: pytest.MonkeyPatch) -> None:
    quick_predictions(monkeypatch)
    monkeypatch.undo()
    quick_predictions(monkeypatch)
    run = Run()
    tripped: list[str] = []

    async def answer(question: Question, refused: str) -> Reply | None:
        if question.kind == "trim" and not tripped:
            tripped.append(question.item)
            run.session.trip(predictions.runaway(POINT, "V", 0.03, 0.0242))
            await asyncio.sleep(60)
        return None

    run.front.answer = answer
    closed = run.go()
    assert closed.exit_status == 4
    assert "rises by itself" in closed.stopped
    names = run.names()
    assert names.count("tripped") == 1
    assert "output off" in names
    assert not run.keeper.on


def test_by_hand_the_words_come_after_each_entry() -> None:
    typed = iter(["10.1 mV", "15.2 mV", "26.0 mV", "22.1 mV"])

    async def answer(question: Question, refused: str) -> Reply | None:
        return Reply(choice="take", text=next(typed))

    bench = Bench(lambda t_s: 0.0, answer, manual=True)
    event = bench.trim()
    assert isinstance(event, ReadingTaken)
    assert event.reading.value == pytest.approx(0.0221)
    said = [question.do for question in bench.front.questions]
    assert "anticlockwise" in said[1]
    assert "too far" in said[3]
    assert bench.front.questions[0].kind == "by hand"


@pytest.mark.parametrize(
    ("typed", "taken_v"),
    [
        (("19.9 mV", "21.5 mV"), 0.0215),  # inside, but not by as much as this meter is unsure: the screw goes on
        (("24.1 mV", "22.9 mV"), 0.0229),
        (("23.0 mV",), 0.023),
    ],
)
def test_by_hand_a_reading_at_the_very_limit_does_not_end_the_trim(typed: tuple[str, ...], taken_v: float) -> None:
    entries = iter(typed)

    async def answer(question: Question, refused: str) -> Reply | None:
        return Reply(choice="take", text=next(entries))

    bench = Bench(lambda t_s: 0.0, answer, manual=True)
    event = bench.trim()
    assert isinstance(event, ReadingTaken)
    assert event.reading.value == pytest.approx(taken_v)
    said = [question.do for question in bench.front.questions]
    assert len(said) == len(typed)
    for words in said[1:]:
        assert "too near the limit for this meter" in words
        assert "leave it" not in words


def test_by_hand_a_meter_that_can_never_tell_still_ends_a_trim_near_the_target() -> None:
    entries = iter(["21.5 mV", "22.0 mV"])

    async def answer(question: Question, refused: str) -> Reply | None:
        return Reply(choice="take", text=next(entries))

    bench = Bench(lambda t_s: 0.0, answer, manual=True, low=0.0218, high=0.0224)
    event = bench.trim()
    assert isinstance(event, ReadingTaken)
    assert event.reading.value == pytest.approx(0.022)


def test_a_rails_current_is_trimmed_by_the_supply(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(predictions, "screw_of", lambda *arguments: replace(SCREW, per_turn=0.07, full=0.1, knee=0.1))
    bench = Bench(
        lambda t_s: 1 / 0, point="rail+.current", function="dc current", unit="A", target=0.1, low=0.09, high=0.11
    )
    state = SupplyState(output_on=True, positive_a=0.1004, negative_a=0.1)
    bench.keeper.supply_state = lambda: done(state)  # type: ignore[method-assign]
    bench.keeper.sample = lambda elapsed_s: done(state)  # type: ignore[method-assign]
    event = bench.trim()
    assert isinstance(event, ReadingTaken)
    assert event.reading.meter == "the supply"
    assert event.reading.unit == "A"


def test_a_real_bench_reads_on_while_nobody_answers() -> None:
    """At the wall clock the picture follows each reading, and the supply is looked at beside them."""
    from benchkit.session.clock import WallClock

    bench = Bench(lambda t_s: 0.03)
    bench.hands = Hands(None)

    def prepare(session: Any) -> None:
        session.clock = WallClock()

    async def answer(question: Question, refused: str) -> Reply | None:
        await asyncio.sleep(0.8)
        return Reply(choice="end")

    bench.front.answer = answer
    bench.trim(prepare)
    assert len(bench.lives) >= 10


# -- is it the point at all -------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("value", "by_itself"),
    [
        (lambda t_s: 0.0221, False),
        (lambda t_s: None if t_s < 1.5 else 0.0221, True),
        (lambda t_s: None if 2.0 <= t_s < 2.2 else 0.0221, False),
    ],
    ids=["it has only ever stood there", "the probe came", "one overload"],
)
def test_a_live_trim_takes_nothing_by_itself_before_it_knows_the_point(
    value: Callable[[float], float | None], by_itself: bool
) -> None:
    bench = Bench(value, condition=replace(WARM, when="cold"))

    bench.front.answer = takes_after(bench, 10.0)
    event = bench.trim()
    assert isinstance(event, ReadingTaken)
    assert event.how.startswith("by itself" if by_itself else "by key")
    said = any("no current speaks for it: space takes it" in live.capture for live in bench.lives)
    assert said or by_itself


def test_a_current_of_another_bias_speaks_for_nothing(monkeypatch: pytest.MonkeyPatch) -> None:
    line = RailLine(standing_a=0.011, per_unit=0.005 / 0.0221)
    monkeypatch.setattr(predictions, "rail_line", lambda *arguments: line)
    bench = Bench(lambda t_s: 0.0221, condition=replace(WARM, when="cold"))

    bench.front.answer = takes_after(bench, 8.0)
    event = bench.trim()
    assert isinstance(event, ReadingTaken)
    assert event.how == "by key"


def test_by_hand_a_fall_is_typed_again_and_a_negative_reading_is_no_advice() -> None:
    typed = iter(["18.0 mV", "9.5 mV", "-9.5 mV", "9.6 mV", "22.1 mV"])

    async def answer(question: Question, refused: str) -> Reply | None:
        return Reply(choice="take", text=next(typed))

    bench = Bench(lambda t_s: 0.0, answer, manual=True)
    assert isinstance(bench.trim(), ReadingTaken)
    said = [question.do for question in bench.front.questions]
    assert "type what they read" in said[2]
    assert "negative" in said[3]
    assert "anticlockwise" in said[4]
