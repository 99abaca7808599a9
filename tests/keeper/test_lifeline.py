"""The pipe by which the stand-by knows that the keeper lives."""

from __future__ import annotations

import os

import pytest

from benchkit.keeper.lifeline import BEAT_S, SILENCE_S, Lifeline, Listener


@pytest.mark.parametrize(
    ("heard", "ended"),
    [
        ([], ""),
        ([b"-"], ""),
        ([b"-+"], ""),
        ([b""], "died"),
        ([b"+", b""], "died"),
        ([b"+."], "in order"),
        ([b".", b""], "in order"),
        ([b"-!", b""], "unsure"),
        ([b"", b"."], "died"),
    ],
)
def test_what_has_become_of_the_keeper(heard: list[bytes], ended: str) -> None:
    listener = Listener(0.0)
    for data in heard:
        listener.hear(data, 0.0)
    assert listener.ended == ended


def quiet(listener: Listener, from_s: float, to_s: float) -> bool:
    """Look often, as a process does that runs; return what the last look said."""
    now_s, frozen = from_s, False
    while now_s < to_s:
        now_s += 0.1
        frozen = listener.frozen(now_s)
    return frozen


@pytest.mark.parametrize(
    ("last", "frozen"), [(b"+", True), (b"-", False), (b"+-", False), (b"-+", True), (b"+.", False)]
)
def test_silence_counts_while_the_output_should_be_on(last: bytes, frozen: bool) -> None:
    listener = Listener(0.0)
    listener.hear(last, 0.0)
    assert not quiet(listener, 0.0, SILENCE_S - 0.3)
    assert quiet(listener, SILENCE_S - 0.3, SILENCE_S + 0.3) == frozen


def test_a_stand_by_that_stood_still_itself_waits() -> None:
    listener = Listener(0.0)
    listener.hear(b"+", 0.0)
    assert not listener.frozen(0.1)
    assert not listener.frozen(60.0)
    assert not quiet(listener, 60.0, 60.0 + SILENCE_S - 0.3)
    assert quiet(listener, 60.0 + SILENCE_S - 0.3, 60.0 + SILENCE_S + 0.3)


def test_it_is_quick_when_something_changes_and_slow_when_nothing_does() -> None:
    source, sink = os.pipe()
    lifeline = Lifeline(sink)
    for now_s, on in [(0.0, False), (0.1, False), (0.15, True), (0.2, True), (0.16 + BEAT_S, True), (0.5, False)]:
        lifeline.beat(now_s, output_on=on)
    lifeline.leave(in_order=True)
    assert os.read(source, 100) == b"-++-."
    assert os.read(source, 100) == b""
    os.close(source)


@pytest.mark.parametrize("gone", [True, False])
def test_it_never_waits_and_never_fails(gone: bool) -> None:
    """Neither a reader that has gone nor one that is frozen stops the keeper."""
    source, sink = os.pipe()
    if gone:
        os.close(source)
    lifeline = Lifeline(sink)
    for number in range(70_000):
        lifeline.beat(number * 1.0, output_on=True)
    lifeline.leave(in_order=False)
    if not gone:
        os.close(source)


def test_there_may_be_none() -> None:
    lifeline = Lifeline(None)
    lifeline.beat(0.0, output_on=True)
    lifeline.leave(in_order=True)
