"""Dwells: a time that passes under watch, or a soak that ends when its reading has come to rest.

Rules
-----
* Every slice of the dwell is watched; what the supply does counts before what the meter says.
* A soak ends when the reading has settled (`benchkit.measure.settling`) and its least time is over, or its most is.
* A reading that rises by itself, faster and faster, trips: the supply goes off before anything is written.
* A probe that slips, or a meter that gives no reading once, is told of and waited through.
* With a meter that a person reads, entries are asked for between rests, and the person may say that it is at rest.
  Too few come for a prediction: the soak ends too when the last four, over a minute and a half or more, move less
  than the drift limit, and at that pace within the slowest time constant by less than a quarter of the limits'
  half-width (our own figures; a reading that turns round slowly may pass for one at rest, and is read once more).
"""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Final

from benchkit import quantities
from benchkit.errors import EntryError, InstrumentError
from benchkit.events import Event, Waited
from benchkit.judge.advice import Mood
from benchkit.measure.readings import Reading
from benchkit.measure.resting import Probe
from benchkit.measure.settling import Settling
from benchkit.procedure.actions import Choice, Question, Wait
from benchkit.procedure.questions import STOP
from benchkit.session import measuring, powering, predictions
from benchkit.session.creeping import LOOK_S, Creep, left_words
from benchkit.session.front import LiveView
from benchkit.session.threads import in_thread
from benchkit.session.trimming import NOISE_SHARE, SURE_LOOKS

if TYPE_CHECKING:
    from benchkit.session.run import Session

SLICE_S: Final = 1.0
"""A dwell passes in slices of this length (s)."""

READ_S: Final = 0.5
"""How often the meter is read during a soak at a real bench (s)."""

READ_SIMULATED_S: Final = 2.0
"""The same in simulated time (s)."""

QUICK_LOOK_S: Final = 4.0
"""How often a prediction is made where nobody watches (s)."""

ENTRY_S: Final = 30.0
"""Between two entries of a person who reads the meter (s)."""

UNTIL_ENTRY: Final = "Until the next entry is asked for:"
"""What runs down between two entries: not the soak, whose end nobody knows."""

ENTRIES: Final = 4
"""So many entries in a row show whether a reading is at rest."""

LEAST_ENTRIES_S: Final = 90.0
"""And so long they have to lie apart, the first from the last (s)."""

LEAST_LEFT_S: Final = 5.0
"""A soak that has not settled says that so much is left at least (s)."""

MOST_KEPT: Final = 60
USUAL_DRIFT: Final = 0.02
"""A settled reading moves by less than this share of its target in a minute, where nothing else is said."""

ENOUGH = Choice(value="enough", label="It is at rest: go on")


async def wait(session: Session, action: Wait) -> Event | None:
    """Let time pass under watch; None when a trip has ended it."""
    if not (action.until_settled and action.point):
        await _pass(session, action.reason, action.seconds)
        return Waited(item=action.item, seconds=action.seconds)
    by_hand = session.job.manual_supply if action.function == "dc current" else session.job.manual_meter
    design = session.job.design
    session.busy(action.reason)
    soak = _Soak(session, action, await in_thread(lambda: predictions.time_constants(design), "benchkit-model"))
    if by_hand:
        return await soak.by_entries()
    if action.function == "dc current":
        return await soak.by_instrument()
    async with powering.minding_the_meter(session):
        return await soak.by_instrument()


async def _pass(session: Session, reason: str, seconds: float) -> None:
    left_s = seconds
    while left_s > 0:
        session.busy(reason, share=1.0 - left_s / seconds, remaining_s=left_s)
        slice_s = min(SLICE_S, left_s)
        await session.clock.spend(slice_s)
        left_s -= slice_s
        await session.sample()


class _Soak:
    """One soak that ends when its reading has settled."""

    def __init__(self, session: Session, action: Wait, lags_s: tuple[float, ...]) -> None:
        self._session, self._action = session, action
        self._started_s = session.clock.now()
        self._lags_s = lags_s
        self._limits: tuple[float, float, float] | None = None
        if action.low is not None and action.high is not None:
            middle = (action.low + action.high) / 2.0
            self._limits = action.low, middle if action.target is None else action.target, action.high
        self._creep: Creep | None = None
        self._probe: Probe | None = None
        self._away = 0
        self._trouble = ""
        self._last: Reading | None = None
        self._entries: list[tuple[float, float]] = []

    async def by_instrument(self) -> Event | None:
        """Read now and then until the reading has settled, or the most is over."""
        session, action = self._session, self._action
        every_s = READ_S if session.clock.own_watch else READ_SIMULATED_S
        due_s = self._started_s
        while True:
            if session.clock.now() >= due_s - 1e-9:
                due_s = session.clock.now() + every_s
                await self._look()
                if self._away >= SURE_LOOKS:
                    assert self._creep is not None
                    value = None if self._creep.trend.last is None else self._creep.trend.last[1]
                    session.trip(predictions.runaway(action.point, action.unit, value, action.high))
                    return None
            if self._over:
                self._show(self._last)
                return self._waited(settled=self._settled)
            await session.clock.spend(min(SLICE_S, every_s))
            await session.sample()

    async def _look(self) -> None:
        session, action = self._session, self._action
        try:
            reading = await measuring.by_instrument(session, action.point, action.function, action.unit, 1)
        except (InstrumentError, EntryError) as error:
            self._trouble, self._last = f"the meter gave no reading ({error})", None
            self._show(None)
            return
        self._last = reading
        now_s, value = session.clock.now(), reading.value
        placed = "on" if action.function == "dc current" else self._probe_for(reading).add(now_s, value)
        self._trouble = ""
        if value is None or placed == "off":
            why = "overload" if value is None else "it jumps like a lead in the air"
            self._trouble = f"the reading is gone ({why}): put the probe back on the point"
        elif placed == "on":  # what moves by a step, or has only just come, is no creep
            self._followed(value).add(now_s, value)
        self._show(reading)
        self._predict(now_s)

    def _predict(self, now_s: float) -> None:
        creep = self._creep
        if creep is None:
            return
        quick = not self._session.clock.own_watch and self._session.job.narrow_rarely
        before = creep.settling
        if creep.look(now_s, QUICK_LOOK_S if quick else LOOK_S) is not before:
            self._away = self._away + 1 if creep.running_away else 0

    def _probe_for(self, reading: Reading) -> Probe:
        if self._probe is None:
            self._probe = Probe(noise=max(NOISE_SHARE * (reading.own_uncertainty or 0.0), 1e-9))
        return self._probe

    def _followed(self, value: float) -> Creep:
        """Return what follows the reading; where no limits are known they are put around its first value."""
        if self._limits is None:
            self._limits = value - 0.1 * abs(value), value, value + 0.1 * abs(value)
        if self._creep is None:
            low, _, high = self._limits
            self._creep = Creep(self._action.unit, low, high, self._lags_s, self._drift_limit, self._started_s)
        return self._creep

    # -- how far it is -----------------------------------------------------------------------------------------

    @property
    def _elapsed_s(self) -> float:
        return self._session.clock.now() - self._started_s

    @property
    def _settled(self) -> bool:
        settling = None if self._creep is None else self._creep.settling
        return (settling is not None and settling.verdict == "settled") or self._still_moving == ""

    @property
    def _over(self) -> bool:
        if self._elapsed_s >= self._action.seconds - 1e-9:
            return True
        return self._settled and self._elapsed_s >= self._action.least_s - 1e-9

    def _left_s(self) -> float:
        """Return how long it will take yet, as far as that can be said (s)."""
        most_s = max(self._action.seconds - self._elapsed_s, 0.0)
        settling = None if self._creep is None else self._creep.settling
        if settling is None or settling.left_s is None:
            return most_s
        left_s = max(settling.left_s, self._until_slow_s(settling))
        if not self._settled:
            left_s = max(left_s, LEAST_LEFT_S)  # near its rest, and not yet sure of it
        return min(max(left_s, self._action.least_s - self._elapsed_s, 0.0), most_s)

    @property
    def _drift_limit(self) -> float:
        target = 0.0 if self._limits is None else self._limits[1]
        return self._action.drift_limit or USUAL_DRIFT * max(abs(target), 1e-9) / 60.0

    def _until_slow_s(self, settling: Settling) -> float:
        """Return how long the drift takes to fall to what is allowed, as the slowest time constant has it (s)."""
        fast = abs(settling.rate) / self._drift_limit
        return max(self._lags_s, default=0.0) * math.log(fast) if fast > 1.0 else 0.0

    def _waited(self, *, settled: bool | None) -> Waited:
        settling = None if self._creep is None else self._creep.settling
        if settled and settling is not None and settling.final is not None:
            self._session.rested = self._action.point, settling.final
        points = () if self._creep is None else self._creep.trend.points(self._started_s)
        known = settling is not None and settling.verdict in ("moving", "settled")
        return Waited(
            item=self._action.item,
            seconds=round(self._elapsed_s, 3),
            settled=settled,
            point=self._action.point,
            unit=self._action.unit,
            final=settling.final if settling is not None and known else None,
            low=settling.low if settling is not None and known else None,
            high=settling.high if settling is not None and known else None,
            trend=thinned(tuple((t_s - self._started_s, value) for t_s, value in points)),
        )

    # -- what is shown -----------------------------------------------------------------------------------------

    def _show(self, reading: Reading | None) -> None:
        session, action = self._session, self._action
        left_s = self._left_s()
        whole_s = self._elapsed_s + left_s
        share = 1.0 if whole_s <= 0.0 else self._elapsed_s / whole_s
        changes = {"busy": action.reason, "busy_share": share, "remaining_s": left_s}
        if self._limits is None:
            session.show_moment(**changes)
            return
        low, target, high = self._limits
        creep = self._creep
        told = None if creep is None else creep.told(session.clock.now())
        value = None if reading is None else reading.value
        mood, words = self._mood(value)
        live = LiveView(
            point=action.point,
            unit=action.unit,
            value=value,
            text=_text(reading, action.unit),
            low=low,
            high=high,
            target=target,
            age_s=0.0,
            inside=value is not None and low <= value <= high,
            trend=() if creep is None else creep.trend.points(),
            mood=mood,
            advice=words,
            rate_text="" if told is None else told.rate_text,
            settles_text="" if told is None else told.settles_text,
            settled_share=share,
            predicted=() if told is None else told.predicted,
            settles_low=None if told is None else told.settles_low,
            settles_high=None if told is None else told.settles_high,
            captured=session.captured,
        )  # fmt: skip
        session.show_moment(live=live, **changes)

    def _mood(self, value: float | None) -> tuple[Mood, str]:
        if self._trouble or value is None:
            return "gone", self._trouble or "no reading"
        if self._creep is not None and self._creep.running_away:
            return "running away", "it rises by itself, faster and faster: off"
        assert self._limits is not None
        low, _, high = self._limits
        if self._settled:
            wait_s = self._action.least_s - self._elapsed_s
            more = f", {left_words(wait_s)} more" if wait_s > 0.0 else ""
            return ("steady" if low <= value <= high else "inside"), f"hands off: at rest{more}"
        rest = None if self._creep is None else self._creep.rest
        if rest is not None and not low <= rest <= high:
            return "turn", "hands off: it will rest outside the limits, and is trimmed after this"
        return ("inside" if low <= value <= high else "turn"), f"hands off: {self._awaited()}"

    def _awaited(self) -> str:
        """Say what a soak waits for that has not settled."""
        settling = None if self._creep is None else self._creep.settling
        if settling is None or settling.left_s is None:
            return "it comes to rest"
        if settling.left_s > 0.0:
            return "it is on its way to its rest"
        per_minute = quantities.show(60.0 * abs(settling.rate), self._action.unit, 2)
        if abs(settling.rate) > self._drift_limit:
            allowed = quantities.show(60.0 * self._drift_limit, self._action.unit, 2)
            return f"it still moves {per_minute} a minute, {allowed} is allowed"
        return "near its rest, and not yet sure of it"

    # -- by hand -----------------------------------------------------------------------------------------------

    async def by_entries(self) -> Event:
        """Ask for an entry now and then until the reading has settled, the person says so, or the most is over."""
        session, action = self._session, self._action
        accuracy = session.job.accuracy if action.function != "dc current" else session.job.supply_accuracy

        def parse(text: str) -> Reading:
            return measuring.typed_reading(text, action.point, action.function, action.unit, accuracy)

        session.show_moment(live=None)  # nothing is read between entries: a figure that stands there would be stale
        between = f"{action.reason} {UNTIL_ENTRY}"
        await _pass(session, between, min(action.least_s, action.seconds))
        said = ""
        shows = "the supply's own display" if action.function == "dc current" else "the meter"
        while not self._over:
            question = Question(
                item=action.item,
                kind="by hand",
                title=f"Type what {shows} shows for {action.point}",
                do=f"{action.reason} It is asked for again after {left_words(ENTRY_S)} until it has come to rest.",
                expected=said,
                point=action.point,
                choices=(Choice(value="done", label="Enter"), ENOUGH, STOP),
            )
            reply, reading = await session.ask_entry(question, parse)
            if reply.choice == "enough":
                return self._waited(settled=None)
            if isinstance(reading, Reading) and reading.value is not None:
                now_s = session.clock.now()
                creep = self._followed(reading.value)
                creep.add(now_s, reading.value)
                creep.look(now_s)
                self._entries = [*self._entries, (now_s, reading.value)][-ENTRIES:]
                told = creep.told(now_s)
                why = "" if self._settled else f"not yet at rest: {self._still_moving or self._awaited()}"
                said = ", ".join(words for words in (told.rate_text, told.settles_text, why) if words)
            if not self._over:
                await _pass(session, between, min(ENTRY_S, max(action.seconds - self._elapsed_s, 0.0)))
        return self._waited(settled=self._settled)

    @property
    def _still_moving(self) -> str | None:
        """Why the last entries of a person are no rest; "" when they are one, None where nobody enters any."""
        if not self._entries or self._limits is None:
            return None
        if len(self._entries) < ENTRIES:
            return f"{len(self._entries)} of at least {ENTRIES} entries"
        span_s = self._entries[-1][0] - self._entries[0][0]
        if span_s < LEAST_ENTRIES_S - 1e-9:
            return (
                f"the last {ENTRIES} entries lie {left_words(span_s)} apart, {left_words(LEAST_ENTRIES_S)} are needed"
            )
        values = [value for _, value in self._entries]
        rate = (max(values) - min(values)) / span_s
        unit = self._action.unit
        if rate >= self._drift_limit:
            allowed = quantities.show(60.0 * self._drift_limit, unit, 2)
            return f"it still moves {quantities.show(60.0 * rate, unit, 2)} a minute, {allowed} is allowed"
        low, _, high = self._limits
        ahead, near = rate * max(self._lags_s, default=0.0), 0.25 * (high - low) / 2.0
        if ahead > near:
            left, allowed = quantities.show(ahead, unit, 2), quantities.show(near, unit, 2)
            return f"at this pace up to {left} may be left, {allowed} is allowed"
        return ""


def _text(reading: Reading | None, unit: str) -> str:
    if reading is None:
        return "no reading"
    return "overload" if reading.value is None else quantities.show(reading.value, unit, 4)


def thinned(points: tuple[tuple[float, float], ...]) -> tuple[tuple[float, float], ...]:
    """Keep no more than `MOST_KEPT` of some points, the first and the last among them."""
    if len(points) <= MOST_KEPT:
        return points
    last = len(points) - 1
    return tuple(points[round(n * last / (MOST_KEPT - 1))] for n in range(MOST_KEPT))
