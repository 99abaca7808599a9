"""What differs between POSIX and Windows: process groups, signals, a parent that is gone, a computer that slept."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from typing import Any


def own_group() -> dict[str, Any]:
    """Return the arguments for `subprocess.Popen` that put a process into a group of its own.

    On POSIX it gets a session of its own, so that neither Ctrl+C nor a closing terminal reaches it.
    """
    if sys.platform == "win32":
        return {"creationflags": subprocess.CREATE_NEW_PROCESS_GROUP}
    return {"start_new_session": True}


def on_stop_signals(act: Callable[[str], None]) -> None:
    """Call `act` with the signal's name when somebody asks this process to end; from the main thread only."""
    names = ("SIGINT", "SIGBREAK") if sys.platform == "win32" else ("SIGINT", "SIGTERM", "SIGHUP", "SIGQUIT")

    def handle(number: int, _frame: object) -> None:
        act(signal.Signals(number).name)

    for name in names:
        signal.signal(getattr(signal, name), handle)


def kill_hard(process: subprocess.Popen[bytes]) -> None:
    """End a process that may be frozen; one that has ended is left alone."""
    if process.poll() is None:
        process.kill()


def parent_id() -> int | None:
    """Return the parent's process id, or None where it says nothing about whether the parent lives.

    On POSIX it changes when the parent dies.  Windows keeps the old number for ever; there the end of the pipe and
    the missing heartbeat say it.
    """
    return None if sys.platform == "win32" else os.getppid()


def slept_s() -> float:
    """Return how long the computer has been suspended since it started, s; 0 where the system doesn't say.

    The difference of a clock that goes on during suspension and one that stops.
    """
    if sys.platform == "linux":
        return time.clock_gettime(time.CLOCK_BOOTTIME) - time.clock_gettime(time.CLOCK_MONOTONIC)
    return 0.0
