"""VXI-11: remote procedure calls over TCP (RFC 5531, RFC 4506), without a port mapper: the address names the port.

A write that ends a message hands it to the instrument; what it says waits in an output queue until it is read.  What
happens to answers that nobody has read when the next message comes differs between instruments: IEEE 488.2 has them
dropped (query interrupted); with `keeps_unread` they stay, and with `shared_output` even for the next link.
"""

from __future__ import annotations

import contextlib
import itertools
import queue
import socket
import struct
import threading
import time
from dataclasses import dataclass

from tests.instruments.fault_bench.instrument import FaultInstrument
from tests.instruments.fault_bench.server import TcpServer, hang_up, receive_exactly

ASYNC_PROGRAM, CORE_PROGRAM = 0x0607B0, 0x0607AF
ABORT = 1
CREATE_LINK, WRITE, READ, READ_STATUS, CLEAR = 10, 11, 12, 13, 15
TRIGGER, REMOTE, LOCAL, LOCK, UNLOCK, DESTROY_LINK = 14, 16, 17, 18, 19, 23

NO_ERROR, INVALID_LINK, NOT_SUPPORTED, TIMED_OUT, ABORTED = 0, 4, 8, 15, 23
END_FLAG, TERMCHAR_FLAG = 8, 128
REASON_COUNT, REASON_CHARACTER, REASON_END = 1, 2, 4

MESSAGE_AVAILABLE = 16
MOST_BYTES = 1 << 16


@dataclass
class _Chunk:
    data: bytes
    end: bool
    breaks: bool = False


class _Output:
    """What was said and not yet read."""

    def __init__(self) -> None:
        self.chunks: list[_Chunk] = []
        self.changed = threading.Condition()

    def put(self, chunk: _Chunk) -> None:
        with self.changed:
            self.chunks.append(chunk)
            self.changed.notify_all()

    def clear(self) -> None:
        with self.changed:
            self.chunks.clear()


class _Link:
    """One link: its input, its output, and the thread in which its messages are dealt with."""

    def __init__(self, server: Vxi11Server, connection: socket.socket, output: _Output) -> None:
        self.server = server
        self.connection = connection
        self.output = output
        self.input = b""
        self.gone = threading.Event()
        self.aborted = threading.Event()
        self.waiting: queue.SimpleQueue[bytes | None] = queue.SimpleQueue()

    def work(self) -> None:
        while (message := self.waiting.get()) is not None:
            with contextlib.suppress(OSError):
                self.server.perform(message, self)

    def say(self, data: bytes, end: bool) -> None:
        self.output.put(_Chunk(data, end))

    def close(self, half: bytes) -> None:
        if half:
            self.output.put(_Chunk(half, end=False, breaks=True))
        else:
            hang_up(self.connection)

    def reset(self) -> None:
        self.gone.set()
        hang_up(self.connection, reset=True)

    def read(self, most: int, timeout_s: float, stop_at: int | None) -> tuple[int, int, bytes, bool]:
        """Return error, reason, data, and whether the connection breaks in the middle of this reply."""
        deadline = time.monotonic() + timeout_s
        with self.output.changed:
            while not self.output.chunks:
                left = deadline - time.monotonic()
                if self.gone.is_set():
                    raise ConnectionError("the link is broken")
                if self.aborted.is_set():
                    self.aborted.clear()
                    return ABORTED, 0, b"", False
                if left <= 0:
                    return TIMED_OUT, 0, b"", False
                self.output.changed.wait(min(left, 0.05))
            chunk = self.output.chunks[0]
            if chunk.breaks:
                self.output.chunks.pop(0)
                return NO_ERROR, 0, chunk.data, True
            data, reason = chunk.data[:most], 0
            if stop_at is not None and stop_at in data:
                data = data[: data.index(stop_at) + 1]
                reason |= REASON_CHARACTER
            if len(data) == most:
                reason |= REASON_COUNT
            chunk.data = chunk.data[len(data) :]
            if not chunk.data:
                self.output.chunks.pop(0)
                if chunk.end:
                    reason |= REASON_END
            return NO_ERROR, reason, data, False


class Vxi11Server(TcpServer):
    """``TCPIP::HOST,PORT::inst0::INSTR``.

    Parameters
    ----------
    keeps_unread : bool
        Answers that nobody has read stay before those to later messages.
    shared_output : bool
        There is one output queue for all links, as behind a converter from another bus.
    """

    kind = "vxi-11"
    stream = False

    def __init__(
        self,
        instrument: FaultInstrument,
        *,
        mute: bool = False,
        keeps_unread: bool = False,
        shared_output: bool = False,
    ) -> None:
        self.keeps_unread = keeps_unread
        self._shared = _Output() if shared_output else None
        self._numbers = itertools.count(1)
        self._links: dict[int, _Link] = {}
        super().__init__(instrument, mute=mute)

    @property
    def address(self) -> str:
        return f"TCPIP::127.0.0.1,{self._port}::inst0::INSTR"

    def start(self) -> None:
        super().start()
        self._abort_listener = socket.create_server(("127.0.0.1", 0))
        self._start_thread(self._accept, self._abort_listener)

    def stop(self) -> None:
        with contextlib.suppress(OSError):
            self._abort_listener.shutdown(socket.SHUT_RDWR)
        self._abort_listener.close()
        super().stop()

    def blurt(self, data: bytes) -> None:
        for link in list(self._links.values()):
            link.say(data, end=True)

    def serve(self, connection: socket.socket) -> None:
        made: list[int] = []
        try:
            while True:
                call = _Arguments(receive_record(connection))
                xid, kind = call.number(), call.number()
                version, program, _, procedure = (call.number() for _ in range(4))
                for _ in range(2):  # credentials and verifier
                    call.number()
                    call.opaque()
                if kind != 0 or version != 2:
                    return
                head = struct.pack("!IIIIII", xid, 1, 0, 0, 0, 0)
                if program == ASYNC_PROGRAM and procedure == ABORT:
                    send_record(connection, head + self._abort(call.number()))
                    continue
                if program != CORE_PROGRAM:
                    send_record(connection, struct.pack("!IIIIII", xid, 1, 0, 0, 0, 1))
                    continue
                results, breaks = self._core(procedure, call, connection, made)
                if breaks:
                    whole = head + results
                    connection.sendall(struct.pack("!I", 0x80000000 | (len(whole) + 16)) + whole)
                    hang_up(connection)
                    return
                send_record(connection, head + results)
        finally:
            for number in made:
                self._end_link(number)

    def _core(self, procedure: int, call: _Arguments, connection: socket.socket, made: list[int]) -> tuple[bytes, bool]:
        if procedure == CREATE_LINK:
            number = next(self._numbers)
            link = self._links[number] = _Link(self, connection, self._shared or _Output())
            made.append(number)
            self._start_thread(link.work)
            abort_port = self._abort_listener.getsockname()[1]
            return struct.pack("!IIII", NO_ERROR, number, abort_port, MOST_BYTES), False
        number = call.number()
        found = self._links.get(number)
        if found is None:
            return struct.pack("!I", INVALID_LINK), False
        if procedure == WRITE:
            _, _, flags = call.number(), call.number(), call.number()
            data = call.opaque()
            found.input += data
            if flags & END_FLAG:
                if not self.keeps_unread and self._shared is None:
                    found.output.clear()
                found.waiting.put(found.input)
                found.input = b""
            return struct.pack("!II", NO_ERROR, len(data)), False
        if procedure == READ:
            most, timeout_ms, _, flags, character = (call.number() for _ in range(5))
            stop_at = character & 0xFF if flags & TERMCHAR_FLAG else None
            error, reason, data, breaks = found.read(most, timeout_ms / 1000.0, stop_at)
            return struct.pack("!III", error, reason, len(data)) + data + bytes(-len(data) % 4), breaks
        if procedure == READ_STATUS:
            return struct.pack("!II", NO_ERROR, MESSAGE_AVAILABLE if found.output.chunks else 0), False
        if procedure == CLEAR:
            found.input = b""
            found.output.clear()
        elif procedure == DESTROY_LINK:
            self._end_link(number)
        elif procedure not in {TRIGGER, REMOTE, LOCAL, LOCK, UNLOCK}:
            return struct.pack("!I", NOT_SUPPORTED), False
        return struct.pack("!I", NO_ERROR), False

    def _abort(self, number: int) -> bytes:
        link = self._links.get(number)
        if link is None:
            return struct.pack("!I", INVALID_LINK)
        link.aborted.set()
        with link.output.changed:
            link.output.changed.notify_all()
        return struct.pack("!I", NO_ERROR)

    def _end_link(self, number: int) -> None:
        link = self._links.pop(number, None)
        if link is not None:
            link.gone.set()
            link.waiting.put(None)


class _Arguments:
    """Takes the arguments of a call apart."""

    def __init__(self, data: bytes) -> None:
        self._data = data
        self._place = 0

    def number(self) -> int:
        (value,) = struct.unpack_from("!I", self._data, self._place)
        self._place += 4
        return int(value)

    def opaque(self) -> bytes:
        length = self.number()
        data = self._data[self._place : self._place + length]
        self._place += length + -length % 4
        return data


def receive_record(connection: socket.socket) -> bytes:
    """Return one record, put together from its fragments."""
    record, last = b"", False
    while not last:
        (head,) = struct.unpack("!I", receive_exactly(connection, 4))
        last = bool(head & 0x80000000)
        record += receive_exactly(connection, head & 0x7FFFFFFF)
    return record


def send_record(connection: socket.socket, data: bytes) -> None:
    """Send one record as one fragment."""
    connection.sendall(struct.pack("!I", 0x80000000 | len(data)) + data)
