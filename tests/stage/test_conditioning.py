from __future__ import annotations

import numpy as np
import pytest

from benchkit.stage.conditioning import Column, Conditioned
from benchkit.stage.draws import Array

UNITS = 6000
OUTSIDE = 0.0027


def columns(*readings: Array) -> list[Column]:
    return [Column.of(one) for one in readings]


def whole(units: int = UNITS) -> np.ndarray[tuple[int], np.dtype[np.intp]]:
    return np.arange(units, dtype=np.intp)


@pytest.mark.parametrize("shift", [0.0, 5.0, -1000.0])
def test_a_column_goes_there_and_back(shift: float) -> None:
    rng = np.random.default_rng(1)
    readings = rng.normal(size=500) * np.exp(3.0 * rng.normal(size=500)) + shift
    column = Column.of(readings)
    assert column.standard.mean() == pytest.approx(0.0, abs=1e-9)
    assert column.standard.std() == pytest.approx(1.0)
    np.testing.assert_allclose(column.back(column.forward(readings)), readings, rtol=1e-9, atol=1e-9)


def test_a_normal_pair_gets_the_limits_of_theory() -> None:
    """Conditional normal law: mean rho*x, standard deviation sqrt(1 - rho^2); three either side are 99.73 %."""
    rng = np.random.default_rng(2)
    x, e = rng.normal(size=(2, 200_000))
    y = 0.8 * x + 0.6 * e
    made = Conditioned(columns(x + 100.0), columns(y + 100.0), whole(len(x)), OUTSIDE)
    at = np.array([[98.5], [100.0], [101.5]])
    low, high, odd = made.limits_many(at)
    assert not odd.any()
    middle = 100.0 + 0.8 * (at[:, 0] - 100.0)
    np.testing.assert_allclose(low[:, 0], middle - 1.8, atol=0.12)
    np.testing.assert_allclose(high[:, 0], middle + 1.8, atol=0.12)


def test_scatter_that_grows_along_a_curve_is_followed() -> None:
    """Next units stay inside at each end of a relation that spans three decades, and the limits are narrow there."""
    rng = np.random.default_rng(3)

    def drawn(units: int) -> tuple[Array, Array, Array]:
        place, e = rng.uniform(size=units), rng.normal(size=units)
        return (
            place + 0.002 * rng.normal(size=units),
            1e-3 * np.exp(7.0 * place) * (1 + (0.01 + 0.05 * place) * e),
            place,
        )

    known, wanted, _ = drawn(UNITS)
    made = Conditioned(columns(known), columns(wanted), whole(), OUTSIDE)
    known, wanted, place = drawn(20_000)
    low, high, _ = made.limits_many(known[:, None])
    outside = (wanted < low[:, 0]) | (wanted > high[:, 0])
    assert outside.mean() < 0.006
    for part in np.array_split(np.argsort(place), 5):
        assert outside[part].mean() < 0.015
        width = np.median((high - low)[part, 0] / wanted[part])
        wanted_width = np.median(6.0 * np.hypot(0.01 + 0.05 * place[part], 7.0 * 0.002))
        assert 0.8 < width / wanted_width < 1.4


def test_many_terms_and_few_units_promise_no_more_than_they_keep() -> None:
    """Residuals of the fit itself would be too small by a third here."""
    rng = np.random.default_rng(4)
    mix = rng.normal(size=(60, 2))
    shares = []
    for _ in range(5):
        x = rng.normal(size=(500, 60))
        y = x @ mix / 8.0 + rng.normal(size=(500, 2))
        made = Conditioned(columns(*x.T), columns(*y.T), whole(500), 0.02)
        x = rng.normal(size=(4000, 60))
        y = x @ mix / 8.0 + rng.normal(size=(4000, 2))
        low, high, _ = made.limits_many(x)
        shares.append(((y < low) | (y > high)).mean())
    assert np.mean(shares) < 0.03


def test_a_sum_of_known_readings_is_known_and_repeated_readings_do_no_harm() -> None:
    rng = np.random.default_rng(5)
    a, b = rng.normal(size=(2, UNITS))
    made = Conditioned(columns(a, b, a, a + b), columns(a - b), whole(), OUTSIDE)
    low, high, _ = made.limits_many(np.array([[0.3, 0.1, 0.3, 0.4]]))
    assert low[0, 0] <= 0.2 + 1e-3
    assert high[0, 0] >= 0.2 - 1e-3
    assert high[0, 0] - low[0, 0] < 0.01 * 6.0 * np.sqrt(2.0)


def test_an_odd_unit_is_known_by_one_reading_against_the_rest_and_named() -> None:
    rng = np.random.default_rng(6)
    base = rng.normal(size=UNITS)
    known = base[:, None] + 0.01 * rng.normal(size=(UNITS, 4))
    made = Conditioned(columns(*known.T), columns(base), whole(), OUTSIDE)
    values = np.full((3, 4), 0.5)
    values[1, 2] += 0.2
    values[2] = 50.0
    _, _, odd = made.limits_many(values)
    assert odd.tolist() == [False, True, True]
    assert made.oddest(values[1]) == 2
