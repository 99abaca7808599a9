"""What the servers of the four links have in common."""

from __future__ import annotations

import contextlib
import socket
import struct
import threading
from abc import ABC, abstractmethod
from types import TracebackType
from typing import ClassVar, Self

from tests.instruments.fault_bench.acts import Outlet, play
from tests.instruments.fault_bench.instrument import FaultInstrument


class FaultServer(ABC):
    """An instrument on a link; it can be killed, and come back at the same address.

    Parameters
    ----------
    instrument : FaultInstrument
        What answers.
    mute : bool
        Connections are taken and nothing is ever answered, not even what the protocol itself asks.
    """

    kind: ClassVar[str]
    stream: ClassVar[bool]
    """True when only the terminator ends a reply."""

    def __init__(self, instrument: FaultInstrument, *, mute: bool = False) -> None:
        self.instrument = instrument
        self.mute = mute
        self.connections = 0
        self.start()

    @property
    @abstractmethod
    def address(self) -> str:
        """The VISA address."""

    @abstractmethod
    def start(self) -> None:
        """Be there; after `stop`, at the same address again."""

    @abstractmethod
    def stop(self) -> None:
        """Be gone: nothing listens, every link is broken."""

    @abstractmethod
    def drop(self, *, reset: bool = False) -> None:
        """Break every link; new ones are taken."""

    @abstractmethod
    def blurt(self, data: bytes) -> None:
        """Send what nobody has asked for."""

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.stop()

    def perform(self, message: bytes, outlet: Outlet) -> None:
        """Let the instrument deal with one message."""
        play(self.instrument.acts(message.decode("latin-1").strip()), outlet)


class TcpServer(FaultServer):
    """A server on a TCP port of this computer, a thread for each connection."""

    _port = 0

    @property
    def port(self) -> int:
        """The TCP port."""
        return self._port

    def start(self) -> None:
        self._open: set[socket.socket] = set()
        self._threads: list[threading.Thread] = []
        self._lock = threading.RLock()
        self._stopping = False
        self._listener = socket.create_server(("127.0.0.1", self._port))
        self._port = self._listener.getsockname()[1]
        self._start_thread(self._accept, self._listener)

    def stop(self) -> None:
        with self._lock:
            if self._stopping:
                return
            self._stopping = True
        with contextlib.suppress(OSError):
            self._listener.shutdown(socket.SHUT_RDWR)
        self._listener.close()
        self.drop()
        for thread in list(self._threads):
            if thread is not threading.current_thread():
                thread.join(2.0)

    def drop(self, *, reset: bool = False) -> None:
        with self._lock:
            connections = list(self._open)
        for connection in connections:
            hang_up(connection, reset=reset)

    @abstractmethod
    def serve(self, connection: socket.socket) -> None:
        """Deal with one connection until it ends; OSError ends it too."""

    def _accept(self, listener: socket.socket) -> None:
        while not self._stopping:
            try:
                connection, _ = listener.accept()
            except OSError:
                return
            connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
            with self._lock:
                self.connections += 1
                self._open.add(connection)
                if self._stopping:
                    hang_up(connection)
            self._start_thread(self._serve, connection)

    def _serve(self, connection: socket.socket) -> None:
        try:
            if self.mute:
                while connection.recv(4096):
                    pass
            else:
                self.serve(connection)
        except (OSError, ValueError):
            pass  # the link is gone: whoever holds the other end sees it
        finally:
            with self._lock:
                self._open.discard(connection)
            connection.close()

    def _start_thread(self, work: object, *what: object) -> threading.Thread:
        assert callable(work)
        thread = threading.Thread(target=work, args=what, daemon=True)
        with self._lock:
            self._threads = [old for old in self._threads if old.is_alive()]
            self._threads.append(thread)
            thread.start()
        return thread


def hang_up(connection: socket.socket, *, reset: bool = False) -> None:
    """Break a connection in order or with a TCP reset; the thread that serves it wakes and closes the socket."""
    with contextlib.suppress(OSError):
        if reset:
            # Without lingering the close is a reset; to shut down reading tells the peer nothing, but wakes the thread.
            connection.setsockopt(socket.SOL_SOCKET, socket.SO_LINGER, struct.pack("ii", 1, 0))
            connection.shutdown(socket.SHUT_RD)
        else:
            connection.shutdown(socket.SHUT_RDWR)


def receive_exactly(connection: socket.socket, count: int) -> bytes:
    """Return exactly so many bytes; ConnectionError when the peer is gone before."""
    data = bytearray()
    while len(data) < count:
        more = connection.recv(min(count - len(data), 1 << 20))
        if not more:
            raise ConnectionError("the peer is gone")
        data += more
    return bytes(data)
