"""Blocking work off the event loop, in threads that never hold up the end of the process."""

from __future__ import annotations

import asyncio
import threading
from collections.abc import Callable
from typing import TypeVar

T = TypeVar("T")


async def in_thread(work: Callable[[], T], name: str = "benchkit-work") -> T:
    """Run `work` in a daemon thread of its own and wait for what it returns or raises.

    When the waiting task is cancelled, the work runs on and its result is dropped.
    """
    loop = asyncio.get_running_loop()
    future: asyncio.Future[T] = loop.create_future()

    def settle(result: T | None, error: BaseException | None) -> None:
        if future.done():
            return
        if error is not None:
            future.set_exception(error)
        else:
            future.set_result(result)  # type: ignore[arg-type]

    def run() -> None:
        result: T | None = None
        error: BaseException | None = None
        try:
            result = work()
        except BaseException as caught:  # it is raised again where it is waited for
            error = caught
        try:
            loop.call_soon_threadsafe(settle, result, error)
        except RuntimeError:
            return  # the loop has gone, and with it whoever waited

    threading.Thread(target=run, name=name, daemon=True).start()
    return await future
