"""What the model is asked aside holds nobody up, whatever it does."""

from __future__ import annotations

import asyncio
import threading
import time
from collections.abc import Iterator, Sequence
from typing import Any

import pytest

from benchkit.events import Judged, Narrowed, OutputOff, ReadingTaken, Suspected
from benchkit.procedure.actions import Narrow, Question, Suspect, Target
from benchkit.session import run as session_run
from benchkit.session import this_unit
from benchkit.session.aside import Aside
from benchkit.session.front import Reply
from tests.procedure.driver import narrowed, suspected
from tests.session.fakes import Run, hang_at, on, quick_predictions

CURRENT = "power.current.rail+.current"
OUTPUT = "power.output-first.output"


@pytest.fixture(autouse=True)
def quick(monkeypatch: pytest.MonkeyPatch) -> None:
    quick_predictions(monkeypatch)


class Slow:
    """A model that takes its time: it answers when it is let go."""

    def __init__(self, answer: Any) -> None:
        self.go = threading.Event()
        self.asked: list[Any] = []
        self.answer = answer

    def narrow(self, action: Narrow, targets: Sequence[Target]) -> Narrowed:
        self.asked.append(action)
        self.go.wait(10.0)
        found = self.answer(action)
        assert isinstance(found, Narrowed)
        return found

    def suspect(self, design: object, action: Suspect) -> Suspected:
        self.asked.append(action)
        self.go.wait(10.0)
        found = self.answer(action)
        assert isinstance(found, Suspected)
        return found


@pytest.fixture
def slow_limits(monkeypatch: pytest.MonkeyPatch) -> Iterator[Slow]:
    slow = Slow(narrowed)
    monkeypatch.setattr(this_unit.Narrower, "narrow", slow.narrow)
    yield slow
    slow.go.set()


@pytest.fixture
def impatient(monkeypatch: pytest.MonkeyPatch) -> None:
    """The end of the walk waits for suspects no longer than a moment."""
    monkeypatch.setattr(session_run, "SUSPECTS_S", 0.2)


@pytest.fixture
def slow_suspects(monkeypatch: pytest.MonkeyPatch) -> Iterator[Slow]:
    slow = Slow(lambda action: suspected(action, "output.upper.1: open", probes=["spread"]))
    monkeypatch.setattr(this_unit, "suspect", slow.suspect)
    yield slow
    slow.go.set()


def failing(run: Run, *more: Reply | None) -> None:
    """Make the output fail; the first answers to what to do about it are these."""
    run.keeper.values["output"] = 99.0
    run.front.answer = on(OUTPUT, None, *more)


# -- narrowing ------------------------------------------------------------------------------------------------------


def test_readings_go_on_while_limits_are_being_narrowed(slow_limits: Slow) -> None:
    run = Run()
    closed = run.go()
    assert closed.verdict == "pass"
    assert len(slow_limits.asked) == 1, "one at a time, and nobody waited for it"
    assert "narrowed" not in run.names()
    assert sum(isinstance(event, ReadingTaken) for event in run.keeper.kept) >= 5


def test_an_answer_that_comes_late_is_kept_and_used_from_then_on(slow_limits: Slow) -> None:
    run = Run()
    slow_limits.answer = lambda action: narrowed(action, 0.4, 0.6)

    async def answer(question: Question, refused: str) -> Reply | None:
        if question.item == "power.ready":
            slow_limits.go.set()
            while "narrowed" not in run.names():
                await asyncio.sleep(0.01)
        return None

    run.front.answer = answer
    assert run.go().verdict == "pass"
    judged = [event for event in run.keeper.kept if isinstance(event, Judged) and event.subject == "output"]
    assert (judged[0].unit_low, judged[0].unit_high, judged[0].odd) == (0.4, 0.6, True)
    assert any(view.aim is not None and view.aim.unit_text for view in run.front.views)
    state, _ = run.session.job.walk.replay([(event, 0.0) for event in run.keeper.kept])
    assert state.narrowed == run.session.state.narrowed


def test_the_newest_question_supersedes_those_that_wait(slow_limits: Slow) -> None:
    run = Run()

    async def answer(question: Question, refused: str) -> Reply | None:
        if question.item == "bias.clip.clip":
            slow_limits.go.set()
            while sum(name == "narrowed" for name in run.names()) < 2:
                await asyncio.sleep(0.01)
        return None

    run.front.answer = answer
    run.go()
    assert [len(action.known) for action in slow_limits.asked][:2] == [1, 3], "the second of three never had its turn"


def test_a_model_that_breaks_is_said_to_and_no_more(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.undo()
    quick_predictions(monkeypatch)
    monkeypatch.setattr(this_unit.Narrower, "narrow", _ORIGINAL_NARROW)
    monkeypatch.setattr("benchkit.stage.narrowing.Narrowing", _broken)
    run = Run()
    assert run.go().verdict == "pass"
    problems = [event.problem for event in run.keeper.kept if isinstance(event, Narrowed)]
    assert problems
    assert set(problems) == {"it made an error of its own, ZeroDivisionError"}


_ORIGINAL_NARROW = this_unit.Narrower.narrow


def _broken(*arguments: object) -> None:
    raise ZeroDivisionError


def test_who_reads_faster_than_the_model_thinks_is_told_once_for_each_section() -> None:
    run = Run()
    session = run_made(run)
    answers: list[str] = []

    async def script() -> None:
        lane = Aside(session.job, lambda: None)
        for action in NARROWS:
            lane.ask(action)
            while lane.narrowing:
                await asyncio.sleep(0.005)
        lane.stop()
        answers.extend(event.item for event in lane.ready)  # type: ignore[attr-defined]

    session.job.narrow_rarely = True
    asyncio.run(script())
    assert answers == ["a.1", "b.2"]


def run_made(run: Run) -> Any:
    async def make() -> Any:
        return run.make()

    return asyncio.run(make())


def _target(key: str, point: str) -> Target:
    return Target(key=key, conditions=(), point=point, unit="V")


NARROWS = (
    Narrow(item="a.1", after=1, known=(), near=(_target("k", "x"), _target("l", "x")), later=(_target("m", "x"),)),
    Narrow(item="a.2", after=2, known=(), near=(_target("l", "x"),)),
    Narrow(item="b.1", after=3, known=(), near=(), later=(_target("m", "x"),)),
    Narrow(item="b.2", after=4, known=(), near=(_target("m", "x"),)),
)


# -- suspects -------------------------------------------------------------------------------------------------------


@pytest.mark.usefixtures("slow_suspects", "impatient")
def test_the_question_stands_while_suspects_are_worked_out_and_can_be_answered() -> None:
    run = Run()
    failing(run, Reply(choice="make safe"))
    began = time.monotonic()
    closed = run.go()
    assert closed.verdict == "fail"
    assert time.monotonic() - began < 8.0
    question = next(question for question in run.front.questions if question.kind == "decide")
    assert [choice.value for choice in question.choices] == ["again", "make safe"], "as without any model"
    working = [view for view in run.front.views if view.suspects is not None and view.suspects.working]
    assert working


@pytest.mark.usefixtures("slow_suspects", "impatient")
def test_off_works_while_suspects_are_worked_out() -> None:
    run = Run()
    run.keeper.values["output"] = 99.0
    seen: list[bool] = []

    def press() -> None:
        run.session.off_now("F9")
        seen.append(run.keeper.offs[-1] == "F9" and not run.keeper.on)

    async def answer(question: Question, refused: str) -> Reply | None:
        if question.kind == "decide":
            assert run.front.views[-1].suspects is not None
            press()
            await asyncio.sleep(60)
        return None

    run.front.answer = answer
    closed = run.go()
    assert seen == [True]
    assert closed.exit_status == 4


def test_the_extra_reading_is_offered_taken_and_kept(slow_suspects: Slow) -> None:
    slow_suspects.go.set()
    run = Run()
    run.keeper.values.update({"output": 99.0, "spread": 0.5})
    asked: list[list[str]] = []

    async def answer(question: Question, refused: str) -> Reply | None:
        if question.kind != "decide":
            return None
        choices = [choice.value for choice in question.choices]
        asked.append(choices)
        if "probe" in choices and len(run.session.state.extras) == 0:
            return Reply(choice="probe")
        if "probe" in choices or len(run.session.state.extras):
            return Reply(choice="make safe")
        await asyncio.sleep(60)
        return None

    run.front.answer = answer
    closed = run.go()
    assert asked[0] == ["again", "make safe"]
    assert asked[1] == ["again", "make safe", "probe"]
    assert closed.verdict == "fail"
    extra = next(e for e in run.keeper.kept if isinstance(e, ReadingTaken) and "extra" in e.item)
    assert extra.reading.point == "spread"
    assert run.bench.point is not None
    assert sum(name == "suspected" for name in run.names()) >= 1
    state, _ = run.session.job.walk.replay([(event, 0.0) for event in run.keeper.kept])
    assert [item.id for item in state.extras] == ["power.extra-1.spread"]


def test_the_end_waits_for_suspects_with_the_supply_off(slow_suspects: Slow) -> None:
    run = Run()
    failing(run, Reply(choice="make safe"))

    async def let_go() -> None:
        while run.session.state.phase != "closing":
            await asyncio.sleep(0.005)
        assert not run.keeper.on
        await asyncio.sleep(0.05)
        slow_suspects.go.set()

    async def both() -> None:
        running = asyncio.create_task(run.run())
        while not hasattr(run, "session"):
            await asyncio.sleep(0.001)
        await asyncio.gather(let_go(), running)

    asyncio.run(both())
    assert run.names()[-3:] == ["suspected", "noted", "closed"] or run.names()[-2:] == ["suspected", "closed"]


def test_a_line_of_the_keepers_own_comes_first(slow_limits: Slow) -> None:
    """An answer that meets a trip on its way into the record is kept behind it, or not at all."""
    slow_limits.go.set()
    run = Run()
    tripped: list[str] = []

    def before_append(event: Any) -> None:
        if isinstance(event, Narrowed) and not tripped and run.keeper.on:
            tripped.append("now")
            run.keeper.trip()

    run.keeper.before_append = before_append
    closed = run.go()
    names = run.names()
    assert closed.exit_status == (4 if tripped else 0)
    if tripped:
        at = names.index("tripped")
        assert names[at + 1] == "output off"
        assert any(isinstance(event, OutputOff) for event in run.keeper.kept)
    state, _ = run.session.job.walk.replay([(event, 0.0) for event in run.keeper.kept])
    assert state.closed == closed


def test_hanging_questions_and_answers_do_not_mix(slow_suspects: Slow) -> None:
    """Suspects that come when the operator has gone on already move nothing."""
    run = Run()
    run.keeper.values["output"] = 99.0

    async def answer(question: Question, refused: str) -> Reply | None:
        if question.kind == "decide" and question.item == OUTPUT:
            while not slow_suspects.asked:  # else the next question supersedes it before it has begun
                await asyncio.sleep(0.005)
            run.keeper.values["output"] = 0.0
            return Reply(choice="again")
        if question.item == "bias.clip.clip":
            slow_suspects.go.set()
            while "suspected" not in run.names():
                await asyncio.sleep(0.005)
        return None

    run.front.answer = answer
    slow_suspects.answer = lambda action: suspected(action, "healthy")
    closed = run.go()
    assert closed.verdict == "pass"
    assert [len(action.known) for action in slow_suspects.asked] == [3, 3]
    assert run.names().count("suspected") == 1, "the first answer was superseded by the better reading"


def test_after_a_trip_the_model_is_asked_although_the_supply_goes_off_in_the_same_breath() -> None:
    """Trip and off come together; what the trip asks aside isn't lost to what the off asks for."""
    run = Run()
    run.front.answer = hang_at("bias.trim.emitter.upper.1", run.keeper.trip)
    closed = run.go()
    assert closed.stopped == "tripped: rail+ in its limit"
    names = run.names()
    assert "suspected" in names[names.index("tripped") :]
    assert not run.session.state.suspecting
    assert not any(view.suspects is not None and view.suspects.working for view in run.front.views[-1:])
