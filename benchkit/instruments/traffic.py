"""The log of what went over a link: time, direction, bytes, duration; bounded in memory and on the disk.

The file is written by a thread of its own: a disk that hangs must not hold up the thread that has to say "off".
"""

from __future__ import annotations

import logging
import logging.handlers
import threading
import time
from collections import deque
from pathlib import Path
from queue import SimpleQueue

from benchkit.instruments.numbers import visible

KEPT_ENTRIES = 500
FILE_BYTES = 2_000_000
UNWRITTEN_ENTRIES = 10_000


class TrafficLog:
    """Remembers the last messages of every link, and writes them to a file if it has one.

    Parameters
    ----------
    path : Path or None
        A text file; at `FILE_BYTES` it is moved to ``NAME.1`` and a new one is begun, so that two files are the most.
    """

    def __init__(self, path: Path | None = None) -> None:
        self._entries: deque[str] = deque(maxlen=KEPT_ENTRIES)
        self._lock = threading.Lock()
        self._unwritten: SimpleQueue[str | None] = SimpleQueue()
        self._thread: threading.Thread | None = None
        if path is not None:
            handler = logging.handlers.RotatingFileHandler(
                path, maxBytes=FILE_BYTES, backupCount=1, encoding="ascii", delay=True
            )
            self._thread = threading.Thread(target=self._write, args=(handler,), name="traffic log", daemon=True)
            self._thread.start()

    def note(self, label: str, what: str, data: bytes = b"", seconds: float | None = None) -> None:
        """Add one entry; `what` is ``sent``, ``got`` or a remark.  It never raises: a log must not stop an "off"."""
        took = "" if seconds is None else f" after {seconds * 1000:.1f} ms"
        entry = f"{time.time():.4f} {label} {what}{' ' + visible(data) if data else ''}{took}"
        with self._lock:
            self._entries.append(entry)
        if self._thread is not None and self._unwritten.qsize() < UNWRITTEN_ENTRIES:
            self._unwritten.put(entry)

    def entries(self) -> tuple[str, ...]:
        """Return the entries that are remembered, the oldest first."""
        with self._lock:
            return tuple(self._entries)

    def close(self, wait_s: float = 1.0) -> None:
        """Write what waits, for at most `wait_s`, and close the file."""
        if self._thread is not None:
            self._unwritten.put(None)
            self._thread.join(wait_s)

    def _write(self, handler: logging.Handler) -> None:
        while (entry := self._unwritten.get()) is not None:
            handler.handle(logging.makeLogRecord({"msg": entry.encode("ascii", "replace").decode()}))
        handler.close()
