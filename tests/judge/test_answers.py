from __future__ import annotations

import numpy as np
import pytest

from benchkit.judge.answers import FAINT, OfSlope, OfUnits
from benchkit.judge.screw import KNEE_V, Scale

TURNS = np.linspace(0.0, 12.0, 49)
NOISE_V = 2e-6


def unit(begins: float) -> np.ndarray:
    """A drop that grows fourfold a turn from 1 uV, as from `begins` turns on, and stays below 0.2 V."""
    return np.minimum(1e-6 * 4.0 ** np.maximum(TURNS - begins, 0.0), 0.2)


UNITS = OfUnits(TURNS, np.stack([unit(begins) for begins in (1.0, 2.0, 3.5)], axis=1))


@pytest.mark.parametrize(
    ("value", "turns", "least"),
    [
        (1e-6, 2.0, 0.0),  # the slowest does not move before 3.5 turns
        (1e-6, 4.5, 3e-6),
        (1e-6, 6.0, 3.1e-5),
        (1e-3, 1.0, 3e-3),
        (1e-3, -1.0, 7.5e-4),
        (1e-6, -3.0, 0.0),  # it is at its end
        (0.2, 3.0, 0.0),
    ],
)
def test_the_slowest_unit_tells_what_may_be_expected(value: float, turns: float, least: float) -> None:
    assert UNITS.least_change(value, turns, 0.0) == pytest.approx(least, rel=0.03, abs=1e-9)


def test_a_reading_known_only_within_its_noise_promises_less() -> None:
    assert UNITS.least_change(2e-5, 1.0, NOISE_V) < 0.8 * UNITS.least_change(2e-5, 1.0, 0.0)


def test_units_without_a_solution_are_left_out() -> None:
    broken = np.full_like(TURNS, np.nan)
    both = OfUnits(TURNS, np.stack([unit(1.0), broken], axis=1))
    assert both.least_change(1e-3, 1.0, 0.0) == pytest.approx(3e-3, rel=0.03)
    with pytest.raises(ValueError, match="no unit"):
        OfUnits(TURNS, broken[:, None])


def test_one_figure_expects_half_of_itself_and_nothing_near_least_bias() -> None:
    scale = Scale(target=0.022, knee=KNEE_V, floor=1e-6)
    slope = OfSlope(scale, 0.016 * scale.steepness(0.022))
    due = slope.least_change(0.020, 0.1, NOISE_V)
    assert due == pytest.approx(0.5 * 0.1 * 0.016, rel=0.1)
    assert slope.least_change(0.9 * FAINT * 0.022, 2.0, NOISE_V) == 0.0
