from __future__ import annotations

import pytest

from benchkit.judge.falls import Falls, fall_words
from benchkit.judge.screw import KNEE_V, Scale

FALLS = Falls(Scale(target=0.022, knee=KNEE_V, floor=2e-6))


@pytest.mark.parametrize(
    ("before", "value", "turned", "away"),
    [
        (0.022, 0.0001, 0.0, True),
        (0.022, 0.0001, 0.25, True),
        (0.022, 0.0100, 0.0, False),  # less than two thirds of it
        (0.022, 0.0050, -1.0, False),  # a turn back does as much
        (0.022, 0.0001, -0.25, True),  # a quarter turn does not
        (1e-5, 0.0, 0.0, False),  # not to be seen
    ],
)
def test_a_fall_is_told_from_a_move(before: float, value: float, turned: float, away: bool) -> None:
    assert FALLS.away(before, value, turned, 0.038, 2e-6) is away


@pytest.mark.parametrize(
    ("before_a", "now_a", "mood", "words"),
    [
        (0.10, 0.03, "no response", "the wiper has opened"),
        (0.10, 0.10, "gone", "the probe has slipped"),
        (0.10, None, "no response", "is the probe on the point?"),
        (None, 0.10, "no response", "is the probe on the point?"),
    ],
)
def test_the_current_tells_what_a_fall_is(before_a: float | None, now_a: float | None, mood: str, words: str) -> None:
    said = fall_words(before_a, now_a)
    assert said[0] == mood
    assert words in said[1]


def test_so_little_bias_tells_nothing_in_the_current() -> None:
    assert FALLS.with_current(0.022, 0.1, 0.05)
    assert not FALLS.with_current(0.022, 0.1, 0.095)
    assert not FALLS.with_current(0.0005, 0.1, 0.05)
