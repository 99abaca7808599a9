"""What every part of the keeper stands on: the inbox, the journal, and answers to the screen."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from concurrent.futures import Future
from queue import SimpleQueue
from typing import Any

from benchkit.keeper.journaling import JournalThread
from benchkit.keeper.pipes import LineWriter
from benchkit.keeper.protocol import error_to_wire


class Desk:
    """The inbox, which only the loop takes from, and the ways out.

    Parameters
    ----------
    sink : int
        Descriptor of the pipe to the screen.
    """

    def __init__(self, sink: int) -> None:
        self.inbox: SimpleQueue[Callable[[], None]] = SimpleQueue()
        self.writer = LineWriter(sink)
        self.journal = JournalThread(self.writer.send, self._acknowledge)

    def when_done(self, future: Future[Any], act: Callable[[Future[Any]], None]) -> None:
        """Call `act` in the loop when the future is done."""
        future.add_done_callback(lambda done: self.inbox.put(lambda: act(done)))

    def relay(self, request: int, ready: Future[Any], pick: Callable[[Any], Any] | None = None) -> None:
        """Answer a request with what a future brought."""
        error = ready.exception()
        if error is not None:
            self.fail(request, error)
            return
        result = ready.result() if pick is None else pick(ready.result())
        self.ok(request, vars(result))

    def ok(self, request: int, result: Mapping[str, Any]) -> None:
        """Answer a request well."""
        self.writer.send({"id": request, "ok": result})

    def fail(self, request: int, error: BaseException) -> None:
        """Answer a request with an error."""
        self.writer.send({"id": request, "error": error_to_wire(error)})

    def keep(self, name: str, payload: Mapping[str, Any]) -> None:
        """Keep an event of the keeper's own, and push it."""
        self.journal.keep_own(name, payload)

    def acknowledged(self, off: int) -> None:
        """Note that the screen knows of an "off"; called in the loop."""
        raise NotImplementedError

    def _acknowledge(self, off: int) -> None:
        """Pass it on; called on the journal's thread."""
        self.inbox.put(lambda: self.acknowledged(off))
