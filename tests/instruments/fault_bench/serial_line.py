"""A serial line: a pseudo-terminal, reached by a name that stays when the device comes back.

POSIX only.  Real serial adapters have such names too (``/dev/serial/by-id``).
"""

from __future__ import annotations

import contextlib
import os
import select
import tempfile
import threading
import tty
from pathlib import Path

from tests.instruments.fault_bench.server import FaultServer


class _LineOutlet:
    def __init__(self, server: SerialServer, master: int) -> None:
        self.gone = threading.Event()
        self._server = server
        self._master = master

    def say(self, data: bytes, end: bool) -> None:
        view = memoryview(data)
        while view:
            if self.gone.is_set():
                raise OSError("the device is gone")
            _, writable, _ = select.select([], [self._master], [], 0.05)
            if writable:
                with contextlib.suppress(BlockingIOError):
                    view = view[os.write(self._master, view[:2048]) :]

    def close(self, half: bytes) -> None:
        if half:
            self.say(half, end=False)
            self._server.wait_read()
        self._server.unplug()

    def reset(self) -> None:
        self._server.unplug()


class SerialServer(FaultServer):
    """``ASRL/path/of/a/link::INSTR``; the path is a symbolic link to the pseudo-terminal of the moment."""

    kind = "serial"
    stream = True
    _path: Path | None = None

    @property
    def path(self) -> str:
        """Where the device is."""
        return str(self._path)

    @property
    def address(self) -> str:
        return f"ASRL{self._path}::INSTR"

    @property
    def present(self) -> bool:
        """True when the device is plugged in."""
        return not self._outlet.gone.is_set()

    def start(self) -> None:
        if self._path is None:
            self._folder = tempfile.TemporaryDirectory(prefix="fault-bench-")
            self._path = Path(self._folder.name) / "line"
        self._master, self._slave = os.openpty()
        tty.setraw(self._slave)
        os.set_blocking(self._master, False)
        self._path.symlink_to(os.ttyname(self._slave))
        self._outlet = _LineOutlet(self, self._master)
        self._lock = threading.Lock()
        self._thread = threading.Thread(target=self._serve, args=(self._master, self._outlet), daemon=True)
        self._thread.start()

    def stop(self) -> None:
        self.unplug()
        if self._thread is not threading.current_thread():
            self._thread.join(2.0)

    def __exit__(self, *what: object) -> None:
        self.stop()
        self._folder.cleanup()

    def drop(self, *, reset: bool = False) -> None:
        """A line has no connections that could be broken: the device is unplugged and plugged in again."""
        self.stop()
        self.start()

    def unplug(self) -> None:
        """Let the device vanish: open ports hang up, the name is gone."""
        with self._lock:
            if self._outlet.gone.is_set():
                return
            self._outlet.gone.set()
            assert self._path is not None
            self._path.unlink(missing_ok=True)
            os.close(self._slave)
            os.close(self._master)

    def blurt(self, data: bytes) -> None:
        self._outlet.say(data, end=True)

    def wait_read(self) -> None:
        """Give the other end the time to read what was sent: what is unread is lost when a device vanishes."""
        self._outlet.gone.wait(0.1)

    def _serve(self, master: int, outlet: _LineOutlet) -> None:
        buffer = b""
        try:
            while not outlet.gone.is_set():
                readable, _, _ = select.select([master], [], [], 0.05)
                if not readable or self.mute:
                    outlet.gone.wait(0.02 if self.mute else 0.0)
                    continue
                buffer += os.read(master, 65536)
                while b"\n" in buffer and not outlet.gone.is_set():
                    message, _, buffer = buffer.partition(b"\n")
                    self.perform(message, outlet)
        except (OSError, ValueError):
            return  # unplugged
