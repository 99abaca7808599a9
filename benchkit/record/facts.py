"""What a summary of a record is made of."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from benchkit.events import (
    Answered,
    Closed,
    Judged,
    Narrowed,
    Noted,
    PartsReplaced,
    Suspected,
    Verdict,
    Waited,
    WalkOpened,
)
from benchkit.measure.readings import Reading
from benchkit.record.verify import Record

Part = Literal["", "found", "left"]
"""What a section's readings are, where the procedure says so: how the unit was found, how it is left."""


@dataclass(frozen=True, kw_only=True)
class Result:
    """One reading or rule with what became of it.

    Parameters
    ----------
    seq, at : int, str
        Line and time (UTC) of the reading, or of the verdict where there is no reading.
    item, section, step : str
        Where it belongs; names as the procedure has them.
    title : str
        The step's title.
    subject : str
        The test point or the rule.
    reading : Reading or None
        None for a rule and for a missed reading.
    judged : Judged or None
        None when no verdict was given.
    missed : str
        Why there was no reading.
    condition : str
        What the limits were made for, where the model made them.
    from_before, replaced : bool
    overridden : str or None
        The reason, when somebody went on in spite of it (may be empty).
    how : str
        What took the reading, where there was a choice: a key, or benchkit by itself, and why.
    part : str
        ``found`` or ``left`` for a section that the procedure marks so, else "".
    driven : bool
        The stage was driven while it was read.
    rails_v : tuple of float or None
        What the supply was last set to, V; None without power, or where the record doesn't say.
    """

    seq: int
    at: str
    item: str
    section: str
    step: str
    title: str
    subject: str
    reading: Reading | None = None
    judged: Judged | None = None
    missed: str = ""
    condition: str = ""
    from_before: bool = False
    replaced: bool = False
    overridden: str | None = None
    how: str = ""
    part: Part = ""
    driven: bool = False
    rails_v: tuple[float, float] | None = None

    @property
    def extra(self) -> bool:
        """True for a reading that was taken for the suspects' sake, besides the plan."""
        return self.step.startswith("extra-")

    @property
    def verdict(self) -> Verdict | None:
        """The verdict that was given, if one was."""
        return self.judged.verdict if self.judged is not None else None

    @property
    def standard_uncertainty(self) -> float | None:
        """What the verdict counted with, else the meter's; None where nothing is known."""
        if self.judged is not None and self.judged.uncertainty is not None:
            return self.judged.uncertainty
        return self.reading.standard_uncertainty if self.reading is not None else None

    @property
    def odd(self) -> bool:
        """True for a reading outside what this unit's other readings lead to."""
        return self.judged is not None and self.judged.odd

    @property
    def fell_short(self) -> bool:
        """Whether it is a missed reading, or one that did not pass."""
        return bool(self.missed) or self.verdict in ("fail", "undecided")

    @property
    def counts_against(self) -> bool:
        """True for what still stands and is no pass."""
        return not self.replaced and self.fell_short


@dataclass(frozen=True, kw_only=True)
class Suspicion:
    """What the model said would explain the readings: line, time, the step that it was asked at, and the answer."""

    seq: int
    at: str
    where: str
    answer: Suspected


@dataclass(frozen=True, kw_only=True)
class Incident:
    """Something that ended or disturbed the walk: line, time, the step that it was at, and words."""

    seq: int
    at: str
    where: str
    what: str


@dataclass(frozen=True, kw_only=True)
class Took:
    """How long the channel took, and what the procedure allows for it (s); None where it allows nothing."""

    seconds: float
    target_s: float | None = None


@dataclass(frozen=True, kw_only=True)
class Ending:
    """What the record says of the supply at its end.

    Parameters
    ----------
    state : str
        ``off`` (confirmed), ``unknown``, ``on`` (last seen so), or ``never on``.
    words : str
        The same for a person.
    """

    state: str
    words: str


@dataclass(frozen=True, kw_only=True)
class Summary:
    """Everything that a reader of a record wants to know.

    Parameters
    ----------
    record : Record
        The file and whether it is whole.
    opened : WalkOpened
        The first event: who, what, with which files.
    begun, ended : str
        Times of the first and the last line, UTC, ISO 8601.
    meter, supply : str
        As they named themselves; empty if they were never found.
    sections : tuple of (name, title)
        Of the procedure, in its order; empty where the procedure's text can't be read.
    results : tuple of Result
        In the order in which they were taken.
    answers : tuple of (title of the step, Answered)
    incidents : tuple of Incident
    notes : tuple of Noted
    suspicions : tuple of Suspicion
        In their order; the last one says most.
    narrowings : tuple of Narrowed
        In their order.
    cautions : tuple of str
        What had to be said of the bench: an overdue calibration, a supply without protection of its own.
    replaced : tuple of PartsReplaced
        What the operator said about parts that were replaced, in the order in which it was said.
    took : Took or None
        Time of this channel, where the walk noted it.
    left_out : tuple of str
        Titles of the sections that the operator chose to leave out.
    soaks : tuple of (title of the step, Waited)
        Dwells during which a reading was watched coming to rest.
    highest_v : tuple of float or None
        The largest magnitudes, V, of the positive and the negative rail that the supply was set to or measured at.
    ending : Ending
        The supply at the end.
    closed : Closed or None
        None for a walk that was not closed.
    """

    record: Record
    opened: WalkOpened
    begun: str
    ended: str
    meter: str
    supply: str
    sections: tuple[tuple[str, str], ...]
    results: tuple[Result, ...]
    answers: tuple[tuple[str, Answered], ...]
    incidents: tuple[Incident, ...]
    notes: tuple[Noted, ...]
    highest_v: tuple[float, float] | None
    ending: Ending
    closed: Closed | None
    suspicions: tuple[Suspicion, ...] = ()
    narrowings: tuple[Narrowed, ...] = ()
    cautions: tuple[str, ...] = ()
    replaced: tuple[PartsReplaced, ...] = ()
    took: Took | None = None
    left_out: tuple[str, ...] = ()
    soaks: tuple[tuple[str, Waited], ...] = ()

    @property
    def verdict(self) -> Verdict | None:
        """The verdict that the walk was closed with; None for one that was not closed."""
        return self.closed.verdict if self.closed is not None else None
