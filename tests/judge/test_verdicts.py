"""Verdicts: guarded and simple acceptance, overload, and what never passes."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchkit.judge.limits import Limits
from benchkit.judge.verdicts import (
    Acceptance,
    Verdict,
    conformance_probability,
    global_risks,
    judge,
    judge_reading,
    worst,
)
from benchkit.measure.accuracy import HANDHELD
from benchkit.measure.uncertainty import make_reading
from benchkit.quantities import Overload

ACCEPTANCES: tuple[Acceptance, ...] = ("guarded", "simple")
LIMITS = Limits(1.0, 2.0, 1.5, "V", "the model")


@pytest.mark.parametrize(
    ("value", "verdict"),
    [
        (0.79, "fail"),
        (0.81, "undecided"),
        (1.19, "undecided"),
        (1.21, "pass"),
        (1.79, "pass"),
        (1.81, "undecided"),
        (2.19, "undecided"),
        (2.21, "fail"),
    ],
)
def test_guarded(value: float, verdict: Verdict) -> None:
    judged = judge(value, 0.1, LIMITS, coverage=0.9545)
    assert judged.guard_band == pytest.approx(0.2, rel=1e-3)
    assert judged.verdict == verdict
    assert judged.why.endswith(".")


def test_simple() -> None:
    assert judge(1.01, 0.1, LIMITS, acceptance="simple").verdict == "pass"
    assert judge(0.99, 0.1, LIMITS, acceptance="simple").verdict == "fail"
    assert judge(1.5, 0.5, LIMITS, acceptance="simple").verdict == "undecided"
    with pytest.raises(ValueError, match="no decision rule"):
        judge(1.5, 0.1, LIMITS, acceptance="lenient")  # type: ignore[arg-type]


def test_without_uncertainty_or_number_nothing_is_decided() -> None:
    for acceptance in ACCEPTANCES:
        assert judge(1.5, None, LIMITS, acceptance=acceptance).verdict == "undecided"
        assert judge(None, 0.1, LIMITS, acceptance=acceptance).verdict == "undecided"
        assert judge(float("nan"), 0.1, LIMITS, acceptance=acceptance).verdict == "undecided"
    with pytest.raises(ValueError, match="no standard uncertainty"):
        judge(1.5, -0.1, LIMITS)


def test_a_perfect_meter() -> None:
    assert judge(1.0, 0.0, LIMITS).verdict == "pass"
    assert judge(0.999, 0.0, LIMITS).verdict == "fail"
    assert judge(1.5, 0.0, LIMITS).conformance_probability == 1.0


def test_overload() -> None:
    judged = judge(Overload(), None, LIMITS)
    assert judged.verdict == "fail"
    assert "overload" in judged.why
    assert judge(Overload(positive=False), None, Limits(None, 2.0, None, "V", "x")).verdict == "pass"
    assert judge(Overload(positive=True), None, Limits(1.0, None, None, "ohm", "x")).verdict == "pass"
    assert judge(Overload(positive=True), None, Limits(None, 2.0, None, "V", "x")).verdict == "fail"
    assert judge(Overload(), None, Limits(None, None, None, "V", "x")).verdict == "undecided"


def test_a_meter_that_cannot_resolve_the_limits_never_passes() -> None:
    """Microvolts of emitter drop on a meter with steps of 0.1 mV."""
    limits = Limits(5e-6, 60e-6, 21e-6, "V", "the model")
    for value in np.linspace(-100e-6, 200e-6, 31):
        reading = make_reading("emitter.upper.1", float(value), "V", function="dc volts", accuracy=HANDHELD)
        for acceptance in ACCEPTANCES:
            assert judge_reading(reading, limits, acceptance=acceptance).verdict == "undecided"


def test_units_must_agree() -> None:
    reading = make_reading("rail+.current", 0.01, "A", function="dc current", accuracy=HANDHELD)
    with pytest.raises(ValueError, match="its limits in V"):
        judge_reading(reading, LIMITS)


def test_worst() -> None:
    assert worst([]) == "undecided"
    everything: tuple[Verdict, ...] = ("pass", "fail", "undecided")
    for verdicts in itertools.product(everything, repeat=3):
        expected = "fail" if "fail" in verdicts else "undecided" if "undecided" in verdicts else "pass"
        assert worst(verdicts) == expected


@given(st.floats(-3, 6), st.floats(1e-6, 2.0), st.floats(0.5, 0.999))
def test_the_verdict_follows_the_risk(value: float, u: float, coverage: float) -> None:
    """A guarded pass is wrong at most with (1 - coverage)/2 at each limit, a fail right at least as often."""
    judged = judge(value, u, LIMITS, coverage=coverage)
    tail = (1.0 - coverage) / 2.0
    if judged.verdict == "pass":
        assert judged.conformance_probability >= 1.0 - 2.0 * tail - 1e-9
    if judged.verdict == "fail":
        assert judged.conformance_probability <= tail + 1e-9
    assert 0.0 <= judged.conformance_probability <= 1.0


@given(st.floats(-3, 6), st.floats(1e-6, 2.0))
def test_probability_against_numbers_drawn(value: float, u: float) -> None:
    draws = value + u * np.random.default_rng(7).standard_normal(20_000)
    share = float(np.mean((draws >= 1.0) & (draws <= 2.0)))
    assert conformance_probability(value, u, 1.0, 2.0) == pytest.approx(share, abs=0.02)


def test_probability_far_out_does_not_vanish_by_rounding() -> None:
    assert conformance_probability(-8.0, 1.0, 1.0, 2.0) == pytest.approx(conformance_probability(11.0, 1.0, 1.0, 2.0))
    assert 0 < conformance_probability(-8.0, 1.0, 1.0, 2.0) < 1e-18


def test_global_risks_by_drawing() -> None:
    rng = np.random.default_rng(11)
    true = 1.5 + 0.3 * rng.standard_normal(400_000)
    read = true + 0.1 * rng.standard_normal(400_000)
    good, passed = (true >= 1) & (true <= 2), (read >= 1.1) & (read <= 1.9)
    risks = global_risks(1.5, 0.3, 0.1, LIMITS, guard_band=0.1)
    assert risks.consumer == pytest.approx(float(np.mean(passed & ~good)), abs=1e-3)
    assert risks.producer == pytest.approx(float(np.mean(~passed & good)), abs=2e-3)
    one_sided = global_risks(1.5, 0.3, 0.1, Limits(None, 2.0, None, "V", "x"), guard_band=0.1)
    assert one_sided.consumer == pytest.approx(float(np.mean((read <= 1.9) & (true > 2))), abs=1e-3)
    closed = global_risks(1.5, 0.3, 0.1, LIMITS, guard_band=0.6)
    assert closed.consumer == 0.0
    assert closed.producer == pytest.approx(float(np.mean(good)), abs=2e-3)
    with pytest.raises(ValueError, match="global risks"):
        global_risks(1.5, 0.0, 0.1, LIMITS)


@pytest.mark.parametrize(
    ("value", "u", "verdict"),
    [
        (100.0, 0.1, "pass"),
        (100.15, 0.1, "pass"),  # outside by less than U = 0.196: the meter may be wrong, the part need not be
        (100.25, 0.1, "fail"),
        (89.85, 0.1, "pass"),
        (89.75, 0.1, "fail"),
        (95.0, 3.0, "undecided"),  # ±U is wider than the limits: nothing can be said
    ],
)
def test_guarded_rejection_rejects_only_beyond_the_uncertainty(value: float, u: float, verdict: str) -> None:
    limits = Limits(90.0, 100.0, 95.0, "ohm", "a tolerance")
    assert judge(value, u, limits, acceptance="guarded rejection").verdict == verdict
