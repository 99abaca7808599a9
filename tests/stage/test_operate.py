from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from benchkit.circuit.devices import saturation_current_at
from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design, parse_design, target_drop_v
from benchkit.stage.draws import draw, nominal, seeds, take
from benchkit.stage.operate import loading_ratios, solve_units
from tests.stage.designs import BREADBOARD, TERN, breadboard, changed, changed_text, tern


def full(**changes: Any) -> Condition:
    """A condition at the Tern's full rails."""
    return Condition(**({"positive_v": 35.0, "negative_v": -35.0} | changes))


def ten(**changes: Any) -> Condition:
    """A condition at the breadboard's full rails."""
    return Condition(**({"positive_v": 10.0, "negative_v": -10.0} | changes))


def test_bench_figure_of_two_equal_arms() -> None:
    """A figure known from practice, no source: equal 4.7 kohm arms, 1 kohm feeds, about +-2.5 V, gain about 150.

    The divider current is a little over ten times the base current; the feeds' drops agree within 1 %, the arms' differ
    by roughly 8 %, and the difference is the base current.
    """
    text = changed_text(
        BREADBOARD,
        ('upper = "910 ohm 1 %"', 'upper = "4.7 kohm 1 %"'),
        ('lower = "820 ohm 1 %"', 'lower = "4.7 kohm 1 %"'),
        ("BF = 180, NF = 1.0, VAF = 90, IKF = 0.2, ISE = 2e-14", "BF = 150, NF = 1.0, VAF = 90, IKF = 0.2, ISE = 0"),
    )
    text = text[: text.index("[spreader.trimmer]")] + text[text.index("[output]") :]
    design = parse_design(text)
    condition = Condition(positive_v=2.5, negative_v=-2.5)
    solved = solve_units(design, nominal(design), condition, loading="none")
    reading = {name: float(value[0]) for name, value in solved.points.items()}
    assert reading["feed.upper"] == pytest.approx(reading["feed.lower"], rel=0.01)
    base_a = float(solved.solution.transistor("spreader.transistor").ib_a[0])
    upper_a, lower_a = reading["spread.upper"] / 4700, reading["spread.lower"] / 4700
    assert 10.0 < lower_a / base_a < 15.0
    mean = 0.5 * (reading["spread.upper"] + reading["spread.lower"])
    assert (reading["spread.upper"] - reading["spread.lower"]) / mean == pytest.approx(0.08, abs=0.01)
    assert upper_a - lower_a == pytest.approx(base_a, rel=1e-4)


def _published_spreader(gain: float, milliamps: float) -> float:
    """Spread (V) of a spreader alone: IS 1e-14 at 25 degC, 1 kohm below, 3.3 kohm above."""
    at_27 = 1e-14 / float(saturation_current_at(298.15, 1.0))
    small = f"parameters = {{ IS = {at_27!r}, BF = {gain!r} }}\nspread = {{}}\n"
    text = changed_text(
        BREADBOARD,
        ('upper = "1 kohm 0.1 %"', f'upper = "{milliamps} mA"'),
        ('lower = "1 kohm 0.1 %"', 'lower = "servo"'),
        ('upper = "910 ohm 1 %"', 'upper = "3.3 kohm"'),
        ('lower = "820 ohm 1 %"', 'lower = "1 kohm"'),
        ('emitter_resistor = "4.7 ohm 1 %"', 'emitter_resistor = "1 kohm"'),
    )
    text = text[: text.index("[spreader.trimmer]")] + text[text.index("[output]") :]
    head = text[: text.index("[device.npn-small]")]
    devices = f'[device.npn-small]\npolarity = "npn"\n{small}'
    for name, polarity in (("npn-medium", "npn"), ("pnp-medium", "pnp")):
        devices += f'[device.{name}]\npolarity = "{polarity}"\nparameters = {{ IS = 1e-25, BF = 1e6 }}\n'
    design = parse_design(head + devices)
    solved = solve_units(design, nominal(design), ten(), loading="none")
    assert solved.converged.all()
    return float(solved.points["spread"][0])


@pytest.mark.parametrize(
    ("gain", "milliamps", "spread"),
    [(1e9, 8.0, 3.0178263), (200.0, 8.0, 3.1371001), (100.0, 8.0, 3.2551945), (1e9, 9.0, 3.0319691)],
)
def test_spreader_by_arithmetic(gain: float, milliamps: float, spread: float) -> None:
    """Arithmetic of an exponential junction and Kirchhoff's laws, IS 1e-14 at 25 degC, arms of 1 and 3.3 kohm."""
    assert _published_spreader(gain, milliamps) == pytest.approx(spread, abs=20e-6)


@pytest.mark.parametrize("when", ["cold", "warm"])
@pytest.mark.parametrize(
    "changes",
    [
        (),
        (('arm = "lower"', 'arm = "upper"'), ('upper = "2.0 kohm 1 %"', 'upper = "1.8 kohm 1 %"'),
         ('lower = "560 ohm 1 %"', 'lower = "820 ohm 1 %"')),
        (('arm = "lower"', 'arm = "between"'), ('upper = "2.0 kohm 1 %"', 'upper = "1.8 kohm 1 %"'),
         ('lower = "560 ohm 1 %"', 'lower = "470 ohm 1 %"')),
    ],
    ids=["lower", "upper", "between"],
)  # fmt: skip
def test_trim_inverted(when: str, changes: tuple[tuple[str, str], ...]) -> None:
    """The trimmer position that the unknown conductance gives, set as a position, gives the target."""
    design = changed(TERN, *changes)
    parameters = draw(design, 20, seeds("unit", 1))
    found = solve_units(
        design, parameters, full(trimmer="target", when=when), loading="none"
    )  # fmt: skip
    assert found.converged.all()
    assert found.in_reach.all()
    assert found.points["emitter.pair.1"] / 2.0 == pytest.approx(target_drop_v(design), rel=1e-6)
    assert found.position is not None
    fixed = solve_units(
        design, parameters, full(trimmer=0.5, when=when), position=found.position, loading="none"
    )  # fmt: skip
    assert fixed.points["emitter.pair.1"] / 2.0 == pytest.approx(target_drop_v(design), rel=1e-3)
    assert 0.1 < float(np.median(found.position)) < 0.9


def test_more_travel_is_more_bias_in_every_arm() -> None:
    for arm in ("lower", "upper", "between"):
        design = changed(TERN, ('arm = "lower"', f'arm = "{arm}"'))
        spread = [
            float(solve_units(design, nominal(design), full(limit_a=0.05, trimmer=at)).points["spread"][0])
            for at in (0.0, 0.3)
        ]
        assert spread[1] > spread[0], arm


def test_least_and_most_are_the_ends_of_the_travel() -> None:
    for word, travel in (("least", 0.0), ("most", 1.0)):
        by_word = solve_units(breadboard(), nominal(breadboard()), ten(trimmer=word))
        by_number = solve_units(breadboard(), nominal(breadboard()), ten(trimmer=travel))
        assert by_word.points["spread"] == pytest.approx(by_number.points["spread"], abs=1e-9)


def test_target_share_scales_the_drop() -> None:
    quarter = solve_units(tern(), nominal(tern()), full(trimmer="target", target_share=0.25), loading="none")
    assert quarter.points["emitter.pair.1"][0] == pytest.approx(0.25 * 0.044, rel=1e-6)


def test_out_of_reach_is_flagged_and_clipped() -> None:
    parameters = {key: np.broadcast_to(value, 2) for key, value in nominal(tern()).items()}
    parameters["spreader.lower"] = np.array([560.0, 5600.0])
    solved = solve_units(tern(), parameters, full(limit_a=1.0, trimmer="target"), loading="none")
    assert solved.in_reach.tolist() == [True, False]
    assert solved.position is not None
    assert solved.unclipped is not None
    assert solved.position[1] == 1.0
    assert solved.unclipped[1] > 1.0
    assert solved.points["emitter.upper.1"][1] < 0.001


def test_no_trimmer() -> None:
    text = TERN.read_text(encoding="utf-8")
    text = text[: text.index("[spreader.trimmer]")] + text[text.index("[output]") :]
    design = parse_design(text.replace('lower = "560 ohm 1 %"', 'lower = "820 ohm 1 %"'))
    for trimmer in ("target", "unknown", "least"):
        solved = solve_units(design, nominal(design), full(trimmer=trimmer))
        assert solved.position is None
        assert solved.in_reach.all()
        assert solved.converged.all()


def test_one_unit_alone_or_among_others() -> None:
    """A unit's readings don't depend on the company that it is solved in."""
    parameters = draw(tern(), 40, seeds("unit", 4))
    condition = full(trimmer="target", when="warm")
    together = solve_units(tern(), parameters, condition, loading="none")
    for index in (0, 17, 39):
        alone = solve_units(tern(), take(parameters, np.array([index])), condition, loading="none")
        for name, value in alone.points.items():
            assert value[0] == pytest.approx(together.points[name][index], rel=2e-5, abs=2e-6), name


def test_servo_rests_at_offset_and_does_not_regulate_below_works_from() -> None:
    parameters = draw(tern(), 200, seeds("unit", 5))
    works = solve_units(tern(), parameters, Condition(positive_v=8.0, negative_v=-8.0, trimmer="least"))
    assert works.converged.all()
    assert works.points["output"] == pytest.approx(parameters["output.offset"], abs=20e-6)
    below = solve_units(tern(), parameters, Condition(positive_v=7.0, negative_v=-7.0, trimmer="least", limit_a=0.05))
    assert below.converged.all()
    assert np.ptp(below.points["output"]) > 5.0


def test_rail_currents_are_positive_when_the_unit_draws() -> None:
    solved = solve_units(tern(), nominal(tern()), full(trimmer="least"), loading="none")
    upper, lower = solved.points["rail+.current"][0], solved.points["rail-.current"][0]
    # 8 mA of feed, 6 mA of front end, 3.5 mA of bleeder, the drivers' current through 220 ohm; rests of the outputs.
    drivers = solved.points["driver.resistor"][0] / 220.0
    outputs = solved.points["emitter.upper.1"][0] / 0.22
    assert upper == pytest.approx(0.008 + 0.006 + 0.0035 + drivers + outputs, rel=0.01)
    assert lower == pytest.approx(upper, rel=0.01)


def test_rails_per_unit() -> None:
    parameters = {key: np.broadcast_to(value, 3) for key, value in nominal(breadboard()).items()}
    volts = np.array([4.0, 6.0, 10.0])
    solved = solve_units(breadboard(), parameters, ten(trimmer=0.5), rails_v=(volts, -volts))
    assert solved.points["rail+"] == pytest.approx(volts, abs=1e-3)
    alone = solve_units(breadboard(), nominal(breadboard()), Condition(positive_v=6, negative_v=-6, trimmer=0.5))
    assert solved.points["spread"][1] == pytest.approx(alone.points["spread"][0], rel=1e-6)


def test_meter_takes_a_little_away() -> None:
    """Across an arm that its transistor holds at a voltage, 10 Mohm takes R/(R + 10 Mohm); across a VBE nothing."""
    ratios = loading_ratios(tern(), full(trimmer=0.5))
    assert 1.0 - ratios["spread.upper"] == pytest.approx(2000.0 / 10e6, rel=0.02)
    assert abs(1.0 - ratios["spread.lower"]) < 2e-6
    assert all(0.99 < ratio <= 1.0 for ratio in ratios.values())


def test_loading_of_the_nominal_unit_stands_for_every_unit() -> None:
    parameters = draw(breadboard(), 12, seeds("unit", 6))
    condition = ten(trimmer="unknown")
    each = solve_units(breadboard(), parameters, condition, loading="each")
    shared = solve_units(breadboard(), parameters, condition, loading="nominal")
    for name, value in each.points.items():
        assert shared.points[name] == pytest.approx(value, rel=2e-5, abs=2e-6), name


def test_loading_of_each_matters_where_a_fault_leaves_a_node_floating() -> None:
    from benchkit.stage.faults import Fault

    design = changed(TERN, ('arm = "lower"', 'arm = "between"'))
    condition = Condition(positive_v=15.0, negative_v=-15.0, limit_a=0.05, trimmer=0.3)
    fault = Fault("spreader.trimmer", "wiper open")
    bare, loaded = (solve_units(design, nominal(design), condition, fault, loading=how) for how in ("none", "each"))
    assert loaded.points["spread.upper"][0] != pytest.approx(bare.points["spread.upper"][0], rel=0.05)


def test_collector_resistor_flattens_the_spread() -> None:
    """With the feed's current up by 10 %, a spread taken behind the resistor moves less."""

    def moved(design: Design) -> float:
        readings = []
        for factor in (1.0, 1.1):
            parameters = dict(nominal(design))
            parameters["feed.upper.amps"] = parameters["feed.upper.amps"] * factor
            condition = full(trimmer="least")
            readings.append(float(solve_units(design, parameters, condition, loading="none").points["spread"][0]))
        return readings[1] - readings[0]

    plain = tern()
    flat = changed(TERN, ('bypass = "10 uF"', 'bypass = "10 uF"\ncollector_resistor = "18 ohm 5 %"'))
    assert moved(plain) > 0.0
    assert abs(moved(flat)) < 0.2 * moved(plain)


def test_two_pairs_share_the_current() -> None:
    design = changed(TERN, ("pairs = 1", "pairs = 2"))
    one = solve_units(tern(), nominal(tern()), full(trimmer="target"), loading="none")
    two = solve_units(design, nominal(design), full(trimmer="target"), loading="none")
    assert two.points["emitter.upper.2"][0] == pytest.approx(two.points["emitter.upper.1"][0], rel=1e-9)
    extra = two.points["rail+.current"][0] - one.points["rail+.current"][0]
    assert extra == pytest.approx(0.1, rel=0.03)
