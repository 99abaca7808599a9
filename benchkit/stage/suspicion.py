"""What is said about suspects: the words in which `benchkit.stage.suspects` answers."""

from __future__ import annotations

from dataclasses import dataclass

from benchkit.stage.faults import Fault
from benchkit.stage.observations import Conditions


@dataclass(frozen=True, kw_only=True)
class Evidence:
    """What one reading says for a suspect.

    Attributes
    ----------
    point, conditions : str, Conditions
    read, expected, healthy : float
        What was read, what the suspect's likeliest unit reads, what the nominal healthy unit reads.
    weight : float
        How much more the reading fits the suspect than a healthy unit, by itself, in nats.
    """

    point: str
    conditions: Conditions
    read: float
    expected: float
    healthy: float
    weight: float


@dataclass(frozen=True, kw_only=True)
class Suspect:
    """One hypothesis: a fault, or `HEALTHY`, with its probability and the faults that can't be told from it."""

    fault: Fault
    probability: float
    alike: tuple[Fault, ...] = ()
    evidence: tuple[Evidence, ...] = ()


@dataclass(frozen=True, kw_only=True)
class Probe:
    """A reading that would tell much: where, under which conditions, expected information in bits, and why."""

    point: str
    conditions: Conditions
    gain_bits: float
    why: str


@dataclass(frozen=True, kw_only=True)
class Suspicion:
    """What the readings of one unit say.

    Attributes
    ----------
    suspects : tuple of Suspect
        All hypotheses, from the most to the least probable.
    probe_next : tuple of Probe
        The most telling first.
    unseen : tuple of Fault
        Faults that these readings could not have shown.
    hypotheses : int
    unsolved : tuple of Fault
        Hypotheses that have no solution; they have probability 0.
    seconds : float
    explained : bool
        Whether at least one hypothesis explains the readings; otherwise the probabilities compare bad explanations.
    """

    suspects: tuple[Suspect, ...]
    probe_next: tuple[Probe, ...]
    unseen: tuple[Fault, ...]
    hypotheses: int
    unsolved: tuple[Fault, ...]
    seconds: float
    explained: bool = True
