"""Readings: from the meter through the keeper, from the supply's own display, or typed in."""

from __future__ import annotations

import asyncio
import re
from typing import TYPE_CHECKING

from benchkit import quantities
from benchkit.errors import EntryError, InstrumentError
from benchkit.events import Event, ReadingMissed, ReadingTaken
from benchkit.measure.accuracy import Accuracy
from benchkit.measure.readings import Reading
from benchkit.measure.uncertainty import make_reading
from benchkit.procedure.actions import Choice, Question, Read
from benchkit.procedure.questions import STOP
from benchkit.quantities import Overload
from benchkit.session.patience import patiently

if TYPE_CHECKING:
    from benchkit.session.run import Session


async def read(session: Session, action: Read) -> Event:
    """Take one reading; a meter that gives none is told as such."""
    session.busy(f"Reading {action.point}.")
    how, session.placed_by_itself = session.placed_by_itself, ""
    try:
        if action.function == "dc current":
            reading = await _rail_current(session, action)
        elif session.job.manual_meter:
            reading = await _by_hand(session, action.point, action.function, action.unit)
        else:
            if not how:  # else it has been seen at rest already
                await _settle(session, action)
            taking = by_meter(session, action.point, action.function, action.unit, action.samples)
            reading = await patiently(session, action, taking)
    except (InstrumentError, EntryError) as error:
        return ReadingMissed(item=action.item, point=action.point, problem=str(error))
    await session.sample()
    if how:
        session.rang()
    return ReadingTaken(item=action.item, reading=reading, how=how)


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


async def by_instrument(session: Session, point: str, function: str, unit: str, samples: int) -> Reading:
    """Take one reading from what reads this function: a rail's current from the supply, all else by meter.

    Raises
    ------
    InstrumentError, EntryError
    """
    if function == "dc current":
        return await _supply_current(session, point)
    return await by_meter(session, point, function, unit, samples)


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
    return await _supply_current(session, action.point)


async def _supply_current(session: Session, point: str) -> Reading:
    state = await asyncio.wrap_future(session.keeper.supply_state())
    session.note_supply(state)
    amps = state.positive_a if point.startswith("rail+") else state.negative_a
    if amps is None:
        raise InstrumentError("garbled", f"The supply gave no current for {point}", "a number", "Read it again")
    return make_reading(
        point, amps, "A", function="dc current", accuracy=session.job.supply_accuracy, meter="the supply"
    )


async def _by_hand(session: Session, point: str, function: str, unit: str) -> Reading:
    accuracy = session.job.accuracy if function != "dc current" else session.job.supply_accuracy
    item = session.job.walk.item(session.state)
    limits = session.job.walk.limits_for(session.state, item)
    of_supply = function == "dc current"
    shows = "the supply's own display shows" if of_supply else "the meter shows"
    rail = "positive" if point.startswith("rail+") else "negative"
    how = f"Meter on {function}."
    if of_supply:
        how = f"The current of the {rail} rail, from the supply's own display: no meter goes into the rail."
    placed = None if of_supply else item.point
    told = session.state.supply
    before_a = None if told is None else told.positive_a if point.startswith("rail+") else told.negative_a
    if of_supply and before_a is not None:
        how += f" When its rails were set it showed {quantities.show(before_a, 'A', 3)}."
    example = f"With its unit, such as {_example(unit)}"
    question = Question(
        item=item.id,
        kind="by hand",
        expected="" if limits is None else str(limits),
        title=f"Type what {shows} for {point}",
        do=f"{how} {example}." if of_supply else f"{example}; OL for overload. {how}",
        point=point,
        red="" if placed is None else placed.red,
        black="" if placed is None else placed.black,
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
    if function == "ohms 4-wire" and function not in accuracy.rows:
        function = "ohms"  # whoever has no four-wire meter reads with two wires, as well as those can
    if function not in accuracy.rows:
        # Nothing is known of how well this meter does that: the reading is kept, and decides nothing.
        return Reading(
            point=point, value=value, unit=unit, standard_uncertainty=None, meter=f"by hand, {accuracy.name}",
            function=function,
        )  # fmt: skip
    return make_reading(point, value, unit, function=function, accuracy=accuracy, meter=f"by hand, {accuracy.name}")


def _example(unit: str) -> str:
    return {"V": "12.3 mV", "A": "21.5 mA", "ohm": "4k7 or 0R22", "degC": "31 degC"}.get(unit, "12.3 mV")
