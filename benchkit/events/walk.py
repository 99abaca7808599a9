"""Events of the walk: people, readings, verdicts, the supply, beginning and end."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import ClassVar, Literal

from benchkit.events.base import Event, SupplyState, Verdict
from benchkit.measure.readings import Reading


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
    channel: str = ""


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
class ReadingTaken(Event):
    """One reading, by an instrument or typed in.

    A rail that was watched down says from where it fell (V), how long that took (s), and whether that was slower than
    the design explains.  ``how`` says what took it: ``by key``, or by itself and why; "" where there was no choice.
    """

    name: ClassVar[str] = "reading taken"
    item: str
    reading: Reading
    fell_from_v: float | None = None
    fell_s: float | None = None
    fell_slowly: bool = False
    how: str = ""


@dataclass(frozen=True, kw_only=True)
class ReadingMissed(Event):
    """The meter gave no reading that can be used."""

    name: ClassVar[str] = "reading missed"
    item: str
    point: str
    problem: str


@dataclass(frozen=True, kw_only=True)
class Judged(Event):
    """The verdict on a reading or a named rule.

    ``unit_low`` and ``unit_high`` are this unit's narrowed limits, where there were any; the verdict never comes from
    them.  ``odd`` is true for a reading that lies outside them.  ``rare`` is true for one that did not pass and lies
    so near to the model's limits that a good unit may well read it; see `benchkit.judge.rare`.
    """

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
    unit_low: float | None = None
    unit_high: float | None = None
    odd: bool = False
    rare: bool = False


@dataclass(frozen=True, kw_only=True)
class Decided(Event):
    """What the operator chose after a failed, undecided, missing or odd result.

    ``trim again`` goes back to the trim that set what was read here, ``read again`` to the readings that a rule judged.
    """

    name: ClassVar[str] = "decided"
    item: str
    choice: Literal["again", "go on", "make safe", "probe", "trim again", "read again"]
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
    """A dwell is over.

    Parameters
    ----------
    item : str
    seconds : float
        How long it was.
    settled : bool or None
        Whether what was watched has come to rest; None where nothing was.
    point, unit : str
        What was watched; "" where nothing was.
    final, low, high : float or None
        Where it was predicted to come to rest, with the 95 % interval.
    trend : tuple of (s, value)
        How it went, thinned out; the first moment of the dwell is 0.
    """

    name: ClassVar[str] = "waited"
    item: str
    seconds: float
    settled: bool | None = None
    point: str = ""
    unit: str = ""
    final: float | None = None
    low: float | None = None
    high: float | None = None
    trend: tuple[tuple[float, float], ...] = ()


@dataclass(frozen=True, kw_only=True)
class PartsReplaced(Event):
    """Which parts of the unit were replaced, as the operator named them; "" when none was.

    ``semiconductors`` is true when a transistor or a diode is among them.
    """

    name: ClassVar[str] = "parts replaced"
    item: str
    parts: str
    semiconductors: bool


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
    """Something worth keeping that changes nothing: a remark, the highest values seen, a caution.

    At the end of a rehearsal `broken` names the parts of the simulated unit that have failed, each with how; empty when
    none has, None where the note says nothing of it.
    """

    name: ClassVar[str] = "noted"
    item: str = ""
    text: str
    figures: Mapping[str, float] = field(default_factory=dict)
    broken: tuple[str, ...] | None = None


@dataclass(frozen=True, kw_only=True)
class Closed(Event):
    """The last line of a finished record: how many lines stand before it, and the verdict.

    ``why`` says what kept the verdict from being better than the readings are, where something did.
    """

    name: ClassVar[str] = "closed"
    count: int
    verdict: Verdict
    stopped: str = ""
    exit_status: int
    why: str = ""
