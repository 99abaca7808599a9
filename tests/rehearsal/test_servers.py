"""Replies over real sockets, however the request is cut up."""

from __future__ import annotations

import asyncio
import contextlib
from collections.abc import AsyncIterator

import pytest

from benchkit.rehearsal.scpi import Arguments, Instrument
from benchkit.rehearsal.servers import LONGEST_MESSAGE, LOOPBACK, serve


class Counter(Instrument):
    """Counts how often it has been asked."""

    def __init__(self) -> None:
        super().__init__("Maker,Counter,0,0")
        self.count = 0
        self.on("COUNt?", self._asked)

    def _asked(self, _: Arguments) -> str:
        self.count += 1
        return str(self.count)


Streams = tuple[asyncio.StreamReader, asyncio.StreamWriter]


@contextlib.asynccontextmanager
async def served(instrument: Instrument, connections: int = 1) -> AsyncIterator[list[Streams]]:
    server, port = await serve(instrument)
    streams = [await asyncio.open_connection(LOOPBACK, port) for _ in range(connections)]
    try:
        yield streams
    finally:
        for _, writer in streams:
            writer.close()
            with contextlib.suppress(OSError):
                await writer.wait_closed()
        server.close()


async def send(writer: asyncio.StreamWriter, data: bytes) -> None:
    writer.write(data)
    await writer.drain()
    await asyncio.sleep(0.001)


REQUEST = b"COUNT?;*IDN?;:COUN?\n"
REPLY = b"1;Maker,Counter,0,0;2\n"


def test_split_at_every_byte_the_reply_is_the_same() -> None:
    async def scenario() -> None:
        for cut in range(len(REQUEST) + 1):
            async with served(Counter()) as [(reader, writer)]:
                await send(writer, REQUEST[:cut])
                await send(writer, REQUEST[cut:])
                assert await asyncio.wait_for(reader.readline(), 2.0) == REPLY, cut

    asyncio.run(scenario())


def test_byte_by_byte_and_with_the_next_message_at_once() -> None:
    async def scenario() -> None:
        async with served(Counter()) as [(reader, writer)]:
            for byte in REQUEST:
                await send(writer, bytes([byte]))
            assert await asyncio.wait_for(reader.readline(), 2.0) == REPLY
            await send(writer, b"COUN?\r\nCOUN?\n\nCOUN?\nCOU")
            assert [await asyncio.wait_for(reader.readline(), 2.0) for _ in range(3)] == [b"3\n", b"4\n", b"5\n"]
            await send(writer, b"N?\n")
            assert await asyncio.wait_for(reader.readline(), 2.0) == b"6\n"

    asyncio.run(scenario())


def test_a_message_too_long_is_thrown_away_up_to_its_end() -> None:
    async def scenario() -> None:
        async with served(Counter()) as [(reader, writer)]:
            for _ in range(3):
                await send(writer, b"COUN?;" * (LONGEST_MESSAGE // 6))
            await send(writer, b"COUN?\nSYST:ERR?\nCOUN?\n")
            assert await asyncio.wait_for(reader.readline(), 2.0) == b'-363,"Input buffer overrun"\n'
            assert await asyncio.wait_for(reader.readline(), 2.0) == b"1\n"

    asyncio.run(scenario())


def test_two_connections_share_the_instrument() -> None:
    async def scenario() -> None:
        async with served(Counter(), 2) as [(reader_a, writer_a), (reader_b, writer_b)]:
            await send(writer_a, b"COUN?\n")
            assert await asyncio.wait_for(reader_a.readline(), 2.0) == b"1\n"
            await send(writer_b, b"COUN?\n")
            assert await asyncio.wait_for(reader_b.readline(), 2.0) == b"2\n"
            writer_a.close()
            await send(writer_b, b"COUN?\n")
            assert await asyncio.wait_for(reader_b.readline(), 2.0) == b"3\n"

    asyncio.run(scenario())


@pytest.mark.parametrize("garbage", [b"\xff\xfe\n", b"\x00\n", "VOLT 5 µV\n".encode()])
def test_bytes_that_are_no_text_are_an_error_and_no_more(garbage: bytes) -> None:
    async def scenario() -> None:
        async with served(Counter()) as [(reader, writer)]:
            await send(writer, garbage)
            await send(writer, b"SYST:ERR?\nCOUN?\n")
            assert await asyncio.wait_for(reader.readline(), 2.0) == b'-101,"Invalid character"\n'
            assert await asyncio.wait_for(reader.readline(), 2.0) == b"1\n"

    asyncio.run(scenario())


def test_what_catches_up_is_called_before_each_message() -> None:
    async def scenario() -> None:
        calls: list[int] = []
        counter = Counter()
        server, port = await serve(counter, lambda: calls.append(counter.count))
        reader, writer = await asyncio.open_connection(LOOPBACK, port)
        await send(writer, b"COUN?\nCOUN?\n")
        assert [await reader.readline() for _ in range(2)] == [b"1\n", b"2\n"]
        writer.close()
        server.close()
        assert calls == [0, 1]

    asyncio.run(scenario())
