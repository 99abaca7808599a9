"""The frozen events of a walk: what a journal line can say.

Rules
-----
* An event says what *happened*; it never asks for anything.  What is asked for is an action (`benchkit.procedure`).
* Every field is plain JSON: text, numbers, booleans, ``None``, tuples and nested events' parts.  A number is finite;
  an overload is ``value=None`` with ``overload=True``.
* Units stand in the names (``_v``, ``_a``, ``_s``).  Rails are signed: ``negative_v`` is zero or negative.
  Currents are positive when the unit draws current.
* An event may gain a field with a default; it never loses or renames one (old records must stay readable).
* ``item`` names the procedure item that the event belongs to; ``""`` where it belongs to none.
"""

from __future__ import annotations

import functools
import math
from collections.abc import Mapping
from dataclasses import fields, is_dataclass
from typing import Any

import pydantic

from benchkit.errors import BenchkitError
from benchkit.events.base import Event, PointLimits, SupplyState, Verdict
from benchkit.events.model import (
    Narrowed,
    NarrowedLimits,
    Predicted,
    PredictionRefused,
    ProbeNamed,
    Suspected,
    SuspectEvidence,
    SuspectNamed,
)
from benchkit.events.walk import (
    Answered,
    BenchFound,
    BenchMissing,
    Closed,
    ContactLost,
    Decided,
    Judged,
    Noted,
    OutputOff,
    PartsReplaced,
    ReadingMissed,
    ReadingTaken,
    Resumed,
    StopAsked,
    SupplyRefused,
    SupplySet,
    TrimEnded,
    Tripped,
    Waited,
    WalkOpened,
)

__all__ = [
    "EVENT_KINDS",
    "KINDS",
    "Answered",
    "BenchFound",
    "BenchMissing",
    "Closed",
    "ContactLost",
    "Decided",
    "Event",
    "Judged",
    "Narrowed",
    "NarrowedLimits",
    "Noted",
    "OutputOff",
    "PartsReplaced",
    "PointLimits",
    "Predicted",
    "PredictionRefused",
    "ProbeNamed",
    "ReadingMissed",
    "ReadingTaken",
    "Resumed",
    "StopAsked",
    "SupplyRefused",
    "SupplySet",
    "SupplyState",
    "SuspectEvidence",
    "SuspectNamed",
    "Suspected",
    "TrimEnded",
    "Tripped",
    "Verdict",
    "Waited",
    "WalkOpened",
    "from_payload",
    "to_payload",
]

EVENT_KINDS: tuple[type[Event], ...] = (
    WalkOpened,
    BenchFound,
    BenchMissing,
    Answered,
    Predicted,
    PredictionRefused,
    ReadingTaken,
    ReadingMissed,
    Judged,
    Narrowed,
    Suspected,
    Decided,
    SupplySet,
    SupplyRefused,
    Waited,
    PartsReplaced,
    TrimEnded,
    Tripped,
    ContactLost,
    OutputOff,
    StopAsked,
    Resumed,
    Noted,
    Closed,
)
"""Every kind of event that a record may hold."""

KINDS: Mapping[str, type[Event]] = {kind.name: kind for kind in EVENT_KINDS}


def to_payload(event: Event) -> dict[str, Any]:
    """Return the event's fields as plain JSON values, without its name.

    Raises
    ------
    BenchkitError
        If a number is not finite: such a number never goes into a record.
    """
    plain = _plain(event)
    assert isinstance(plain, dict)
    return plain


def from_payload(name: str, payload: Mapping[str, Any]) -> Event:
    """Return the event that `name` and `payload` describe, checked field by field.

    Raises
    ------
    BenchkitError
        If there is no such event or a field doesn't fit.
    """
    kind = KINDS.get(name)
    if kind is None:
        raise BenchkitError(f"The record holds an event named {name!r}", "one that this version knows")
    try:
        event = _adapter(name).validate_python(dict(payload))
    except pydantic.ValidationError as error:
        first = error.errors()[0]
        where = ".".join(str(part) for part in first["loc"])
        raise BenchkitError(f"The event {name!r} has {first['input']!r} at {where!r}", first["msg"]) from None
    assert isinstance(event, Event)
    return event


@functools.cache
def _adapter(name: str) -> pydantic.TypeAdapter[Event]:
    return pydantic.TypeAdapter(KINDS[name])


def _plain(value: object) -> object:
    if is_dataclass(value) and not isinstance(value, type):
        return {part.name: _plain(getattr(value, part.name)) for part in fields(value)}
    if isinstance(value, Mapping):
        return {str(key): _plain(part) for key, part in value.items()}
    if isinstance(value, (tuple, list)):
        return [_plain(part) for part in value]
    if isinstance(value, bool) or value is None or isinstance(value, str):
        return value
    if isinstance(value, int):
        return int(value)
    if isinstance(value, float):
        if not math.isfinite(value):
            raise BenchkitError(f"A record can't hold the number {value!r}", "a finite number")
        return float(value)
    raise BenchkitError(f"A record can't hold {type(value).__name__}", "text, numbers, lists or events")
