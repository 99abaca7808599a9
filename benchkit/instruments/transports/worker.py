"""Threads that may be left behind: whatever blocks in a VISA library must not block an instrument's owner.

Neither a connection that is never answered, nor a library that waits for a message, can be interrupted from outside
everywhere.  So such calls run in a daemon thread, and the owner waits for its answer in slices.  When it has waited
long enough it goes away; what the thread makes later is thrown away by the thread itself.
"""

from __future__ import annotations

import threading
import time
from collections.abc import Callable
from concurrent.futures import Future
from contextlib import suppress
from queue import SimpleQueue
from typing import Any, Generic, TypeVar

T = TypeVar("T")


class Abandonable(Generic[T]):
    """One call in a thread of its own, that can be waited for in slices and given up.

    Parameters
    ----------
    call : callable
        What may block.
    discard : callable
        What to do with a result that comes after it was given up.
    name : str
        Of the thread.
    """

    def __init__(self, call: Callable[[], T], discard: Callable[[T], object], name: str) -> None:
        self._call = call
        self._discard = discard
        self._lock = threading.Lock()
        self._done = threading.Event()
        self._given_up = False
        self._result: T | None = None
        self._error: BaseException | None = None
        threading.Thread(target=self._run, name=name, daemon=True).start()

    def result(self, within_s: float, slice_s: float, stop: Callable[[], bool]) -> T | None:
        """Return the result, or None when it took longer than `within_s` or `stop` said so; then it is given up.

        Raises
        ------
        BaseException
            What the call raised.
        """
        end_s = time.monotonic() + within_s
        while not self._done.wait(max(0.0, min(slice_s, end_s - time.monotonic()))):
            if stop() or time.monotonic() >= end_s:
                with self._lock:
                    self._given_up = not self._done.is_set()
                if self._given_up:
                    return None
        if self._error is not None:
            raise self._error
        return self._result

    def _run(self) -> None:
        result: T | None = None
        error: BaseException | None = None
        try:
            result = self._call()
        except BaseException as raised:
            error = raised
        with self._lock:
            self._result, self._error = result, error
            given_up = self._given_up
            self._done.set()
        if given_up and result is not None:
            with suppress(Exception):
                self._discard(result)


class Worker:
    """A daemon thread that makes one call after the other.

    It ends after `stop`, as soon as the call that it makes comes back.
    """

    def __init__(self, name: str) -> None:
        self._calls: SimpleQueue[tuple[Callable[[], Any], Future[Any]] | None] = SimpleQueue()
        threading.Thread(target=self._run, name=name, daemon=True).start()

    def start(self, call: Callable[[], T]) -> Future[T]:
        """Begin a call, behind those that were begun before."""
        future: Future[T] = Future()
        self._calls.put((call, future))
        return future

    def stop(self) -> None:
        """End the thread when it has made its calls."""
        self._calls.put(None)

    def _run(self) -> None:
        while (work := self._calls.get()) is not None:
            call, future = work
            try:
                result = call()
            except BaseException as error:
                future.set_exception(error)
            else:
                future.set_result(result)
            del work, call, future
