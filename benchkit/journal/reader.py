"""Reading a journal and checking that it is whole.

What a file can be
------------------
* *whole and closed* (status 0): every line is right, each follows the one before, and the last is a ``closed`` event
  whose ``count`` is the number of lines before it;
* *unfinished* (status 1): every line is right, but there is no ``closed`` line; or the file ends in the beginning of a
  line (*torn*: the power went while it was being written).  Nothing before it is lost;
* *broken* (status 2): something has been changed, lost or put in.  The first bad line is named.

A torn end is a line without its line feed.  If such an end holds a complete line with something behind it, it was not
torn but tampered with, because a cut can only take bytes away.  Nothing may follow a ``closed`` line, not a byte.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Literal

from benchkit.errors import BenchkitError, RecordError
from benchkit.journal.line import FIRST_PREV, TAIL, Line, parse_line

CLOSED = "closed"
"""The event that ends a finished journal."""

_BEGINNING = b'{"seq":1,"at":"'


@dataclass(frozen=True, kw_only=True)
class Journal:
    """What a file holds.

    Parameters
    ----------
    lines : tuple of Line
        The good lines from the first up to the first problem.
    torn : str or None
        The text of an unfinished last line.
    problem : str or None
        What is wrong with the first bad line.
    problem_line : int or None
        Its number, from 1.
    kept_bytes : int
        Where the good lines end.
    """

    lines: tuple[Line, ...]
    torn: str | None = None
    problem: str | None = None
    problem_line: int | None = None
    kept_bytes: int = 0

    @property
    def closed(self) -> bool:
        """True when the last good line is a ``closed`` event."""
        return bool(self.lines) and self.lines[-1].event == CLOSED

    @property
    def last_digest(self) -> str:
        """The digest that the next line would carry as ``prev``."""
        return self.lines[-1].digest if self.lines else FIRST_PREV


@dataclass(frozen=True, kw_only=True)
class Verification:
    """The outcome of a check: 0 whole and closed, 1 unfinished or torn, 2 broken; the line that shows it (from 1)."""

    status: Literal[0, 1, 2]
    line: int
    message: str


def read(path: str | Path) -> Journal:
    """Read a journal as far as it is good.

    Raises
    ------
    RecordError
        If the file can't be read at all.
    """
    try:
        data = Path(path).read_bytes()
    except OSError as error:
        raise RecordError(
            str(path),
            "",
            f"it can't be read ({error.strerror})",
            "a record that benchkit has written",
            "Check the path",
        ) from None
    return scan(data)


def scan(data: bytes) -> Journal:
    """Read a journal from the bytes of its file."""
    pieces = data.split(b"\n")
    end = pieces.pop()
    lines: list[Line] = []
    prev = FIRST_PREV
    kept_bytes = 0

    def broken(problem: str) -> Journal:
        number = len(lines) + 1
        return Journal(lines=tuple(lines), problem=problem, problem_line=number, kept_bytes=kept_bytes)

    for number, piece in enumerate(pieces, start=1):
        if lines and lines[-1].event == CLOSED:
            return broken(f"Line {number} stands behind the closed line. Expected nothing there.")
        try:
            line = parse_line(piece + b"\n", number)
        except BenchkitError as error:
            return broken(error.message)
        if line.seq != number:
            return broken(f"Line {number} has the number {line.seq}: a line is missing or out of its place.")
        if line.prev != prev:
            return broken(f"Line {number} does not follow line {number - 1}: its prev is another line's digest.")
        if line.event == CLOSED and line.payload.get("count") != number - 1:
            return broken(
                f"Line {number} closes a record of {line.payload.get('count')!r} lines. Expected {number - 1}."
            )
        lines.append(line)
        prev = line.digest
        kept_bytes += len(line.raw)
    if not end:
        return Journal(lines=tuple(lines), kept_bytes=kept_bytes)
    number = len(lines) + 1
    if lines and lines[-1].event == CLOSED:
        return broken(f"Line {number} stands behind the closed line. Expected nothing there.")
    if _holds_more_than_a_line(end, number):
        return broken(f"Line {number} has other bytes behind its end. Expected a line feed there.")
    if not lines and not (end.startswith(_BEGINNING[: len(end)]) or not end.strip(b"\0")):
        return broken("Line 1 is not the first line of a journal.")
    return Journal(lines=tuple(lines), torn=end.decode("utf-8", "backslashreplace"), kept_bytes=kept_bytes)


def _holds_more_than_a_line(end: bytes, number: int) -> bool:
    for tail in TAIL.finditer(end):
        if tail.end() == len(end):
            continue
        try:
            parse_line(end[: tail.end()] + b"\n", number)
        except BenchkitError:
            continue
        return True
    return False


def verify(path: str | Path) -> Verification:
    """Check a journal; the file is only read.

    Raises
    ------
    RecordError
        If the file can't be read at all.
    """
    return judge(read(path))


def judge(journal: Journal) -> Verification:
    """Return what a journal that has been read is worth."""
    count = len(journal.lines)
    if journal.problem is not None:
        assert journal.problem_line is not None
        return Verification(status=2, line=journal.problem_line, message=journal.problem)
    if journal.torn is not None:
        return Verification(
            status=1,
            line=count + 1,
            message=f"Line {count + 1} is torn: its end is missing. The {count} lines before it are whole.",
        )
    if not journal.closed:
        return Verification(
            status=1,
            line=count,
            message=f"The record is unfinished: it has no closed line behind line {count}. Its lines are whole.",
        )
    return Verification(status=0, line=count, message=f"The record is whole and closed: {count} lines.")
