"""Whether a record is whole: its chain of lines, and whether what the lines say fits together.

The journal's own check (`benchkit.journal.reader`) finds every changed, lost or added byte.  This one adds what only
somebody who knows the events can see:

* the first event is ``walk opened``, and no other is;
* every line is an event that this version knows, field by field;
* the texts of design, procedure and bench file are those whose digests stand beside them.

Status, which is also the exit status of the command: 0 whole and closed, 1 unfinished or torn, 2 broken.
"""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

from benchkit.errors import BenchkitError, RecordError
from benchkit.events import Event, WalkOpened, from_payload
from benchkit.journal import reader

STATUS_WORDS = {0: "whole", 1: "unfinished", 2: "broken"}
"""One word for each status."""


@dataclass(frozen=True, kw_only=True)
class Kept:
    """One event as it stands in a record: the line's number, its time (UTC, ISO 8601) and the event."""

    seq: int
    at: str
    monotonic_s: float
    event: Event


@dataclass(frozen=True, kw_only=True)
class Record:
    """A record that has been read and checked.

    Parameters
    ----------
    path : Path
        Where it came from.
    status : int
        0 whole and closed, 1 unfinished or torn, 2 broken.
    line : int
        The line that shows it, from 1; of a broken record the first bad one.
    message : str
        The finding in words, the line named.
    kept : tuple of Kept
        The events before the first problem.
    torn : str or None
        The text of an unfinished last line.
    """

    path: Path
    status: Literal[0, 1, 2]
    line: int
    message: str
    kept: tuple[Kept, ...]
    torn: str | None = None

    @property
    def word(self) -> str:
        """``whole``, ``unfinished`` or ``broken``."""
        return STATUS_WORDS[self.status]

    def as_json(self) -> dict[str, Any]:
        """Return the finding for a program: file, status, word, line, message, whole lines."""
        return {
            "file": str(self.path),
            "status": self.status,
            "word": self.word,
            "line": self.line,
            "message": self.message,
            "events": len(self.kept),
        }

    def as_text(self) -> str:
        """Return the finding as one line."""
        return f"{self.path}: {self.word}: {self.message}"


def load(path: str | Path) -> Record:
    """Read and check a record; the file is only read.

    Raises
    ------
    RecordError
        If the file can't be read at all.
    """
    path = Path(path)
    if path.is_dir():
        raise RecordError(str(path), "", "it is a folder", "the file of one record", "Name a file in it")
    journal = reader.read(path)
    found = reader.judge(journal)
    kept: list[Kept] = []
    for line in journal.lines:
        problem = ""
        try:
            event = from_payload(line.event, line.payload)
        except BenchkitError as error:
            problem = error.message
        else:
            problem = _misfit(line.seq, event)
        if problem:
            return Record(
                path=path,
                status=2,
                line=line.seq,
                message=f"Line {line.seq} is in its place, but does not make sense: {problem}",
                kept=tuple(kept),
            )
        kept.append(Kept(seq=line.seq, at=line.at, monotonic_s=line.monotonic_s, event=event))
    if found.status != 2 and not kept:
        return Record(path=path, status=1, line=found.line, message=_EMPTY, kept=(), torn=journal.torn)
    return Record(
        path=path, status=found.status, line=found.line, message=found.message, kept=tuple(kept), torn=journal.torn
    )


_EMPTY = "The record holds no whole line: the walk was cut off before it had begun."


def worst(records: Sequence[Record]) -> int:
    """Return the status of several records together: the highest of theirs, 0 for none."""
    return max((record.status for record in records), default=0)


def _misfit(seq: int, event: Event) -> str:
    """Return what is wrong with an event at its place; ``""`` if nothing is."""
    if seq == 1 and not isinstance(event, WalkOpened):
        return f"the first event is {event.name!r}. Expected 'walk opened'."
    if not isinstance(event, WalkOpened):
        return ""
    if seq != 1:
        return "a second 'walk opened'. Expected it in line 1 only."
    if event.format != 1:
        return f"the record has format {event.format}. Expected format 1. A later version of benchkit may read it."
    for what, text, digest in (
        ("design", event.design_text, event.design_sha256),
        ("procedure", event.procedure_text, event.procedure_sha256),
        ("bench file", event.bench_text, event.bench_sha256),
    ):
        if (text or digest) and hashlib.sha256(text.encode("utf-8", "surrogatepass")).hexdigest() != digest:
            return f"the text of the {what} does not give the digest beside it."
    return ""
