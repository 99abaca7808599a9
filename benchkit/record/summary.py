"""The facts of one walk, gathered from the events of its record.

Rules
-----
* A result is a reading, a reading that was missed, or a rule; it has its verdict if one was given.
* A result whose item was measured again is *replaced*: it stays in the summary, and the later one counts.
* ``go on`` after a result that is no pass makes it *overridden*, with the reason that was given.  It stays what it was.
* Everything before a resume is *from before*: trimmer and warmth may have changed since.
* An odd reading passed: it is none that counts against the unit, and still one to know of.
* What the supply is at the end is never said with more certainty than the record has.
* As found and as left are the sections that the procedure marks so.
* Which section an item belongs to is read from the item's name: the names of the section and of the step are its first
  two words.  Titles come from the procedure that the record holds; where it can't be read, the names stand for them.
"""

from __future__ import annotations

from pathlib import Path

from benchkit.errors import RecordError
from benchkit.events import (
    WalkOpened,
)
from benchkit.record.ending import ending_of, with_lamp
from benchkit.record.facts import Ending, Incident, Result, Summary, Suspicion, Took
from benchkit.record.gathering import Gathering
from benchkit.record.verify import Record, load

__all__ = ["Ending", "Incident", "Result", "Summary", "Suspicion", "Took", "load_summary", "summarise"]


def load_summary(path: str | Path) -> Summary:
    """Read a record and gather its facts.

    Raises
    ------
    RecordError
        If the file can't be read, or does not even hold the first line of a record.
    """
    return summarise(load(path))


def summarise(record: Record) -> Summary:
    """Gather the facts of a record, of a broken one those before the first bad line."""
    if not record.kept or not isinstance(record.kept[0].event, WalkOpened):
        raise RecordError(
            str(record.path), "", record.message, "a record that benchkit has written", "Choose another file"
        )
    gathered = Gathering(opened=record.kept[0].event)
    by_hand = gathered.opened.supply == "manual"
    for kept in record.kept:
        gathered.take(kept.seq, kept.at, kept.event)
    return Summary(
        record=record,
        opened=gathered.opened,
        begun=record.kept[0].at,
        ended=record.kept[-1].at,
        meter=gathered.meter,
        supply=gathered.supply,
        sections=tuple(gathered.sections.items()),
        results=tuple(gathered.results),
        answers=tuple(gathered.answers),
        incidents=tuple(gathered.incidents),
        notes=tuple(gathered.notes),
        highest_v=gathered.highest,
        ending=with_lamp(
            ending_of(gathered.ever_on, gathered.may_be_on, gathered.off, by_hand=by_hand),
            gathered.lamp_on_at,
            gathered.lamp_off_at,
            by_hand=by_hand and not gathered.ever_on,
        ),
        closed=gathered.closed,
        suspicions=tuple(gathered.suspicions),
        narrowings=tuple(gathered.narrowings),
        cautions=tuple(gathered.cautions),
        replaced=tuple(gathered.replaced),
        took=gathered.took,
        left_out=tuple(gathered.left_out),
        soaks=tuple(gathered.soaks),
    )
