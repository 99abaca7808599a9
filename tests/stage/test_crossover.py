"""Gain and output resistance against other means; Oliver's figures by formula and by the model."""

from __future__ import annotations

import re

import numpy as np
import pytest

from benchkit.circuit.devices import thermal_voltage
from benchkit.stage.crossover import (
    Setting,
    least_ripple_drop_v,
    ohmic_ohm,
    oliver_current_a,
    oliver_drop_v,
    region,
    setting_at,
    sweeps,
)
from benchkit.stage.design import Design, parse_design, target_drop_v
from tests.stage.catalogue import few
from tests.stage.designs import BREADBOARD, TERN, changed, tern

OLIVER = [(0.22, 116.78), (0.1, 256.93), (0.33, 77.86)]
"""Emitter resistor (ohm) and optimum (mA) at 25 degC: B. M. Oliver, Hewlett-Packard Journal, 1971 (second-hand)."""


LOSSY = (0.22, 0.1, 5.0, 100.0, 69.44)
"""R_E, re, rb (ohm), hFE and the optimum (mA): the same source (second-hand)."""


def ideal_pair(emitter_ohm: float, re_ohm: float = 0.0, rb_ohm: float = 0.0, hfe: float = 1e6) -> Design:
    """Two devices that are alike but for their polarity, with nothing but an exponential and ohmic resistances."""
    text = BREADBOARD.read_text(encoding="utf-8")
    text = text.replace('emitter_resistor = "4.7 ohm 1 %"', f'emitter_resistor = "{emitter_ohm} ohm"')
    parameters = f"IS = 1e-12, BF = {hfe}, RE = {re_ohm}, RB = {rb_ohm}, EG = 1.11, XTI = 3"
    text, count = re.subn(
        r'(\[device\.[np]+-medium\]\npolarity = "[np]+"\n)parameters = .*\nspread = .*\n',
        rf"\1parameters = {{ {parameters} }}\n", text,
    )  # fmt: skip
    assert count == 2
    return parse_design(text, "ideal pair")


@pytest.mark.parametrize(("ohm", "milliamps"), OLIVER)
def test_oliver_by_formula(ohm: float, milliamps: float) -> None:
    assert oliver_current_a(298.15, ohm) * 1e3 == pytest.approx(milliamps, abs=0.01)
    assert oliver_drop_v(ideal_pair(ohm), 25.0) / ohm * 1e3 == pytest.approx(milliamps, abs=0.01)


def test_oliver_by_formula_with_ohmic_resistances() -> None:
    ohm, re_ohm, rb_ohm, hfe, milliamps = LOSSY
    assert oliver_current_a(298.15, ohm, re_ohm, rb_ohm, hfe) * 1e3 == pytest.approx(milliamps, abs=0.005)
    design = ideal_pair(ohm, re_ohm, rb_ohm, hfe)
    assert ohmic_ohm(design) == pytest.approx(0.15)
    assert oliver_drop_v(design, 25.0) / ohm * 1e3 == pytest.approx(milliamps, abs=0.005)


@pytest.mark.parametrize(("ohm", "milliamps"), OLIVER)
def test_oliver_by_least_ripple_of_the_model(ohm: float, milliamps: float) -> None:
    """Within 2.5 % in a region of 100 currents, and within 0.3 % of what the limits of a region make of it."""
    design = ideal_pair(ohm)
    for currents, within in ((100.0, 0.025), (30.0, 0.07)):
        found_a = least_ripple_drop_v(design, setting_at(design, 25.0), None, currents * milliamps * 1e-3) / ohm
        assert found_a * 1e3 == pytest.approx(milliamps, rel=within)
        assert found_a * 1e3 == pytest.approx(milliamps / (1.0 + 2.0 / currents), rel=3e-3)


def test_oliver_by_least_ripple_with_ohmic_resistances() -> None:
    """Within 3 %: with a finite gain the other half's base current counts too."""
    ohm, re_ohm, rb_ohm, hfe, milliamps = LOSSY
    design = ideal_pair(ohm, re_ohm, rb_ohm, hfe)
    found_a = least_ripple_drop_v(design, setting_at(design, 25.0), None, 100.0 * milliamps * 1e-3) / ohm
    assert found_a * 1e3 == pytest.approx(milliamps, rel=0.03)


def test_the_least_ripple_is_the_least() -> None:
    design, setting = tern(), setting_at(tern(), 40.0)
    best_v = least_ripple_drop_v(design, setting, 8.0)
    ripples = [one.ripple for one in sweeps(design, (0.9 * best_v, best_v, 1.1 * best_v), 8.0, setting)]
    assert ripples[1] < min(ripples[0], ripples[2])


def test_resistance_of_an_ideal_pair() -> None:
    """Circuit theory: (R + VT/I)/2 at rest, R + VT/I where one half has it all."""
    ohm = 0.22
    design = ideal_pair(ohm)
    vt = float(thermal_voltage(298.15))
    (found,) = sweeps(design, (0.01,), 1.0, setting_at(design, 25.0), 5.0)
    current_a = 0.01 / ohm
    assert found.current_a == pytest.approx(current_a, rel=1e-6)
    gain, output_ohm = found.at_rest
    assert output_ohm == pytest.approx((ohm + vt / current_a) / 2.0, rel=1e-4)
    assert found.output_ohm[-1] == pytest.approx(ohm + vt / found.amps[-1], rel=1e-3)
    assert found.output_ohm[0] == pytest.approx(ohm - vt / found.amps[0], rel=1e-3)
    assert gain == pytest.approx(1.0 / (1.0 + output_ohm), rel=1e-4)


def test_gain_and_resistance_are_differences() -> None:
    """The gain is the slope of output over drive; two loads at one drive give the resistance."""
    setting = setting_at(tern(), 35.0)
    (found,) = sweeps(tern(), (0.022,), 8.0, setting, 1.0, each_side=60)
    output_v = found.amps * 8.0
    near = np.abs(found.amps) < 0.9
    # The drive follows from gain: integrate it and compare with the even share of the sweep's own drive.
    drive_v = np.concatenate([[0.0], np.cumsum(np.diff(output_v) / ((found.gain[1:] + found.gain[:-1]) / 2.0))])
    side = np.geomspace(1e-3, 1.0, 60)
    shares = np.concatenate([-side[::-1], [0.0], side])
    scale = 1.0 * (8.0 + tern().output.emitter_resistor.value)
    expected_v = (shares - shares[0]) * scale
    assert np.allclose(drive_v[near], expected_v[near], rtol=2e-3)
    open_gain = found.gain * (1.0 + found.output_ohm / 8.0)
    assert np.all((open_gain > 0.97) & (open_gain < 1.001))


def test_a_feedback_pair_wants_less_than_a_follower() -> None:
    """Its loop divides VT/I: published optima of such pairs are a few millivolts (common practice)."""
    design = next(d for d in few().values() if d.output.topology == "complementary-feedback-pair")
    found_v = least_ripple_drop_v(design, setting_at(design, 25.0))
    assert 0.5e-3 < found_v < 8e-3
    text = design.text.replace('emitter_drop = "20 mV"', "optimum = true")
    assert target_drop_v(parse_design(text)) == pytest.approx(found_v, rel=1e-9)


def test_pairs_side_by_side() -> None:
    """Two pairs have half the resistance of one, at the same drop."""
    one = changed(TERN, ('base_stopper = "4.7 ohm 5 %"', ""))
    two = parse_design(one.text.replace("pairs = 1", "pairs = 2"))
    single, double = (sweeps(d, (0.022,), 8.0, setting_at(d, 25.0))[0] for d in (one, two))
    assert double.current_a == pytest.approx(2.0 * single.current_a, rel=1e-6)
    assert 0.45 < double.at_rest[1] / single.at_rest[1] < 0.62


def test_region_stays_within_the_rails() -> None:
    full = setting_at(tern(), 25.0)
    low = Setting(positive_v=10.0, negative_v=-10.0, temperatures_c=full.temperatures_c)
    assert region(tern(), 8.0, low) == pytest.approx(0.7 * 10.0 / 8.0)
    assert region(tern(), 1.0, full) == pytest.approx(30.0 * float(thermal_voltage(298.15)) / 0.22)
