"""Events of the model: what it predicts, narrows and suspects.  Replay never computes any of it again."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

from benchkit.events.base import Event, PointLimits


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
class NarrowedLimits:
    """One reading's limits for this very unit, in the point's unit.

    A side that stays open is None; where both are, the design's limits stay.
    """

    point: str
    condition: str
    unit: str
    low: float | None
    high: float | None


@dataclass(frozen=True, kw_only=True)
class Narrowed(Event):
    """Limits of readings still to come, conditioned on what this unit has read so far.

    Parameters
    ----------
    item : str
        The item after which they were asked for.
    after : int
        Readings up to this line of the record were counted; later ones were not.
    limits : tuple of NarrowedLimits
        One for each reading that they were asked for.
    readings, units, seed : int
        Readings that were counted, units of the model's ensemble, and its seed.
    seconds : float
    problem : str
        Why the model had no answer; "" when it had one.
    """

    name: ClassVar[str] = "narrowed"
    item: str
    after: int
    limits: tuple[NarrowedLimits, ...] = ()
    readings: int = 0
    units: int = 0
    seed: int = 0
    seconds: float = 0.0
    problem: str = ""


@dataclass(frozen=True, kw_only=True)
class SuspectEvidence:
    """What one reading says for a suspect.

    ``read``, ``expected`` (with the suspect in the unit) and ``healthy`` are in `unit`; None is an overload.
    ``weight`` is how much it speaks for the suspect (nats, cut at ±1000).
    """

    point: str
    condition: str
    unit: str
    read: float | None
    expected: float | None
    healthy: float | None
    weight: float


@dataclass(frozen=True, kw_only=True)
class SuspectNamed:
    """One suspect: a fault as ``part: fault``, or ``healthy``, with those that these readings can't tell from it."""

    fault: str
    probability: float
    alike: tuple[str, ...] = ()
    evidence: tuple[SuspectEvidence, ...] = ()


@dataclass(frozen=True, kw_only=True)
class ProbeNamed:
    """A reading that would tell much: point, condition's name, expected information (bits), and why."""

    point: str
    condition: str
    gain_bits: float
    why: str


@dataclass(frozen=True, kw_only=True)
class Suspected(Event):
    """What would explain this unit's readings, likeliest first.

    Parameters
    ----------
    item : str
        The item at which it was asked.
    after : int
        The line of the record at which it was asked; an answer to an earlier question is not taken.
    suspects : tuple of SuspectNamed
        The few likeliest, ``healthy`` always among them.
    probe_next : tuple of ProbeNamed
        The most telling first.
    unseen_count : int
        Faults that these readings could not have shown.
    unseen : tuple of str
        Their names.
    hypotheses, readings : int
        Explanations that were compared, readings that were counted.
    unsolved : tuple of str
        Faults that the model has no answer for.
    seconds : float
    problem : str
        Why the model had no answer at all; "" when it had one.
    explained : bool
        Whether at least one explanation fits; otherwise bad ones were compared.
    """

    name: ClassVar[str] = "suspected"
    item: str
    after: int
    suspects: tuple[SuspectNamed, ...] = ()
    probe_next: tuple[ProbeNamed, ...] = ()
    unseen_count: int = 0
    unseen: tuple[str, ...] = ()
    hypotheses: int = 0
    readings: int = 0
    unsolved: tuple[str, ...] = ()
    seconds: float = 0.0
    problem: str = ""
    explained: bool = True
