"""Which records a folder holds: found by looking, no index is kept.

A file counts as a record when its name ends in ``.jsonl``.  A file that can't be read or is no record is listed with
the reason, never left out: a record that silently goes missing is the one that somebody will look for.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from benchkit.errors import BenchkitError, FileError
from benchkit.record.names import SUFFIX, in_order
from benchkit.record.summary import Summary, load_summary
from benchkit.record.words import clean, verdict_words


@dataclass(frozen=True, kw_only=True)
class Entry:
    """One file of a folder: its summary, or why there is none."""

    path: Path
    summary: Summary | None
    problem: str = ""

    @property
    def resumable(self) -> bool:
        """True for a walk that was cut off and can go on."""
        return self.summary is not None and self.summary.record.status == 1

    def as_json(self) -> dict[str, Any]:
        """Return the entry for a program."""
        if self.summary is None:
            return {"file": str(self.path), "word": "no record", "problem": self.problem}
        opened = self.summary.opened
        return {
            "file": str(self.path),
            "word": self.summary.record.word,
            "problem": "" if self.summary.record.status == 0 else self.summary.record.message,
            "unit": opened.unit,
            "channel": opened.channel,
            "operator": opened.operator,
            "design": opened.design_name,
            "procedure": opened.procedure_name,
            "kind": opened.kind,
            "begun": self.summary.begun,
            "verdict": self.summary.verdict if self.summary.record.status == 0 else None,
        }

    def as_text(self) -> str:
        """Return the entry as one line."""
        if self.summary is None:
            return f"{self.path.name}  no record: {clean(self.problem)}"
        opened = self.summary.opened
        unit = f"{opened.unit}, channel {opened.channel}" if opened.channel else opened.unit
        parts = (self.path.name, unit, opened.design_name, opened.procedure_name, verdict_words(self.summary))
        kind = "  (rehearsal)" if opened.kind == "rehearsal" else ""
        return "  ".join(clean(part) for part in parts) + kind


def entries(folder: Path) -> Iterator[Entry]:
    """Yield every record of a folder (not of the folders in it), by name, hence a unit's walks in their order.

    Raises
    ------
    FileError
        If the folder can't be read.
    """
    try:
        paths = sorted(
            (path for path in folder.iterdir() if path.name.endswith(SUFFIX)), key=lambda path: in_order(path.name)
        )
    except OSError as error:
        raise FileError(
            str(folder), "", f"can't be read: {error.strerror}", "a folder with records", "Check the name"
        ) from None
    for path in paths:
        try:
            yield Entry(path=path, summary=load_summary(path))
        except BenchkitError as error:
            yield Entry(path=path, summary=None, problem=error.message)


def records_of(folder: Path, unit: str) -> Iterator[Entry]:
    """Yield the records of one unit, told by what the record says and not by the file's name."""
    for entry in entries(folder):
        if entry.summary is not None and entry.summary.opened.unit.strip() == unit.strip():
            yield entry
