"""What differs between systems: process groups, signals, a parent that is gone, pipes, a computer that sleeps.

Tried on Linux.  What is here for macOS and Windows has been written after their documentation and has not been run.
"""

from __future__ import annotations

import os
import shutil
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Callable
from contextlib import suppress
from typing import Any

HOLD_PROOF_S = 1.0
"""A helper that holds sleep off and lives so long is taken to hold it, s."""


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


def end_process(number: int) -> None:
    """End a process by its number; one that has gone is none."""
    with suppress(OSError):
        os.kill(number, signal.SIGTERM if sys.platform == "win32" else signal.SIGKILL)


def make_pipe() -> tuple[int, int] | None:
    """Return the reading and the writing end of a pipe that a new process can inherit; None where none can."""
    return None if sys.platform == "win32" else os.pipe()


def inheriting(descriptor: int | None) -> dict[str, Any]:
    """Return the arguments for `subprocess.Popen` that let a process inherit a descriptor."""
    return {} if descriptor is None else {"pass_fds": (descriptor,)}


def slept_s() -> float:
    """Return how long the computer has been suspended since it started, s; 0 where the system doesn't say.

    The difference of a clock that goes on during suspension and one that stops.  Setting the time of day changes
    neither.
    """
    if sys.platform == "linux":
        return time.clock_gettime(time.CLOCK_BOOTTIME) - time.clock_gettime(time.CLOCK_MONOTONIC)
    if sys.platform == "darwin":
        return time.clock_gettime(time.CLOCK_MONOTONIC_RAW) - time.clock_gettime(time.CLOCK_UPTIME_RAW)
    if sys.platform == "win32":
        import ctypes

        awake = ctypes.c_ulonglong(0)
        ctypes.windll.kernel32.QueryUnbiasedInterruptTime(ctypes.byref(awake))
        ctypes.windll.kernel32.GetTickCount64.restype = ctypes.c_ulonglong
        return float(ctypes.windll.kernel32.GetTickCount64()) / 1e3 - awake.value / 1e7
    return 0.0


class Awake:
    """A wish that the computer be not suspended; it ends with `end`, and with this process however that ends.

    Parameters
    ----------
    reason : str
        Why, for whoever asks the system.

    Attributes
    ----------
    caution : str
        What has to be said because the system did not agree; empty if it did.
    """

    def __init__(self, reason: str) -> None:
        self.caution = ""
        self._process: subprocess.Popen[bytes] | None = None
        self._ended = threading.Event()
        problem = self._hold(reason)
        if problem:
            self.caution = (
                f"This computer may be suspended by itself ({problem}): switch its sleep off while a unit is on the "
                "bench. A suspended computer protects nothing, only the limit in the supply does."
            )

    def end(self) -> None:
        """Let the computer sleep again."""
        self._ended.set()
        if self._process is not None:
            kill_hard(self._process)
            self._process.wait()
            if self._process.stdin is not None:
                self._process.stdin.close()
            self._process = None

    def _hold(self, reason: str) -> str:
        """Ask the system; return why it did not agree, or nothing."""
        if sys.platform == "win32":
            threading.Thread(target=self._hold_windows, name="stay awake", daemon=True).start()
            return ""
        if sys.platform == "darwin":
            return self._start(["caffeinate", "-i", "-s", "-w", str(os.getpid())])
        what = ["--what=sleep:idle:handle-lid-switch", "--mode=block", "--who=benchkit", f"--why={reason}"]
        # "cat" ends with the pipe, and the pipe with this process.
        return self._start(["systemd-inhibit", *what, "cat"])

    def _start(self, command: list[str]) -> str:
        path = shutil.which(command[0])
        if path is None:
            return f"{command[0]} is not here"
        try:
            self._process = subprocess.Popen(
                [path, *command[1:]],
                stdin=subprocess.PIPE,
                stdout=subprocess.DEVNULL,
                stderr=subprocess.DEVNULL,
                **own_group(),
            )
        except OSError as error:
            return f"{command[0]} can't be started: {error.strerror}"
        with suppress(subprocess.TimeoutExpired):
            status = self._process.wait(HOLD_PROOF_S)
            self.end()
            return f"{command[0]} ended with status {status}"
        return ""

    def _hold_windows(self) -> None:
        """Hold the wish as long as this thread lives: it belongs to the thread."""
        if sys.platform == "win32":
            import ctypes

            ctypes.windll.kernel32.SetThreadExecutionState(0x80000001)  # ES_CONTINUOUS | ES_SYSTEM_REQUIRED
            self._ended.wait()
            ctypes.windll.kernel32.SetThreadExecutionState(0x80000000)
