"""The laws are checked by stepping the differential equation dv/dt = -v/(R·C) and adding up v²/R, a second way."""

from __future__ import annotations

import math

import pytest

from benchkit.stage.stored import HAZARDOUS_V, LARGE_J, Stored, fall_s, read_tau_s, stored
from tests.stage.designs import BREADBOARD, TERN, breadboard, changed, tern


def rails(volts: float = 35.0, *, farad: float = 10e-3, bleed: float | None = 2200.0, reservoir: bool = True) -> Stored:
    return Stored(
        positive_v=volts, negative_v=-volts, farad=farad, bleed_ohm=bleed, bleed_fraction=0.05, reservoir=reservoir
    )


def stepped(from_v: float, to_v: float, ohm: float, farad: float) -> tuple[float, float]:
    """Time (s) and energy (J) of a discharge, by Heun's steps of a ten-thousandth of the time constant."""
    volts, seconds, joule = from_v, 0.0, 0.0
    step_s = ohm * farad / 1e4
    while volts > to_v:
        slope = -volts / (ohm * farad)
        after = volts + step_s * 0.5 * (slope - (volts + step_s * slope) / (ohm * farad))
        joule += step_s * 0.5 * (volts**2 + after**2) / ohm
        volts, seconds = after, seconds + step_s
    return seconds, joule


@pytest.mark.parametrize(("volts", "farad", "bleed"), [(35.0, 10e-3, 2200.0), (63.0, 4.7e-3, 4700.0), (10, 1e-4, 1e4)])
def test_time_and_energy_are_those_of_the_differential_equation(volts: float, farad: float, bleed: float) -> None:
    one = rails(volts, farad=farad, bleed=bleed)
    seconds, joule = stepped(volts, 1.0, bleed, farad)
    assert one.fall_s(volts, 1.0) == pytest.approx(seconds, rel=1e-3)
    assert one.joule / 2 - 0.5 * farad == pytest.approx(joule, rel=1e-3)  # all but what 1 V still holds
    assert one.bleed_peak_w == pytest.approx(volts**2 / bleed)


def test_a_known_case_in_numbers() -> None:
    """10 mF at 35 V: 0.5 · 0.01 · 1225 = 6.125 J a rail; 2.2 kohm · 10 mF = 22 s; 22 · ln 35 = 78.2 s."""
    one = rails()
    assert one.joule == pytest.approx(12.25)
    assert one.tau_s == pytest.approx(22.0)
    assert one.fall_s(35.0, 1.0) == pytest.approx(78.2, abs=0.05)
    assert one.slowest_tau_s == pytest.approx(22.0 * 1.05 * 1.2)


def test_from_rail_to_rail_counts_both() -> None:
    one = rails()
    assert one.span_v == 70.0
    in_series = 0.5 * (one.farad / 2) * one.span_v**2
    assert one.joule == pytest.approx(in_series)
    assert one.helper is not None
    assert one.helper.volts == 70.0
    assert one.helper.ohm == 1000.0  # 70² / 5 W = 980 ohm
    assert one.helper.peak_w == pytest.approx(4.9)
    assert one.helper.rating_w == 5.0
    assert one.helped_s(35.0, 1.0) == pytest.approx(10.0 * math.log(35.0))
    assert one.helped_s(70.0, 2.0, rails=2) == pytest.approx(5.0 * math.log(35.0))


@pytest.mark.parametrize("volts", [2.5, 5.0, 10.0, 24.0, 35.0, 63.0, 90.0])
def test_the_resistor_for_a_hand_is_never_overloaded(volts: float) -> None:
    helper = rails(volts).helper
    assert helper is not None
    assert helper.peak_w <= 5.0 * (1 + 1e-9)
    assert helper.peak_w <= helper.rating_w * (1 + 1e-9)
    assert (2 * volts) ** 2 / helper.ohm == pytest.approx(helper.peak_w)
    smaller = helper.ohm / 1.6
    assert (2 * volts) ** 2 / smaller > 5.0, "the next smaller of the series would do"


def test_where_a_second_look_is_asked_for() -> None:
    assert rails().second_look
    assert not rails(farad=100e-6, reservoir=False).second_look  # 0.12 J, 70 V, no reservoir
    assert rails(farad=470e-6).second_look  # 0.58 J, but 70 V and a reservoir
    assert not rails(24.0, farad=470e-6).second_look
    edge = math.sqrt(LARGE_J / 10e-3)
    assert rails(edge * 1.001).second_look
    assert not rails(edge * 0.999).second_look
    assert HAZARDOUS_V == 2 * 30.0
    assert not rails(30.0, farad=470e-6).second_look


def test_nothing_stored_and_no_bleed_resistor() -> None:
    empty = rails(farad=0.0)
    assert (empty.joule, empty.tau_s, empty.helper, empty.fall_s(35.0, 1.0)) == (0.0, 0.0, None, 0.0)
    assert empty.helped_s(35.0, 1.0) == 0.0
    alone = rails(bleed=None)
    assert (alone.tau_s, alone.slowest_tau_s, alone.fall_s(35.0, 1.0), alone.bleed_peak_w) == (None, None, None, None)


def test_designs() -> None:
    one = stored(tern(), 35.0, -35.0)
    assert (one.farad, one.bleed_ohm, one.bleed_fraction, one.reservoir) == (100e-6, 10e3, 0.05, False)
    assert not one.second_look
    large = changed(TERN, ('local_capacitors = "100 uF"', 'local_capacitors = "100 uF"\nreservoir = "10 mF"'))
    assert stored(large, 35.0, -35.0).farad == pytest.approx(10.1e-3)
    assert stored(large, 35.0, -35.0).second_look
    assert stored(breadboard(), 10.0, -10.0).bleed_ohm is None
    bare = changed(BREADBOARD, ('local_capacitors = "100 uF"\n', ""))
    assert stored(bare, 10.0, -10.0).joule == 0.0


def test_the_time_constant_that_is_read() -> None:
    for tau_s in (0.5, 22.0, 300.0):
        later = 0.3 * tau_s
        last = (later + 7.0, -35.0 * math.exp(-0.3))
        assert read_tau_s((7.0, -35.0), last) == pytest.approx(tau_s)
    assert read_tau_s((0.0, 5.0), (1.0, 5.0)) is None
    assert read_tau_s((0.0, 5.0), (1.0, 5.1)) is None
    assert read_tau_s((1.0, 5.0), (1.0, 4.0)) is None
    assert read_tau_s((0.0, 5.0), (1.0, 0.0)) is None


def test_a_fall_that_is_over() -> None:
    assert fall_s(22.0, 0.5, 1.0) == 0.0
    assert fall_s(22.0, -35.0, 1.0) == pytest.approx(22.0 * math.log(35.0))
    assert fall_s(None, 35.0, 1.0) is None
