"""Instruments on sockets: lines in, replies out, on the loopback interface only.

* One line, ended by LF (a CR before it is tolerated), is one message; a reply is one line ended by LF.
* However the bytes of a message are cut up on their way, the same message is carried out once, when its LF has come.
* A message longer than `LONGEST_MESSAGE` is thrown away up to its LF, with -363 in the error queue.
* Nagle's algorithm is off: a reply leaves at once.
* Several connections may be open at a time (a second program may need to switch off); they share the instrument and
  its error queue, and messages are carried out one after the other in the order in which their LFs arrive.
"""

from __future__ import annotations

import asyncio
import socket
from collections.abc import Callable
from typing import Final, Protocol

LOOPBACK: Final = "127.0.0.1"
LONGEST_MESSAGE: Final = 4096


class Talker(Protocol):
    """Something that answers messages: an instrument."""

    def handle(self, message: str) -> str | None:
        """Carry out one message and return its reply, if it has one."""
        ...

    def complain(self, code: int) -> None:
        """Put an entry into the error queue."""
        ...


class _Connection(asyncio.Protocol):
    def __init__(self, talker: Talker, before: Callable[[], None]) -> None:
        self._talker = talker
        self._before = before
        self._held = b""
        self._skipping = False
        self._transport: asyncio.Transport | None = None

    def connection_made(self, transport: asyncio.BaseTransport) -> None:
        assert isinstance(transport, asyncio.Transport)
        self._transport = transport
        sock = transport.get_extra_info("socket")
        if sock is not None:
            sock.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)

    def data_received(self, data: bytes) -> None:
        self._held += data
        *lines, self._held = self._held.split(b"\n")
        for line in lines:
            if self._skipping or len(line) > LONGEST_MESSAGE:
                self._skipping = False
                self._talker.complain(-363)
                continue
            self._answer(line.removesuffix(b"\r"))
        if len(self._held) > LONGEST_MESSAGE:
            self._held, self._skipping = b"", True

    def _answer(self, line: bytes) -> None:
        self._before()
        reply = self._talker.handle(line.decode("latin-1"))
        if reply is not None and self._transport is not None and not self._transport.is_closing():
            self._transport.write(reply.encode("ascii") + b"\n")


async def serve(talker: Talker, before: Callable[[], None] = lambda: None) -> tuple[asyncio.Server, int]:
    """Serve `talker` on a free loopback port.

    Parameters
    ----------
    talker : Talker
        The instrument.
    before : callable
        Called before each message, for instance to let simulated time catch up.

    Returns
    -------
    tuple of asyncio.Server and int
        The server and its port.
    """
    loop = asyncio.get_running_loop()
    server = await loop.create_server(lambda: _Connection(talker, before), LOOPBACK, 0, family=socket.AF_INET)
    return server, int(server.sockets[0].getsockname()[1])
