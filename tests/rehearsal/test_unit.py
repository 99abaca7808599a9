"""The simulated unit: parts of its own, operating points that are kept as long as they hold, and what breaks."""

from __future__ import annotations

import numpy as np
import pytest

from benchkit.rehearsal.strain import JUNCTION_MARGIN_K
from benchkit.rehearsal.unit import COARSE_K, SimulatedUnit, powers_w
from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design, parse_design
from benchkit.stage.draws import draw, seeds
from benchkit.stage.faults import Fault
from benchkit.stage.operate import solve_units
from tests.rehearsal.helpers import TERN

RAILS = (15.0, 15.0)


def test_parts_are_drawn_for_this_unit_alone(tern: Design) -> None:
    unit, again, other = (SimulatedUnit(tern, seed) for seed in (1, 1, 2))
    limits = draw(tern, 1, seeds("limits", 1))
    assert unit.parameters["spreader.upper"] == again.parameters["spreader.upper"]
    assert unit.travel == again.travel
    assert unit.parameters["spreader.upper"] != other.parameters["spreader.upper"]
    toleranced = [key for key, value in limits.items() if value.size == 1 and unit.parameters[key].ndim == 1]
    assert len(toleranced) > 20
    assert not any(limits[key] == unit.parameters[key] for key in toleranced)
    assert abs(float(unit.parameters["spreader.upper"][0]) / 2000.0 - 1.0) <= 0.01


def test_the_screw_stops_at_its_ends(tern: Design) -> None:
    unit = SimulatedUnit(tern, 1)
    unit.set_travel(0.0)
    assert unit.turn(-3.0) == 0.0
    assert unit.turn(3.0) == pytest.approx(0.25)  # 12 turns from end to end
    assert unit.turn(100.0) == 1.0


def test_more_travel_is_more_bias(tern: Design) -> None:
    unit = SimulatedUnit(tern, 1)
    currents = []
    for travel in (0.0, 0.2, 0.4, 0.6):
        unit.set_travel(travel)
        currents.append(unit.quiescent_a(unit.operate(RAILS, None)))
    assert currents == sorted(currents)
    assert currents[-1] > 10.0 * currents[0]


def test_operating_points_are_kept_while_nothing_has_changed(tern: Design) -> None:
    unit = SimulatedUnit(tern, 1)
    solved = unit.operate(RAILS, 0.1)
    assert unit.operate(RAILS, 0.1) is solved
    assert unit.operate(RAILS, None) is not solved
    assert unit.operate((15.0, 14.9), 0.1) is not solved
    unit.turn(0.1)
    assert unit.operate(RAILS, 0.1) is not solved


def test_a_kept_point_goes_when_the_junctions_have_moved(tern: Design) -> None:
    unit = SimulatedUnit(tern, 1)
    unit.set_travel(0.5)
    solved = unit.operate(RAILS, None)
    unit.warmth.step(powers_w(solved), 0.003)
    assert unit.operate(RAILS, None, within_k=COARSE_K) is solved
    assert unit.operate(RAILS, None) is not solved


def test_warming_up_moves_the_drop_as_much_as_the_model_says(tern: Design) -> None:
    unit = SimulatedUnit(tern, 1)
    unit.set_travel(0.45)
    cold = unit.operate((35.0, 35.0), None)
    for _ in range(4000):
        solved = unit.operate((35.0, 35.0), None, within_k=COARSE_K)
        unit.heat(solved, unit.longest_step_s(solved))
    warm = unit.operate((35.0, 35.0), None)
    condition = Condition(positive_v=35.0, negative_v=-35.0, trimmer=0.45, when="warm")
    balance = solve_units(tern, unit.parameters, condition, loading="none")
    assert bool(balance.converged[0])
    assert warm.points["emitter.upper.1"][0] == pytest.approx(balance.points["emitter.upper.1"][0], rel=2e-3)
    assert abs(warm.points["emitter.upper.1"][0] / cold.points["emitter.upper.1"][0] - 1.0) > 0.05
    assert unit.broken == ()


def test_too_hot_a_junction_fuses_and_stays_fused() -> None:
    # Rated at 60 degC, so that the full bias gets there in seconds.
    design = parse_design(TERN.replace('junction = "150 degC"', 'junction = "60 degC"'))
    unit = SimulatedUnit(design, 1)
    unit.set_travel(1.0)
    seconds = 0.0
    while not unit.broken and seconds < 60.0:
        solved = unit.operate((35.0, 35.0), None, within_k=COARSE_K)
        step_s = unit.longest_step_s(solved)
        unit.heat(solved, step_s)
        seconds += step_s
    assert seconds > 0.5
    assert unit.broken[0].startswith("output.")
    assert unit.strain.hot_spots_c(unit.warmth.temperatures_c())[unit.broken[0]] > 60.0 + JUNCTION_MARGIN_K
    assert unit.burnt[0].fault == "collector-emitter short"
    assert unit.burnt[0].at_s == pytest.approx(seconds)
    unit.set_travel(0.0)
    after = unit.operate(RAILS, 0.1)
    # Collector to emitter is a short now: the output hangs at a rail, or a rail at the output.
    assert abs(after.solution.between(*_ends(unit.broken[0]))[0]) < 0.05


def _ends(part: str) -> tuple[str, str]:
    return ("rail+" if ".upper." in part else "rail-"), f"{part}.e"


def test_an_overloaded_emitter_resistor_opens() -> None:
    design = parse_design(TERN.replace('power = "3 W"', 'power = "30 mW"'))
    unit = SimulatedUnit(design, 1)
    unit.set_travel(1.0)
    for _ in range(40):
        unit.heat(unit.operate((35.0, 35.0), None, within_k=1e3), 0.5)
    # Both carry the same current: one opens, or both in the same half second.
    assert unit.broken
    assert set(unit.broken) <= {"emitter.upper.1", "emitter.lower.1"}
    assert unit.unpowered(f"ohm.{unit.broken[0]}", None) > 1e3


@pytest.mark.parametrize(
    ("arm", "wiring", "reads"),
    [("lower", "series", np.inf), ("lower", "tied", 1060.0), ("upper", "series", np.inf), ("upper", "tied", 2500.0)],
)
def test_a_burnt_track_opens_its_wiper(arm: str, wiring: str, reads: float) -> None:
    text = TERN.replace('arm = "lower"', f'arm = "{arm}"').replace('wiring = "series"', f'wiring = "{wiring}"')
    design = parse_design(text)
    unit = SimulatedUnit(design, 1)
    unit.set_travel(0.5)
    before = unit.unpowered(f"ohm.spreader.{arm}", None)
    for burnt in unit.strain.step(unit.warmth.temperatures_c(), dict.fromkeys(unit.warmth.parts, 0.0),
                                  {"spreader.trimmer": 20.0}, 5.0, 1.0):  # fmt: skip
        unit._break(burnt)
    assert unit.broken == ("spreader.trimmer",)
    after = unit.unpowered(f"ohm.spreader.{arm}", None)
    if np.isinf(reads):
        # The arm is open, and the meter finds what lies beside it: junctions, or nothing.
        assert after > 1.3 * before
    else:
        assert after == pytest.approx(reads, rel=0.12)  # track 10 %, resistors 1 %
    solved = unit.operate(RAILS, 0.1)
    assert bool(solved.converged[0])


def test_a_leaky_device_that_burns_is_a_short(tern: Design) -> None:
    unit = SimulatedUnit(tern, 1, Fault("output.upper.1", "leaky"))
    hot = dict.fromkeys(unit.warmth.parts, 0.0) | {"output.upper.1": 5000.0}
    for burnt in unit.strain.step(unit.warmth.temperatures_c(), hot, {}, 0.2, 1.0):
        unit._break(burnt)
    assert unit.broken == ("output.upper.1",)
    solved = unit.operate(RAILS, 0.1)
    assert abs(solved.solution.between("rail+", "output.upper.1.e")[0]) < 0.05


def test_a_healthy_unit_at_its_target_overloads_nothing(tern: Design) -> None:
    unit = SimulatedUnit(tern, 1)
    unit.set_travel(0.45)
    for _ in range(400):
        solved = unit.operate((35.0, 35.0), None, within_k=COARSE_K)
        unit.heat(solved, unit.longest_step_s(solved))
    assert unit.burnt == ()
    assert unit.strain.overloaded == {}


def test_the_servo_wakes_up_as_the_design_says(tern: Design) -> None:
    settles_s = tern.feed.settles_after_s
    assert settles_s == 3.0
    unit = SimulatedUnit(tern, 1)
    rest_v = unit.operate(RAILS, None).points["output"][0]
    unit.heat(unit.operate((5.0, 5.0), None), 1.0)
    off_v = []
    for _ in range(7):
        solved = unit.operate(RAILS, None)
        unit.heat(solved, 0.5)
        off_v.append(float(unit.operate(RAILS, None).points["output"][0] - rest_v))
    assert off_v[0] == pytest.approx(0.5, rel=0.05)
    assert off_v == sorted(off_v, reverse=True)
    assert abs(off_v[-1]) < 1e-3, "three seconds after the rails were there"
    unit.heat_off(1.0)
    unit.heat(unit.operate(RAILS, None), 0.01)
    assert float(unit.operate(RAILS, None).points["output"][0] - rest_v) > 0.4, "and again after every time off"


def test_unpowered_resistances(tern: Design) -> None:
    unit = SimulatedUnit(tern, 1)
    emitter_ohm = float(unit.parameters["emitter.upper.1"][0])
    assert unit.unpowered("ohm.emitter.upper.1", None) == pytest.approx(emitter_ohm, rel=1e-4)
    unit.set_travel(0.0)
    low = unit.unpowered("ohm.spreader.lower", None)
    unit.set_travel(1.0)
    assert unit.unpowered("ohm.spreader.lower", None) < low - 300.0  # the trimmer's 500 ohm are out of the lower arm
    assert unit.unpowered("ohm.heatsink.output.upper.1", None) == np.inf
    assert 0.4 < unit.unpowered("diode.output.upper.1", None) < 0.65


@pytest.mark.parametrize(
    ("part", "fault", "point", "reads"),
    [
        ("emitter.upper.1", "open", "ohm.emitter.upper.1", np.inf),
        ("output.upper.1", "base-emitter short", "diode.output.upper.1", 0.0),
        ("output.upper.1", "collector to heatsink", "ohm.heatsink.output.upper.1", 0.05),
        ("spreader.upper", "ten times low", "ohm.spreader.upper", 200.0),
    ],
)
def test_planted_faults_show_unpowered(tern: Design, part: str, fault: str, point: str, reads: float) -> None:
    unit = SimulatedUnit(tern, 1, Fault(part, fault))
    value = unit.unpowered(point, None)
    healthy = SimulatedUnit(tern, 1).unpowered(point, None)
    assert value == pytest.approx(reads, rel=0.05, abs=0.01) or (np.isinf(reads) and value > 1e6)
    assert value != pytest.approx(healthy, rel=0.05)
