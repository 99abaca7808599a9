from __future__ import annotations

import asyncio
from collections.abc import Callable, Iterator
from typing import Any

import pytest

from benchkit.errors import InstrumentError
from benchkit.events import Answered, ReadingTaken
from benchkit.instruments.meter import RawReading
from benchkit.judge.limits import Limits
from benchkit.procedure.actions import Ask, Choice, Question, Read
from benchkit.session import asking, capturing, measuring
from benchkit.session.front import LiveView, Reply
from benchkit.session.hands import Hands
from tests.procedure.driver import small
from tests.session.fakes import FakeFront, Run, done

STEP_S = 0.1
ITEM = next(item for item in small().plan.items if item.point is not None and item.kind == "measure" and item.powered)
assert ITEM.point is not None
NAME = ITEM.point.name
QUESTION = Question(
    item=ITEM.id, kind="probes", title="Place them", do="Red, black.", point=NAME,
    choices=(Choice(value="done", label="Done"), Choice(value="make safe", label="Stop")),
)  # fmt: skip
LIMITS = Limits(0.018, 0.026, 0.022, "V", "the model")

Values = Iterator[float | Exception | None]


class ReadClock:
    """A clock that moves on by a step with each reading."""

    own_watch = True

    def __init__(self) -> None:
        self.now_s = 0.0
        self.spent_s = 0.0

    def now(self) -> float:
        return self.now_s

    async def spend(self, seconds: float) -> None:
        self.spent_s += seconds


class Bench(Run):
    """One question of a walk over the fakes, while a real hand moves real probes."""

    def __init__(self, values: Values, limits: Limits | None = LIMITS, keyed_after: int = 10_000) -> None:
        super().__init__()
        self.hands = Hands(None)
        self.values, self.limits = values, limits
        self.clock = ReadClock()
        self.reads = 0

        async def answer(question: Question, refused: str) -> Reply | None:
            while self.reads < keyed_after:
                await asyncio.sleep(0)
            return Reply(choice="done")

        self.front = FakeFront(answer)
        self.keeper.read = self.read  # type: ignore[method-assign]

    def read(self, function: str, range: float | None = None, samples: int = 1) -> Any:
        self.reads += 1
        self.clock.now_s += STEP_S
        value = next(self.values)
        if isinstance(value, Exception):
            return done(value)
        if value is None:
            return done(RawReading(value=None, function=function, meter="m", values=(), overload=True))
        return done(RawReading(value=value, function=function, meter="m", values=(value,) * samples))

    def ask(self, monkeypatch: pytest.MonkeyPatch, prepare: Callable[[Any], None] = lambda session: None) -> Any:
        """Put the question; then take the reading as the walk does."""
        monkeypatch.setattr(capturing, "INTERVAL_S", 0.0)
        monkeypatch.setattr(capturing, "RETRY_S", 0.0)

        async def whole() -> tuple[Any, Any]:
            session = self.make()
            session.clock = self.clock
            walk = session.job.walk
            monkeypatch.setattr(type(walk), "item", lambda walk, state: ITEM)
            monkeypatch.setattr(type(walk), "limits_for", lambda walk, state, item: self.limits)
            prepare(session)
            answered = await asyncio.wait_for(asking.ask(session, Ask(item=ITEM.id, question=QUESTION)), 20.0)
            read = Read(item=ITEM.id, point=NAME, function="dc volts", unit="V")
            return answered, await measuring.read(session, read)

        return asyncio.run(whole())

    @property
    def lives(self) -> list[LiveView]:
        return [view.live for view in self.front.views if view.live is not None]


def sequence(*parts: tuple[int, float | Exception | None]) -> Values:
    for many, value in parts:
        for n in range(many):
            yield value + 1e-6 * (n % 3) if isinstance(value, float) else value
    while True:
        yield parts[-1][1]


def test_a_value_is_taken_when_the_probes_have_moved_and_it_rests(monkeypatch: pytest.MonkeyPatch) -> None:
    bench = Bench(sequence((8, 0.0002), (6, None), (60, 0.0221)))
    answered, taken = bench.ask(monkeypatch)
    assert answered == Answered(item=ITEM.id, choice="done", text="by itself: at rest for 2.0 s")
    assert isinstance(taken, ReadingTaken)
    assert taken.how == "by itself: at rest for 2.0 s"
    assert taken.reading.value == pytest.approx(0.0221, abs=1e-5)
    assert bench.session.captured == 1
    assert bench.clock.spent_s == 0.0  # at rest already: nothing is waited for again
    assert 28 <= bench.reads <= 40
    words = [live.capture for live in bench.lives]
    assert "probe not on the point" in words
    assert any(one.startswith("at rest ") for one in words)


@pytest.mark.parametrize(
    ("values", "limits", "words"),
    [
        (sequence((60, 0.0221)), LIMITS, "the probes have not moved yet"),
        (sequence((6, None), (60, 0.0300)), LIMITS, "outside the limits: space takes it"),
        (sequence((6, None), (60, 0.025995)), LIMITS, "too near the limit for this meter"),
        (sequence((60, None)), LIMITS, "probe not on the point"),
        (sequence((6, None), (60, 0.001)), Limits(-0.05, 0.05, 0.0, "V", "the model"), "a lead in the air"),
    ],
    ids=["not moved", "outside", "at the limit", "in the air", "zero inside"],
)
def test_what_is_never_taken_by_itself(
    monkeypatch: pytest.MonkeyPatch, values: Values, limits: Limits, words: str
) -> None:
    bench = Bench(values, limits, keyed_after=50)
    answered, taken = bench.ask(monkeypatch)
    assert answered == Answered(item=ITEM.id, choice="done", text="")
    assert bench.session.captured == 0
    assert words in bench.lives[-1].capture
    assert getattr(taken, "how", "") == ""


def test_a_point_that_reads_like_the_one_before_is_seen_to_be_another_by_the_way_there(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    bench = Bench(sequence((10, 0.0221), (6, 1e-6), (60, 0.0220)))
    answered, _ = bench.ask(monkeypatch)
    assert answered.text
    assert bench.reads > 30


def test_a_meter_that_does_not_answer_leaves_it_to_the_key(monkeypatch: pytest.MonkeyPatch) -> None:
    trouble = InstrumentError("timeout", "The meter did not answer")
    bench = Bench(sequence((60, trouble)))

    async def answer(question: Question, refused: str) -> Reply | None:
        while not any("no reading by itself here" in view.message for view in bench.front.views):
            await asyncio.sleep(0)
        return Reply(choice="done")

    bench.front.answer = answer
    answered, _ = bench.ask(monkeypatch)
    assert answered.text == ""
    assert bench.reads == capturing.MOST_FAILURES + 1  # the last one is for the key


def test_a_meter_that_fails_now_and_then_is_asked_again(monkeypatch: pytest.MonkeyPatch) -> None:
    trouble = InstrumentError("timeout", "The meter did not answer")
    some = capturing.MOST_FAILURES - 1
    bench = Bench(sequence((some, trouble), (8, 0.0002), (some, trouble), (6, None), (60, 0.0221)))
    answered, taken = bench.ask(monkeypatch)
    assert answered.text == "by itself: at rest for 2.0 s"
    assert taken.reading.value == pytest.approx(0.0221, abs=1e-5)
    assert any("asked again" in view.message for view in bench.front.views)


@pytest.mark.parametrize(
    ("change", "possible"),
    [
        (lambda session: None, True),
        (lambda session: setattr(session.job, "hands_free", False), False),
        (lambda session: session.job.setup.update(meter=None), False),
        (lambda session: setattr(session, "hands", Hands(session.keeper.bench)), False),
    ],
    ids=["real hands", "not wanted", "by hand", "simulated hands"],
)
def test_where_it_is_possible(monkeypatch: pytest.MonkeyPatch, change: Callable[[Any], None], possible: bool) -> None:
    bench = Bench(sequence((1, 0.0)))

    async def whole() -> bool:
        session = bench.make()
        monkeypatch.setattr(type(session.job.walk), "item", lambda walk, state: ITEM)
        change(session)
        return capturing.possible(session, QUESTION)

    assert asyncio.run(whole()) is possible
