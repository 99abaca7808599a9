"""Raw sockets and serial lines: streams of bytes, read in slices.

What is worked around here (pyvisa-py 0.8)
------------------------------------------
* Opening a refused or unreachable port succeeds, and fails at the first write: an open link is never trusted before
  the instrument has said its name (`benchkit.instruments.conversation`).
* A time-out throws away what had arrived.  The session below PyVISA's resource returns it, so that slices are read
  there; the caller has its own deadline.
* A peer that has closed looks like silence.  A look at the socket tells them apart after each slice.
* ``TCP_NODELAY`` can't be set as an attribute, and without it an "output off" behind another message waits some 40 ms.
* A host that nobody knows leaves an open socket behind there: names are looked up before.
* A serial line is read there one byte a call, and each byte starts the time-out again; the port below is read instead.
* A serial port can be opened twice; here it is locked.
"""

from __future__ import annotations

import select
import socket
import time
from contextlib import suppress
from typing import Any

from benchkit.errors import InstrumentError
from benchkit.instruments.address import Address
from benchkit.instruments.settings import LinkSettings, SerialLine
from benchkit.instruments.transports.base import SLICE_S, Piece
from benchkit.instruments.visa import boundary, constants, resource_manager

_WRITE_S = 1.0
_SHOWN = 200
_MOST_DRAINED = 8_000_000
_QUIET_BITS = 40.0
"""A slow line is quiet only when it has been so for some characters."""


class VisaSocket:
    """One open raw socket.

    Parameters
    ----------
    address : Address
    settings : LinkSettings

    Raises
    ------
    InstrumentError
        If it can't be opened, as far as that shows.
    """

    fresh_when_reopened = True

    def __init__(self, address: Address, settings: LinkSettings) -> None:
        self._address = address
        self._slice_s = SLICE_S
        with boundary(address.text, "open"):
            socket.getaddrinfo(address.host, address.port, socket.AF_INET)
            manager = resource_manager(settings.library)
            self._resource: Any = manager.open_resource(
                address.text,
                open_timeout=max(1, int(settings.open_timeout_s * 1000)),
                timeout=int(SLICE_S * 1000),
                read_termination=settings.read_termination[-1:] or None,
                write_termination="",
            )
            self._session: Any = manager.visalib.sessions[self._resource.session]
            self._socket: socket.socket = self._session.interface
            self._socket.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
            self._socket.setsockopt(socket.SOL_SOCKET, socket.SO_KEEPALIVE, 1)

    def write(self, data: bytes) -> None:
        """Send bytes as they are."""
        with boundary(self._address.text, "write"):
            if not select.select([], [self._socket], [], _WRITE_S)[1]:
                raise _stuck(self._address.text)
            self._resource.write_raw(data)

    def read_piece(self, wait_s: float, left_s: float) -> Piece:
        """Return what has come up to and with the terminator, or up to the end of the slice; may be empty."""
        with boundary(self._address.text, "read"):
            if not self._session._pending_buffer and not select.select([self._socket], [], [], max(0.0, wait_s))[0]:
                return Piece(b"", False)
            self._session.timeout = 0.001
            data, _status = self._session.read(65536)
            return Piece(bytes(data), False)

    def pending(self) -> bool:
        """Tell whether bytes wait that nobody has asked for; a closed peer counts as none."""
        with boundary(self._address.text, "read"):
            return bool(self._session._pending_buffer) or bool(peek(self._socket))

    def peer_closed(self) -> bool:
        """Tell whether the other side has closed the connection."""
        with boundary(self._address.text, "read"):
            return peek(self._socket) == b""

    def drain(self, quiet_s: float) -> bytes:
        """Throw away what has come, until nothing comes for `quiet_s`; return the first of it for the log."""
        with boundary(self._address.text, "read"):
            thrown = bytes(self._session._pending_buffer)
            self._session._pending_buffer.clear()
            end_s = time.monotonic() + 10 * quiet_s + 0.2
            taken = 0
            while taken < _MOST_DRAINED and time.monotonic() < end_s:
                if not select.select([self._socket], [], [], quiet_s)[0]:
                    break
                data = self._socket.recv(65536)
                if not data:
                    break
                taken += len(data)
                thrown += data[: max(0, _SHOWN - len(thrown))]
            return thrown

    def reset(self) -> None:
        """Nothing: a stream has no way to say that."""

    def close(self) -> None:
        """Close; safe to call twice, never raises."""
        with suppress(Exception):
            self._resource.close()


class VisaSerial:
    """One open serial line.

    Parameters
    ----------
    address : Address
    settings : LinkSettings

    Raises
    ------
    InstrumentError
        If it can't be opened, another program has it, or it can't do what the line's settings ask for.
    """

    fresh_when_reopened = False

    def __init__(self, address: Address, settings: LinkSettings) -> None:
        self._address = address
        self._terminator = settings.read_termination.encode("latin-1")
        self._kept = bytearray()
        self._least_quiet_s = _QUIET_BITS / settings.line.baud
        with boundary(address.text, "open"):
            manager = resource_manager(settings.library)
            self._resource: Any = manager.open_resource(
                address.text if address.text.upper().endswith("::INSTR") else address.text + "::INSTR",
                open_timeout=max(1, int(settings.open_timeout_s * 1000)),
                timeout=int(_WRITE_S * 1000),
                read_termination=None,
                write_termination="",
            )
        try:
            with boundary(address.text, "open"):
                self._set_line(settings.line)
                self._port: Any = manager.visalib.sessions[self._resource.session].interface
                self._port.exclusive = True
                for line, wanted in (("dtr", settings.line.dtr), ("rts", settings.line.rts)):
                    if not wanted:
                        self._put_off(line)
                self._port.reset_input_buffer()
                self._port.timeout = SLICE_S
        except InstrumentError:
            self.close()
            raise

    def write(self, data: bytes) -> None:
        """Send bytes as they are."""
        with boundary(self._address.text, "write"):
            self._port.write_timeout = _WRITE_S
            if self._port.write(data) != len(data):
                raise _stuck(self._address.text)

    def read_piece(self, wait_s: float, left_s: float) -> Piece:
        """Return what has come up to and with the terminator, or up to the end of the slice; may be empty."""
        with boundary(self._address.text, "read"):
            line = self._line()
            if line is None:
                self._kept += self._some(wait_s)
                line = self._line()
            if line is None:
                line = bytes(self._kept)
                self._kept.clear()
            return Piece(line, False)

    def pending(self) -> bool:
        """Tell whether bytes wait that nobody has asked for."""
        with boundary(self._address.text, "read"):
            return bool(self._kept) or self._port.in_waiting > 0

    def peer_closed(self) -> bool:
        """A serial line has nobody who could close it; a port that is pulled out is an error when it is read."""
        return False

    def drain(self, quiet_s: float) -> bytes:
        """Throw away what has come, until nothing comes for `quiet_s`; return the first of it for the log."""
        with boundary(self._address.text, "read"):
            thrown = bytes(self._kept[:_SHOWN])
            self._kept.clear()
            quiet_s = max(quiet_s, self._least_quiet_s)
            end_s = time.monotonic() + 10 * quiet_s + 0.2
            while time.monotonic() < end_s:
                data = self._some(quiet_s)
                if not data:
                    break
                thrown += data[: max(0, _SHOWN - len(thrown))]
            return thrown

    def reset(self) -> None:
        """Nothing: a stream has no way to say that."""

    def close(self) -> None:
        """Close; safe to call twice, never raises; what was not sent yet is dropped, for a stopped line."""
        with suppress(Exception):
            self._port.reset_output_buffer()
        with suppress(Exception):
            self._resource.close()

    def _set_line(self, line: SerialLine) -> None:
        try:
            set_line(self._resource, line)
        except Exception as error:
            raise InstrumentError(
                "unsupported",
                f"The port of {self._address.text} can't be set to {line.baud} baud, {line.data_bits} data bits, "
                f"parity {line.parity}, {line.stop_bits:g} stop bits, flow {line.flow} ({error})",
                "settings that the port has",
                "Correct the profile's [link.line] or the bench file's, or use another port",
            ) from None

    def _put_off(self, line: str) -> None:
        """Switch one of the port's lines off; PyVISA opens it with both on."""
        try:
            setattr(self._port, line, False)
        except OSError as error:
            raise InstrumentError(
                "unsupported",
                f"The port of {self._address.text} can't switch its line {line.upper()} ({error.strerror})",
                "a serial port that has it",
                f"Leave {line} out of the profile and of the bench file",
            ) from None

    def _some(self, wait_s: float) -> bytes:
        """Return what waits, or wait for the first of it."""
        waiting = self._port.in_waiting
        if not waiting:
            if self._port.timeout != wait_s:
                self._port.timeout = max(0.0, wait_s)
            first = bytes(self._port.read(1))
            with suppress(OSError):  # what came before the line broke is still worth having; the next look finds it
                waiting = self._port.in_waiting if first else 0
            return first + bytes(self._port.read(waiting)) if waiting else first
        return bytes(self._port.read(waiting))

    def _line(self) -> bytes | None:
        """Take one line from what is kept, if a whole one is there."""
        if not self._terminator:
            return None
        end = self._kept.find(self._terminator)
        if end < 0:
            return None
        end += len(self._terminator)
        line = bytes(self._kept[:end])
        del self._kept[:end]
        return line


def set_line(resource: Any, line: SerialLine) -> None:
    """Give a VISA resource the settings of a serial line."""
    visa = constants()
    resource.baud_rate = line.baud
    resource.data_bits = line.data_bits
    resource.parity = visa.Parity[line.parity]
    resource.stop_bits = {1: visa.StopBits.one, 1.5: visa.StopBits.one_and_a_half, 2: visa.StopBits.two}[line.stop_bits]
    resource.flow_control = {
        "none": visa.ControlFlow.none,
        "rts/cts": visa.ControlFlow.rts_cts,
        "xon/xoff": visa.ControlFlow.xon_xoff,
        "dtr/dsr": visa.ControlFlow.dtr_dsr,
    }[line.flow]


def peek(connection: socket.socket) -> bytes | None:
    """Return b"" when the peer has closed, None when nothing is there, else the first byte."""
    ready, _, _ = select.select([connection], [], [], 0)
    return connection.recv(1, socket.MSG_PEEK) if ready else None


def _stuck(address: str) -> InstrumentError:
    return InstrumentError(
        "link lost",
        f"{address} takes no more bytes",
        "an instrument that reads what it is sent",
        "Check the cable, the line's settings and the instrument",
    )
