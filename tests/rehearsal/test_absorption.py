"""What large capacitors give back."""

from __future__ import annotations

import math

import pytest

from benchkit.rehearsal.absorption import LAG_S, SHARE, Absorption


def charged(reservoir_f: float, bleed_ohm: float = math.inf, volts: float = 35.0) -> Absorption:
    absorbed = Absorption(reservoir_f, 100e-6, bleed_ohm)
    absorbed.follow(volts, 1000.0)
    assert absorbed.back_v == 0.0
    return absorbed


def test_a_reservoir_comes_back_by_its_share() -> None:
    absorbed = charged(10e-3)
    absorbed.rest(60.0)
    after_a_minute_v = absorbed.back_v
    absorbed.rest(3600.0)
    # Charge is kept: V0*share*C over C + 0.1 mF + share*C (arithmetic).
    assert absorbed.back_v == pytest.approx(35.0 * SHARE * 10e-3 / (10e-3 + 100e-6 + SHARE * 10e-3), rel=1e-3)
    assert 0.7 * absorbed.back_v < after_a_minute_v < absorbed.back_v


def test_a_bleeder_holds_it_down_and_takes_it_away() -> None:
    bled, free = charged(10e-3, 2200.0), charged(10e-3)
    for absorbed in (bled, free):
        absorbed.rest(60.0)
    assert 0.1 < bled.back_v < 0.7 * free.back_v
    bled.rest(600.0)
    assert bled.back_v < 0.01
    bled.rest(6000.0)
    assert bled.back_v == 0.0


def test_slices_make_no_difference() -> None:
    whole, sliced = charged(10e-3, 2200.0), charged(10e-3, 2200.0)
    whole.rest(60.0)
    for _ in range(60):
        sliced.rest(1.0)
    assert sliced.back_v == pytest.approx(whole.back_v, rel=1e-9)


def test_it_takes_time_to_soak_up() -> None:
    absorbed = Absorption(10e-3, 0.0, math.inf)
    absorbed.follow(35.0, LAG_S)
    assert absorbed.slow_v == pytest.approx(35.0 * -math.expm1(-1.0))


def test_without_a_reservoir_nothing_comes_back() -> None:
    absorbed = charged(0.0)
    absorbed.rest(60.0)
    assert absorbed.back_v == 0.0
