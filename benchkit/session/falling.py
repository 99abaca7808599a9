"""A rail watched down after off: by the meter, live, or typed in by whoever reads one.

Rules
-----
* The watch ends by itself: when the rail reads low beyond the meter's doubt, or when it should long have been low.
  What it reads then is the reading, and the walk judges it.
* The time that is left comes from the reading of this moment and the design's time constant, t = tau·ln(V/low).
* *Too slowly*: over the last stretch of the fall the time constant, as read, is more than `TOO_SLOW` times the one at
  the far ends of the design's tolerances.  A stretch counts when it is long enough for a fall by a tenth at that pace.
* What a rail does before it is seen falling, with the supply's own capacitors still on it, is not judged.
"""

from __future__ import annotations

import asyncio
import math
from collections import deque
from collections.abc import Sequence
from dataclasses import replace
from typing import TYPE_CHECKING, Final

from benchkit import quantities
from benchkit.errors import EntryError, InstrumentError
from benchkit.events import Event, ReadingMissed, ReadingTaken
from benchkit.measure.readings import Reading
from benchkit.procedure.actions import Choice, Fall
from benchkit.procedure.questions import ENOUGH, STOP
from benchkit.procedure.sizing import time_text
from benchkit.session import measuring
from benchkit.session.front import LiveView
from benchkit.session.job import Stopped
from benchkit.stage.stored import TOO_SLOW, fall_s, read_tau_s

if TYPE_CHECKING:
    from benchkit.session.run import Session

LOOK_S: Final = 0.25
"""Between two readings of a fall at the wall clock, and the least that simulated time moves on (s)."""

MOST_LOOK_S: Final = 2.0
"""The most that simulated time moves on between two readings (s)."""

PATIENCE: Final = 3.0
"""So many times the expected time is a fall watched before its reading is taken as it is; our own figure."""

LEAST_PATIENCE_S: Final = 30.0
"""The least, and what a rail gets whose time nobody knows, before it is taken as it is (s); our own figure."""

MOST_PATIENCE_S: Final = 900.0

TOO_SLOW_WORDS: Final = "It falls too slowly: bleed resistor open?"


async def watch(session: Session, action: Fall) -> Event:
    """Watch one rail down; the answer carries where it fell from and how long it took."""
    if session.job.manual_meter:
        return await _typed_down(session, action)
    started_s = session.clock.now()
    seen: deque[tuple[float, float]] = deque(maxlen=2000)
    asking: asyncio.Task[object] | None = None
    refused = ""
    try:
        while True:
            try:
                reading = await measuring.by_meter(session, action.point, action.function, action.unit, 1)
            except (InstrumentError, EntryError) as error:
                return ReadingMissed(item=action.item, point=action.point, problem=str(error))
            now_s = session.clock.now()
            if reading.value is not None:
                seen.append((now_s, reading.value))
            slowly = falls_too_slowly(seen, action.slowest_tau_s)
            over = now_s - started_s > patience_s(action.slowest_tau_s, seen, action.low_v)
            if is_low(reading, action.low_v) or over:
                return _taken(action, reading, seen, slowly)
            _show(session, action, reading, seen, slowly)
            if asking is None:
                asking = asyncio.create_task(session.front.ask(action.question, refused))
            await asyncio.wait({asking}, timeout=LOOK_S if session.clock.own_watch else 0.02)
            if not session.clock.own_watch:
                await session.clock.spend(_step_s(reading, action))
            if not asking.done():
                continue
            reply = asking.result()
            asking, refused = None, ""
            match reply.choice:  # type: ignore[attr-defined]
                case "enough":
                    return _taken(action, reading, seen, slowly)
                case "make safe":
                    raise Stopped(f"the operator chose it at: {action.question.title}")
                case "done":
                    continue
                case other:
                    refused = f"{other!r} is no answer here. It ends by itself, or take it as it reads."
    finally:
        if asking is not None:
            asking.cancel()


def is_low(reading: Reading, low_v: float) -> bool:
    """Whether a rail reads low beyond the meter's doubt (k = 2, JCGM 100, 6.3.3)."""
    if reading.value is None:
        return False
    return abs(reading.value) + 2.0 * (reading.standard_uncertainty or 0.0) < low_v


def patience_s(slowest_tau_s: float | None, seen: Sequence[tuple[float, float]], low_v: float) -> float:
    """How long a fall is watched before its reading is taken as it is (s)."""
    expected_s = fall_s(slowest_tau_s, seen[0][1], low_v) if seen else None
    if expected_s is None:
        return LEAST_PATIENCE_S
    return min(MOST_PATIENCE_S, max(LEAST_PATIENCE_S, PATIENCE * expected_s))


def falls_too_slowly(seen: Sequence[tuple[float, float]], slowest_tau_s: float | None) -> bool:
    """Whether the last stretch of a fall is slower than the design explains.

    Parameters
    ----------
    seen : sequence of (float, float)
        Times (s) and readings (V), oldest first.
    slowest_tau_s : float or None
        The design's time constant at the far ends of its tolerances (s); None where nobody knows, 0 without
        capacitors.
    """
    if not slowest_tau_s or len(seen) < 3:
        return False
    last_s, last_v = seen[-1]
    stretch_s = max(2.0 * LOOK_S, slowest_tau_s * TOO_SLOW * math.log(1.0 / 0.9))
    first = next((one for one in reversed(seen) if last_s - one[0] >= stretch_s), None)
    if first is None:
        return False
    tau_s = read_tau_s(first, (last_s, last_v))
    return tau_s is None or tau_s > TOO_SLOW * slowest_tau_s


def fall_words(value: float | None, low_v: float, tau_s: float | None, *, slowly: bool) -> tuple[str, float | None]:
    """Say how the fall stands, and how much time is left (s) where that is known."""
    if value is None:
        return "The meter reads overload.", None
    if slowly:
        return TOO_SLOW_WORDS, None
    left_s = fall_s(tau_s, value, low_v)
    low = quantities.show(low_v, "V", 2)
    if left_s is None:
        return f"Falling to {low}; the design names no bleed resistor, so nobody knows how long.", None
    return f"Falling to {low}.", left_s


def _show(session: Session, action: Fall, reading: Reading, seen: Sequence[tuple[float, float]], slowly: bool) -> None:
    value = reading.value
    words, left_s = fall_words(value, action.low_v, action.tau_s, slowly=slowly)
    share = None
    if left_s is not None and seen and abs(seen[0][1]) > action.low_v and value is not None:
        whole = math.log(abs(seen[0][1]) / action.low_v)
        share = 1.0 - math.log(max(abs(value), action.low_v) / action.low_v) / whole
    session.show_moment(
        busy=words,
        busy_share=share,
        remaining_s=left_s,
        live=LiveView(
            point=action.point,
            unit=action.unit,
            value=value,
            text="overload" if value is None else quantities.show(value, action.unit, 4),
            low=-action.low_v,
            high=action.low_v,
            target=0.0,
            age_s=0.0,
            inside=value is not None and abs(value) < action.low_v,
            trend=tuple(seen)[-240:],
        ),
    )


def _step_s(reading: Reading, action: Fall) -> float:
    """How far simulated time moves on: a twentieth of what is left, within bounds."""
    left_s = None if reading.value is None else fall_s(action.tau_s, reading.value, action.low_v)
    return LOOK_S if left_s is None else min(MOST_LOOK_S, max(LOOK_S, left_s / 20.0))


def _taken(action: Fall, reading: Reading, seen: Sequence[tuple[float, float]], slowly: bool) -> ReadingTaken:
    fell = bool(seen) and abs(seen[0][1]) > action.low_v
    return ReadingTaken(
        item=action.item,
        reading=reading,
        fell_from_v=abs(seen[0][1]) if fell else None,
        fell_s=seen[-1][0] - seen[0][0] if fell else None,
        fell_slowly=slowly,
    )


async def _typed_down(session: Session, action: Fall) -> Event:
    """Let whoever reads the meter type what it shows, until it is low or taken as it is."""
    accuracy = session.job.accuracy

    def parse(text: str) -> Reading:
        return measuring.typed_reading(text, action.point, action.function, action.unit, accuracy)

    question = replace(
        action.question,
        kind="by hand",
        title=f"Type what the meter shows for {action.point}",
        do=f"{action.question.title}. With its unit, such as 350 mV. Hands off the circuit while it falls.",
        choices=(Choice(value="done", label="Enter"), ENOUGH, STOP),
    )
    seen: list[tuple[float, float]] = []
    newest: Reading | None = None
    while True:
        reply, reading = await session.ask_entry(question, parse)
        if isinstance(reading, Reading):
            newest = reading
            if reading.value is not None:
                seen.append((session.clock.now(), reading.value))
        slowly = falls_too_slowly(seen, action.slowest_tau_s)
        if newest is not None and (reply.choice == "enough" or is_low(newest, action.low_v)):
            return _taken(action, newest, seen, slowly)
        if newest is None:
            question = replace(question, expected=f"Nothing has been typed yet. {action.question.expected}")
            continue
        words, left_s = fall_words(newest.value, action.low_v, action.tau_s, slowly=slowly)
        shown = "overload" if newest.value is None else quantities.show(newest.value, action.unit)
        left = "" if left_s is None else f" About {time_text(left_s)} more."
        question = replace(
            question, expected=f"{shown} is not low yet. {words}{left} Type what it shows then. {action.help}".strip()
        )
