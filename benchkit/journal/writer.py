"""Appending to a journal: an event is kept when `Writer.append` returns, and not before.

Rules
-----
* A new record never overwrites a file.
* One writer a file: the file is locked as long as the writer lives.
* A line is written and flushed to the disk before `append` returns.  If the disk does not take it, what was written of
  it is cut off again, the lines before it stay as they were, and the next `append` may try again.
* A record that ends in a torn line is cut back to its last whole line on resuming; the torn text is handed to the
  caller, who has to report it.
* A file that was removed, replaced, cut or added to by somebody else is no longer this record: nothing is appended to
  it, and whoever asks is told.
* A closed record takes no more lines.  A broken one takes none either.
"""

from __future__ import annotations

import os
from collections.abc import Mapping
from pathlib import Path
from types import TracebackType
from typing import Any, Self

from benchkit.errors import FileError, RecordError, TakenError
from benchkit.journal import disk, reader
from benchkit.journal.line import FIRST_PREV, Line, make_line
from benchkit.journal.locking import try_lock

_FLAGS = os.O_RDWR | getattr(os, "O_CLOEXEC", 0) | getattr(os, "O_BINARY", 0)


class Writer:
    """The one writer of one journal; made by `create` or `resume`.

    Attributes
    ----------
    path : Path
    seq : int
        The number of the last kept line; 0 when there is none.
    torn : str
        The torn last line that `resume` cut off; empty if there was none.
    """

    def __init__(self, path: Path, descriptor: int, *, seq: int, digest: str, length: int, torn: str = "") -> None:
        self.path = path
        self._whole_path = path.absolute()
        self.seq = seq
        self.torn = torn
        self._descriptor: int | None = descriptor
        self._digest = digest
        self._length = length
        self._closed = False
        self._spoilt = ""

    @classmethod
    def create(cls, path: str | Path) -> Writer:
        """Start a new journal.

        Raises
        ------
        TakenError
            If there is a file of that name already.
        FileError
            If it can't be made.
        """
        path = Path(path)
        try:
            descriptor = os.open(path, _FLAGS | os.O_CREAT | os.O_EXCL, 0o644)
        except FileExistsError:
            raise TakenError(
                str(path), "", "there is a file of this name already", "a new name", "Nothing was overwritten"
            ) from None
        except OSError as error:
            raise _unusable(path, error) from None
        try:
            _lock(path, descriptor)
            disk.flush_to_disk(descriptor)
            disk.flush_folder(path.absolute().parent)
        except OSError as error:
            os.close(descriptor)
            raise _unusable(path, error) from None
        except BaseException:
            os.close(descriptor)
            raise
        return cls(path, descriptor, seq=0, digest=FIRST_PREV, length=0)

    @classmethod
    def resume(cls, path: str | Path) -> Writer:
        """Go on with a journal that was not closed; a torn last line is cut off and kept in `torn`.

        Raises
        ------
        RecordError
            If it is closed or broken, or another process is writing it.
        FileError
            If it can't be opened.
        """
        path = Path(path)
        try:
            descriptor = os.open(path, _FLAGS)
        except OSError as error:
            raise _unusable(path, error) from None
        try:
            _lock(path, descriptor)
            journal = reader.read(path)
            if journal.problem is not None:
                raise RecordError(
                    str(path), "", f"the record is broken: {journal.problem}", "", "Start a new walk and keep this file"
                )
            if journal.closed:
                raise RecordError(
                    str(path), "", "the record is closed", "one that was cut off", "Start a new walk instead"
                )
            if journal.torn is not None:
                os.ftruncate(descriptor, journal.kept_bytes)
                disk.flush_to_disk(descriptor)
        except OSError as error:
            os.close(descriptor)
            raise _unusable(path, error) from None
        except BaseException:
            os.close(descriptor)
            raise
        return cls(
            path,
            descriptor,
            seq=len(journal.lines),
            digest=journal.last_digest,
            length=journal.kept_bytes,
            torn=journal.torn or "",
        )

    def append(self, event_name: str, payload: Mapping[str, Any], monotonic_s: float, at: str) -> Line:
        """Write one event and return when it is on the disk.

        Parameters
        ----------
        event_name : str
            The event's name.
        payload : mapping
            Plain JSON.
        monotonic_s : float
            The caller's steady clock, s.
        at : str
            UTC, ISO 8601, ending in ``Z``.

        Raises
        ------
        FileError
            If the disk did not take it, or the file is no longer the one that was written.  The journal is as it was
            before.
        RecordError
            If the journal is closed.
        BenchkitError
            If the payload isn't plain JSON.
        """
        descriptor = self._descriptor
        if descriptor is None:
            raise RecordError(str(self.path), "", "this writer has been closed", "an open one")
        if self._closed:
            raise RecordError(str(self.path), "", "the record is closed", "no event after that")
        if self._spoilt:
            raise FileError(str(self.path), "", self._spoilt, "", "Free the disk and resume the walk")
        line = make_line(self.seq + 1, at, monotonic_s, event_name, payload, prev=self._digest)
        self._demand_untouched(descriptor)
        try:
            os.lseek(descriptor, self._length, os.SEEK_SET)
            disk.write_all(descriptor, line.raw)
            disk.flush_to_disk(descriptor)
        except OSError as error:
            self._cut_back(descriptor)
            raise FileError(
                str(self.path),
                "",
                f"the event {event_name!r} could not be kept ({error.strerror})",
                "",
                f"Free the disk; the {self.seq} events before it are safe",
            ) from None
        self.seq = line.seq
        self._digest = line.digest
        self._length += len(line.raw)
        self._closed = event_name == reader.CLOSED
        return line

    def close(self) -> None:
        """Let the file go; safe to call twice.  Every kept line is on the disk already."""
        if self._descriptor is not None:
            os.close(self._descriptor)
            self._descriptor = None

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def _demand_untouched(self, descriptor: int) -> None:
        """See that the file is still where and as it was left."""
        own = os.fstat(descriptor)
        try:
            there = os.stat(self._whole_path)
            same = (there.st_dev, there.st_ino) == (own.st_dev, own.st_ino)
            damage = "" if same else "another file stands in its place"
        except OSError as error:
            damage = "it was removed" if own.st_nlink == 0 else f"it is not there any more ({error.strerror})"
        if not damage and own.st_size < self._length:
            damage = f"only {own.st_size} of its {self._length} bytes are left"
        elif not damage and own.st_size > self._length:
            damage = f"somebody else has added {own.st_size - self._length} bytes to it"
        if damage:
            raise FileError(
                str(self.path),
                "",
                f"the record was lost or damaged while it was written: {damage}",
                "the file as benchkit left it",
                "Find out who has touched it, and begin a new walk",
            )

    def _cut_back(self, descriptor: int) -> None:
        try:
            os.ftruncate(descriptor, self._length)
        except OSError as error:
            self._spoilt = f"a torn line could not be cut off ({error.strerror})"


def _lock(path: Path, descriptor: int) -> None:
    if not try_lock(descriptor):
        raise RecordError(
            str(path), "", "another process is writing this record", "nobody else", "Close the other benchkit first"
        )


def _unusable(path: Path, error: OSError) -> FileError:
    return FileError(
        str(path), "", f"it can't be used ({error.strerror})", "a file that can be written", "Check the path"
    )
