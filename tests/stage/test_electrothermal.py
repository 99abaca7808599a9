"""Warm states: balances of heat and power, gains against brute force, and the criterion on a stage of ideal devices."""

from __future__ import annotations

import numpy as np
import pytest

from benchkit.circuit.netlist import Resistor, Servo, Source, Supply, Transistor
from benchkit.circuit.solution import Solution
from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design, parse_design
from benchkit.stage.draws import draw, nominal, seeds
from benchkit.stage.electrothermal import Electrothermal, is_stable, warm_state
from benchkit.stage.heat import heat, heat_nodes
from benchkit.stage.loop_gain import one_device_gain, sum_gain
from benchkit.stage.operate import solve_units
from tests.stage.catalogue import few
from tests.stage.designs import BREADBOARD, TERN, breadboard, changed, changed_text, tern


def _condition(design: Design, trimmer: str | float = "target") -> Condition:
    if design.spreader.trimmer is None:
        trimmer = "unknown"
    rails = design.rails
    return Condition(positive_v=rails.positive_v, negative_v=rails.negative_v, trimmer=trimmer)  # type: ignore[arg-type]


ALL = {"tern": tern(), "breadboard": breadboard(), **few()}


@pytest.mark.parametrize("name", ALL)
def test_heat_balances(name: str) -> None:
    """Each unit's powers give its temperatures, to a millionth of its largest rise; supplies deliver what is burnt."""
    design = ALL[name]
    parameters = draw(design, 20, seeds("unit", 5))
    state = warm_state(design, parameters, _condition(design))
    assert state.rests.all()
    assert state.balance.max() < 1e-6
    again = heat(design, state.powers_w, design.thermal.ambient_c).temperatures_c
    rise_k = np.max([again[part] - design.thermal.ambient_c for part in state.parts], axis=0)
    for part, celsius in state.temperatures_c.items():
        assert np.abs(again[part] - celsius).max() < 1e-6 * rise_k.min(), part
    assert state.rails_w == pytest.approx(_burnt_w(state.solution, state.transistors_w), rel=1e-6)


def _burnt_w(solution: Solution, transistors_w: np.ndarray) -> np.ndarray:
    """What resistors, sources and servo take, summed element by element, with the transistors on top."""
    total = transistors_w.copy()
    for element in solution.netlist.elements.values():
        if isinstance(element, Resistor):
            volts = solution.between(element.a, element.b)
        elif isinstance(element, (Source, Servo)):
            volts = solution.between(element.from_node, element.to_node)
        else:
            assert isinstance(element, (Supply, Transistor))
            continue
        total = total + volts * solution.current(element.name)
    return total


def test_slopes_are_those_of_finite_differences() -> None:
    design = tern()
    stage = Electrothermal(design, nominal(design), _condition(design), np.asarray(0.5), units=1)
    celsius = np.full((len(stage.nodes.names), 1), 45.0)
    slopes = stage.slopes(stage.at(celsius))
    step_k = 0.02
    for column in range(len(stage.nodes.parts)):
        ends = []
        for sign in (1.0, -1.0):
            moved = celsius.copy()
            moved[column] += sign * step_k
            point = stage.at(moved)
            ends.append((point.powers_w[:, 0], stage.drop_v(point.solution)[0]))
        powers = (ends[0][0] - ends[1][0]) / (2.0 * step_k)
        assert slopes.powers[0, :, column] == pytest.approx(powers, rel=1e-4, abs=1e-8)
        assert slopes.drop[0, column] == pytest.approx((ends[0][1] - ends[1][1]) / (2.0 * step_k), rel=1e-4, abs=1e-10)


def test_the_sum_form_is_the_slope_of_the_sinks_own_balance() -> None:
    """theta*dP/dr by brute force: hold the sink a little warmer, let everything else follow, look at its power."""
    design = tern()
    state = warm_state(design, nominal(design), _condition(design))
    assert state.travel is not None
    rises_k = float(state.heatsink_rise_k[0]) + np.array([-0.1, 0.1])
    stage = Electrothermal(design, nominal(design), _condition(design), state.travel, units=2)
    _, point = stage.held(rises_k)
    assert point.converged.all()
    power_w = point.powers_w[stage.nodes.on_sink].sum(axis=0)
    brute = design.thermal.heatsink_k_per_w * (power_w[1] - power_w[0]) / 0.2
    assert state.gain_sum[0] == pytest.approx(brute, rel=1e-4)
    assert power_w.mean() == pytest.approx(state.output_w[0], rel=1e-5)


def test_held_from_near_is_held_from_nowhere() -> None:
    design = tern()
    state = warm_state(design, nominal(design), _condition(design))
    stage = Electrothermal(design, nominal(design), _condition(design), state.travel, units=4)
    rises_k = np.array([0.0, 20.0, 60.0, 120.0])
    far, far_point = stage.held(rises_k)
    near, near_point = stage.held(rises_k, state)
    assert far_point.converged.all()
    assert near_point.converged.all()
    assert near == pytest.approx(far, abs=1e-4)


IDEAL = (
    ("spreader_tracking = 0.8", "spreader_tracking = 0.0"),
    ('spreader_to_ambient = "200 K/W"\n', ""),
    ('spreader_lag = "10 s"\n', ""),
    ('heatsink = "20 K/W"', 'heatsink = "5 K/W"'),
    ('junction_to_heatsink = "8 K/W"', 'junction_to_heatsink = "2 K/W"'),
    ('emitter_resistor = "4.7 ohm 1 %"', 'emitter_resistor = "0.22 ohm"'),
    ('quiescent_current = "10 mA"', 'quiescent_current = "60 mA"'),
    ('value = "500 ohm 10 %"', 'value = "500 ohm"'),
)


def _ideal() -> Design:
    """A single follower of devices with nothing but a junction, base current next to none, no tracking."""
    lines = []
    for line in changed_text(BREADBOARD, *IDEAL).splitlines():
        if line.startswith("parameters"):
            lines.append("parameters = { IS = 1e-13, BF = 1e7, XTI = 3, EG = 1.11 }")
        elif not line.startswith("spread ="):
            lines.append(line)
    return parse_design("\n".join(lines), "ideal.toml")


def test_ideal_devices_obey_the_published_criterion() -> None:
    """Two ideal devices with fixed bias: theta*V*TC/(VT/I + R_E), theta being theta_jh + 2*theta_sink on a shared sink.

    TC is that of the junction, (VBE - EG - XTI*VT)/T at constant current. What is left of a difference: the spreader is
    no perfect voltage source, and each device's power also falls by what its emitter resistor takes.
    """
    design = _ideal()
    state = warm_state(design, nominal(design), _condition(design))
    assert state.rests[0]
    part = "output.upper.1"
    kelvin = float(state.temperatures_c[part][0]) + 273.15
    thermal_v = 1.380649e-23 * kelvin / 1.602176634e-19
    quiescent_a = float(state.quiescent_a[0])
    vbe_v = float(state.solution.transistor(part).vbe_v[0])
    drift = -(vbe_v - 1.11 - 3.0 * thermal_v) / kelvin
    expected = one_device_gain(2.0 + 2 * 5.0, 10.0, quiescent_a, 0.22, drift, kelvin - 273.15)
    assert 0.1 < expected < 0.6
    assert state.gain[0] == pytest.approx(expected, rel=0.005)


def test_tracking_lowers_every_gain() -> None:
    gains = []
    for share in (0.0, 0.3, 0.7):
        design = changed(TERN, ("spreader_tracking = 0.7", f"spreader_tracking = {share}"))
        state = warm_state(design, nominal(design), _condition(design))
        gains.append((state.gain_sum[0], state.gain[0]))
        assert state.gain_untracked[0] == pytest.approx(gains[0][1], rel=0.02)
    assert gains[0][0] > gains[1][0] > gains[2][0]
    assert gains[0][1] > gains[1][1] > gains[2][1]


def test_a_target_can_be_met_where_nothing_stays() -> None:
    """Trimmed to its target warm, a stage without tracking on a poor sink stands on a balance that it leaves."""
    design = changed(TERN, ("spreader_tracking = 0.7", "spreader_tracking = 0.0"), ('heatsink = "1.2', 'heatsink = "8'))
    condition = Condition(positive_v=35.0, negative_v=-35.0, trimmer="target", when="warm")
    solved = solve_units(design, nominal(design), condition, loading="none")
    assert solved.converged[0]
    assert not is_stable(design, nominal(design), condition, solved)[0]
    state = warm_state(design, nominal(design), condition)
    assert not state.rests[0]
    assert state.gain[0] > 1.0
    assert state.growth_per_s[0] > 0.0


def test_one_device_of_three_can_take_the_others_current() -> None:
    """With pairs side by side the loop sees modes that the sum over the stage doesn't: junctions against each other."""
    text = (
        ("pairs = 1", "pairs = 3"),
        ('emitter_resistor = "0.22 ohm 1 %"', 'emitter_resistor = "0.02 ohm"'),
        ('junction_to_heatsink = "1.5 K/W"', 'junction_to_heatsink = "12 K/W"'),
        ('emitter_drop = "22 mV"', 'emitter_drop = "2.5 mV"'),
    )
    design = changed(TERN, *text)
    state = warm_state(design, nominal(design), _condition(design))
    nodes = heat_nodes(design)
    assert state.gain[0] > 1.0 > sum_gain(nodes, state.slopes)[0]
    assert not state.rests[0]
