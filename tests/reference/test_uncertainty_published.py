"""Published figures of uncertainty, decisions and RKM codes; each test names its source."""

from __future__ import annotations

import math

import numpy as np
import pytest

from benchkit.judge.limits import Limits
from benchkit.judge.verdicts import conformance_probability, global_risks, judge
from benchkit.measure.accuracy import BENCH_METER, Accuracy, AccuracyRow
from benchkit.measure.uncertainty import (
    combine,
    coverage_factor,
    coverage_interval,
    fit_line,
    propagate,
    rectangular,
    type_a,
)
from benchkit.quantities import parse, parse_tolerance

# JCGM 100:2008 (GUM), example H.2: five simultaneous readings of a circuit element.
VOLTS = [5.007, 4.994, 5.005, 4.990, 4.999]
AMPS = [19.663e-3, 19.639e-3, 19.640e-3, 19.685e-3, 19.678e-3]
RADIANS = [1.0456, 1.0438, 1.0468, 1.0428, 1.0433]

# JCGM 100:2008 (GUM), example H.3: calibration of a thermometer.
CELSIUS = [21.521, 22.012, 22.512, 23.003, 23.507, 23.999, 24.513, 25.002, 25.503, 26.010, 26.511]
CORRECTION = [-0.171, -0.169, -0.166, -0.159, -0.164, -0.165, -0.156, -0.157, -0.159, -0.161, -0.160]


def _impedance(x: np.ndarray) -> np.ndarray:
    volts, amps, phase = x
    return np.array([volts / amps * math.cos(phase), volts / amps * math.sin(phase), volts / amps])


def _h2_inputs() -> tuple[np.ndarray, np.ndarray]:
    samples = np.array([VOLTS, AMPS, RADIANS])
    return samples.mean(axis=1), np.cov(samples) / len(VOLTS)


def test_gum_h2_resistance_reactance_and_impedance() -> None:
    """JCGM 100:2008, H.2, tables H.3 and H.4."""
    means, covariance = _h2_inputs()
    for index, samples in enumerate((VOLTS, AMPS, RADIANS)):
        assert type_a(samples).mean == pytest.approx(means[index], rel=1e-12)
        assert type_a(samples).standard_uncertainty == pytest.approx(math.sqrt(covariance[index, index]), rel=1e-12)
    outputs, found = propagate(_impedance, means, covariance)
    assert outputs == pytest.approx([127.732, 219.847, 254.260], abs=5e-4)
    u = np.sqrt(np.diag(found))
    assert u == pytest.approx([0.071, 0.2956, 0.236], abs=5e-4)
    correlation = found / np.outer(u, u)
    assert correlation[0, 1] == pytest.approx(-0.588, abs=5e-4)
    assert correlation[0, 2] == pytest.approx(-0.485, abs=5e-4)
    assert correlation[1, 2] == pytest.approx(0.993, abs=5e-4)


def test_gum_h2_by_hand_with_the_law_of_propagation() -> None:
    """JCGM 100:2008, H.2 again through `combine`: derivatives written out, correlations as its table H.2 has them."""
    means, covariance = _h2_inputs()
    volts, amps, phase = means
    u = np.sqrt(np.diag(covariance))
    correlations = {(i, j): float(covariance[i, j] / (u[i] * u[j])) for i, j in ((0, 1), (0, 2), (1, 2))}
    resistance = volts / amps * math.cos(phase)
    parts = [resistance / volts * u[0], -resistance / amps * u[1], -resistance * math.tan(phase) * u[2]]
    assert combine(parts, correlations) == pytest.approx(0.071, abs=5e-4)


def test_gum_h2_without_the_correlations_is_wrong() -> None:
    """The same example with the correlations left out gives 0.1945 ohm: the correlations are really used."""
    means, covariance = _h2_inputs()
    _, found = propagate(_impedance, means, np.diag(np.diag(covariance)))
    assert math.sqrt(found[0, 0]) == pytest.approx(0.1945, abs=5e-5)


def test_gum_h3_thermometer() -> None:
    """JCGM 100:2008, H.3.3 and H.3.4."""
    line = fit_line(CELSIUS, CORRECTION, x0=20.0)
    assert line.intercept == pytest.approx(-0.1712, abs=5e-5)
    assert line.u_intercept == pytest.approx(0.0029, abs=5e-5)
    assert line.slope == pytest.approx(0.00218, abs=5e-6)
    assert line.u_slope == pytest.approx(0.00067, abs=5e-6)
    assert line.correlation == pytest.approx(-0.930, abs=5e-4)
    assert line.residual_deviation == pytest.approx(0.0035, abs=5e-5)
    value, u = line.at(30.0)
    assert value == pytest.approx(-0.1494, abs=5e-5)
    assert u == pytest.approx(0.0041, abs=5e-5)


def test_gum_specification_of_a_voltmeter() -> None:
    """JCGM 100:2008, 4.3.7 and 5.1.5 (from memory): 14e-6 of reading and 2e-6 of range, 0.928571 V on 1 V."""
    meter = Accuracy("the example's", {"dc volts": (AccuracyRow(1.0, 14e-4, percent_of_range=2e-4),)})
    assert meter.row("dc volts", 0.928571).half_width(0.928571) == pytest.approx(15e-6, abs=5e-9)
    u = meter.standard_uncertainty("dc volts", 0.928571)
    assert u == pytest.approx(8.7e-6, abs=5e-8)
    assert combine([u, 12e-6]) == pytest.approx(15e-6, abs=5e-7)


def test_bench_meter_specification() -> None:
    """34401A user's guide: 5 V on the 10 V range within ±(0.0020 % + 0.0005 % of range) = ±150 µV."""
    assert BENCH_METER.row("dc volts", 5.0).half_width(5.0) == pytest.approx(150e-6, rel=1e-12)
    row = AccuracyRow(10.0, 0.0, percent_of_range=0.0004)
    assert row.half_width(0.0) == pytest.approx(40e-6, rel=1e-12)
    assert row.half_width(10.0) == row.half_width(0.0)


@pytest.mark.parametrize(
    ("function", "at", "limit"),
    [
        ("dc volts", 0.1, 7.5e-6),
        ("dc volts", 1.0, 37e-6),
        ("dc volts", 10.0, 250e-6),
        ("dc volts", 100.0, 4.1e-3),
        ("dc volts", 1000.0, 45e-3),
        ("ohms 4-wire", 100.0, 12e-3),
        ("ohms 4-wire", 1e3, 90e-3),
        ("ohms 4-wire", 1e4, 900e-3),
        ("ohms 4-wire", 1e5, 9.0),
        ("ohms 4-wire", 1e6, 90.0),
        ("ohms 4-wire", 1e7, 2.1e3),
        ("ohms 4-wire", 1e8, 810e3),
        ("dc current", 10e-3, 5e-6),
        ("dc current", 0.1, 35e-6),
        ("dc current", 1.0, 900e-6),
        ("dc current", 2.0, 3.0e-3),
    ],
)
def test_bench_meter_at_full_scale(function: str, at: float, limit: float) -> None:
    """34401A service guide, gain verification table, column "90 day"."""
    assert BENCH_METER.row(function, at).half_width(at) == pytest.approx(limit, rel=1e-9)


def test_bench_meter_two_wires() -> None:
    """34401A service guide, note 1 of the same table: without a null 2-wire ohms need 200 mohm more."""
    extra = BENCH_METER.row("ohms", 100.0).half_width(100.0) - BENCH_METER.row("ohms 4-wire", 100.0).half_width(100.0)
    assert extra == pytest.approx(0.2, rel=1e-12)


def test_per_cent_and_counts() -> None:
    """0.5 % + 2 counts at 24.50 V with steps of 0.01 V (common practice): ±0.1425 V, u 0.08227 V."""
    meter = Accuracy("counts", {"dc volts": (AccuracyRow(60.0, 0.5, counts=2, resolution=0.01),)})
    assert meter.row("dc volts", 24.50).half_width(24.50) == pytest.approx(0.1425, rel=1e-12)
    assert meter.standard_uncertainty("dc volts", 24.50) == pytest.approx(0.08227, abs=5e-6)


def test_jcgm_101_sum_of_four() -> None:
    """JCGM 101:2008, 9.2.2 and 9.2.3 (from memory): four N(0,1) ±3.92; four rectangular of deviation 1 ±3.88."""
    u = combine([1.0] * 4)
    assert u == pytest.approx(2.0, rel=1e-15)
    assert coverage_factor(0.95) * u == pytest.approx(3.92, abs=5e-3)
    rng = np.random.default_rng(1)
    half = math.sqrt(3.0)
    assert rectangular(half) == pytest.approx(1.0)
    draws = rng.uniform(-half, half, size=(400_000, 4)).sum(axis=1)
    low, high = coverage_interval(draws, 0.95)
    assert (high - low) / 2 == pytest.approx(3.8794, abs=0.015)
    normal = rng.standard_normal((400_000, 4)).sum(axis=1)
    low, high = coverage_interval(normal, 0.95)
    assert (high - low) / 2 == pytest.approx(3.92, abs=0.015)


@pytest.mark.parametrize(("probability", "z"), [(0.80, 0.84), (0.90, 1.28), (0.95, 1.64), (0.99, 2.33), (0.999, 3.09)])
def test_jcgm_106_one_sided_conformance(probability: float, z: float) -> None:
    """JCGM 106:2012, 7.3.3, table 1 (from memory)."""
    assert conformance_probability(-z, 1.0, None, 0.0) == pytest.approx(probability, abs=3e-3)
    assert conformance_probability(z, 1.0, 0.0, None) == pytest.approx(probability, abs=3e-3)


@pytest.mark.parametrize(
    ("value", "u", "low", "high", "probability"),
    [(-5.47, 0.05, None, -5.40, 0.92), (509.7, 8.6, 490.0, None, 0.99), (13.6, 1.8, 12.5, 16.3, 0.66)],
)
def test_jcgm_106_examples(value: float, u: float, low: float | None, high: float | None, probability: float) -> None:
    """JCGM 106:2012, examples of clause 7 (from memory for the printed results)."""
    assert conformance_probability(value, u, low, high) == pytest.approx(probability, abs=5e-3)


def test_jcgm_106_precision_resistors() -> None:
    """JCGM 106:2012, 9.5.4 (from memory): global risks with and without a guard band."""
    limits = Limits(1499.8, 1500.2, 1500.0, "ohm", "JCGM 106")
    guarded = global_risks(1500.0, 0.12, 0.04, limits, guard_band=0.02)
    assert guarded.consumer == pytest.approx(0.009878, abs=5e-7)
    assert guarded.producer == pytest.approx(0.069027, abs=5e-7)
    simple = global_risks(1500.0, 0.12, 0.04, limits)
    assert simple.consumer == pytest.approx(0.018942, abs=5e-7)
    assert simple.producer == pytest.approx(0.037208, abs=5e-7)


def test_ilac_g8_risks_at_the_acceptance_limit() -> None:
    """ILAC-G8:09/2019, 4.2: with U = 2u the risk at the acceptance limit is 2.275 % for w = U, 50 % for 0."""
    two_sigma = math.erf(math.sqrt(2.0))
    assert coverage_factor(two_sigma) == pytest.approx(2.0, rel=1e-12)
    limits = Limits(None, 10.0, None, "V", "upper limit")
    guarded = judge(9.0, 0.5, limits, coverage=two_sigma)
    assert guarded.guard_band == pytest.approx(1.0)
    assert guarded.acceptance_high == pytest.approx(9.0)
    assert 1.0 - guarded.conformance_probability == pytest.approx(0.02275, abs=5e-6)
    simple = judge(10.0, 0.5, limits, acceptance="simple", coverage=two_sigma)
    assert simple.verdict == "pass"
    assert 1.0 - simple.conformance_probability == pytest.approx(0.5, abs=1e-12)


def test_ilac_g8_zone_between() -> None:
    """ILAC-G8:09/2019, 4.2.2 and 4.2.3: pass at or below TL - w, and the zone between is reported as such."""
    limits = Limits(None, 10.0, None, "V", "upper limit")
    two_sigma = math.erf(math.sqrt(2.0))
    verdicts = [judge(value, 0.5, limits, coverage=two_sigma).verdict for value in (8.99, 9.01, 10.99, 11.01)]
    assert verdicts == ["pass", "undecided", "undecided", "fail"]


@pytest.mark.parametrize(
    ("code", "ohm"),
    [
        ("4k7", 4700.0),
        ("4K7", 4700.0),
        ("0R22", 0.22),
        ("R22", 0.22),
        ("4R7", 4.7),
        ("47R", 47.0),
        ("1M0", 1e6),
        ("2M2", 2.2e6),
    ],
)
def test_rkm_codes(code: str, ohm: float) -> None:
    """IEC 60062:2016."""
    assert parse(code, "ohm") == ohm


@pytest.mark.parametrize(("letter", "fraction"), [("F", 0.01), ("G", 0.02), ("J", 0.05), ("K", 0.10), ("M", 0.20)])
def test_tolerance_letters(letter: str, fraction: float) -> None:
    """IEC 60062:2016 (from memory)."""
    found = parse_tolerance(f"4k7{letter}", "ohm")
    assert found.value == 4700.0
    assert found.fraction == pytest.approx(fraction)
