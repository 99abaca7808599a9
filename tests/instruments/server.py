"""A supply and a meter that answer SCPI on loopback sockets, and misbehave when told to."""

from __future__ import annotations

import contextlib
import re
import socket
import struct
import threading
import time
from collections.abc import Callable
from types import TracebackType
from typing import Self

Reply = bytes | None


class ScpiServer:
    """One instrument on one port; each connection has its own thread.

    ``answers`` maps a message to a function that returns the bytes to send, or None for silence.  ``faults`` is looked
    at first: it gets the connection and the message and returns True when it has dealt with it.
    """

    def __init__(self, name: str, *, port: int = 0) -> None:
        self.name = name
        self.heard: list[tuple[float, str]] = []
        self.fault: Callable[[socket.socket, str], bool] | None = None
        self.connections = 0
        self._open: list[socket.socket] = []
        self._listener = socket.create_server(("127.0.0.1", port))
        self.port: int = self._listener.getsockname()[1]
        self._closing = False
        self.lock = threading.RLock()
        threading.Thread(target=self._accept, daemon=True).start()

    @property
    def address(self) -> str:
        return f"TCPIP::127.0.0.1::{self.port}::SOCKET"

    def messages(self) -> list[str]:
        with self.lock:
            return [message for _, message in self.heard]

    def answer(self, message: str) -> str | None:
        """Return the reply to one unit of a message; None when there is none."""
        if message == "*IDN?":
            return self.name
        if message == "SYST:ERR?":
            return '+0,"No error"'
        return None

    def drop_connections(self, *, reset: bool = False) -> None:
        with self.lock:
            for connection in self._open:
                if reset:
                    connection.setsockopt(socket.SOL_SOCKET, socket.SO_LINGER, struct.pack("ii", 1, 0))
                with contextlib.suppress(OSError):
                    connection.shutdown(socket.SHUT_RDWR) if not reset else None
                connection.close()
            self._open.clear()

    def close(self) -> None:
        self._closing = True
        with contextlib.suppress(OSError):
            self._listener.shutdown(socket.SHUT_RDWR)
        self._listener.close()
        self.drop_connections()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def _accept(self) -> None:
        while not self._closing:
            try:
                connection, _ = self._listener.accept()
            except OSError:
                return
            connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
            with self.lock:
                self.connections += 1
                self._open.append(connection)
            threading.Thread(target=self._serve, args=(connection,), daemon=True).start()

    def _serve(self, connection: socket.socket) -> None:
        buffer = b""
        while True:
            try:
                data = connection.recv(4096)
            except OSError:
                return
            if not data:
                return
            buffer += data
            while b"\n" in buffer:
                line, _, buffer = buffer.partition(b"\n")
                message = line.decode("ascii").strip()
                with self.lock:
                    self.heard.append((time.monotonic(), message))
                try:
                    if self.fault is not None and self.fault(connection, message):
                        continue
                    with self.lock:
                        replies = [self.answer(part.removeprefix(":")) for part in message.split(";")]
                    spoken = [reply for reply in replies if reply is not None]
                    if spoken:
                        connection.sendall((";".join(spoken) + "\n").encode("latin-1"))
                except OSError:
                    return


class TestSupply(ScpiServer):
    """Two outputs into two resistors."""

    __test__ = False

    def __init__(self, *, load_ohm: float = 1000.0, port: int = 0) -> None:
        self.volts = {1: 0.0, 2: 0.0}
        self.limit = {1: 0.1, 2: 0.1}
        self.on = {1: False, 2: False}
        self.load_ohm = load_ohm
        self.on_at: list[tuple[float, bool]] = []
        super().__init__("Own,Test Supply,S-1,1.0", port=port)

    @property
    def is_on(self) -> bool:
        return any(self.on.values())

    def off_time(self) -> float:
        """When both outputs last went off, on the monotonic clock."""
        with self.lock:
            return next(at for at, on in reversed(self.on_at) if not on)

    def wait_off(self, timeout_s: float) -> bool:
        end = time.monotonic() + timeout_s
        while time.monotonic() < end:
            if not self.is_on:
                return True
            time.sleep(0.005)
        return False

    def _amps(self, channel: int) -> tuple[float, bool]:
        if not self.on[channel]:
            return 0.0, False
        amps = self.volts[channel] / self.load_ohm
        return (self.limit[channel], True) if amps > self.limit[channel] else (amps, False)

    def answer(self, message: str) -> str | None:
        match = re.fullmatch(r"(.+?)(?: (ON|OFF|[-+.0-9eE]+))?,?\s*\(@([12])(?:,([12]))?\)", message)
        if match is None:
            return super().answer(message)
        header, value = match[1], match[2]
        channels = [int(channel) for channel in match.groups()[2:] if channel]

        def each(read: Callable[[int], str]) -> str:
            return ",".join(read(channel) for channel in channels)

        match header:
            case "OUTP":
                for channel in channels:
                    self.on[channel] = value == "ON"
                self.on_at.append((time.monotonic(), self.is_on))
            case "VOLT":
                for channel in channels:
                    self.volts[channel] = float(value)
            case "CURR":
                for channel in channels:
                    self.limit[channel] = float(value)
            case "OUTP?":
                return each(lambda c: str(int(self.on[c])))
            case "VOLT?":
                return each(lambda c: f"{self.volts[c]:.4f}")
            case "CURR?":
                return each(lambda c: f"{self.limit[c]:.5f}")
            case "MEAS:VOLT?":
                return each(lambda c: f"{self._amps(c)[0] * self.load_ohm:.5E}")
            case "MEAS:CURR?":
                return each(lambda c: f"{self._amps(c)[0]:+.6E}")
            case "STAT:QUES:COND?":
                return each(lambda c: str(int(self._amps(c)[1])))
            case _:
                return None
        return None


class TestMeter(ScpiServer):
    """Reads whatever it is told to."""

    __test__ = False

    def __init__(self, *, port: int = 0) -> None:
        self.reading = "+1.23450000E-02"
        super().__init__("Own,Test Meter,M-1,1.0", port=port)

    def answer(self, message: str) -> str | None:
        return self.reading if message.startswith("MEAS:") else super().answer(message)
