"""Uncertainty arithmetic: properties, and ratios of two readings of one meter."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchkit.measure.accuracy import HANDHELD, Accuracy, AccuracyRow
from benchkit.measure.uncertainty import (
    combine,
    coverage_factor,
    coverage_interval,
    effective_degrees_of_freedom,
    fit_line,
    make_reading,
    propagate,
    rectangular,
    relative_uncertainty_of_ratio,
    same_gain,
    type_a,
)

METER = Accuracy("1 % and 1 mV", {"dc volts": (AccuracyRow(1.0, 1.0, counts=1, resolution=0.001),)})


def test_coverage_factor() -> None:
    """JCGM 100, table G.2: two degrees of freedom 4.30, ten 2.23; k is not always 2."""
    assert coverage_factor(0.95) == pytest.approx(1.95996, abs=1e-5)
    assert coverage_factor(0.99) == pytest.approx(2.57583, abs=1e-5)
    assert coverage_factor(0.95, 2) == pytest.approx(4.30, abs=5e-3)
    assert coverage_factor(0.95, 10) == pytest.approx(2.23, abs=5e-3)
    for wrong in (0.0, 1.0, -1.0, math.nan):
        with pytest.raises(ValueError, match="no coverage"):
            coverage_factor(wrong)
    with pytest.raises(ValueError, match="degrees"):
        coverage_factor(0.95, 0)


def test_effective_degrees_of_freedom() -> None:
    assert effective_degrees_of_freedom([(1.0, 4.0), (1.0, 4.0)]) == pytest.approx(8.0)
    assert effective_degrees_of_freedom([(1.0, math.inf), (2.0, math.inf)]) == math.inf
    assert effective_degrees_of_freedom([(1.0, 4.0), (100.0, math.inf)]) > 1e6


@given(st.lists(st.floats(-1e3, 1e3), min_size=1, max_size=6), st.floats(-1, 1))
def test_combination(parts: list[float], correlation: float) -> None:
    plain = combine(parts)
    assert plain == pytest.approx(math.hypot(*parts), rel=1e-12, abs=1e-12)
    if len(parts) > 1:
        assert combine(parts[:2], {(0, 1): 1.0}) == pytest.approx(abs(parts[0] + parts[1]), rel=1e-6, abs=1e-4)
        both = combine(parts[:2], {(0, 1): correlation})
        assert both <= abs(parts[0]) + abs(parts[1]) + 1e-9


def test_impossible_correlations_are_refused() -> None:
    for pair, value in (((0, 0), 0.5), ((0, 1), 1.1)):
        with pytest.raises(ValueError, match="correlated"):
            combine([1.0, 2.0], {pair: value})


def test_type_a() -> None:
    single = type_a([3.0])
    assert (single.mean, single.standard_uncertainty, single.degrees_of_freedom) == (3.0, 0.0, math.inf)
    many = type_a([1.0, 2.0, 3.0, 4.0])
    assert many.standard_deviation == pytest.approx(np.std([1, 2, 3, 4], ddof=1))
    assert many.standard_uncertainty == pytest.approx(many.standard_deviation / 2)
    with pytest.raises(ValueError, match="no samples"):
        type_a([])


def test_rectangular_against_draws() -> None:
    draws = np.random.default_rng(3).uniform(-2.0, 2.0, 200_000)
    assert rectangular(2.0) == pytest.approx(float(draws.std()), rel=0.01)
    with pytest.raises(ValueError, match="half-width"):
        rectangular(-1.0)


def test_propagation_of_a_linear_function_is_exact() -> None:
    matrix = np.array([[1.0, 2.0], [3.0, -4.0], [0.0, 5.0]])
    covariance = np.array([[0.04, 0.01], [0.01, 0.09]])
    outputs, found = propagate(lambda x: matrix @ x, [1.0, 2.0], covariance)
    assert outputs == pytest.approx([5.0, -5.0, 10.0])
    assert found == pytest.approx(matrix @ covariance @ matrix.T, rel=1e-8)
    with pytest.raises(ValueError, match="shape"):
        propagate(lambda x: x, [1.0, 2.0], [[1.0]])


def test_line() -> None:
    line = fit_line([0.0, 1.0, 2.0], [1.0, 3.0, 5.0])
    assert (line.intercept, line.slope, line.residual_deviation) == (1.0, 2.0, 0.0)
    assert line.at(10.0) == (21.0, 0.0)
    for x, y in (([0.0, 1.0], [0.0, 1.0]), ([1.0, 1.0, 1.0], [0.0, 1.0, 2.0]), ([0.0, 1.0, 2.0], [0.0, 1.0])):
        with pytest.raises(ValueError, match=r"line|same x"):
            fit_line(x, y)


def test_interval_of_draws() -> None:
    low, high = coverage_interval(np.arange(1001.0), 0.9)
    assert (low, high) == pytest.approx((50.0, 950.0))
    with pytest.raises(ValueError, match="no interval"):
        coverage_interval([1.0], 0.9)


def test_repeated_readings_add_their_scatter() -> None:
    single = make_reading("spread", 0.5, "V", function="dc volts", accuracy=METER)
    many = make_reading("spread", [0.49, 0.51], "V", function="dc volts", accuracy=METER)
    assert single.standard_uncertainty == pytest.approx(0.006 / math.sqrt(3))
    assert single.own_uncertainty == pytest.approx(0.001 / math.sqrt(3))
    assert many.value == pytest.approx(0.5)
    assert many.samples == 2
    assert many.standard_uncertainty == pytest.approx(math.hypot(0.006 / math.sqrt(3), 0.01))
    assert many.own_uncertainty == pytest.approx(math.hypot(0.001 / math.sqrt(3), 0.01))


def test_the_gain_cancels_in_a_ratio_and_the_counts_do_not() -> None:
    first = make_reading("emitter.upper.1", 0.5, "V", function="dc volts", accuracy=METER)
    second = make_reading("emitter.lower.1", 0.4, "V", function="dc volts", accuracy=METER)
    counts = 0.001 / math.sqrt(3)
    assert same_gain(first, second)
    assert relative_uncertainty_of_ratio(first, second) == pytest.approx(math.hypot(counts / 0.5, counts / 0.4))
    other = replace(second, meter="another")
    assert not same_gain(first, other)
    separate = relative_uncertainty_of_ratio(first, other)
    assert separate == pytest.approx(math.hypot(0.006 / 0.5, 0.005 / 0.4) / math.sqrt(3))


def test_the_gain_cancels_for_many_meters_drawn_at_random() -> None:
    """Draw meters within the specification: the scatter of the ratio is what the counts alone give."""
    rng = np.random.default_rng(5)
    gain = rng.uniform(-0.01, 0.01, 100_000)
    counts = rng.uniform(-0.001, 0.001, (2, 100_000))
    ratio = (0.5 * (1 + gain) + counts[0]) / (0.4 * (1 + gain) + counts[1])
    first = make_reading("a", 0.5, "V", function="dc volts", accuracy=METER)
    second = make_reading("b", 0.4, "V", function="dc volts", accuracy=METER)
    u = relative_uncertainty_of_ratio(first, second)
    assert u is not None
    assert float(ratio.std()) / (0.5 / 0.4) == pytest.approx(u, rel=0.02)


def test_ratios_that_have_no_uncertainty() -> None:
    known = make_reading("a", 0.5, "V", function="dc volts", accuracy=HANDHELD)
    assert relative_uncertainty_of_ratio(known, replace(known, value=0.0)) is None
    unknown = replace(known, standard_uncertainty=None, own_uncertainty=None)
    assert relative_uncertainty_of_ratio(known, unknown) is None
    over = replace(known, value=None, overload=True)
    assert relative_uncertainty_of_ratio(known, over) is None
