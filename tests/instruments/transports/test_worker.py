"""Calls that may block: waited for in slices, left behind, and cleared up by themselves."""

from __future__ import annotations

import threading
import time

import pytest

from benchkit.instruments.transports.worker import Abandonable, Worker


def never() -> bool:
    return False


def test_a_result_and_an_exception_come_through() -> None:
    assert Abandonable(lambda: 7, lambda _: None, "a").result(5.0, 0.05, never) == 7
    failing: Abandonable[int] = Abandonable(lambda: 1 // 0, lambda _: None, "b")
    with pytest.raises(ZeroDivisionError):
        failing.result(5.0, 0.05, never)


@pytest.mark.parametrize("stop_s", [None, 0.05])
def test_what_takes_too_long_is_given_up_and_its_result_thrown_away(stop_s: float | None) -> None:
    go = threading.Event()
    thrown = threading.Event()

    def slow() -> int:
        go.wait(10.0)
        return 7

    began_s = time.monotonic()
    call = Abandonable(slow, lambda _: thrown.set(), "slow")
    assert call.result(0.2 if stop_s is None else 9.0, 0.02, lambda: stop_s is not None) is None
    assert time.monotonic() - began_s < 2.0
    assert not thrown.is_set()
    go.set()
    assert thrown.wait(5.0)


def test_a_late_exception_is_silent() -> None:
    go = threading.Event()
    thrown: list[object] = []

    def slow() -> int:
        go.wait(10.0)
        raise ValueError

    assert Abandonable(slow, thrown.append, "slow").result(0.05, 0.02, never) is None
    go.set()
    time.sleep(0.1)
    assert thrown == []


def test_a_worker_makes_one_call_after_the_other_and_ends() -> None:
    worker = Worker("one")
    seen: list[int] = []
    names = {worker.start(lambda: threading.current_thread().name).result(5.0) for _ in range(5)}
    futures = [worker.start(lambda number=number: seen.append(number)) for number in range(20)]  # type: ignore[misc]
    failing = worker.start(lambda: 1 // 0)
    worker.stop()
    with pytest.raises(ZeroDivisionError):
        failing.result(5.0)
    for future in futures:
        future.result(5.0)
    assert seen == list(range(20))
    assert names == {"one"}
    deadline = time.monotonic() + 5.0
    while any(thread.name == "one" for thread in threading.enumerate()) and time.monotonic() < deadline:
        time.sleep(0.01)
    assert all(thread.name != "one" for thread in threading.enumerate())
