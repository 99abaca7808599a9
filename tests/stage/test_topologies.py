"""What each topology is, told by Kirchhoff's laws at its points; and a trimmer's arms and wirings."""

from __future__ import annotations

import numpy as np
import pytest

from benchkit.circuit.equations import Batch
from benchkit.circuit.newton import LinearSolver
from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design
from benchkit.stage.draws import draw, nominal, seeds
from benchkit.stage.faults import Fault, faults_of
from benchkit.stage.operate import Solved, solve_units
from benchkit.stage.points import points_of
from benchkit.stage.reach import full_rails, least_regulating_rails, open_wiper_lowers_bias
from benchkit.stage.topologies import build, pair_nodes
from tests.stage.catalogue import TOPOLOGIES, Wanted, catalogue, few
from tests.stage.catalogue import text as catalogue_text

TRIPLE = "triple source servo upper series 1 stopper"
FEEDBACK = "feedback source servo lower series 1 stopper"
ONE_SUPPLY = "double resistor servo upper tied 1 stopper one supply"


def _at_target(design: Design) -> Solved:
    return solve_units(design, nominal(design), full_rails(design, when="cold"), loading="none")


def _one(solved: Solved, point: str) -> float:
    return float(solved.points[point][0])


def test_triple_follower_adds_up() -> None:
    design = few()[TRIPLE]
    solved = _at_target(design)
    upper_v = sum(_one(solved, f"{part}.vbe") for part in ("predriver.upper", "driver.upper", "output.upper.1"))
    lower_v = sum(_one(solved, f"{part}.vbe") for part in ("predriver.lower", "driver.lower", "output.lower.1"))
    stoppers_v = _one(solved, "stopper.upper.1") + _one(solved, "stopper.lower.1")
    assert _one(solved, "spread") == pytest.approx(upper_v + lower_v + stoppers_v + _one(solved, "emitter.pair.1"))
    # The pre-driver's resistor spans two junctions a side.
    inner_v = sum(_one(solved, f"{part}.vbe") for part in ("driver.upper", "output.upper.1", "driver.lower",
                                                           "output.lower.1"))  # fmt: skip
    assert _one(solved, "predriver.resistor") == pytest.approx(inner_v + stoppers_v + _one(solved, "emitter.pair.1"))


def test_feedback_pair() -> None:
    design = few()[FEEDBACK]
    solved = _at_target(design)
    values, circuit = nominal(design), solved.solution
    for side in ("upper", "lower"):
        driver, output = circuit.transistor(f"driver.{side}"), circuit.transistor(f"output.{side}.1")
        # The driver's collector current goes through its resistor and into the output device's base ...
        resistor_a = _one(solved, f"driver.resistor.{side}") / float(values[f"driver.resistor.{side}"])
        assert driver.ic_a[0] == pytest.approx(resistor_a + output.ib_a[0], rel=1e-6)
        # ... its emitter current and the output device's collector current through the emitter resistor.
        emitter_a = _one(solved, f"emitter.{side}.1") / float(values[f"emitter.{side}.1"])
        assert abs(driver.ie_a[0]) + output.ic_a[0] == pytest.approx(emitter_a, rel=1e-6)
        assert output.ic_a[0] > 10.0 * driver.ic_a[0]
        # The base-emitter resistor lies on the near side of the stopper.
        junction_v = _one(solved, f"output.{side}.1.vbe") + _one(solved, f"stopper.{side}.1")
        assert _one(solved, f"driver.resistor.{side}") == pytest.approx(junction_v)
        assert 0.4 < _one(solved, f"output.{side}.1.vbe") < 0.8
        assert _one(solved, f"stopper.{side}.1") > 0.0
    two_drivers_v = _one(solved, "driver.upper.vbe") + _one(solved, "driver.lower.vbe")
    assert _one(solved, "spread") == pytest.approx(two_drivers_v + _one(solved, "emitter.pair.1"))
    assert _one(solved, "emitter.pair.1") == pytest.approx(0.040)


def test_feedback_pairs_points_say_collector() -> None:
    points = {point.name: point for point in points_of(few()[FEEDBACK])}
    assert points["emitter.upper.1"].red == "collector of output.upper.1"
    assert points["ohm.emitter.lower.1"].black == "collector of output.lower.1"
    assert points["stopper.upper.1"].red == "stopper.upper.1, end towards the base"  # a pnp: current out of its base
    assert points["stopper.lower.1"].red == "stopper.lower.1, end towards the driver"
    assert points["driver.resistor.upper"].red == "driver.resistor.upper, end towards rail+"
    assert pair_nodes(few()[FEEDBACK], 1) == ("driver.upper.e", "driver.lower.e")


def test_single_supply() -> None:
    design = few()[ONE_SUPPLY]
    names = {point.name for point in points_of(design)}
    assert not {name for name in names if name.startswith("rail-")}
    assert "ohm.rail-" not in names
    assert {"ohm.rails", "ohm.rail+", "rail+", "rail+.current"} <= names
    assert "rail-" not in build(design).netlist.nodes()
    assert build(design).between["ohm.rails"] == ("rail+", "0")
    solved = _at_target(design)
    assert _one(solved, "output") == pytest.approx(0.5 * design.rails.positive_v, abs=1e-3)
    assert set(solved.points) == {p.name for p in points_of(design) if p.powered and p.modelled} - {"rail+.drop"}
    lowest = least_regulating_rails(design)
    assert 6.0 <= lowest[0] < design.rails.positive_v
    assert lowest[1] == 0.0
    half = Condition(positive_v=0.5 * design.rails.positive_v, negative_v=0.0, trimmer="least")
    drawn = solve_units(design, draw(design, 50, seeds("unit", 2)), half, loading="none")
    off_v = drawn.points["output"] - 0.25 * design.rails.positive_v
    assert np.all(np.abs(off_v) < design.output.offset_v + 1e-4)


@pytest.mark.parametrize("topology", TOPOLOGIES)
def test_every_powered_voltage_is_positive_in_a_healthy_stage(topology: str) -> None:
    """Signs: drops from rail+ to rail-, junctions and stoppers when they conduct."""
    for name, design in catalogue().items():
        if design.output.topology != topology or design.output.pairs != 1:
            continue
        solved = _at_target(design)
        for point, value in solved.points.items():
            if point not in ("output", "rail-", "heatsink"):
                assert value[0] > 0.0, (name, point)


def test_pairs_share_alike() -> None:
    design = few()["triple resistor servo between series 3 stopper to output"]
    solved = _at_target(design)
    for number in (2, 3):
        assert _one(solved, f"emitter.upper.{number}") == pytest.approx(_one(solved, "emitter.upper.1"))


def _with(arm: str, wiring: str) -> Design:
    return catalogue_design(Wanted(topology=TOPOLOGIES[1], feed="source servo", trimmer=arm, wiring=wiring))


def catalogue_design(wanted: Wanted) -> Design:
    from benchkit.stage.design import parse_design

    return parse_design(catalogue_text(wanted))


@pytest.mark.parametrize("arm", ["lower", "upper", "between"])
@pytest.mark.parametrize("wiring", ["series", "tied"])
def test_more_travel_is_more_bias_and_the_target_is_where_the_search_says(arm: str, wiring: str) -> None:
    design = _with(arm, wiring)
    condition = full_rails(design, when="cold")
    found = solve_units(design, nominal(design), condition, loading="none")
    assert found.unclipped is not None
    travel = float(found.unclipped[0])
    again = solve_units(design, nominal(design), condition, position=np.array([travel - 0.05, travel, travel + 0.05]),
                        loading="none")  # fmt: skip
    drops = again.points["emitter.pair.1"] / 2.0
    assert drops[1] == pytest.approx(0.020, rel=1e-5)
    assert drops[0] < drops[1] < drops[2]


@pytest.mark.parametrize(
    ("arm", "wiring", "wiper_open_is"),
    [
        ("lower", "series", "off"), ("lower", "tied", "least"), ("upper", "series", "most or above"),
        ("upper", "tied", "most"), ("between", "tied", "least"),
    ],
)  # fmt: skip
def test_what_an_open_wiper_leaves(arm: str, wiring: str, wiper_open_is: str) -> None:
    design = _with(arm, wiring)
    condition = Condition(positive_v=12.0, negative_v=-12.0, limit_a=0.05, trimmer=0.5)

    def spread_v(position: float, fault: Fault | None = None) -> float:
        solved = solve_units(design, nominal(design), condition, fault, position=position, loading="none")
        assert solved.converged.all()
        return float(solved.points["spread"][0])

    open_v = spread_v(0.5, Fault("spreader.trimmer", "wiper open"))
    least_v, most_v = spread_v(0.0), spread_v(1.0)
    if wiper_open_is == "off":
        assert open_v < least_v - 0.3
    elif wiper_open_is == "least":
        # The end resistance on the wiper's own way is all that differs.
        assert open_v == pytest.approx(least_v, abs=5e-3)
    elif wiper_open_is == "most":
        assert open_v == pytest.approx(most_v, abs=5e-3)
    else:
        assert open_v > most_v - 5e-3
    assert open_wiper_lowers_bias(design) == (wiper_open_is in ("off", "least"))


def test_a_stuck_servo_of_a_resistor_fed_single_supply_takes_a_share_of_what_the_feed_sends() -> None:
    design = few()[ONE_SUPPLY]
    condition = full_rails(design, trimmer="least", when="cold", limit_a=0.05)
    solved = solve_units(design, nominal(design), condition, Fault("feed.lower", "stuck low"), loading="none")
    sent_a = (design.rails.positive_v / 2.0) / design.feed.upper.value.value
    assert solved.solution.current("feed.lower.stuck")[0] == pytest.approx(0.3 * sent_a, rel=1e-3)


@pytest.mark.parametrize("name", list(few()))
def test_every_fault_has_a_solution_at_a_limited_supply(name: str) -> None:
    """Two units here; 200 of each by ``tests/benchmarks/fault_table.py``."""
    design, units = few()[name], 2
    rails = design.rails
    condition = Condition(
        positive_v=0.4 * rails.positive_v, negative_v=0.4 * rails.negative_v, limit_a=0.05, trimmer="least"
    )
    faults = [fault for fault in faults_of(design) for _ in range(units)]
    drawn = draw(design, units, seeds("unit", 5))
    many = {key: v if v.ndim == 0 else np.tile(v, len(faults) // units) for key, v in drawn.items()}
    solved = solve_units(design, many, condition, faults, loading="none")
    assert solved.converged.all(), {str(faults[k]) for k in np.flatnonzero(~solved.converged)}


@pytest.mark.parametrize("name", [FEEDBACK, "double source servo lower tied 2 stopper"])
def test_another_step_moves_no_node(name: str) -> None:
    """Also where picoamperes decide about millivolts, and a limited rail hangs on 1 uS."""
    design = few()[name]
    rails, faults = design.rails, list(faults_of(design))
    condition = Condition(
        positive_v=0.4 * rails.positive_v, negative_v=0.4 * rails.negative_v, limit_a=0.05, trimmer="least"
    )
    solution = solve_units(design, nominal(design), condition, faults, loading="none").solution
    batch = Batch(solution.plan, solution.values, solution.units)
    linear = batch.evaluate(solution.x, None)
    left_a = solution.plan.sum_currents(linear.currents, solution.x, batch.volts)
    step = LinearSolver(solution.plan.structure).solve(batch.matrix(linear, None), -left_a)
    longest_v = np.abs(step[: solution.plan.nodes]).max(axis=0)
    assert longest_v.max() < 0.2e-3, {str(faults[k]): longest_v[k] for k in np.flatnonzero(longest_v > 0.2e-3)}
