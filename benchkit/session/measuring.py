"""Readings: from the meter through the keeper, from the supply's own display, or typed in; and the live trim."""

from __future__ import annotations

import asyncio
import re
from collections import deque
from dataclasses import replace
from typing import TYPE_CHECKING

from benchkit import quantities
from benchkit.errors import BenchkitError, EntryError, InstrumentError
from benchkit.events import Event, ReadingMissed, ReadingTaken, TrimEnded
from benchkit.measure.accuracy import Accuracy
from benchkit.measure.readings import Reading
from benchkit.measure.uncertainty import make_reading
from benchkit.procedure.actions import Choice, Question, Read, Trim
from benchkit.procedure.questions import END, STOP
from benchkit.quantities import Overload
from benchkit.session.front import LiveView
from benchkit.session.job import Stopped
from benchkit.session.patience import patiently

if TYPE_CHECKING:
    from benchkit.session.run import Session

TRIM_INTERVAL_S = 0.25
"""Between two live readings, at the wall clock."""

TURN_S = 2.0
"""Simulated seconds that a hand needs for a move of the screw."""


async def read(session: Session, action: Read) -> Event:
    """Take one reading; a meter that gives none is told as such."""
    session.busy(f"Reading {action.point}.")
    try:
        if action.function == "dc current":
            reading = await _rail_current(session, action)
        elif session.job.manual_meter:
            reading = await _by_hand(session, action.point, action.function, action.unit)
        else:
            await _settle(session, action)
            taking = by_meter(session, action.point, action.function, action.unit, action.samples)
            reading = await patiently(session, action, taking)
    except (InstrumentError, EntryError) as error:
        return ReadingMissed(item=action.item, point=action.point, problem=str(error))
    await session.sample()
    return ReadingTaken(item=action.item, reading=reading)


async def _settle(session: Session, action: Read) -> None:
    """Let the reading come to rest, second by second, so that a trip or off is never held up."""
    whole_s = left_s = max(action.settle_s, 1.0)
    while left_s > 0:
        if action.settle_s:
            words = f"{action.point}: letting the reading come to rest."
            session.busy(words, share=1.0 - left_s / whole_s, remaining_s=left_s)
        slice_s = min(1.0, left_s)
        await session.clock.spend(slice_s)
        left_s -= slice_s


async def by_meter(session: Session, point: str, function: str, unit: str, samples: int) -> Reading:
    """Take one reading from the meter.

    Raises
    ------
    InstrumentError, EntryError
    """
    raw = await asyncio.wrap_future(session.keeper.read(function, samples=samples))
    if raw.overload:
        return _overload(point, function, unit, raw.meter, negative=raw.negative)
    return make_reading(
        point, list(raw.values), unit, function=function, accuracy=session.job.accuracy, meter=raw.meter
    )


def _overload(point: str, function: str, unit: str, meter: str, *, negative: bool) -> Reading:
    return Reading(
        point=point,
        value=None,
        unit=unit,
        overload=True,
        negative=negative,
        standard_uncertainty=None,
        meter=meter,
        function=function,
    )


async def _rail_current(session: Session, action: Read) -> Reading:
    if session.job.manual_supply:
        return await _by_hand(session, action.point, action.function, action.unit)
    state = await asyncio.wrap_future(session.keeper.supply_state())
    session.note_supply(state)
    amps = state.positive_a if action.point.startswith("rail+") else state.negative_a
    if amps is None:
        raise InstrumentError("garbled", f"The supply gave no current for {action.point}", "a number", "Read it again")
    return make_reading(
        action.point, amps, "A", function="dc current", accuracy=session.job.supply_accuracy, meter="the supply"
    )


async def _by_hand(session: Session, point: str, function: str, unit: str) -> Reading:
    accuracy = session.job.accuracy if function != "dc current" else session.job.supply_accuracy
    item = session.job.walk.item(session.state)
    question = Question(
        item=item.id,
        kind="by hand",
        title=f"Type what the meter shows for {point}",
        do=f"With its unit, such as {_example(unit)}; OL for overload. Meter on {function}.",
        point=point,
        red="" if item.point is None else item.point.red,
        black="" if item.point is None else item.point.black,
        choices=(Choice(value="done", label="Take it"), STOP),
    )
    _, reading = await session.ask_entry(question, lambda text: typed_reading(text, point, function, unit, accuracy))
    assert isinstance(reading, Reading)
    return reading


def typed_reading(text: str, point: str, function: str, unit: str, accuracy: Accuracy) -> Reading:
    """Make a reading of what somebody typed.

    Raises
    ------
    EntryError
        When it is no quantity, or came without its unit.
    """
    if re.fullmatch(r"[-+]?[\d.,]+(e[-+]?\d+)?", text.strip(), re.IGNORECASE):
        raise EntryError(f"{text.strip()} came without a unit", f"the unit too, such as {_example(unit)}")
    value = quantities.parse_reading(text, unit)
    if isinstance(value, Overload):
        return _overload(point, function, unit, f"by hand, {accuracy.name}", negative=not value.positive)
    if function not in accuracy.rows:
        # Nothing is known of how well this meter does that: the reading is kept, and decides nothing.
        return Reading(
            point=point, value=value, unit=unit, standard_uncertainty=None, meter=f"by hand, {accuracy.name}",
            function=function,
        )  # fmt: skip
    return make_reading(point, value, unit, function=function, accuracy=accuracy, meter=f"by hand, {accuracy.name}")


def _example(unit: str) -> str:
    return {"V": "12.3 mV", "A": "21.5 mA", "ohm": "4k7 or 0R22", "degC": "31 degC"}.get(unit, "12.3 mV")


# -- the live trim -------------------------------------------------------------------------------------------------


async def trim(session: Session, action: Trim) -> Event:
    """Show the reading while the screw is turned, until the person takes it or gives up."""
    if session.job.manual_meter:
        return await _trim_by_hand(session, action)
    trend: deque[tuple[float, float]] = deque(maxlen=240)
    refused = ""
    asking = None
    session.busy("")
    samples = max(1, session.job.walk.item(session.state).samples)
    try:
        while True:
            try:
                reading = await by_meter(session, action.point, action.function, action.unit, 1)
            except (InstrumentError, EntryError) as error:
                return ReadingMissed(item=action.item, point=action.point, problem=str(error))
            _live(session, action, reading, trend)
            await session.sample()
            if asking is None:
                asking = asyncio.create_task(session.front.ask(action.question, refused))
            await asyncio.wait({asking}, timeout=TRIM_INTERVAL_S)
            if not session.clock.own_watch:
                await session.clock.spend(TRIM_INTERVAL_S)
            if not asking.done():
                continue
            reply = asking.result()
            asking, refused = None, ""
            match reply.choice:
                case "take":
                    final = await by_meter(session, action.point, action.function, action.unit, samples)
                    return ReadingTaken(item=action.item, reading=final)
                case "end":
                    return TrimEnded(item=action.item, problem=reply.text.strip() or "The screw is at its end.")
                case "make safe":
                    raise Stopped(f"the operator chose it at: {action.question.title}")
                case "turn" if session.hands.simulated:
                    await session.hands.turn(reply.turns)
                    await session.clock.spend(TURN_S)
                case _:
                    refused = f"{reply.choice!r} is no answer here. Take the reading, or say that it can't be reached."
    finally:
        if asking is not None:
            asking.cancel()


def _live(session: Session, action: Trim, reading: Reading, trend: deque[tuple[float, float]]) -> None:
    value = reading.value
    if value is not None:
        trend.append((session.clock.now(), value))
    session.show_moment(
        busy="",
        live=LiveView(
            point=action.point,
            unit=action.unit,
            value=value,
            text="overload" if value is None else quantities.show(value, action.unit, 4),
            low=action.low,
            high=action.high,
            target=action.target,
            age_s=0.0,
            inside=value is not None and action.low <= value <= action.high,
            trend=tuple(trend),
        ),
    )


async def _trim_by_hand(session: Session, action: Trim) -> Event:
    """Trim with a meter that a person reads: entries until one is inside the limits and taken."""
    question = replace(
        action.question,
        kind="by hand",
        do=f"{action.question.do} Type what the meter shows after each move, with its unit.",
        choices=(Choice(value="take", label="Enter"), END, STOP),
    )
    accuracy = session.job.accuracy

    def parse(text: str) -> Reading:
        return typed_reading(text, action.point, action.function, action.unit, accuracy)

    while True:
        reply, reading = await session.ask_entry(question, parse)
        if reply.choice == "end":
            return TrimEnded(item=action.item, problem=reply.text.strip() or "The screw is at its end.")
        if not isinstance(reading, Reading):
            raise BenchkitError("A front end answered a trim with something that is no entry")
        _live(session, action, reading, deque())
        if reading.value is not None and action.low <= reading.value <= action.high:
            return ReadingTaken(item=action.item, reading=reading)
        way = "more" if reading.value is not None and reading.value < action.low else "less"
        shown = "overload" if reading.value is None else quantities.show(reading.value, action.unit)
        question = replace(question, expected=f"{shown}: {way} bias is needed. {action.question.expected}")
