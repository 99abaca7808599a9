from __future__ import annotations

import math
from statistics import NormalDist

import numpy as np
import pytest

from benchkit.stage.quantiles import LEAST_UNITS, OUTSIDE_EACH_SIDE, interval


@pytest.mark.parametrize("units", [1000, 3000, 6000])
def test_next_units_lie_outside_as_often_as_stated(units: int) -> None:
    """On average over ensembles, the share of fresh units outside is 0.27 % (uniform here; ranks know no law)."""
    rng = np.random.default_rng(1)
    outside = []
    for _ in range(300):
        low, high = interval(rng.uniform(size=units))
        outside.append(low + (1.0 - high))
    # One ensemble scatters by about 0.27 % * sqrt(2/(0.0027 * units)); 300 of them by a seventeenth of that.
    scatter = 0.0027 * math.sqrt(1.0 / (0.0027 * units)) / math.sqrt(300)
    assert np.mean(outside) == pytest.approx(2.0 * OUTSIDE_EACH_SIDE, abs=4.0 * scatter)


def test_with_k_over_n_they_would_lie_outside_too_often() -> None:
    rng = np.random.default_rng(2)
    outside = []
    for _ in range(400):
        ordered = np.sort(rng.uniform(size=1000))
        outside.append(ordered[int(np.ceil(0.00135 * 1000)) - 1] * 2.0)
    assert np.mean(outside) > 1.2 * 2.0 * OUTSIDE_EACH_SIDE


def test_a_small_ensemble_is_carried_on_beyond_its_last_unit() -> None:
    normal = NormalDist()
    exact = np.array([normal.inv_cdf((k + 1) / 301) for k in range(300)])
    low, high = interval(exact)
    assert low < exact[0]
    assert low == pytest.approx(-3.0, abs=1e-3)
    assert high == pytest.approx(3.0, abs=1e-3)


def test_overloads_count_as_infinite() -> None:
    values = np.linspace(0.0, 1.0, 2000)
    assert interval(values)[1] < 1.0
    values[-100:] = np.inf
    low, high = interval(values)
    assert 0.0 < low < 0.01
    assert high == math.inf
    assert interval(np.full(100, np.inf)) == (math.inf, math.inf)
    few = np.linspace(0.0, 1.0, 100)
    few[-1] = np.inf
    assert interval(few)[1] == math.inf


def test_equal_values_give_that_value() -> None:
    assert interval(np.full(2000, 25.0)) == (25.0, 25.0)
    assert interval(np.full(60, 25.0)) == (25.0, 25.0)


def test_what_gives_no_limits() -> None:
    with pytest.raises(ValueError, match="too few"):
        interval(np.zeros(LEAST_UNITS - 1))
    with pytest.raises(ValueError, match="not a number"):
        interval(np.append(np.zeros(100), np.nan))
