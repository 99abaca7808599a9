from __future__ import annotations

import asyncio
import threading
import time

import pytest

from benchkit.errors import EntryError
from benchkit.session.threads import in_thread


def test_the_result_comes_back_and_the_loop_turns_meanwhile() -> None:
    def work() -> str:
        time.sleep(0.05)
        return threading.current_thread().name

    async def whole() -> tuple[str, int]:
        turns = 0

        async def turn() -> None:
            nonlocal turns
            while True:
                turns += 1
                await asyncio.sleep(0.001)

        turning = asyncio.create_task(turn())
        result = await in_thread(work, "a-name")
        turning.cancel()
        return result, turns

    result, turns = asyncio.run(whole())
    assert result == "a-name"
    assert turns > 3


def test_an_error_comes_back() -> None:
    def fail() -> None:
        raise EntryError("no")

    with pytest.raises(EntryError):
        asyncio.run(in_thread(fail))


def test_the_thread_never_holds_up_the_end() -> None:
    async def whole() -> bool:
        return await in_thread(lambda: threading.current_thread().daemon)

    assert asyncio.run(whole())


def test_a_result_that_nobody_waits_for_is_dropped() -> None:
    go = threading.Event()
    done = threading.Event()

    def work() -> int:
        go.wait(5.0)
        done.set()
        return 1

    async def whole() -> None:
        task = asyncio.create_task(in_thread(work))
        await asyncio.sleep(0.01)
        task.cancel()
        with pytest.raises(asyncio.CancelledError):
            await task
        go.set()
        await asyncio.sleep(0.05)

    asyncio.run(whole())
    assert done.is_set()


def test_a_loop_that_has_gone_is_no_crash() -> None:
    go = threading.Event()
    done = threading.Event()

    def work() -> None:
        go.wait(5.0)
        done.set()

    async def whole() -> None:
        task = asyncio.create_task(in_thread(work))
        await asyncio.sleep(0.01)
        task.cancel()

    asyncio.run(whole())
    go.set()
    assert done.wait(5.0)
