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
from dataclasses import dataclass, field, fields, is_dataclass
from typing import Any, ClassVar, Literal

import pydantic

from benchkit.errors import BenchkitError
from benchkit.measure.readings import Reading

Verdict = Literal["pass", "fail", "undecided"]


@dataclass(frozen=True, kw_only=True)
class SupplyState:
    """What the supply says of itself.

    Parameters
    ----------
    output_on : bool or None
        As read back; ``None`` when it could not be read.
    positive_v, negative_v, positive_a, negative_a : float or None
        Measured at its terminals.
    set_positive_v, set_negative_v, limit_a : float or None
        As read back from its settings.
    positive_in_limit, negative_in_limit : bool
        The rail is held by its current limit instead of its voltage.
    """

    output_on: bool | None = None
    positive_v: float | None = None
    negative_v: float | None = None
    positive_a: float | None = None
    negative_a: float | None = None
    set_positive_v: float | None = None
    set_negative_v: float | None = None
    limit_a: float | None = None
    positive_in_limit: bool = False
    negative_in_limit: bool = False

    @property
    def in_limit(self) -> bool:
        """True when either rail is held by its current limit."""
        return self.positive_in_limit or self.negative_in_limit


@dataclass(frozen=True, kw_only=True)
class PointLimits:
    """What one reading should be: nominal, lowest and highest, in the point's unit (V, A, ohm, degC)."""

    point: str
    unit: str
    nominal: float | None
    low: float | None
    high: float | None


@dataclass(frozen=True, kw_only=True)
class Event:
    """Base of all events."""

    name: ClassVar[str] = ""
    __pydantic_config__: ClassVar[pydantic.ConfigDict] = pydantic.ConfigDict(extra="forbid", allow_inf_nan=False)


@dataclass(frozen=True, kw_only=True)
class WalkOpened(Event):
    """The first line of a record: everything that the record needs to stand alone."""

    name: ClassVar[str] = "walk opened"
    format: int = 1
    version: str
    walk: str
    kind: Literal["walk", "rehearsal"]
    unit: str
    operator: str
    design_name: str
    design_text: str
    design_sha256: str
    procedure_name: str
    procedure_text: str
    procedure_sha256: str
    bench_text: str
    bench_sha256: str
    seed: int = 0
    plant: str = ""
    supply: Literal["scpi", "manual"] = "scpi"
    meter: Literal["scpi", "manual"] = "scpi"
    cautions: tuple[str, ...] = ()


@dataclass(frozen=True, kw_only=True)
class BenchFound(Event):
    """The instruments that answered, as they named themselves; ``by hand`` where there is none."""

    name: ClassVar[str] = "bench found"
    meter: str
    supply: str
    supply_state: SupplyState | None = None


@dataclass(frozen=True, kw_only=True)
class BenchMissing(Event):
    """An instrument that the bench names did not answer."""

    name: ClassVar[str] = "bench missing"
    problem: str


@dataclass(frozen=True, kw_only=True)
class Answered(Event):
    """The operator answered an item: ``done``, ``yes`` or ``no``, with what was typed."""

    name: ClassVar[str] = "answered"
    item: str
    choice: Literal["done", "yes", "no"]
    text: str = ""


@dataclass(frozen=True, kw_only=True)
class Predicted(Event):
    """The model's limits for one condition.  Replay never computes them again."""

    name: ClassVar[str] = "predicted"
    item: str
    condition: str
    limits: tuple[PointLimits, ...]
    units: int
    solved: int
    seed: int
    seconds: float


@dataclass(frozen=True, kw_only=True)
class PredictionRefused(Event):
    """The model has no trustworthy answer; a reading that needed it can't pass."""

    name: ClassVar[str] = "prediction refused"
    item: str
    condition: str
    problem: str


@dataclass(frozen=True, kw_only=True)
class ReadingTaken(Event):
    """One reading, by an instrument or typed in."""

    name: ClassVar[str] = "reading taken"
    item: str
    reading: Reading


@dataclass(frozen=True, kw_only=True)
class ReadingMissed(Event):
    """The meter gave no reading that can be used."""

    name: ClassVar[str] = "reading missed"
    item: str
    point: str
    problem: str


@dataclass(frozen=True, kw_only=True)
class Judged(Event):
    """The verdict on a reading or a named rule."""

    name: ClassVar[str] = "judged"
    item: str
    subject: str
    verdict: Verdict
    value: float | None
    unit: str
    low: float | None
    high: float | None
    uncertainty: float | None = None
    probability: float | None = None
    why: str = ""


@dataclass(frozen=True, kw_only=True)
class Decided(Event):
    """What the operator chose after a failed, undecided or missing result."""

    name: ClassVar[str] = "decided"
    item: str
    choice: Literal["again", "go on", "make safe"]
    reason: str = ""


@dataclass(frozen=True, kw_only=True)
class SupplySet(Event):
    """The supply has been set and read back."""

    name: ClassVar[str] = "supply set"
    item: str
    state: SupplyState


@dataclass(frozen=True, kw_only=True)
class SupplyRefused(Event):
    """The supply did not do what it was told."""

    name: ClassVar[str] = "supply refused"
    item: str
    problem: str


@dataclass(frozen=True, kw_only=True)
class Waited(Event):
    """A dwell is over."""

    name: ClassVar[str] = "waited"
    item: str
    seconds: float


@dataclass(frozen=True, kw_only=True)
class TrimEnded(Event):
    """The operator says that the trim can't be reached, or the screw is at its end."""

    name: ClassVar[str] = "trim ended"
    item: str
    problem: str


@dataclass(frozen=True, kw_only=True)
class Tripped(Event):
    """A watch crossed its line; the keeper is switching off by itself."""

    name: ClassVar[str] = "tripped"
    reason: str
    what: str = ""
    value: float | None = None
    limit: float | None = None
    state: SupplyState | None = None


@dataclass(frozen=True, kw_only=True)
class ContactLost(Event):
    """An instrument or the screen can't be reached any more."""

    name: ClassVar[str] = "contact lost"
    who: str
    problem: str


@dataclass(frozen=True, kw_only=True)
class OutputOff(Event):
    """The supply was told to switch off.

    ``confirmed`` is true only when the output state was read back as off.  Otherwise the words are: output state
    unknown: switch it off by hand.
    """

    name: ClassVar[str] = "output off"
    reason: str
    confirmed: bool
    how: str
    state: SupplyState | None = None


@dataclass(frozen=True, kw_only=True)
class StopAsked(Event):
    """The operator asked for everything off, now."""

    name: ClassVar[str] = "stop asked"
    reason: str = "the operator asked for it"


@dataclass(frozen=True, kw_only=True)
class Resumed(Event):
    """A walk that had been cut off goes on; what was read before it is marked as from before."""

    name: ClassVar[str] = "resumed"
    operator: str
    torn: str = ""


@dataclass(frozen=True, kw_only=True)
class Noted(Event):
    """Something worth keeping that changes nothing: a remark, the highest values seen, a caution."""

    name: ClassVar[str] = "noted"
    item: str = ""
    text: str
    figures: Mapping[str, float] = field(default_factory=dict)


@dataclass(frozen=True, kw_only=True)
class Closed(Event):
    """The last line of a finished record: how many lines stand before it, and the verdict."""

    name: ClassVar[str] = "closed"
    count: int
    verdict: Verdict
    stopped: str = ""
    exit_status: int


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
    Decided,
    SupplySet,
    SupplyRefused,
    Waited,
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
