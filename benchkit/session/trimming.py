"""The live trim: digits, advice, prediction, and a reading that is taken without a hand.

Rules
-----
* From the meter's answer to the digits nothing waits: the picture is shown first; the supply, the fit and the question
  come after it, or beside it.
* A reading is taken by itself when it is nearer to the target than half of the tolerance and clear of the limits by
  `SURE` standard uncertainties of the meter, when in a warm trim the same is true of what it will rest at, and when the
  probe is on the point and it has been at rest by `benchkit.measure.resting`.  A key takes it at any moment.
* Nor is one taken by itself before it is known to be of the point: it has followed a turn, or the probe has been off
  and on, or the supply's current agrees with it by the model.
* What the screw does is seen in the reading alone; only in a rehearsal does somebody say how far it was turned.
* A drop that rises by itself, faster and faster, trips: the supply goes off before anything is written.
"""

from __future__ import annotations

import asyncio
import contextlib
from dataclasses import replace
from typing import TYPE_CHECKING, Final

from benchkit import quantities
from benchkit.errors import BenchkitError, EntryError, InstrumentError
from benchkit.events import Event, ReadingMissed, ReadingTaken, TrimEnded
from benchkit.judge.advice import Advice
from benchkit.judge.answers import Answers
from benchkit.judge.trimming import Adviser
from benchkit.judge.trust import RailLine
from benchkit.measure.readings import Reading
from benchkit.measure.resting import Probe, Rest, RestView
from benchkit.procedure.actions import Choice, Trim
from benchkit.procedure.questions import END, STOP
from benchkit.session import measuring, powering, predictions
from benchkit.session.advising import adviser_for, live_view, settled_share
from benchkit.session.creeping import Creep, Told
from benchkit.session.front import Reply
from benchkit.session.job import Stopped
from benchkit.session.threads import in_thread

if TYPE_CHECKING:
    from benchkit.session.predictions import Screw
    from benchkit.session.run import Session

INTERVAL_S: Final = 0.1
"""From one live reading to the next where the meter is quick enough, at the wall clock (s)."""

QUICK_INTERVAL_S: Final = 0.25
"""The same in simulated time, where nobody watches (s)."""

SAMPLE_S: Final = 0.5
"""How often a supply that the keeper watches by itself is looked at for the screen (s)."""

TURN_S: Final = 2.0
"""Simulated seconds that a hand needs for a move of the screw."""

REST_S: Final = 2.0
LEAST_READINGS: Final = 6
DRIFT_SHARE: Final = 0.05
"""At rest: so long (s), in so many readings, with a drift below this share of the tolerance per second."""

SPREAD_SHARE: Final = 0.25
"""... and from the lowest to the highest no more than this share of the tolerance."""

NOISE_SHARE: Final = 0.2
"""What readings scatter by, before it is known, as a share of the standard uncertainty that is a reading's own."""

MOVE_S: Final = 3.0
"""So long (s) after a move its reading still counts as that of the moment, before it creeps."""

SURE: Final = 3.0
"""A reading that is taken by itself lies so many of the meter's standard uncertainties inside the limits."""

SURE_LOOKS: Final = 2
"""So many predictions in a row have to say that it runs away."""

AFTER_A_MOVE: Final = (
    "Type what the meter shows after each move, with its unit; let it come to rest for some seconds first."
)
BY_KEY: Final = "by key"
BY_ITSELF: Final = f"by itself, at rest for {REST_S:.1f} s"


async def trim(session: Session, action: Trim) -> Event | None:
    """Show the reading while the screw is turned, until it is taken or given up; None when a trip has ended it."""
    session.busy("")
    design = session.job.design
    fuse_ohm = None if action.condition is None else action.condition.fuse_ohm
    screw = await in_thread(
        lambda: predictions.screw_of(
            design, action.point, action.target, action.share, fuse_ohm, action.condition
        ),
        "benchkit-model",
    )  # fmt: skip
    answers = await in_thread(
        lambda: predictions.answers_of(design, action.point, action.condition), "benchkit-model"
    )  # fmt: skip
    line = await in_thread(lambda: predictions.rail_line(design, action.point, action.condition), "benchkit-model")
    by_hand = session.job.manual_meter if action.function != "dc current" else session.job.manual_supply
    if by_hand:
        return await _by_hand(session, action, screw, answers, line)
    lags_s = await in_thread(lambda: predictions.time_constants(design), "benchkit-model")
    live = _Live(session, action, screw, lags_s, answers, line)
    if action.function == "dc current":
        return await live.run()
    async with powering.minding_the_meter(session):
        return await live.run()


class _Live:
    """One live trim with a meter."""

    def __init__(
        self,
        session: Session,
        action: Trim,
        screw: Screw,
        lags_s: tuple[float, ...],
        answers: Answers | None,
        line: RailLine | None,
    ) -> None:
        self._session, self._action = session, action
        self._tolerance = (action.high - action.low) / 2.0
        self._screw, self._answers, self._line = screw, answers, line
        # A cold pre-set is right as it reads now, wherever the warming brings it.
        self._warm = action.condition is not None and action.condition.when == "warm"
        self._predicts = self._warm and bool(lags_s)
        self._started_s = session.clock.now()
        self._creep = Creep(action.unit, action.low, action.high, lags_s, self._tolerance / 60.0, self._started_s)
        self._rest = Rest(
            window_s=REST_S, least=LEAST_READINGS, drift_limit=DRIFT_SHARE * self._tolerance,
            spread=SPREAD_SHARE * self._tolerance,
        )  # fmt: skip
        # A reading of the moment and where it comes to rest, before the first move or by a trend since; and where it
        # will after the last move.
        rested = session.rested
        self._rested = rested[1] if rested is not None and rested[0] == action.point and self._warm else None
        self._known = None if self._rested is None else (self._rested, self._rested)
        self._expected: float | None = None
        session.rested = None
        self._adviser: Adviser | None = None
        self._probe: Probe | None = None
        self._away = 0
        self._asking: asyncio.Task[Reply] | None = None
        self._sampling: asyncio.Task[None] | None = None
        self._sampled_s = self._started_s
        self._rail: tuple[float, float] | None = None  # when the supply was asked last, and its current

    async def run(self) -> Event | None:
        """Read, show and ask until something ends it."""
        session, action = self._session, self._action
        refused = ""
        quick = not session.clock.own_watch and session.job.narrow_rarely
        interval_s = QUICK_INTERVAL_S if quick else INTERVAL_S
        try:
            while True:
                began_s = session.clock.now()
                try:
                    reading = await self._read(1)
                except (InstrumentError, EntryError) as error:
                    return ReadingMissed(item=action.item, point=action.point, problem=str(error))
                advice, rest = self._take(reading)
                if self._may_capture(reading, advice, rest) and (event := await self._capture()) is not None:
                    return event
                if self._runs_away():
                    session.trip(predictions.runaway(action.point, action.unit, reading.value, action.high))
                    return None
                await self._sample()
                if self._asking is None:
                    self._asking = asyncio.create_task(session.front.ask(action.question, refused))
                left_s = interval_s - (session.clock.now() - began_s) if session.clock.own_watch else interval_s
                await asyncio.wait({self._asking}, timeout=max(left_s, 0.001))
                if not session.clock.own_watch:
                    await session.clock.spend(interval_s)
                if not self._asking.done():
                    continue
                reply, self._asking, refused = self._asking.result(), None, ""
                match reply.choice:
                    case "take":
                        final = await self._read(action.samples)
                        return ReadingTaken(item=action.item, reading=final, how=BY_KEY)
                    case "end":
                        return TrimEnded(item=action.item, problem=reply.text.strip() or "The screw is at its end.")
                    case "make safe":
                        raise Stopped(f"the operator chose it at: {action.question.title}")
                    case "turn" if session.hands.simulated:
                        await self._turn(reply.turns)
                    case _:
                        refused = (
                            f"{reply.choice!r} is no answer here. Take the reading, or say that it can't be reached."
                        )
        except (InstrumentError, EntryError) as error:
            return ReadingMissed(item=action.item, point=action.point, problem=str(error))
        finally:
            for task in (self._asking, self._sampling):
                if task is not None:
                    task.cancel()

    async def _read(self, samples: int) -> Reading:
        return await measuring.by_instrument(
            self._session, self._action.point, self._action.function, self._action.unit, samples
        )

    async def _turn(self, turns: float) -> None:
        """Let the simulated hand turn the screw, watched at every second."""
        session = self._session
        if not turns:
            return
        await session.hands.turn(turns)
        if self._adviser is not None and self._probe is not None:
            self._adviser.turned(turns)
            self._probe.clear()
        for _ in range(round(TURN_S)):
            await session.clock.spend(1.0)
            await session.sample()
        self._rest.clear()
        self._creep.disturbed(session.clock.now())

    async def _sample(self) -> None:
        """Look at the supply: in simulated time here and now, at a real bench beside the readings."""
        session, now_s = self._session, self._session.clock.now()
        if not session.clock.own_watch:
            self._sampled_s = now_s
            await self._ask_supply()
        elif now_s - self._sampled_s >= SAMPLE_S and (self._sampling is None or self._sampling.done()):
            self._sampled_s = now_s
            self._sampling = asyncio.create_task(self._ask_supply())

    async def _ask_supply(self) -> None:
        """Ask the supply, and note its current; one that only a person reads says nothing of this moment."""
        session, asked_s, before = self._session, self._session.clock.now(), self._session.moment.supply
        await session.sample()
        supply = session.moment.supply
        if supply is not None and supply is not before and not session.job.manual_supply:
            self._rail = None if supply.positive_a is None else (asked_s, supply.positive_a)

    # -- one reading -------------------------------------------------------------------------------------------

    def _take(self, reading: Reading) -> tuple[Advice, RestView | None]:
        """Show a reading with all that is said about it."""
        now_s, value = self._session.clock.now(), reading.value
        adviser, probe = self._tools(reading)
        adviser.guards(SURE * (reading.standard_uncertainty or 0.0))
        placed = "on" if self._action.function == "dc current" else probe.add(now_s, value)
        supply = self._session.moment.supply
        folded = supply is not None and bool(supply.positive_in_limit or supply.negative_in_limit)
        advice = adviser.add(
            now_s, value,
            folded=folded,
            rest=self._comes_to(),
            running_away=self._away >= SURE_LOOKS,
            rail=self._rail,
            gone="" if placed != "off" else "overload" if value is None else "it jumps like a lead in the air",
        )  # fmt: skip
        rest: RestView | None = None
        if value is None or advice.mood == "gone":
            self._rest.clear()
        else:
            rest = self._rest.add(now_s, value)
            self._creep.add(now_s, value)
            if not advice.calm:
                self._creep.disturbed(now_s)
            if self._warm:
                self._expect(now_s, value, advice)
        self._show(reading, advice, self._creep.told(now_s), rest, self._held_back(reading))
        # What takes longer comes after the digits, and is shown with the next ones.
        adviser.scatters(max(self._creep.noise, probe.noise))
        before = self._creep.settling
        if self._creep.look(now_s) is not before:
            self._away = self._away + 1 if self._creep.running_away and self._above(value) else 0
        return advice, rest

    def _expect(self, now_s: float, value: float, advice: Advice) -> None:
        """Work out where the reading will rest after a move, until its own trend tells."""
        just_moved = not advice.calm or now_s - (advice.moved_s or -MOVE_S) < MOVE_S
        if self._known is not None and (self._expected is None or just_moved):
            before, rest = self._known
            self._expected = rest + settled_share(self._screw, rest) * (value - before)
        elif self._creep.rest is not None and not just_moved:
            # What this unit has been seen to do counts for more than the model, for the moves to come too.
            self._known = value, self._creep.rest
            self._expected = self._creep.rest

    def _comes_to(self) -> float | None:
        """Where the reading will rest: by its own trend once that tells, else by what the model says of such moves."""
        if not self._warm:
            return None
        return self._expected if self._creep.rest is None else self._creep.rest

    def _tools(self, reading: Reading) -> tuple[Adviser, Probe]:
        """Return adviser and probe, made when the first reading tells how finely the meter reads."""
        if self._adviser is None or self._probe is None:
            noise = NOISE_SHARE * (reading.own_uncertainty or 0.0)
            screw = self._screw
            if self._rested is not None:
                screw = replace(screw, settled_share=settled_share(screw, self._rested))
            self._adviser = adviser_for(self._action, screw, noise, self._answers, self._line)
            if self._session.hands.simulated:
                self._adviser.hears_of_turns()
            self._probe = Probe(noise=max(noise, 1e-9))
        return self._adviser, self._probe

    def _above(self, value: float | None) -> bool:
        return value is not None and value > self._action.target

    def _runs_away(self) -> bool:
        return self._away >= SURE_LOOKS

    def _held_back(self, reading: Reading) -> str:
        """Say why a reading is not taken by itself, wherever it rests; "" when it may be."""
        value, unsure = reading.value, reading.standard_uncertainty
        if value is None or self._adviser is None:
            return "no reading"
        if unsure is None:
            return "nothing is known of this meter's accuracy: space takes it"
        if min(value - self._action.low, self._action.high - value) < SURE * unsure:
            return "too near the limit for this meter: space takes it"
        if not self._adviser.near(value):
            return "not near the target yet"
        rail, by_supply = self._rail, self._action.function == "dc current"
        if not by_supply and not self._adviser.proven(value, None if rail is None else rail[1]):
            return "it has not followed the screw yet, and no current speaks for it: space takes it"
        rest = self._comes_to()
        if rest is None and self._predicts:
            return "not known yet what it will rest at: space takes it"
        return "" if rest is None or self._adviser.near(rest) else "it will not rest near the target"

    def _may_capture(self, reading: Reading, advice: Advice, rest: RestView | None) -> bool:
        at_rest = advice.mood == "steady" and rest is not None and rest.at_rest
        return self._session.job.hands_free and at_rest and not self._held_back(reading)

    async def _capture(self) -> Event | None:
        """Take the reading, unless it turns out not to be near the target after all."""
        final = await self._read(self._action.samples)
        if self._held_back(final):
            self._rest.clear()
            return None
        self._session.rang()
        self._take(final)
        return ReadingTaken(item=self._action.item, reading=final, how=BY_ITSELF)

    def _show(self, reading: Reading, advice: Advice, told: Told, rest: RestView | None, held_back: str) -> None:
        session = self._session
        capture = ""
        if session.job.hands_free:
            if advice.mood == "gone":
                capture = "probe not on the point"
            elif advice.mood == "steady" and rest is not None:
                full = f"at rest {REST_S:.1f} s of {REST_S:.1f} s"
                capture = rest.why if rest.share < 1.0 else held_back or full
        session.show_moment(busy="", live=live_view(session, self._action, reading, advice, told, self._creep, capture))


async def _by_hand(
    session: Session, action: Trim, screw: Screw, answers: Answers | None, line: RailLine | None
) -> Event:
    """Trim with a meter that a person reads: entries until one is inside the limits and taken."""
    question = replace(
        action.question,
        kind="by hand",
        do=f"{action.question.do} {AFTER_A_MOVE}",
        choices=(Choice(value="take", label="Enter"), END, STOP),
    )
    accuracy = session.job.accuracy
    adviser: Adviser | None = None

    def parse(text: str) -> tuple[Reading, float]:
        reading = measuring.typed_reading(text, action.point, action.function, action.unit, accuracy)
        step = 0.0
        with contextlib.suppress(EntryError):
            step = quantities.last_digit(text, action.unit)
        return reading, step / 12.0**0.5

    while True:
        reply, typed = await session.ask_entry(question, parse)
        if reply.choice == "end":
            return TrimEnded(item=action.item, problem=reply.text.strip() or "The screw is at its end.")
        if not isinstance(typed, tuple):
            raise BenchkitError("A front end answered a trim with something that is no entry")
        reading, noise = typed
        if adviser is None:
            adviser = adviser_for(action, screw, noise, answers, line, calm_s=0.0)
        if session.hands.simulated and reply.turns:
            adviser.turned(reply.turns)
        rail = None
        if not session.job.manual_supply:
            await session.sample()
            supply = session.moment.supply
            rail = None if supply is None or supply.positive_a is None else (session.clock.now(), supply.positive_a)
        advice = adviser.add(session.clock.now(), reading.value, rail=rail)
        session.show_moment(busy="", live=live_view(session, action, reading, advice, Told()))
        if _settles(reading, action, adviser):
            return ReadingTaken(item=action.item, reading=reading)
        shown = "overload" if reading.value is None else quantities.show(reading.value, action.unit)
        inside = reading.value is not None and action.low <= reading.value <= action.high
        edge = " It is inside, but too near the limit for this meter: nearer to the target." if inside else ""
        question = replace(question, do=f"{shown}: {advice.words}.{edge} {AFTER_A_MOVE}")


def _settles(reading: Reading, action: Trim, adviser: Adviser) -> bool:
    """Whether a typed reading ends the trim: clear of the limits, or as near the target as it is led to."""
    value, unsure = reading.value, reading.standard_uncertainty
    if value is None or not action.low <= value <= action.high:
        return False
    return adviser.near(value) or min(value - action.low, action.high - value) >= SURE * (unsure or 0.0)
