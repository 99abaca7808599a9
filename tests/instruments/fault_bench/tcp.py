"""A raw socket: lines of text and nothing else."""

from __future__ import annotations

import contextlib
import socket
import threading

from tests.instruments.fault_bench.server import TcpServer, hang_up


class _SocketOutlet:
    def __init__(self, connection: socket.socket) -> None:
        self.gone = threading.Event()
        self._connection = connection

    def say(self, data: bytes, end: bool) -> None:
        self._connection.sendall(data)

    def close(self, half: bytes) -> None:
        if half:
            self._connection.sendall(half)
        self.gone.set()
        hang_up(self._connection)

    def reset(self) -> None:
        self.gone.set()
        hang_up(self._connection, reset=True)


class SocketServer(TcpServer):
    """``TCPIP::HOST::PORT::SOCKET``."""

    kind = "socket"
    stream = True

    @property
    def address(self) -> str:
        return f"TCPIP::127.0.0.1::{self._port}::SOCKET"

    def start(self) -> None:
        self._outlets: set[_SocketOutlet] = set()
        super().start()

    def drop(self, *, reset: bool = False) -> None:
        with self._lock:
            for outlet in self._outlets:
                outlet.gone.set()
        super().drop(reset=reset)

    def blurt(self, data: bytes) -> None:
        with self._lock:
            for connection in self._open:
                with contextlib.suppress(OSError):
                    connection.sendall(data)

    def serve(self, connection: socket.socket) -> None:
        outlet = _SocketOutlet(connection)
        with self._lock:
            self._outlets.add(outlet)
        buffer = b""
        while not outlet.gone.is_set() and (data := connection.recv(65536)):
            buffer += data
            while b"\n" in buffer and not outlet.gone.is_set():
                message, _, buffer = buffer.partition(b"\n")
                self.perform(message, outlet)
