"""The keeper's ends of the pipes: a thread that reads, a thread that writes, and a standard output kept clean."""

from __future__ import annotations

import os
import threading
import time
from collections.abc import Callable, Mapping
from queue import SimpleQueue
from typing import Any

from benchkit.keeper.protocol import decode, encode


def take_standard_streams() -> tuple[int, int]:
    """Return private descriptors of standard input and output, and put harmless things in their place.

    Whatever a library prints then goes to standard error, and nothing but the keeper reads the screen's messages.
    """
    source, sink = os.dup(0), os.dup(1)
    nothing = os.open(os.devnull, os.O_RDONLY)
    os.dup2(nothing, 0)
    os.close(nothing)
    os.dup2(2, 1)
    return source, sink


def watch_pipe(descriptor: int, act: Callable[[bytes], None]) -> None:
    """Call `act` with what comes through a pipe, and with b"" at its end, on a thread of its own."""

    def read() -> None:
        while True:
            try:
                data = os.read(descriptor, 4096)
            except OSError:
                data = b""
            act(data)
            if not data:
                return

    threading.Thread(target=read, name="reader of a pipe", daemon=True).start()


class LineReader:
    """Reads messages on a thread of its own.

    Parameters
    ----------
    descriptor : int
        Where from.
    act : callable
        Called with a message and the time it was read at (monotonic, s); with None at the end of the file.
    """

    def __init__(self, descriptor: int, act: Callable[[dict[str, Any] | None, float], None]) -> None:
        self._descriptor = descriptor
        self._act = act
        threading.Thread(target=self._read, name="reader of the screen", daemon=True).start()

    def _read(self) -> None:
        buffer = b""
        while True:
            try:
                data = os.read(self._descriptor, 65536)
            except OSError:
                data = b""
            if not data:
                self._act(None, time.monotonic())
                return
            read_s = time.monotonic()
            *lines, buffer = (buffer + data).split(b"\n")
            for line in lines:
                try:
                    message = decode(line)
                except ValueError:
                    message = {"do": "unreadable", "line": line[:80].decode("latin-1")}
                self._act(message, read_s)


class LineWriter:
    """Writes messages on a thread of its own, so that a frozen reader stops nobody.

    Parameters
    ----------
    descriptor : int
        Where to.
    """

    def __init__(self, descriptor: int) -> None:
        self._descriptor = descriptor
        self._queue: SimpleQueue[bytes | None] = SimpleQueue()
        self._thread = threading.Thread(target=self._write, name="writer to the screen", daemon=True)
        self._thread.start()

    def send(self, message: Mapping[str, Any]) -> None:
        """Put a message behind the others; never blocks."""
        self._queue.put(encode(message))

    def finish(self, wait_s: float) -> None:
        """Write what waits, for at most `wait_s`."""
        self._queue.put(None)
        self._thread.join(wait_s)

    def _write(self) -> None:
        broken = False
        while (data := self._queue.get()) is not None:
            while data and not broken:
                try:
                    data = data[os.write(self._descriptor, data) :]
                except OSError:
                    broken = True
