"""A keeper, a bench and a front end that live in memory, for the session's tests."""

from __future__ import annotations

import asyncio
import itertools
from collections.abc import Awaitable, Callable, Sequence
from concurrent.futures import Future
from pathlib import Path
from typing import Any

from benchkit.errors import InstrumentError
from benchkit.events import (
    Closed,
    ContactLost,
    Event,
    Narrowed,
    OutputOff,
    Predicted,
    SupplyState,
    Tripped,
    WalkOpened,
)
from benchkit.instruments.meter import RawReading
from benchkit.keeper.protocol import KeeperDied, Kept, Push, WatchLines
from benchkit.measure.accuracy import HANDHELD, STATED_DEFAULT
from benchkit.procedure.actions import Narrow, Predict, Question, Target
from benchkit.procedure.file import parse_procedure
from benchkit.session import predictions, this_unit
from benchkit.session.clock import SimulatedClock
from benchkit.session.front import Reply, View
from benchkit.session.hands import Hands
from benchkit.session.job import Job, only_done
from benchkit.session.run import Session
from benchkit.stage.design import Design
from tests.procedure.driver import OPENED, SMALL, judged, limits_of, small, suspected
from tests.stage.designs import breadboard

GOOD_VALUES = {
    "ohm.spreader.lower": 0.5, "ohm.rails": 0.5, "output": 0.0, "emitter.upper.1": 0.047, "rail+": 0.0, "rail-": 0.0,
    "rails": 0.0,
}  # fmt: skip


def done(value: Any) -> Future[Any]:
    future: Future[Any] = Future()
    if isinstance(value, Exception):
        future.set_exception(value)
    else:
        future.set_result(value)
    return future


class FakeBench:
    """What hands move: probes, the leads' short, the unit's plug, simulated time."""

    def __init__(self) -> None:
        self.point: str | None = None
        self.shorted = False
        self.acts: list[tuple[str, Any]] = []
        self.turned = 0.0
        self.seconds = 0.0
        self.faulty: list[str] = []

    def probe(self, point: str | None) -> None:
        self.point = point

    def turn(self, turns: float) -> None:
        self.turned += turns

    def trimmer_to(self, position: str | float) -> None:
        self.acts.append(("trimmer", position))

    def connect(self, on: bool) -> None:
        self.acts.append(("connect", on))

    def short(self, on: bool) -> None:
        self.acts.append(("short", on))
        self.shorted = on

    def drive(self, share: float) -> None:
        self.acts.append(("drive", share))

    def repair(self) -> None:
        self.acts.append(("repair", None))

    def clear_protection(self) -> None:
        self.acts.append(("clear protection", None))

    def advance(self, seconds: float) -> None:
        self.seconds += seconds

    def truth(self) -> dict[str, Any]:
        return {"highest_rail_v": 10.0, "plant": "", "faulty": self.faulty}


class FakeKeeper:
    """Keeps events in a list and plays supply and meter."""

    def __init__(self, bench: FakeBench, walk_opened: WalkOpened) -> None:
        self.bench = bench
        self.kept: list[Event] = [walk_opened]
        self.on_push: Callable[[Push | KeeperDied], None]
        self.on = False
        self.positive_v = self.negative_v = self.limit_a = 0.0
        self.sets: list[tuple[float, float, float]] = []
        self.protections: list[tuple[tuple[float, float] | None, bool]] = []
        self.ramps: list[tuple[float, float, float, WatchLines | None]] = []
        self.minded: list[float | None] = []
        self.caution = ""
        self.log: list[str] = []
        self.values = dict(GOOD_VALUES)
        self.offs: list[str] = []
        self.beats = 0
        self.confirmed = True
        self.alive = True
        self.fail: dict[str, Exception] = {}
        self.before_append: Callable[[Event], None] = lambda event: None
        self.on_sample: Callable[[], None] = lambda: None

    # -- the journal

    def append(self, event: Event, after: int) -> Future[Kept]:
        self.before_append(event)
        if after != len(self.kept):
            return done(Kept(seq=len(self.kept), moved_on=True))
        self.kept.append(event)
        return done(Kept(seq=len(self.kept)))

    def push(self, event: Event) -> None:
        self.kept.append(event)
        self.on_push(Push(event=event, seq=len(self.kept)))

    # -- minding

    def arm(self) -> Future[None]:
        self.log.append("arm")
        return done(None)

    def heartbeat(self) -> None:
        self.beats += 1

    # -- the instruments

    def connect(self, setup: dict[str, Any]) -> Future[dict[str, str | None]]:
        if "connect" in self.fail:
            return done(self.fail["connect"])
        return done({"meter": setup["meter"] and "a meter", "supply": setup["supply"] and "a supply"})

    def state(self) -> SupplyState:
        short = self.on and self.bench.shorted
        return SupplyState(
            output_on=self.on,
            positive_v=0.0 if short or not self.on else self.positive_v,
            negative_v=0.0 if short or not self.on else self.negative_v,
            positive_a=self.limit_a if short else 0.012 if self.on else 0.0,
            negative_a=self.limit_a if short else 0.012 if self.on else 0.0,
            set_positive_v=self.positive_v,
            set_negative_v=self.negative_v,
            limit_a=self.limit_a,
            positive_in_limit=short,
            negative_in_limit=short,
        )

    def supply_state(self) -> Future[SupplyState]:
        return done(self.fail.get("state") or self.state())

    def supply_set(
        self,
        positive_v: float,
        negative_v: float,
        limit_a: float,
        output_on: bool,
        protection_v: tuple[float, float] | None = None,
        *,
        over_current: bool = True,
    ) -> Future[SupplyState]:
        if "set" in self.fail:
            return done(self.fail["set"])
        self.log.append("set")
        self.protections.append((protection_v, over_current))
        self.sets.append((positive_v, negative_v, limit_a))
        self.positive_v, self.negative_v, self.limit_a, self.on = positive_v, negative_v, limit_a, output_on
        return done(self.state())

    def supply_ramp(
        self,
        positive_v: float,
        negative_v: float,
        limit_a: float,
        ramp_s: float,
        protection_v: tuple[float, float] | None = None,
        lines: WatchLines | None = None,
        on_step: Callable[[float, SupplyState], None] | None = None,
        *,
        over_current: bool = True,
    ) -> Future[SupplyState]:
        self.ramps.append((positive_v, negative_v, ramp_s, lines))
        if on_step is not None:
            on_step(0.5, self.state())
        return self.supply_set(positive_v, negative_v, limit_a, True, protection_v, over_current=over_current)

    def mind_meter(self, age_limit_s: float | None) -> Future[None]:
        self.minded.append(age_limit_s)
        return done(None)

    def stay_awake(self) -> Future[str]:
        return done(self.caution)

    def watch(self, lines: WatchLines | None) -> Future[None]:
        self.log.append("watch" if lines is not None else "no watch")
        return done(None)

    def sample(self, elapsed_s: float) -> Future[SupplyState]:
        self.on_sample()
        return done(self.fail.get("sample") or self.state())

    def read(self, function: str, range: float | None = None, samples: int = 1) -> Future[RawReading]:
        if "read" in self.fail:
            return done(self.fail["read"])
        assert self.bench.point is not None, "read without probes"
        value = self.values[self.bench.point]
        return done(RawReading(value=value, function=function, meter="a meter", values=(value,) * samples))

    def off(self, reason: str) -> Future[OutputOff]:
        self.offs.append(reason)
        self.on = False if self.confirmed else self.on
        event = OutputOff(reason=reason, confirmed=self.confirmed, how="read back", state=self.state())
        self.push(event)
        return done(event)

    def after_death(self, setup: dict[str, Any]) -> Future[OutputOff]:
        self.log.append("after death")
        return done(OutputOff(reason="the keeper died", confirmed=self.confirmed, how="by the stand-by"))

    def trip(self) -> None:
        self.push(Tripped(reason="rail+ in its limit"))
        self.off("tripped")

    def lose_supply(self) -> None:
        self.push(ContactLost(who="the supply", problem="no answer"))
        self.off("contact with the supply was lost")


Answer = Callable[[Question, str], Awaitable[Reply | None]]


class FakeFront:
    """Answers well unless `answer` says otherwise; keeps what it was asked and shown."""

    def __init__(self, answer: Answer | None = None) -> None:
        self.answer = answer
        self.questions: list[Question] = []
        self.refused: list[str] = []
        self.views: list[View] = []
        self.taken_back: list[str] = []

    def show(self, view: View) -> None:
        self.views.append(view)

    async def ask(self, question: Question, refused: str = "") -> Reply:
        self.questions.append(question)
        if refused:
            self.refused.append(refused)
        try:
            reply = None if self.answer is None else await self.answer(question, refused)
        except asyncio.CancelledError:
            self.taken_back.append(question.item)
            raise
        return well(question) if reply is None else reply


def well(question: Question) -> Reply:
    match question.kind:
        case "hold":
            return Reply(choice="yes", text="yes")
        case "confirm":
            return Reply(choice="yes")
        case "trim":
            return Reply(choice="take")
        case "decide":
            free = {choice.value for choice in question.choices if not choice.wants_reason}
            return Reply(choice="go on" if "go on" in free else "again")
    return Reply(choice=question.choices[0].value, text="" if only_done(question) else "typed")


def on(item: str, *replies: Reply | None) -> Answer:
    """Give these replies to the item's questions, one after the other, and good ones after that."""
    left = itertools.chain(replies, itertools.repeat(None))

    async def answer(question: Question, refused: str) -> Reply | None:
        return next(left) if question.item == item else None

    return answer


def hang_at(item: str, then: Callable[[], None]) -> Answer:
    """At this item's first question do something else, and never answer."""
    hung: list[str] = []

    async def answer(question: Question, refused: str) -> Reply | None:
        if question.item == item and not hung:
            hung.append(item)
            then()
            await asyncio.sleep(60)
        return None

    return answer


def quick_predictions(monkeypatch: Any) -> None:
    """Wide limits at once in place of the model's, and rules that pass."""

    def predict(design: Design, action: Predict, units: int | None, seed: int) -> Event:
        return Predicted(
            item=action.item, condition=action.key, limits=limits_of(small(), action), units=9, solved=9, seed=seed,
            seconds=0.0,
        )  # fmt: skip

    def narrow(self: object, action: Narrow, targets: Sequence[Target]) -> Narrowed:
        return Narrowed(item=action.item, after=action.after, readings=len(action.known))

    monkeypatch.setattr(predictions, "predict", predict)
    monkeypatch.setattr(predictions, "check_warm", lambda design, action, seed: judged(action.item, "pass"))
    monkeypatch.setattr(this_unit.Narrower, "narrow", narrow)
    monkeypatch.setattr(this_unit, "suspect", lambda design, action: suspected(action, "healthy"))
    monkeypatch.setattr(predictions, "evaluate_rule", lambda design, walk, state, action: judged(action.item, "pass"))


class Run:
    """One run of the small walk over the fakes."""

    def __init__(self, *, manual: bool = False, opened: WalkOpened = OPENED) -> None:
        self.bench = FakeBench()
        self.opened = opened
        self.keeper = FakeKeeper(self.bench, opened)
        self.front = FakeFront()
        self.setup: dict[str, Any] = {"meter": None, "supply": None} if manual else {"meter": {}, "supply": {}}
        if not manual:
            self.setup = {"meter": {"address": "m"}, "supply": {"address": "s"}}
        self.session: Session
        self.hands = Hands(self.bench)

    async def advance(self, seconds: float) -> None:
        self.bench.advance(seconds)

    def make(self) -> Session:
        job = Job(
            design=breadboard(),
            procedure=parse_procedure(SMALL, "small.toml"),
            walk=small(),
            record=Path("x.jsonl"),
            setup=self.setup,
            accuracy=STATED_DEFAULT,
            supply_accuracy=HANDHELD,
        )
        clock = SimulatedClock(self.advance, None)
        self.session = Session(job, self.keeper, self.front, self.hands, clock)  # type: ignore[arg-type]
        self.keeper.on_push = self.session.on_push
        return self.session

    async def run(self, first: Event | None = None) -> Closed:
        session = self.make()
        return await asyncio.wait_for(session.run(first or self.opened), 20.0)

    def go(self, first: Event | None = None) -> Closed:
        return asyncio.run(self.run(first))

    def names(self) -> list[str]:
        return [event.name for event in self.keeper.kept]


TROUBLE = InstrumentError("timeout", "The meter did not answer", "a number", "Look at the cable")
