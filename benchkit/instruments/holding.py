"""Hold back what would end this process while a supply is on: the caller looks, switches off, and ends by itself.

SIGINT, SIGTERM, SIGHUP, SIGQUIT (on Windows SIGINT, SIGTERM and SIGBREAK; untried there) are noted; a stop from the
keyboard (SIGTSTP) is ignored for so long.  SIGKILL and SIGSTOP can't be held by anybody: what is switched on under this
guard must be harmless for itself, and on for a moment only.
"""

from __future__ import annotations

import contextlib
import signal
import threading
from types import FrameType, TracebackType
from typing import Any, Self

NOTED = ("SIGINT", "SIGTERM", "SIGHUP", "SIGQUIT", "SIGBREAK")
IGNORED = ("SIGTSTP", "SIGTTIN", "SIGTTOU")


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
                    wanted: Any = self._note if name in NOTED else signal.SIG_IGN
                    with contextlib.suppress(OSError, ValueError):
                        self._before[number] = signal.signal(number, wanted)
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        for number, before in self._before.items():
            signal.signal(number, signal.SIG_DFL if before is None else before)

    def _note(self, number: int, frame: FrameType | None) -> None:
        self.stopped = self.stopped or signal.Signals(number).name
