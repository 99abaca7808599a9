"""Readings one after the other, no hand on the keyboard: a value is taken when the probes have moved and it rests.

Rules
-----
* The question stands all the time, and a key answers it at once, whatever is being read.
* Taken by itself is only what comes after the probes have left where they were (`benchkit.session.leaving`), lies
  inside the limits by `SURE` standard uncertainties of the meter, and is at rest by `benchkit.measure.resting`.
  What rests elsewhere is never taken by itself, and told of.
* Where the limits hold zero, or have no end, a lead in the air could pass for the reading: nothing is taken by itself.
* A meter that gives no reading is asked again after `RETRY_S`, but no more than `MOST_FAILURES` times in a row: then
  only a key takes this one.
* Simulated hands move the probes when they are told to, so that there is nothing to wait for in a rehearsal.
"""

from __future__ import annotations

import asyncio
from typing import TYPE_CHECKING, Final

from benchkit import quantities
from benchkit.errors import EntryError, InstrumentError
from benchkit.measure.readings import Reading
from benchkit.measure.resting import Probe, Rest, RestView
from benchkit.procedure.actions import Question
from benchkit.session import measuring
from benchkit.session.front import LiveView, Reply
from benchkit.session.job import refusal
from benchkit.session.leaving import Leaving

if TYPE_CHECKING:
    from benchkit.judge.limits import Limits
    from benchkit.procedure.items import Item
    from benchkit.session.run import Session

REST_S: Final = 2.0
LEAST_READINGS: Final = 6
DRIFT_SHARE: Final = 0.05
"""At rest: so long (s), in so many readings, with a drift below this share of the limits' half-width per second ..."""

OF_VALUE: Final = 0.02
"""... and of the middle, however wide the limits are; the same for the distance from lowest to highest."""

NOISE_SHARE: Final = 0.2
SURE: Final = 3.0
INTERVAL_S: Final = 0.1
LOOK_S: Final = 1.0
RETRY_S: Final = 1.0
MOST_FAILURES: Final = 4
BY_ITSELF: Final = f"by itself: at rest for {REST_S:.1f} s"


def possible(session: Session, question: Question) -> bool:
    """Whether a reading can be taken without a key: a meter that is asked, and hands that nobody simulates."""
    job = session.job
    if not job.hands_free or job.manual_meter or session.hands.simulated or question.kind != "probes":
        return False
    item = job.walk.item(session.state)
    return item.point is not None and item.point.function != "dc current"


async def put(session: Session, question: Question) -> Reply:
    """Put a question where the probes go, and answer it when they are there; a key answers it at any moment."""
    item = session.job.walk.item(session.state)
    watch = _Placing(session, item, session.job.walk.limits_for(session.state, item))
    session.busy("")
    refused = ""
    looking: asyncio.Task[None] | None = None
    reading: asyncio.Task[Reading] | None = None
    asking: asyncio.Task[Reply] | None = None
    looked_s = session.clock.now()
    try:
        while True:
            if asking is None:
                asking = asyncio.create_task(session.front.ask(question, refused))
            if reading is None and not watch.mute:
                reading = asyncio.create_task(watch.read())
            waiting: set[asyncio.Task[Reply] | asyncio.Task[Reading]] = {asking}
            if reading is not None:
                waiting.add(reading)
            await asyncio.wait(waiting, timeout=LOOK_S, return_when=asyncio.FIRST_COMPLETED)
            now_s = session.clock.now()
            if session.state.energised == "on" and now_s - looked_s >= LOOK_S and (looking is None or looking.done()):
                looked_s, looking = now_s, asyncio.create_task(session.sample())
            if asking.done():
                reply, asking = asking.result(), None
                refused = refusal(question, reply)
                if not refused:
                    return reply
                continue
            if reading is None or not reading.done():
                continue
            try:
                taken = watch.take(reading.result())
            except (InstrumentError, EntryError) as error:
                watch.failed(str(error))
                reading = None
                await asyncio.wait({asking}, timeout=RETRY_S)
                continue
            reading = None
            if taken:
                session.placed_by_itself = BY_ITSELF
                return Reply(choice="done", text=BY_ITSELF)
            await asyncio.wait({asking}, timeout=INTERVAL_S)
    finally:
        for task in (asking, reading, looking):
            if task is not None:
                task.cancel()


class _Placing:
    """Watches the probes find their point."""

    def __init__(self, session: Session, item: Item, limits: Limits | None) -> None:
        assert item.point is not None
        self._session, self._point = session, item.point
        self._low = None if limits is None else limits.low
        self._high = None if limits is None else limits.high
        self._nominal = None if limits is None else limits.nominal
        self._probe: Probe | None = None
        self._rest: Rest | None = None
        self._leaving: Leaving | None = None
        self._trend: list[tuple[float, float]] = []
        self._failures = 0
        self.mute = False

    @property
    def _sure(self) -> bool:
        """Whether the limits tell a reading from a lead in the air."""
        return self._low is not None and self._high is not None and self._low * self._high > 0.0

    async def read(self) -> Reading:
        point = self._point
        return await measuring.by_meter(self._session, point.name, point.function, point.unit, 1)

    def take(self, reading: Reading) -> bool:
        """Look at a reading; whether it is to be taken now."""
        now_s, value = self._session.clock.now(), reading.value
        self._failures = 0
        probe, rest = self._tools(reading)
        placed = probe.add(now_s, value)
        assert self._leaving is not None
        self._leaving.add(now_s, value, hums=placed == "off")
        view: RestView | None = None
        if value is None or placed == "off":
            rest.clear()
        else:
            view = rest.add(now_s, value)
            self._trend = [*self._trend[-100:], (now_s, value)]
        words, taken = self._said(placed, value, view, SURE * (reading.standard_uncertainty or 0.0))
        self._show(reading, words)
        return taken

    def failed(self, problem: str) -> None:
        """Take note that the meter gave no reading; after too many in a row it is not asked any more."""
        self._failures += 1
        if self._rest is not None:
            self._rest.clear()
        self.mute = self._failures >= MOST_FAILURES
        words = "no reading by itself here: the key takes it" if self.mute else "it is asked again; the key works too"
        self._session.show_moment(message=f"The meter gave no reading ({problem}): {words}.", live=None)

    def _tools(self, reading: Reading) -> tuple[Probe, Rest]:
        if self._probe is None or self._rest is None:
            noise = max(NOISE_SHARE * (reading.own_uncertainty or 0.0), 1e-12)
            self._leaving = Leaving(self._low, self._high, noise)
            self._probe = Probe(noise=noise, low=self._low, high=self._high)
            size = max(abs(end) for end in (self._low, self._high, reading.value, noise) if end is not None)
            middle, half = size, size
            if self._low is not None and self._high is not None:
                middle, half = abs(self._low + self._high) / 2.0, (self._high - self._low) / 2.0
            narrow = min(DRIFT_SHARE * half, OF_VALUE * middle) if middle else DRIFT_SHARE * half
            self._rest = Rest(
                window_s=REST_S, least=LEAST_READINGS, drift_limit=max(narrow, noise),
                spread=max(min(half, OF_VALUE * middle) if middle else half, 8.0 * noise),
            )  # fmt: skip
        return self._probe, self._rest

    def _said(self, placed: str, value: float | None, view: RestView | None, guard: float) -> tuple[str, bool]:
        """Say how far it is, and whether the value is taken."""
        if value is None or view is None or placed == "off":
            return "probe not on the point", False
        if not self._sure:
            return "a lead in the air could read the same: space takes it", False
        assert self._leaving is not None
        if not self._leaving.has_left(value if view.value is None else view.value):
            return "the probes have not moved yet", False
        assert self._low is not None
        assert self._high is not None
        if not view.at_rest or placed != "on":
            return view.why if view.share < 1.0 else "at rest", False
        if not self._low <= value <= self._high:
            shown = quantities.show(value, self._point.unit, 4)
            return f"steady at {shown}, outside the limits: space takes it", False
        if min(value - self._low, self._high - value) < guard:
            return "too near the limit for this meter: space takes it", False
        return f"at rest {REST_S:.1f} s of {REST_S:.1f} s", True

    def _show(self, reading: Reading, words: str) -> None:
        value, unit = reading.value, self._point.unit
        if self._low is None or self._high is None:
            self._session.show_moment(busy="")
            return
        middle = (self._low + self._high) / 2.0
        live = LiveView(
            point=self._point.name,
            unit=unit,
            value=value,
            text="overload" if value is None else quantities.show(value, unit, 4),
            low=self._low,
            high=self._high,
            target=middle if self._nominal is None else self._nominal,
            age_s=0.0,
            inside=value is not None and self._low <= value <= self._high,
            trend=tuple(self._trend),
            mood="gone" if words.startswith("probe not") else "steady" if words.startswith("at rest") else "inside",
            capture=words,
            captured=self._session.captured,
        )
        self._session.show_moment(busy="", live=live)
