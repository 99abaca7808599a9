"""The journal's own thread: whatever the disk does, "off" never waits for it.

Requests and the keeper's own events go through one queue and are written in that order; the answers and pushes are
sent from here in the same order.
"""

from __future__ import annotations

import threading
import time
from collections.abc import Callable, Mapping
from datetime import UTC, datetime
from pathlib import Path
from queue import SimpleQueue
from typing import Any

from benchkit.errors import BenchkitError, FileError
from benchkit.journal import Writer
from benchkit.keeper.protocol import error_to_wire


class JournalThread:
    """Owns the writer.

    Parameters
    ----------
    send : callable
        Takes a message for the screen; must not block.
    acknowledged : callable
        Called with the number of an "off" when the screen has shown that it knows of it: it had an event kept behind
        that line.  Called before the screen is told that this event is kept.  Without an open journal, at once.
    """

    def __init__(self, send: Callable[[Mapping[str, Any]], None], acknowledged: Callable[[int], None]) -> None:
        self._send = send
        self._acknowledged = acknowledged
        self._unknown_off: int | None = None
        self._queue: SimpleQueue[Callable[[], None] | None] = SimpleQueue()
        self._writer: Writer | None = None
        self._closed = False
        self._thread = threading.Thread(target=self._own, name="owner of the journal", daemon=True)
        self._thread.start()

    def open(self, request: int, path: str, name: str, payload: Mapping[str, Any]) -> None:
        """Make a new journal with its first event; the answer goes to the screen."""
        self._queue.put(lambda: self._answer(request, lambda: self._open(path, name, payload)))

    def resume(self, request: int, path: str) -> None:
        """Go on with a journal; the answer goes to the screen."""
        self._queue.put(lambda: self._answer(request, lambda: self._resume(path)))

    def append(self, request: int, name: str, payload: Mapping[str, Any], after: int) -> None:
        """Keep an event if the journal stands at `after`; the answer goes to the screen."""
        self._queue.put(lambda: self._answer(request, lambda: self._append(name, payload, after)))

    def keep_own(self, name: str, payload: Mapping[str, Any], off: int | None = None) -> None:
        """Keep an event of the keeper's if a journal is open, and push it in any case; `off` numbers an "off"."""
        self._queue.put(lambda: self._keep_own(name, payload, off))

    @property
    def keeps(self) -> bool:
        """Whether a journal is open."""
        return self._writer is not None and not self._closed

    def finish(self, wait_s: float) -> bool:
        """Write what waits and close; return whether that was done within `wait_s`."""
        self._queue.put(None)
        self._thread.join(wait_s)
        return not self._thread.is_alive()

    def _own(self) -> None:
        while (work := self._queue.get()) is not None:
            work()
        if self._writer is not None:
            self._writer.close()

    def _answer(self, request: int, work: Callable[[], dict[str, Any]]) -> None:
        try:
            self._send({"id": request, "ok": work()})
        except Exception as error:
            self._send({"id": request, "error": error_to_wire(error)})

    def _open(self, path: str, name: str, payload: Mapping[str, Any]) -> dict[str, Any]:
        self._demand_free()
        writer = Writer.create(path)
        try:
            self._write(writer, name, payload)
        except BenchkitError:
            writer.close()
            Path(path).unlink(missing_ok=True)
            raise
        self._writer = writer
        self._closed = False
        return {"seq": writer.seq, "torn": ""}

    def _resume(self, path: str) -> dict[str, Any]:
        self._demand_free()
        self._writer = Writer.resume(path)
        self._closed = False
        return {"seq": self._writer.seq, "torn": self._writer.torn}

    def _append(self, name: str, payload: Mapping[str, Any], after: int) -> dict[str, Any]:
        if self._writer is None:
            raise FileError("the journal", "", "no journal is open", "an open one", "Open or resume one first")
        if self._writer.seq != after:
            return {"seq": self._writer.seq, "moved_on": True}
        seq = self._write(self._writer, name, payload)
        if self._unknown_off is not None:
            self._acknowledged(self._unknown_off)
            self._unknown_off = None
        return {"seq": seq, "moved_on": False}

    def _keep_own(self, name: str, payload: Mapping[str, Any], off: int | None) -> None:
        seq: int | None = None
        problem = ""
        if self._writer is not None and not self._closed:
            try:
                seq = self._write(self._writer, name, payload)
            except Exception as error:
                problem = str(error)
        if off is not None and (self._writer is None or self._closed):
            self._acknowledged(off)
        elif off is not None:
            self._unknown_off = off
        self._send({"push": {"event": name, "payload": payload, "seq": seq, "problem": problem}})

    def _write(self, writer: Writer, name: str, payload: Mapping[str, Any]) -> int:
        at = datetime.now(UTC).strftime("%Y-%m-%dT%H:%M:%S.%fZ")
        line = writer.append(name, payload, round(time.monotonic(), 6), at)
        self._closed = name == "closed"
        return line.seq

    def _demand_free(self) -> None:
        if self._writer is None:
            return
        if not self._closed:
            raise FileError(
                str(self._writer.path), "", "this journal is still open", "a closed one", "Close that walk first"
            )
        self._writer.close()
        self._writer = None
