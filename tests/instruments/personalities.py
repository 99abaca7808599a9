"""Instruments of our own invention that speak other dialects, behind a socket or a pseudo-terminal (POSIX)."""

from __future__ import annotations

import contextlib
import os
import re
import select
import socket
import threading
from types import TracebackType
from typing import Self


class Personality:
    """An instrument without a link: what it hears and what it says."""

    terminator = "\n"
    reply_end = "\n"

    def __init__(self) -> None:
        self.heard: list[str] = []
        self.lock = threading.RLock()

    def handle(self, message: str) -> str | None:
        with self.lock:
            self.heard.append(message)
            return self.answer(message)

    def answer(self, message: str) -> str | None:
        raise NotImplementedError

    def told(self) -> list[str]:
        """The messages that are no questions."""
        return [message for message in self.heard if not message.endswith("?") and "? " not in message]


class TwoRails(Personality):
    """Two outputs into two resistors."""

    def __init__(self, load_ohm: float = 1000.0) -> None:
        super().__init__()
        self.volts = {1: 0.0, 2: 0.0}
        self.limit = {1: 0.1, 2: 0.1}
        self.on = {1: False, 2: False}
        self.over_volts = {1: 60.0, 2: 60.0}
        self.tripped = {1: False, 2: False}
        self.load_ohm = load_ohm
        self.deaf = ""
        self.switched_at: list[tuple[int, float]] = []

    def handle(self, message: str) -> str | None:
        with self.lock:
            if self.deaf and re.match(self.deaf, message):
                self.heard.append(message)
                return None
            return super().handle(message)

    def out(self, channel: int) -> tuple[float, float, bool]:
        """Volts and amperes at an output, and whether its limit holds it."""
        if not self.on[channel]:
            return 0.0, 0.0, False
        amps = self.volts[channel] / self.load_ohm
        held = amps > self.limit[channel]
        amps = min(amps, self.limit[channel])
        return amps * self.load_ohm, amps, held

    def switch(self, channel: int, on: bool) -> None:
        if on and not self.on[channel]:
            self.switched_at.append((channel, self.volts[channel]))
        self.on[channel] = on and not self.tripped[channel]

    def trip(self, channel: int) -> None:
        with self.lock:
            self.tripped[channel] = True
            self.on[channel] = False


class SelectSupply(TwoRails):
    """Speaks as ``select-supply`` does."""

    def __init__(self, load_ohm: float = 1000.0) -> None:
        super().__init__(load_ohm)
        self.selected = 1
        self.enabled = 0
        self.errors: list[str] = []

    def answer(self, message: str) -> str | None:
        if message.startswith("*ESE ") and message.endswith(";*ESE?"):
            return message.removeprefix("*ESE ").removesuffix(";*ESE?")
        header, _, value = message.partition(" ")
        one = self.selected
        volts, amps, held = self.out(one)
        answers = {
            "*IDN?": "Own,Select Supply,S-2,1.0",
            "SYST:ERR?": self.errors[0] if self.errors else '0,"No error"',
            "OUTP?": "ON" if self.on[1] and self.on[2] else "OFF",
            "VOLT?": f"{self.volts[one]:.3f}",
            "CURR?": f"{self.limit[one]:.4f}",
            "MEAS:VOLT?": f"{volts:.3f}",
            "MEAS:CURR?": f"{amps:.4f}",
            "OUTP:MODE?": "CC" if held else "CV" if self.on[one] else "OFF",
            "VOLT:PROT?": f"{self.over_volts[one]:.2f}",
            "VOLT:PROT:TRIP?": str(int(self.tripped[one])),
        }
        if header in answers:
            if header == "SYST:ERR?" and self.errors:
                self.errors.pop(0)
            return answers[header]
        match header:
            case "INST:NSEL":
                self.selected = int(value)
            case "VOLT":
                self.volts[one] = float(value)
            case "CURR":
                self.limit[one] = float(value)
            case "VOLT:PROT":
                self.over_volts[one] = float(value)
            case "VOLT:PROT:CLE":
                self.tripped[one] = False
            case "OUTP":
                for channel in (1, 2):
                    self.switch(channel, value == "ON")
            case _:
                self.errors.append('-113,"Undefined header"')
        return None


class PlainSupply(TwoRails):
    """Speaks as ``plain-supply`` does: its replies have no end."""

    reply_end = ""

    def answer(self, message: str) -> str | None:
        if message == "*IDN?":
            return "Own,Plain Supply,S-3,1.0"
        match = re.fullmatch(r"(SW|U|I|MU|MI)([12]?)(?:( [0-9.]+)|(\?))", message)
        if match is None:
            return None
        word, channel, value = match[1], int(match[2] or 1), match[3]
        if match[4]:
            volts, amps, _ = self.out(channel)
            return {
                "SW": str(int(self.on[1])),
                "U": f"{self.volts[channel]:.3f} V",
                "I": f"{self.limit[channel]:.3f} A",
                "MU": f"{volts:.3f} V",
                "MI": f"{amps:.3f} A",
            }[word]
        match word:
            case "SW":
                for each in (1, 2):
                    self.switch(each, float(value) == 1.0)
            case "U":
                self.volts[channel] = float(value)
            case "I":
                self.limit[channel] = float(value)
        return None


class TogetherSupply(TwoRails):
    """Takes voltage and limit of an output in one message, and switches each output by itself."""

    profile = """
format = 1
kind = "supply"
[link]
sync = ""
[outputs]
positive = "CH1"
negative = "CH2"
[commands]
volts = "APPL {output},{volts},{amps}"
limit = "APPL {output},{volts},{amps}"
on = "OUTP {output},ON"
off = "OUTP {output},OFF"
joiner = ""
[questions]
set_volts = "APPL? {output}"
limits = "APPL? {output}"
output = "OUTP? {output}"
volts = "MEAS:VOLT? {output}"
amps = "MEAS:CURR? {output}"
in_limit = "OUTP:MODE? {output}"
error = "SYST:ERR?"
[forms]
set_volts = "{value},{any}"
limits = "{any},{value}"
[answers]
in_limit = ["CC"]
not_in_limit = ["CV"]
no_error = ["NONE"]
"""

    def answer(self, message: str) -> str | None:
        if message == "*IDN?":
            return "Own,Together Supply,S-4,1.0"
        if message == "SYST:ERR?":
            return "NONE"
        match = re.fullmatch(r"([A-Z:]+\??) CH([12])(?:,(.+))?", message)
        if match is None:
            return None
        header, channel, rest = match[1], int(match[2]), match[3]
        volts, amps, held = self.out(channel)
        match header:
            case "APPL":
                self.volts[channel], self.limit[channel] = (float(part) for part in rest.split(","))
            case "OUTP":
                self.switch(channel, rest == "ON")
            case "APPL?":
                return f"{self.volts[channel]:.3f},{self.limit[channel]:.4f}"
            case "OUTP?":
                return "ON" if self.on[channel] else "OFF"
            case "MEAS:VOLT?":
                return f"{volts:.3f}V"
            case "MEAS:CURR?":
                return f"{amps:.4f}A"
            case "OUTP:MODE?":
                return "CC" if held else "CV"
        return None


class NumberedSupply(TwoRails):
    """Has numbered headers and a switch for each output, reads back neither settings nor currents."""

    profile = """
format = 1
kind = "supply"
[link]
sync = ""
[commands]
volts = "CH{output}:VOLT {value}"
limit = "CH{output}:CURR {value}"
on = "OUT{output} ON"
off = "OUT{output} OFF"
joiner = ""
[questions]
set_volts = ""
limits = ""
output = "OUT{output}?"
volts = "CH{output}:MEAS?"
amps = ""
"""

    def answer(self, message: str) -> str | None:
        if message == "*IDN?":
            return "Own,Numbered Supply,S-5,1.0"
        match = re.fullmatch(r"(OUT|CH)([12])(:[A-Z]+)?(\?)?(?: (.+))?", message)
        if match is None:
            return None
        channel = int(match[2])
        match (match[1], match[3], match[4]):
            case ("OUT", None, "?"):
                return "ON" if self.on[channel] else "OFF"
            case ("OUT", None, None):
                self.switch(channel, match[5] == "ON")
            case ("CH", ":VOLT", None):
                self.volts[channel] = float(match[5])
            case ("CH", ":CURR", None):
                self.limit[channel] = float(match[5])
            case ("CH", ":MEAS", "?"):
                return f"{self.out(channel)[0]:.3f}"
        return None


class SerialMeter(Personality):
    """Speaks as ``serial-meter`` does: dumb until it is under remote control."""

    terminator = "\r"
    reply_end = "\r"

    def __init__(self) -> None:
        super().__init__()
        self.remote = False
        self.function = "DCV"
        self.shows: str | list[str] = "12.345 mV"
        self.stuck = False

    def answer(self, message: str) -> str | None:
        if message == "SYST:REM":
            self.remote = True
        if not self.remote:
            return None
        header, _, value = message.partition(" ")
        match header:
            case "*IDN?":
                return "Own,Serial Meter,M-2,1.0"
            case "FUN":
                self.function = self.function if self.stuck else value
            case "FUN?":
                return self.function
            case "VAL?":
                shown = self.shows if isinstance(self.shows, str) else self.shows.pop(0)
                return f"{self.function} {shown}"
        return None


class Host:
    """A personality on a socket."""

    def __init__(self, personality: Personality) -> None:
        self.personality = personality
        self._listener = socket.create_server(("127.0.0.1", 0))
        self._open: list[socket.socket] = []
        self.address = f"TCPIP::127.0.0.1::{self._listener.getsockname()[1]}::SOCKET"
        threading.Thread(target=self._accept, daemon=True).start()

    def hang_up(self) -> None:
        """Close all connections."""
        for connection in self._open:
            with contextlib.suppress(OSError):
                connection.shutdown(socket.SHUT_RDWR)
            connection.close()
        self._open.clear()

    def close(self) -> None:
        with contextlib.suppress(OSError):
            self._listener.shutdown(socket.SHUT_RDWR)
        self._listener.close()
        self.hang_up()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def _accept(self) -> None:
        with contextlib.suppress(OSError):
            while True:
                connection, _ = self._listener.accept()
                connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
                self._open.append(connection)
                threading.Thread(target=self._serve, args=(connection,), daemon=True).start()

    def _serve(self, connection: socket.socket) -> None:
        buffer = b""
        with contextlib.suppress(OSError):
            while data := connection.recv(4096):
                buffer = answer_all(self.personality, buffer + data, connection.sendall)
        with contextlib.suppress(OSError):
            connection.shutdown(socket.SHUT_RDWR)


class Line:
    """A personality on a pseudo-terminal."""

    def __init__(self, personality: Personality) -> None:
        import tty

        self.personality = personality
        self._master, self._slave = os.openpty()
        tty.setraw(self._slave)
        self.address = f"ASRL{os.ttyname(self._slave)}::INSTR"
        self._ending, self._end = os.pipe()
        self._thread = threading.Thread(target=self._serve, daemon=True)
        self._thread.start()

    def close(self) -> None:
        os.write(self._end, b"x")
        self._thread.join(5)
        for number in (self._master, self._slave, self._ending, self._end):
            os.close(number)

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def _serve(self) -> None:
        buffer = b""
        while True:
            ready, _, _ = select.select([self._master, self._ending], [], [])
            if self._ending in ready:
                return
            data = os.read(self._master, 4096)
            buffer = answer_all(self.personality, buffer + data, lambda reply: os.write(self._master, reply))


def answer_all(personality: Personality, buffer: bytes, send: object) -> bytes:
    """Answer every whole message in a buffer and return what is left of it."""
    assert callable(send)
    end = personality.terminator.encode()
    while end in buffer:
        line, _, buffer = buffer.partition(end)
        reply = personality.handle(line.decode("ascii"))
        if reply is not None:
            send((reply + personality.reply_end).encode("latin-1"))
    return buffer
