from __future__ import annotations

import itertools
import math

import pytest

from benchkit.judge.screw import KNEE_V, Scale, amount_words, taken_for

TARGET_V = 0.022
SCALE = Scale(target=TARGET_V, knee=KNEE_V, floor=1e-6)


@pytest.mark.parametrize("value", [1.1e-6, 2e-5, 3e-4, 2.6e-3, TARGET_V, 0.09, 0.5])
def test_a_reading_comes_back_from_its_place_on_the_screw(value: float) -> None:
    assert SCALE.value_at(SCALE.even(value)) == pytest.approx(value, rel=1e-6)


def test_without_a_knee_the_reading_is_its_own_place() -> None:
    even = Scale(target=0.1, knee=0.0, floor=1e-4)
    assert even.even(0.07) == 0.07
    assert even.value_at(0.07) == 0.07
    assert even.value_at(-1.0) == 1e-4


def test_what_lies_below_the_floor_is_the_floor() -> None:
    assert SCALE.even(-1.0) == SCALE.even(0.0) == SCALE.even(1e-6)
    assert SCALE.value_at(-10.0) == 1e-6


def test_steepness_is_the_derivative() -> None:
    for value in (1e-4, 0.01, 0.1):
        step = 1e-4 * value
        slope = (SCALE.even(value + step) - SCALE.even(value - step)) / (2.0 * step)
        assert SCALE.steepness(value) == pytest.approx(slope, rel=1e-6)


def test_a_junction_and_a_resistor_follow_the_screw_evenly() -> None:
    """V = v + n*VT*ln v, solved for v by halving, at evenly spaced V: u is evenly spaced too."""
    thermal_v = KNEE_V
    places = []
    for volts in (-0.12, -0.08, -0.04, 0.0, 0.04, 0.08):
        low, high = 1e-9, 1.0
        for _ in range(80):
            middle = math.sqrt(low * high)
            low, high = (middle, high) if middle + thermal_v * math.log(middle) < volts else (low, middle)
        places.append(SCALE.even(low))
    steps = [second - first for first, second in itertools.pairwise(places)]
    assert steps == pytest.approx([0.04] * 5, rel=1e-6)


@pytest.mark.parametrize(
    ("turns", "track", "words"),
    [
        (0.01, 12.0, "a touch"),
        (0.1, 12.0, "an eighth of a turn"),
        (0.25, 12.0, "a quarter turn"),
        (0.5, 12.0, "half a turn"),
        (0.75, 12.0, "three quarters of a turn"),
        (1.0, 12.0, "one turn"),
        (1.5, 12.0, "one and a half turns"),
        (2.0, 12.0, "two turns"),
        (0.01, 0.75, "a touch"),
        (0.1, 0.75, "about 35 degrees"),
    ],
)
def test_amounts_in_words(turns: float, track: float, words: str) -> None:
    assert amount_words(turns, track) == words


@pytest.mark.parametrize("turns", [0.05, 0.1, 0.3, 0.55, 0.8, 1.1, 1.6, 2.0])
def test_words_are_taken_for_about_what_they_were_made_from(turns: float) -> None:
    assert 0.65 < taken_for(turns, 12.0) / turns < 1.55
    assert taken_for(turns, 0.75) == turns


def test_what_stands_beside_the_bias_is_taken_off() -> None:
    plain = Scale(target=0.097, knee=0.13, floor=1e-6)
    rail = Scale(target=0.119, knee=0.13, floor=1e-6, standing=0.022)
    for over in (1e-4, 0.01, 0.097, 0.2):
        assert rail.even(0.022 + over) == pytest.approx(plain.even(over), abs=1e-12)
        assert rail.steepness(0.022 + over) == pytest.approx(plain.steepness(over))
        assert rail.value_at(rail.even(0.022 + over)) == pytest.approx(0.022 + over)
    assert rail.even(0.010) == rail.even(0.022), "a unit whose feeds draw less"
    assert Scale(target=0.119, knee=0.0, floor=1e-6, standing=0.022).value_at(0.05) == pytest.approx(0.072)
