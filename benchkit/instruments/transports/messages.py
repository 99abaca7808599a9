"""Links that know where a message ends: VXI-11, HiSLIP, USBTMC, and whatever another VISA library brings.

Strategy
--------
* Every call into the library is made by the link's own `Worker`; the owner waits for it in slices.  A call that hangs
  is left behind, with its sockets closed under it, and the owner opens a new link beside it.
* VXI-11 is read with short time-outs of its own protocol, HiSLIP only when bytes are there: both can be given up
  within a slice and keep their link.  USBTMC and other libraries are asked once for a whole message: many instruments
  take a second asking for an error of ours.
* A peer that has closed is looked for on the socket below: VXI-11 takes it for silence, with a processor core busy.
* HiSLIP numbers its messages, so that a late reply is dropped below.  With the others it stays in the instrument;
  "device clear" empties that, where the link has it, and only as a way back into step: it can also throw away a
  command that the instrument has not read yet.

USBTMC is written from PyVISA's and pyvisa-py's documentation and sources; it has not been tried on hardware.
"""

from __future__ import annotations

import select
import socket
import struct
import time
from collections.abc import Callable
from concurrent.futures import Future
from contextlib import suppress
from typing import Any, TypeVar

from benchkit.errors import InstrumentError
from benchkit.instruments.address import Address
from benchkit.instruments.settings import LinkSettings
from benchkit.instruments.transports.base import SLICE_S, Piece
from benchkit.instruments.transports.streams import peek, set_line
from benchkit.instruments.transports.worker import Worker
from benchkit.instruments.visa import boundary, constants, resource_manager

T = TypeVar("T")

_WRITE_S = 1.0
_LET_GO_S = 0.1
_CLEAR_S = 1.0
_CHUNK = 65536
_NOTHING = Piece(b"", False)


class _Messages:
    """What these links share: the worker, and one call at a time."""

    fresh_when_reopened = False

    def __init__(self, address: Address, settings: LinkSettings) -> None:
        self._address = address
        self._settings = settings
        self._reading: Future[Piece] | None = None
        self._closed = False
        self._write_s = _WRITE_S
        with boundary(address.text, "open"):
            self._open()
        self._worker = Worker(f"link to {address.text}")

    def write(self, data: bytes) -> None:
        """Send bytes as they are; a reading that is still on its way gets `_LET_GO_S` to come back first."""
        self._let_go()
        self._call(lambda: self._write(data), "write", self._write_s)

    def read_piece(self, wait_s: float, left_s: float) -> Piece:
        """Return what came within the slice; what is being read goes on in the worker."""
        if self._reading is None:
            self._reading = self._worker.start(lambda: self._read(wait_s, left_s))
        reading = self._reading
        if not _came(reading, wait_s + SLICE_S / 2):
            return _NOTHING
        self._reading = None
        with boundary(self._address.text, "read"):
            return reading.result()

    def pending(self) -> bool:
        """Tell whether unasked bytes wait; these links can't see that."""
        return False

    def peer_closed(self) -> bool:
        """Tell whether the other side has closed a connection."""
        with boundary(self._address.text, "read"):
            return any(peek(connection) == b"" for connection in self._sockets())

    def drain(self, quiet_s: float) -> bytes:
        """Throw away what is being read; what else waits in the instrument can't be seen."""
        if self._reading is not None and not _came(self._reading, quiet_s):
            return b""
        reading, self._reading = self._reading, None
        with suppress(Exception):
            return b"" if reading is None else reading.result().data[:200]
        return b""

    def reset(self) -> None:
        """Empty the instrument's buffers by a device clear, where the link has one."""
        with suppress(InstrumentError):
            self._let_go()
            self._call(self._clear, "clear", _CLEAR_S)

    def close(self) -> None:
        """Close; safe to call twice, never raises; a call that hangs finds its sockets closed."""
        if self._closed:
            return
        self._closed = True
        future = self._worker.start(self._close_quietly)
        self._worker.stop()
        _came(future, _LET_GO_S)
        for connection in self._sockets():
            with suppress(OSError):
                connection.shutdown(socket.SHUT_RDWR)
            connection.close()

    def _let_go(self) -> None:
        """Wait for a reading that goes on in the worker; its answer is thrown away."""
        if self._reading is None:
            return
        if not _came(self._reading, _LET_GO_S):
            raise InstrumentError(
                "link lost",
                f"The link to {self._address.text} hangs in a reading",
                "an answer or the end of its time",
                "A new link is opened beside it",
            )
        self._reading = None

    def _call(self, call: Callable[[], T], doing: str, within_s: float) -> T:
        future = self._worker.start(call)
        if _came(future, within_s + 2 * SLICE_S):
            with boundary(self._address.text, doing):
                return future.result()
        raise InstrumentError(
            "link lost",
            f"{self._address.text} did not take a message within {within_s:.1f} s",
            "an instrument that reads what it is sent",
            "Check that it is switched on and that no other program uses it",
        )

    def _open(self) -> None:
        raise NotImplementedError

    def _write(self, data: bytes) -> None:
        raise NotImplementedError

    def _read(self, wait_s: float, left_s: float) -> Piece:
        raise NotImplementedError

    def _clear(self) -> None:
        raise NotImplementedError

    def _sockets(self) -> tuple[socket.socket, ...]:
        return ()

    def _close_quietly(self) -> None:
        raise NotImplementedError


class Vxi11(_Messages):
    """VXI-11: remote procedure calls over TCP."""

    def _open(self) -> None:
        socket.getaddrinfo(self._address.host, 111, socket.AF_INET)
        manager = resource_manager()
        self._resource: Any = manager.open_resource(
            self._address.text, open_timeout=max(1, int(self._settings.open_timeout_s * 1000)), timeout=1000
        )
        self._session: Any = manager.visalib.sessions[self._resource.session]
        self._client: Any = self._session.interface
        self._connection: socket.socket = self._client.sock
        self._connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        self._connection.setsockopt(socket.SOL_SOCKET, socket.SO_KEEPALIVE, 1)
        self._session.lock_timeout = int(self._settings.lock_timeout_s * 1000)
        self._lock_flag = _VXI11_WAIT_FLAG if self._session.lock_timeout else 0
        self._write_s += self._settings.lock_timeout_s

    def _write(self, data: bytes) -> None:
        session, client = self._session, self._client
        while data:
            block, data = data[: session.max_recv_size], data[session.max_recv_size :]
            flags = self._lock_flag | (0 if data else _VXI11_END_FLAG)
            limit_ms = int(_WRITE_S * 1000) + session.lock_timeout
            error, size = client.device_write(session.link, limit_ms, session.lock_timeout, flags, block)
            self._check(error)
            if size < len(block):
                raise ConnectionError(f"VXI-11 took {size} of {len(block)} bytes")

    def _read(self, wait_s: float, left_s: float) -> Piece:
        session = self._session
        error, reason, data = self._client.device_read(
            session.link,
            min(session.max_recv_size, _CHUNK),
            max(1, int(wait_s * 1000)),
            session.lock_timeout,
            self._lock_flag,
            0,
        )
        if error == _VXI11_TIMEOUT:
            return Piece(bytes(data), False)
        self._check(error)
        return Piece(bytes(data), bool(reason & _VXI11_END))

    def _check(self, error: int) -> None:
        if error == _VXI11_LOCKED:
            raise InstrumentError(
                "refused", f"Another program has locked {self._address.text}", "nobody else", "End that program first"
            )
        if error:
            raise ConnectionError(f"VXI-11 reports error {int(error)}")

    def _clear(self) -> None:
        self._session._set_timeout(None, int(_CLEAR_S * 1000))
        self._session.clear()

    def _sockets(self) -> tuple[socket.socket, ...]:
        return (self._connection,) if self._connection.fileno() >= 0 else ()

    def _close_quietly(self) -> None:
        try:
            gone = peek(self._connection) == b""
        except (OSError, ValueError):  # closed already, under a call that hung
            gone = True
        if gone:
            self._client.destroy_link = _forget
        try:
            self._resource.close()
        except Exception:
            self._client.destroy_link = _forget
            self._resource.close()


class Hislip(_Messages):
    """HiSLIP: two TCP connections, messages with numbers."""

    fresh_when_reopened = True

    def _open(self) -> None:
        socket.getaddrinfo(self._address.host, self._address.port or 4880, socket.AF_INET)
        manager = resource_manager()
        self._resource: Any = manager.open_resource(
            self._address.text, open_timeout=max(1, int(self._settings.open_timeout_s * 1000)), timeout=1000
        )
        self._session: Any = manager.visalib.sessions[self._resource.session]
        self._client: Any = self._session.interface
        self._connection: socket.socket = self._client._sync
        self._beside: socket.socket = self._client._async
        self._client.keepalive = True
        self._skip = 0

    def pending(self) -> bool:
        """Tell whether a reply waits that would be taken for the answer of the next question."""
        with boundary(self._address.text, "read"):
            if self._skip:
                return True
            if self._reading is not None or not select.select([self._connection], [], [], 0)[0]:
                return False
            header = self._connection.recv(_HISLIP_HEADER.size, socket.MSG_PEEK)
            if len(header) < _HISLIP_HEADER.size:
                return bool(header)
            _, kind, _, number, _ = _HISLIP_HEADER.unpack(header)
            return kind in _HISLIP_DATA and number in {_HISLIP_ANY, self._client.last_message_id}

    def _write(self, data: bytes) -> None:
        client = self._client
        self._skip += max(0, client._payload_remaining)  # which sending forgets
        client.timeout = _WRITE_S
        self._resource.write_raw(data)

    def _read(self, wait_s: float, left_s: float) -> Piece:
        client = self._client
        client.timeout = max(0.2, min(left_s, 5.0))
        left = client._payload_remaining
        if left <= 0:
            if not select.select([self._connection], [], [], max(0.0, wait_s))[0]:
                return _NOTHING
            if self._skip:
                self._skip -= len(self._some(self._skip))
                return _NOTHING
            kind, number, left = self._header(client.timeout)
            if kind not in _HISLIP_DATA or number not in {_HISLIP_ANY, client.last_message_id}:
                self._pass_over(kind, left)
                return _NOTHING
        data, status = self._session.read(max(1, min(left, _CHUNK)))
        if status == constants().StatusCode.error_timeout:
            raise ConnectionError("the instrument stopped in the middle of a message")
        return Piece(bytes(data), bool(client._rmt))

    def _header(self, timeout_s: float) -> tuple[int, int, int]:
        """Look at the next message's header: kind, number, length."""
        end_s = time.monotonic() + timeout_s
        while len(header := self._connection.recv(_HISLIP_HEADER.size, socket.MSG_PEEK)) < _HISLIP_HEADER.size:
            if not header:
                raise EOFError("the connection ended")
            if time.monotonic() > end_s:
                raise ConnectionError("the instrument stopped in the middle of a message")
            time.sleep(0.002)
        prologue, kind, _, number, length = _HISLIP_HEADER.unpack(header)
        if prologue != b"HS":
            raise ConnectionError("what comes is no HiSLIP message")
        return int(kind), int(number), int(length)

    def _some(self, most: int) -> bytes:
        data = self._connection.recv(min(most, _CHUNK))
        if not data:
            raise EOFError("the connection ended")
        return data

    def _pass_over(self, kind: int, length: int) -> None:
        """Throw away a message that answers nothing that is being waited for; what it is long is left for later."""
        text = b""
        while len(text) < min(_HISLIP_HEADER.size + length, 200):
            text += self._some(min(_HISLIP_HEADER.size + length, 200) - len(text))
        self._skip = _HISLIP_HEADER.size + length - len(text)
        if kind in _HISLIP_ERRORS:
            raise ConnectionError(f"HiSLIP reports {text[_HISLIP_HEADER.size :].decode('ascii', 'replace')!r}")

    def _clear(self) -> None:
        """Nothing: a late reply has a number that nobody waits for."""

    def _sockets(self) -> tuple[socket.socket, ...]:
        return tuple(one for one in (self._connection, self._beside) if one.fileno() >= 0)

    def _close_quietly(self) -> None:
        self._resource.close()


class VisaMessages(_Messages):
    """USBTMC, and anything that another VISA library opens: one call brings one whole message."""

    def _open(self) -> None:
        settings = self._settings
        self._resource: Any = resource_manager(settings.library).open_resource(
            self._address.text,
            open_timeout=max(1, int(settings.open_timeout_s * 1000)),
            timeout=max(1, int(settings.timeout_s * 1000)),
        )
        # without one VISA goes on until its own end of a message, which a stream hasn't got
        self._resource.read_termination = settings.read_termination[-1:] or None
        self._resource.write_termination = ""
        if self._address.kind == "serial":
            set_line(self._resource, settings.line)
        if self._address.kind == "socket":
            with suppress(Exception):  # not every library has it
                self._resource.set_visa_attribute(constants().ResourceAttribute.tcpip_nodelay, True)

    def _write(self, data: bytes) -> None:
        self._resource.timeout = int(_WRITE_S * 1000)
        self._resource.write_raw(data)

    def _read(self, wait_s: float, left_s: float) -> Piece:
        self._resource.timeout = max(1, int(left_s * 1000))
        try:
            data = bytes(self._resource.read_raw())
        except Exception as error:
            if getattr(error, "error_code", None) != constants().StatusCode.error_timeout:
                raise
            data = b""
        if not data:  # some libraries return at once with nothing
            time.sleep(min(wait_s, SLICE_S / 5))
        return Piece(data, bool(data))

    def _clear(self) -> None:
        self._resource.clear()

    def _close_quietly(self) -> None:
        self._resource.close()


_VXI11_TIMEOUT, _VXI11_LOCKED, _VXI11_END = 15, 11, 4
_VXI11_WAIT_FLAG, _VXI11_END_FLAG = 1, 8
_HISLIP_HEADER = struct.Struct("!2sBBIQ")
_HISLIP_ERRORS = (2, 3)
_HISLIP_DATA = (6, 7)
_HISLIP_ANY = 0xFFFFFFFF


def _came(future: Future[Any], within_s: float) -> bool:
    """Wait for a call to end, well or badly, and tell whether it did."""
    with suppress(TimeoutError):
        future.exception(within_s)
    return future.done()


def _forget(link: int) -> int:
    """Stand in for the goodbye to a server that is not there any more."""
    return 0
