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


class Scpi:
    """What every instrument here answers, whatever the link."""

    def __init__(self, name: str) -> None:
        self.name = name
        self.enabled = 0

    def answer(self, message: str) -> str | None:
        """Return the reply to one unit of a message; None when there is none."""
        if message == "*IDN?":
            return self.name
        if message == "SYST:ERR?":
            return '+0,"No error"'
        if message == "*ESE?":
            return str(self.enabled)
        if message == "*OPC?":
            return "1"
        if re.fullmatch(r"\*ESE [0-9]{1,3}", message):
            self.enabled = int(message[5:])
        return None

    def reply(self, message: str) -> str | None:
        """Return the reply to a whole message, its units' answers joined by semicolons."""
        answers = [self.answer(part.strip().removeprefix(":")) for part in message.split(";")]
        spoken = [answer for answer in answers if answer is not None]
        return ";".join(spoken) if spoken else None


class ScpiServer(Scpi):
    """One instrument on one port; each connection has its own thread.

    ``answers`` maps a message to a function that returns the bytes to send, or None for silence.  ``faults`` is looked
    at first: it gets the connection and the message and returns True when it has dealt with it.
    """

    def __init__(self, name: str, *, port: int = 0) -> None:
        Scpi.__init__(self, name)
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
                        reply = self.reply(message)
                    if reply is not None:
                        connection.sendall((reply + "\n").encode("latin-1"))
                except OSError:
                    return


class TwoOutputs(Scpi):
    """Two outputs into two resistors, with protection; no link yet."""

    def __init__(self, name: str, load_ohm: float) -> None:
        Scpi.__init__(self, name)
        self.state_lock = threading.RLock()
        self.volts = {1: 0.0, 2: 0.0}
        self.limit = {1: 0.1, 2: 0.1}
        self.on = {1: False, 2: False}
        self.over_volts = {1: 1000.0, 2: 1000.0}
        self.over_current_trips = {1: False, 2: False}
        self.over_volts_tripped = {1: False, 2: False}
        self.over_current_tripped = {1: False, 2: False}
        self.load_ohm = load_ohm
        self.on_at: list[tuple[float, bool]] = []

    @property
    def is_on(self) -> bool:
        return any(self.on.values())

    def off_time(self) -> float:
        """When both outputs last went off, on the monotonic clock."""
        with self.state_lock:
            return next(at for at, on in reversed(self.on_at) if not on)

    def off_after(self, began: float) -> float:
        """When both outputs first went off after a time, on the monotonic clock."""
        with self.state_lock:
            return next(at for at, on in self.on_at if at > began and not on)

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

    def _protect(self) -> None:
        """Take an output off that is beyond its protection, as a supply does by itself."""
        for channel in (1, 2):
            if not self.on[channel]:
                continue
            amps, limited = self._amps(channel)
            if amps * self.load_ohm > self.over_volts[channel]:
                self.over_volts_tripped[channel] = True
            if limited and self.over_current_trips[channel]:
                self.over_current_tripped[channel] = True
            if self.over_volts_tripped[channel] or self.over_current_tripped[channel]:
                self.on[channel] = False
                self.on_at.append((time.monotonic(), self.is_on))

    def answer(self, message: str) -> str | None:
        with self.state_lock:
            self._protect()
            reply = self._answer(message)
            self._protect()
            return reply

    def _answer(self, message: str) -> str | None:
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
                    tripped = self.over_volts_tripped[channel] or self.over_current_tripped[channel]
                    self.on[channel] = value == "ON" and not tripped
                self.on_at.append((time.monotonic(), self.is_on))
            case "VOLT":
                for channel in channels:
                    self.volts[channel] = float(value)
            case "CURR":
                for channel in channels:
                    self.limit[channel] = float(value)
            case "VOLT:PROT" | "VOLT:PROT:LEV":
                for channel in channels:
                    self.over_volts[channel] = float(value)
            case "CURR:PROT:STAT":
                for channel in channels:
                    self.over_current_trips[channel] = value in {"ON", "1"}
            case "OUTP:PROT:CLE":
                for channel in channels:
                    self.over_volts_tripped[channel] = self.over_current_tripped[channel] = False
            case "VOLT:PROT?" | "VOLT:PROT:LEV?":
                return each(lambda c: f"{self.over_volts[c]:.4f}")
            case "CURR:PROT:STAT?":
                return each(lambda c: str(int(self.over_current_trips[c])))
            case "VOLT:PROT:TRIP?":
                return each(lambda c: str(int(self.over_volts_tripped[c])))
            case "CURR:PROT:TRIP?":
                return each(lambda c: str(int(self.over_current_tripped[c])))
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


class TestSupply(TwoOutputs, ScpiServer):
    """Two outputs behind a socket."""

    __test__ = False

    def __init__(self, *, load_ohm: float = 1000.0, port: int = 0) -> None:
        TwoOutputs.__init__(self, "Own,Test Supply,S-1,1.0", load_ohm)
        ScpiServer.__init__(self, "Own,Test Supply,S-1,1.0", port=port)


class TestMeter(ScpiServer):
    """Reads whatever it is told to."""

    __test__ = False

    def __init__(self, *, port: int = 0) -> None:
        self.reading = "+1.23450000E-02"
        super().__init__("Own,Test Meter,M-1,1.0", port=port)

    def answer(self, message: str) -> str | None:
        return self.reading if message.startswith("MEAS:") else super().answer(message)
