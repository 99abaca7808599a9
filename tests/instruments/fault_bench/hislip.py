"""HiSLIP 1.0 (IVI-6.1), synchronized mode: two connections a session, framed messages, a number for each message.

A header is ``HS``, the type, a control code, a parameter (32 bits) and the length of the payload (64 bits), most
significant byte first.  A reply carries the number of the message that it answers, and the client drops any other; a
server may also give 0xFFFFFFFF, which matches all: with `anonymous` this one does, so that late replies get through.
"""

from __future__ import annotations

import contextlib
import itertools
import queue
import socket
import struct
import threading
from typing import Any

from tests.instruments.fault_bench.instrument import FaultInstrument
from tests.instruments.fault_bench.server import TcpServer, hang_up, receive_exactly

HEADER = struct.Struct("!2sBBIQ")

INITIALIZE, INITIALIZE_RESPONSE = 0, 1
ERROR = 3
ASYNC_LOCK, ASYNC_LOCK_RESPONSE = 4, 5
DATA, DATA_END = 6, 7
DEVICE_CLEAR_COMPLETE, DEVICE_CLEAR_ACKNOWLEDGE = 8, 9
ASYNC_REMOTE_LOCAL, ASYNC_REMOTE_LOCAL_RESPONSE = 10, 11
TRIGGER = 12
ASYNC_MAX_SIZE, ASYNC_MAX_SIZE_RESPONSE = 15, 16
ASYNC_INITIALIZE, ASYNC_INITIALIZE_RESPONSE = 17, 18
ASYNC_DEVICE_CLEAR, ASYNC_DEVICE_CLEAR_ACKNOWLEDGE = 19, 23
ASYNC_STATUS_QUERY, ASYNC_STATUS_RESPONSE = 21, 22
ASYNC_LOCK_INFO, ASYNC_LOCK_INFO_RESPONSE = 24, 25

ANY_MESSAGE = 0xFFFFFFFF
MOST_BYTES = 1 << 20


class _Session:
    """Both connections of a client, and the thread in which its messages are dealt with."""

    def __init__(self, server: HislipServer, synchronous: socket.socket) -> None:
        self.server = server
        self.synchronous = synchronous
        self.asynchronous: socket.socket | None = None
        self.waiting: queue.SimpleQueue[tuple[int, bytes] | None] = queue.SimpleQueue()
        self.gone = threading.Event()
        self.sending = threading.Lock()
        self.cleared = 0

    def work(self) -> None:
        while (item := self.waiting.get()) is not None:
            with contextlib.suppress(OSError):
                self.server.perform(item[1], _SessionOutlet(self, item[0]))

    def hang_up(self, *, reset: bool = False) -> None:
        self.gone.set()
        for connection in (self.synchronous, self.asynchronous):
            if connection is not None:
                hang_up(connection, reset=reset)


class _SessionOutlet:
    """Where the answer to one message goes; what is said after a device clear is dropped."""

    def __init__(self, session: _Session, number: int) -> None:
        self.gone = session.gone
        self._session = session
        self._number = ANY_MESSAGE if session.server.anonymous else number
        self._cleared = session.cleared

    def say(self, data: bytes, end: bool) -> None:
        with self._session.sending:
            if self._cleared == self._session.cleared:
                send(self._session.synchronous, DATA_END if end else DATA, 0, self._number, data)

    def close(self, half: bytes) -> None:
        with self._session.sending:
            if half:
                head = HEADER.pack(b"HS", DATA_END, 0, self._number, len(half) + 8)
                self._session.synchronous.sendall(head + half)
        self._session.hang_up()

    def reset(self) -> None:
        self._session.hang_up(reset=True)


class HislipServer(TcpServer):
    """``TCPIP::HOST::hislip0,PORT::INSTR``.

    Parameters
    ----------
    anonymous : bool
        Replies match any message, so that a late one is taken by the client for the newest.
    overlap : bool
        Say at the beginning that overlap mode is preferred.
    """

    kind = "hislip"
    stream = False

    def __init__(
        self, instrument: FaultInstrument, *, mute: bool = False, anonymous: bool = False, overlap: bool = False
    ) -> None:
        self.anonymous = anonymous
        self.overlap = overlap
        self._numbers = itertools.count(1)
        self._sessions: dict[int, _Session] = {}
        super().__init__(instrument, mute=mute)

    @property
    def address(self) -> str:
        return f"TCPIP::127.0.0.1::hislip0,{self._port}::INSTR"

    def start(self) -> None:
        self._sessions.clear()
        super().start()

    def drop(self, *, reset: bool = False) -> None:
        for session in list(self._sessions.values()):
            session.hang_up(reset=reset)
        super().drop(reset=reset)

    def blurt(self, data: bytes) -> None:
        for session in list(self._sessions.values()):
            with contextlib.suppress(OSError), session.sending:
                send(session.synchronous, DATA_END, 0, ANY_MESSAGE, data)

    def serve(self, connection: socket.socket) -> None:
        kind, _, parameter, _ = receive(connection)
        if kind == INITIALIZE:
            self._synchronous(connection)
        elif kind == ASYNC_INITIALIZE and parameter in self._sessions:
            self._asynchronous(connection, self._sessions[parameter])

    def _synchronous(self, connection: socket.socket) -> None:
        number = next(self._numbers) & 0xFFFF
        session = self._sessions[number] = _Session(self, connection)
        send(connection, INITIALIZE_RESPONSE, int(self.overlap), 0x0100 << 16 | number, b"")
        worker = self._start_thread(session.work)
        pending = b""
        try:
            while not session.gone.is_set():
                kind, control, parameter, payload = receive(connection)
                if kind == DATA:
                    pending += payload
                elif kind == DATA_END:
                    session.waiting.put((parameter, pending + payload))
                    pending = b""
                elif kind == DEVICE_CLEAR_COMPLETE:
                    pending = b""
                    with session.sending:
                        send(connection, DEVICE_CLEAR_ACKNOWLEDGE, control, 0, b"")
                elif kind != TRIGGER:
                    send(connection, ERROR, 1, 0, b"unrecognized message type")
        finally:
            self._sessions.pop(number, None)
            session.hang_up()
            session.waiting.put(None)
            worker.join(1.0)

    def _asynchronous(self, connection: socket.socket, session: _Session) -> None:
        session.asynchronous = connection
        send(connection, ASYNC_INITIALIZE_RESPONSE, 0, 0, b"")
        answers: dict[int, tuple[Any, ...]] = {
            ASYNC_MAX_SIZE: (ASYNC_MAX_SIZE_RESPONSE, 0, 0, struct.pack("!Q", MOST_BYTES)),
            ASYNC_LOCK: (ASYNC_LOCK_RESPONSE, 1, 0, b""),
            ASYNC_LOCK_INFO: (ASYNC_LOCK_INFO_RESPONSE, 0, 0, b""),
            ASYNC_REMOTE_LOCAL: (ASYNC_REMOTE_LOCAL_RESPONSE, 0, 0, b""),
            ASYNC_STATUS_QUERY: (ASYNC_STATUS_RESPONSE, 0, 0, b""),
            ASYNC_DEVICE_CLEAR: (ASYNC_DEVICE_CLEAR_ACKNOWLEDGE, 0, 0, b""),
        }
        while not session.gone.is_set():
            kind, _, _, _ = receive(connection)
            if kind == ASYNC_DEVICE_CLEAR:
                with session.sending:
                    session.cleared += 1
            send(connection, *answers.get(kind, (ERROR, 1, 0, b"unrecognized message type")))


def send(connection: socket.socket, kind: int, control: int, parameter: int, payload: bytes) -> None:
    """Send one message."""
    connection.sendall(HEADER.pack(b"HS", kind, control, parameter, len(payload)) + payload)


def receive(connection: socket.socket) -> tuple[int, int, int, bytes]:
    """Return type, control code, parameter and payload of the next message."""
    prologue, kind, control, parameter, length = HEADER.unpack(receive_exactly(connection, HEADER.size))
    if prologue != b"HS" or length > MOST_BYTES * 2:
        raise ConnectionError("no HiSLIP message")
    return kind, control, parameter, receive_exactly(connection, length)
