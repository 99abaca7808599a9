"""Rails against closed solutions: constant-current charging, exponential discharge, a limit that holds a load down."""

from __future__ import annotations

import math
from collections.abc import Callable

import pytest

from benchkit.rehearsal.rails import EMPTY_V, Channel, Pair, Rails


class Load:
    """Each rail draws what a function of its own voltage says."""

    def __init__(self, law: Callable[[float], float]) -> None:
        self.law = law
        self.asked = 0

    def drawn(self, volts: Pair) -> Pair:
        self.asked += 1
        return self.law(volts[0]), self.law(volts[1])

    def balance(self, volts: Pair, limit_a: float) -> Pair:
        return self._one(volts[0], limit_a), self._one(volts[1], limit_a)

    def _one(self, volts: float, limit_a: float) -> float:
        if self.law(volts) <= limit_a:
            return volts
        low, high = 0.0, volts
        for _ in range(80):
            middle = (low + high) / 2.0
            low, high = (middle, high) if self.law(middle) < limit_a else (low, middle)
        return low


def run(rails: Rails, load: Load, seconds: float) -> float:
    """Let time pass; return how much was left when the rails settled."""
    rails.go_on()
    while seconds > 0.0 and not rails.begin(load):
        seconds -= rails.step(load, seconds)
    return seconds


def both(volts: float, limit_a: float, on: bool = True) -> tuple[Channel, Channel]:
    return Channel(volts, limit_a, on), Channel(volts, limit_a, on)


def test_charging_takes_c_times_v_over_i() -> None:
    # t = C*V/I (arithmetic): 10 mF to 35 V at 50 mA takes 7 s.
    rails, load = Rails(10e-3), Load(lambda _: 0.0)
    rails.disturb(both(35.0, 0.05))
    assert 20.0 - run(rails, load, 20.0) == pytest.approx(7.0, rel=1e-3)
    assert rails.volts == pytest.approx((35.0, 35.0))
    assert load.asked < 40


def test_charging_against_a_resistor() -> None:
    # v = I*R*(1 - exp(-t/RC)) while the limit delivers (arithmetic); 2.2 kohm, 50 mA, 10 mF.
    rails, load = Rails(10e-3), Load(lambda volts: volts / 2200.0)
    rails.disturb(both(35.0, 0.05))
    run(rails, load, 3.0)
    assert rails.volts[0] == pytest.approx(0.05 * 2200.0 * -math.expm1(-3.0 / 22.0), rel=2e-3)
    assert rails.delivered == (0.05, 0.05)


def test_discharging_through_a_resistor() -> None:
    # t = R*C*ln(V0/V) (arithmetic): 35 V to 5 V through 2.2 kohm and 1 mF: 4.281 s.
    rails, load = Rails(1e-3, (35.0, 35.0)), Load(lambda volts: volts / 2200.0)
    rails.disturb(both(35.0, 0.05, on=False))
    expected_s = 2.2 * math.log(35.0 / 5.0)
    run(rails, load, expected_s)
    assert rails.volts[0] == pytest.approx(5.0, rel=0.03)
    assert rails.delivered == (0.0, 0.0)
    run(rails, load, 60.0)
    assert rails.settled
    assert rails.volts == (0.0, 0.0)


@pytest.mark.parametrize("capacitance_f", [1e-6, 100e-6, 10e-3])
def test_a_load_beyond_the_limit_is_held_down(capacitance_f: float) -> None:
    rails, load = Rails(capacitance_f), Load(lambda volts: volts / 10.0)
    rails.disturb(both(15.0, 0.05))
    run(rails, load, 10.0)
    assert rails.settled
    assert rails.volts == pytest.approx((0.5, 0.5), abs=0.02)
    assert max(rails.highest_v) < 0.6


def test_what_the_capacitors_hold_no_limit_contains() -> None:
    # A short comes across a charged rail: it falls at once, though the supply delivers no more than its limit.
    rails, load = Rails(10e-3, (35.0, 35.0)), Load(lambda volts: volts / 0.05)
    rails.disturb(both(35.0, 0.05))
    left_s = run(rails, load, 1.0)
    assert 1.0 - left_s < 0.05
    assert max(rails.volts) < 0.03


def test_a_rail_above_its_setting_falls_only_by_its_load() -> None:
    rails, load = Rails(1e-3, (35.0, 35.0)), Load(lambda volts: 0.01)
    rails.disturb(both(20.0, 0.05))
    run(rails, load, 0.5)
    assert rails.volts[0] == pytest.approx(35.0 - 0.01 * 0.5 / 1e-3, rel=1e-6)
    run(rails, load, 5.0)
    assert rails.settled
    assert rails.volts == pytest.approx((20.0, 20.0))


def test_slices_of_time_make_no_difference() -> None:
    def law(volts: float) -> float:
        return volts / 2200.0

    whole, sliced = Rails(10e-3), Rails(10e-3)
    whole.disturb(both(35.0, 0.05))
    sliced.disturb(both(35.0, 0.05))
    run(whole, Load(law), 2.0)
    for _ in range(40):
        run(sliced, Load(law), 0.05)
    assert sliced.volts == pytest.approx(whole.volts, rel=2e-3)


def test_no_step_comes_near_the_limit_of_steps_for_a_slow_tail() -> None:
    rails, load = Rails(10e-3, (1.0, 1.0)), Load(lambda volts: 1e-9)
    rails.disturb(both(0.0, 0.0, on=False))
    for _ in range(1000):
        run(rails, load, 0.1)
    assert not rails.settled
    assert rails.volts[0] == pytest.approx(1.0 - 1e-9 * 100.0 / 10e-3, rel=1e-9)
    assert rails.volts[0] > EMPTY_V


def test_off_with_empty_capacitors_is_settled_at_once() -> None:
    rails = Rails(1e-3, (0.005, 0.004))
    rails.disturb(both(35.0, 0.05, on=False))
    assert rails.settled
    assert rails.volts == (0.0, 0.0)


def test_one_rail_alone() -> None:
    rails, load = Rails(100e-6), Load(lambda volts: volts / 1000.0)
    rails.disturb((Channel(15.0, 0.05, True), Channel(15.0, 0.05, False)))
    run(rails, load, 10.0)
    assert rails.volts[0] == pytest.approx(15.0)
    assert rails.volts[1] == 0.0
