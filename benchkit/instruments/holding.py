"""Hold back what would end this process while a supply is on: the caller looks, switches off, and ends by itself.

Rules
-----
* SIGINT, SIGTERM, SIGHUP, SIGQUIT (on Windows SIGINT, SIGTERM and SIGBREAK; untried there) are noted, whatever was to
  be done with them.
* Every other signal that ends a process by itself is noted if nobody ignores or handles it: alarms and time limits, the
  two user signals, real-time signals, and so on.
* A stop from the keyboard (SIGTSTP) is ignored for so long.
* SIGKILL and SIGSTOP can't be held by anybody.  SIGSEGV, SIGBUS, SIGFPE and SIGILL are not held: they tell of a broken
  program, which would only break again at the same place, for ever.  So what is switched on under this guard must be
  harmless for itself, and on for a moment only.
"""

from __future__ import annotations

import contextlib
import signal
import threading
from types import FrameType, TracebackType
from typing import Any, Self

NOTED = ("SIGINT", "SIGTERM", "SIGHUP", "SIGQUIT", "SIGBREAK")
IGNORED = ("SIGTSTP", "SIGTTIN", "SIGTTOU")
ENDING = (
    *("SIGABRT", "SIGALRM", "SIGIO", "SIGPIPE", "SIGPOLL", "SIGPROF", "SIGPWR", "SIGSTKFLT", "SIGSYS", "SIGTRAP"),
    *("SIGEMT", "SIGUSR1", "SIGUSR2", "SIGVTALRM", "SIGXCPU", "SIGXFSZ"),
)


def ending() -> tuple[int, ...]:
    """Return the numbers of the other signals whose default ends a process, as far as this system has them."""
    named = {int(getattr(signal, name)) for name in ENDING if hasattr(signal, name)}
    first, last = getattr(signal, "SIGRTMIN", 1), getattr(signal, "SIGRTMAX", 0)
    return tuple(sorted(named | set(range(first, last + 1))))


class HeldSignals:
    """A block in which signals are only noted.  Outside the main thread it holds nothing: signals don't come there.

    Attributes
    ----------
    stopped : str
        The name of the first signal that came; empty while none did.
    """

    def __init__(self) -> None:
        self.stopped = ""
        self._before: dict[int, Any] = {}

    def __enter__(self) -> Self:
        if threading.current_thread() is threading.main_thread():
            for name in (*NOTED, *IGNORED):
                number = getattr(signal, name, None)
                if number is not None:
                    self._handle(number, self._note if name in NOTED else signal.SIG_IGN)
            for number in ending():
                if signal.getsignal(number) == signal.SIG_DFL:
                    self._handle(number, self._note)
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        for number, before in self._before.items():
            signal.signal(number, signal.SIG_DFL if before is None else before)

    def _handle(self, number: int, handler: Any) -> None:
        with contextlib.suppress(OSError, ValueError):
            self._before[number] = signal.signal(number, handler)

    def _note(self, number: int, frame: FrameType | None) -> None:
        if not self.stopped:
            known = {int(each): each.name for each in signal.Signals}
            self.stopped = known.get(number, f"signal {number}")
