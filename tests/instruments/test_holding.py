"""Signals are noted and not acted upon for the time of a block."""

from __future__ import annotations

import os
import signal
import threading

import pytest

from benchkit.instruments.holding import IGNORED, NOTED, HeldSignals


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
