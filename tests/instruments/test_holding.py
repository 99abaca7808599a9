"""Signals are noted and not acted upon for the time of a block."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import threading

import pytest

from benchkit.instruments.holding import IGNORED, NOTED, HeldSignals, ending


@pytest.mark.parametrize("name", [name for name in NOTED if hasattr(signal, name)])
def test_a_signal_is_noted_and_the_handler_comes_back(name: str) -> None:
    number = getattr(signal, name)
    before = signal.getsignal(number)
    with HeldSignals() as held:
        assert held.stopped == ""
        os.kill(os.getpid(), number)
        assert held.stopped == name
    assert signal.getsignal(number) == before


def test_the_first_of_several_counts() -> None:
    with HeldSignals() as held:
        os.kill(os.getpid(), signal.SIGTERM)
        os.kill(os.getpid(), signal.SIGINT)
    assert held.stopped == "SIGTERM"


@pytest.mark.parametrize("name", [name for name in IGNORED if hasattr(signal, name)])
def test_a_stop_from_the_keyboard_does_not_stop(name: str) -> None:
    number = getattr(signal, name)
    with HeldSignals() as held:
        os.kill(os.getpid(), number)
        assert signal.getsignal(number) == signal.SIG_IGN
    assert held.stopped == ""
    assert signal.getsignal(number) != signal.SIG_IGN


def test_handlers_come_back_after_an_error() -> None:
    before = signal.getsignal(signal.SIGTERM)
    with pytest.raises(ZeroDivisionError), HeldSignals():
        raise ZeroDivisionError
    assert signal.getsignal(signal.SIGTERM) == before


def test_in_another_thread_it_changes_nothing() -> None:
    seen: list[object] = []

    def work() -> None:
        with HeldSignals():
            seen.append(signal.getsignal(signal.SIGTERM))

    before = signal.getsignal(signal.SIGTERM)
    thread = threading.Thread(target=work)
    thread.start()
    thread.join()
    assert seen == [before]


FAULTS = {"SIGSEGV", "SIGBUS", "SIGFPE", "SIGILL"}
"""What is not held, beside that which can't be."""

ALL = """
import os, signal, sys
from benchkit.instruments.holding import HeldSignals
for number in map(int, sys.argv[1:]):
    signal.signal(number, signal.SIG_DFL)
    with HeldSignals() as held:
        os.kill(os.getpid(), number)
        assert held.stopped, number
        print(number, held.stopped, flush=True)
    assert signal.getsignal(number) == signal.SIG_DFL, number
"""

DIES = """
import os, signal, sys
signal.signal(int(sys.argv[1]), signal.SIG_DFL)
os.kill(os.getpid(), int(sys.argv[1]))
"""


@pytest.mark.skipif(sys.platform == "win32", reason="sends signals")
def test_all_that_ends_a_process_is_held() -> None:
    """Which those are is found out: a process of its own is sent each signal that there is, but the faults."""
    kept = {signal.SIGKILL, signal.SIGSTOP, *(getattr(signal, name) for name in (*IGNORED, *FAULTS))}
    numbers = sorted(set(signal.valid_signals()) - kept)
    named = [number for number in numbers if number in signal.Signals.__members__.values()]
    children = {number: subprocess.Popen([sys.executable, "-I", "-c", DIES, str(int(number))]) for number in named}
    deadly = [int(number) for number, child in children.items() if child.wait(30) == -number]
    assert {signal.SIGUSR1, signal.SIGUSR2, signal.SIGALRM, signal.SIGVTALRM, signal.SIGXCPU} <= set(deadly)
    tried = sorted({*deadly, *ending()})
    command = [sys.executable, "-c", ALL, *map(str, tried)]
    done = subprocess.run(command, check=False, capture_output=True, text=True, timeout=50)
    assert (done.returncode, done.stderr) == (0, "")
    assert [int(line.split()[0]) for line in done.stdout.splitlines()] == tried
    assert f"{int(signal.SIGUSR1)} SIGUSR1\n" in done.stdout


@pytest.mark.skipif(sys.platform == "win32", reason="Windows has no such signal")
def test_a_signal_with_a_handler_or_ignored_is_left_alone() -> None:
    seen: list[int] = []
    before = signal.signal(signal.SIGUSR1, lambda number, frame: seen.append(number))
    try:
        with HeldSignals() as held:
            os.kill(os.getpid(), signal.SIGUSR1)
        signal.signal(signal.SIGUSR1, signal.SIG_IGN)
        with held:
            os.kill(os.getpid(), signal.SIGUSR1)
    finally:
        signal.signal(signal.SIGUSR1, before)
    assert (held.stopped, seen) == ("", [signal.SIGUSR1])
