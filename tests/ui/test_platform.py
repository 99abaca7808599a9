from __future__ import annotations

import threading
import time

from benchkit.ui.platform import Leaver, leaving_signals


def test_off_comes_first_then_the_way_out_then_the_hard_exit() -> None:
    order: list[str] = []
    ended = threading.Event()

    def hard_exit(status: int) -> None:
        order.append(f"exit {status}")
        ended.set()

    begun = time.monotonic()
    leaver = Leaver(
        lambda reason: order.append(f"off {reason}"),
        lambda reason: order.append(f"leave {reason}"),
        hard_exit_s=0.2,
        hard_exit=hard_exit,
    )
    leaver.ask("signal SIGTERM")
    leaver.ask("signal SIGTERM")
    assert ended.wait(5.0)
    assert time.monotonic() - begun >= 0.2
    assert order == ["off signal SIGTERM", "leave signal SIGTERM", "exit 4"]


def test_an_off_that_hangs_or_fails_does_not_hold_up_the_hard_exit() -> None:
    ended, go_on = threading.Event(), threading.Event()
    hanging = Leaver(
        lambda reason: go_on.wait(20.0), lambda reason: None, hard_exit_s=0.1, hard_exit=lambda status: ended.set()
    )
    hanging.ask("x")
    assert ended.wait(5.0)
    go_on.set()
    left = threading.Event()

    def fails(reason: str) -> None:
        raise OSError("pipe broken")

    failing = Leaver(fails, lambda reason: left.set(), hard_exit_s=60.0, hard_exit=lambda status: None)
    failing.ask("x")
    assert left.wait(5.0)


def test_a_way_out_in_time_needs_no_hard_exit() -> None:
    exits: list[int] = []
    leaver = Leaver(lambda reason: None, lambda reason: None, hard_exit_s=0.2, hard_exit=exits.append)
    with leaver.installed():
        leaver.ask("x")
        time.sleep(0.05)
    time.sleep(0.4)
    assert exits == []


def test_the_handlers_are_put_back() -> None:
    import signal

    before = [signal.getsignal(number) for number in leaving_signals()]
    with Leaver(lambda reason: None, lambda reason: None).installed():
        assert [signal.getsignal(number) for number in leaving_signals()] != before
    assert [signal.getsignal(number) for number in leaving_signals()] == before
