"""One owner thread for each instrument, and an urgent slot that overtakes everything.

Rules
-----
* Only the owner thread touches the instrument, not even to close it.  Each instrument has its own: a long reading of
  the meter can't hold up the supply.
* Work is a job: a function of the `Conversation`, run from the first message to the last without anybody between.
* An urgent job overtakes all waiting jobs, and *drops* them: what was asked for before "off" must not be done after
  it.  The job that is running is cancelled and ends within one slice.
* The threads are daemons: a stuck one never keeps the process alive.
"""

from __future__ import annotations

import threading
from collections import deque
from collections.abc import Callable
from concurrent.futures import Future
from typing import Any, TypeVar

from benchkit.errors import InstrumentError
from benchkit.instruments.address import parse_address
from benchkit.instruments.conversation import Conversation, LinkSettings, Opener
from benchkit.instruments.traffic import TrafficLog

T = TypeVar("T")

_Work = tuple[Callable[[Conversation], Any], "Future[Any]"]


class Link:
    """An instrument's owner thread.

    Parameters
    ----------
    label : str
        ``the meter`` or ``the supply``.
    address : str
        As in the bench file.
    settings : LinkSettings
    log : TrafficLog
    opener : callable, optional
        Makes the transport; without it the address's kind and the settings' library decide.

    Raises
    ------
    InstrumentError
        If the address is none.
    """

    def __init__(
        self,
        label: str,
        address: str,
        settings: LinkSettings,
        log: TrafficLog,
        *,
        opener: Opener | None = None,
    ) -> None:
        self._condition = threading.Condition()
        self._waiting: deque[_Work] = deque()
        self._urgent: deque[_Work] = deque()
        self._cancel = threading.Event()
        self._running = ""
        self._stopping = False
        self._conversation = Conversation(
            label, parse_address(address, settings.library), settings, log, self._cancel, opener=opener
        )
        self._thread = threading.Thread(target=self._own, name=f"owner of {label}", daemon=True)
        self._thread.start()

    def submit(self, job: Callable[[Conversation], T]) -> Future[T]:
        """Put a job behind the others and return its future."""
        future: Future[T] = Future()
        with self._condition:
            if self._stopping:
                future.set_exception(_stopped())
                return future
            self._waiting.append((job, future))
            self._condition.notify()
        return future

    def submit_urgent(self, job: Callable[[Conversation], T]) -> Future[T]:
        """Run a job next: drop what waits, cancel what runs."""
        future: Future[T] = Future()
        with self._condition:
            if self._stopping:
                future.set_exception(_stopped())
                return future
            dropped = list(self._waiting)
            self._waiting.clear()
            self._urgent.append((job, future))
            if self._running == "normal":
                self._cancel.set()
            self._condition.notify()
        for _, waiting in dropped:
            _fail(waiting, InstrumentError("refused", "This was dropped because the output is being switched off"))
        return future

    def close(self, wait_s: float = 1.0) -> None:
        """Let the running job end, close the instrument, and wait for that for a bounded time."""
        with self._condition:
            self._stopping = True
            dropped = [*self._waiting, *self._urgent]
            self._waiting.clear()
            self._urgent.clear()
            self._cancel.set()
            self._condition.notify()
        for _, future in dropped:
            _fail(future, _stopped())
        if threading.current_thread() is not self._thread:
            self._thread.join(wait_s)

    def _own(self) -> None:
        while True:
            with self._condition:
                self._running = ""
                while not (self._urgent or self._waiting or self._stopping):
                    self._condition.wait()
                if self._stopping:
                    break
                self._running = "urgent" if self._urgent else "normal"
                job, future = (self._urgent or self._waiting).popleft()
                self._cancel.clear()
            if not future.set_running_or_notify_cancel():
                continue
            try:
                result = job(self._conversation)
            except BaseException as error:
                future.set_exception(error)
            else:
                future.set_result(result)
        self._conversation.close()


def _fail(future: Future[Any], error: Exception) -> None:
    if future.set_running_or_notify_cancel():
        future.set_exception(error)


def _stopped() -> InstrumentError:
    return InstrumentError("link lost", "The link has been closed by benchkit itself", "", "Connect again")
