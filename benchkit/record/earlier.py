"""The last record of the same unit and channel before another one.

Rules
-----
* Told by what the records say: serial number, channel, and whether it was a rehearsal.  A rehearsal is never put beside
  a real walk.
* Earlier means begun earlier.  The walk itself, or a copy of its record, is none.
* Only a record that is whole and closed, and read one of the points that records are compared by, will do.  One that is
  passed over is named with the reason: whoever knows that there was another walk finds it mentioned.
* A file whose name benchkit made for another serial number is not opened; nor is more than the first line of one that
  turns out to be another unit's.
"""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

from benchkit.errors import BenchkitError, FileError
from benchkit.events import WalkOpened, from_payload
from benchkit.journal.line import parse_line
from benchkit.record.facts import Summary
from benchkit.record.names import SUFFIX, unit_prefix
from benchkit.record.pairing import KEY_POINTS, standing
from benchkit.record.summary import load_summary

MOST_TRIED = 10
"""So many earlier records are read at most before it is said that none will do."""

_LONGEST_LINE = 8_000_000
_OWN_NAME = re.compile(r"[A-Za-z0-9-]+-[0-9a-f]{8}-\d{8}T\d{6}Z(-[A-Za-z0-9-]+)?\.jsonl")


@dataclass(frozen=True, kw_only=True)
class Earlier:
    """The record that was found, None where there is none, and a sentence about each that was passed over."""

    summary: Summary | None
    passed_over: tuple[str, ...] = ()


def last_before(summary: Summary, folder: Path) -> Earlier:
    """Find the last record in `folder` of the unit and channel of `summary` that was begun before it.

    Raises
    ------
    FileError
        If the folder can't be read.
    """
    begun = sorted(
        ((at, path) for path in _candidates(folder, summary.opened) if (at := _begun(path, summary)) is not None),
        reverse=True,
    )
    passed_over: list[str] = []
    for _, path in begun[:MOST_TRIED]:
        try:
            found = load_summary(path)
        except BenchkitError as error:
            passed_over.append(f"{path.name} is passed over: {error.message}")
            continue
        problem = _unfit(found)
        if not problem:
            return Earlier(summary=found, passed_over=tuple(passed_over))
        passed_over.append(f"{path.name} is passed over: {problem}.")
    if len(begun) > MOST_TRIED:
        passed_over.append(f"{len(begun) - MOST_TRIED} more before these were not looked at.")
    return Earlier(summary=None, passed_over=tuple(passed_over))


def _unfit(found: Summary) -> str:
    if found.record.status:
        return {1: "it is unfinished", 2: "it is broken"}[found.record.status]
    if not any(KEY_POINTS.fullmatch(result.subject) for result in standing(found.results)):
        return "it holds no drop, offset or current"
    return ""


def _candidates(folder: Path, opened: WalkOpened) -> Iterator[Path]:
    """Yield the files that may be records of this unit, by their names."""
    own = unit_prefix(opened.unit) + "-"
    try:
        paths = [path for path in folder.iterdir() if path.name.endswith(SUFFIX)]
    except OSError as error:
        raise FileError(
            str(folder), "", f"can't be read: {error.strerror}", "a folder with records", "Check the name"
        ) from None
    for path in paths:
        if path.name.startswith(own) or not _OWN_NAME.fullmatch(path.name):
            yield path


def _begun(path: Path, summary: Summary) -> str | None:
    """Return when a walk was begun, from its first line; None for what is no earlier walk on the same channel."""
    try:
        with path.open("rb") as file:
            line = parse_line(file.readline(_LONGEST_LINE), 1)
        first = from_payload(line.event, line.payload)
    except (OSError, BenchkitError):
        return None
    opened = summary.opened
    if not isinstance(first, WalkOpened) or first.walk == opened.walk or line.at >= summary.begun:
        return None
    alike = (first.unit.strip(), first.channel.strip(), first.kind) == (
        opened.unit.strip(), opened.channel.strip(), opened.kind,
    )  # fmt: skip
    return line.at if alike else None
