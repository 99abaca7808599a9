"""Readings and their slopes against the forward model and differences of full solves."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design
from benchkit.stage.draws import Array
from benchkit.stage.faults import HEALTHY, Fault, faults_of
from benchkit.stage.forcing import Held
from benchkit.stage.latent import AMBIENT, RAIL_SHARE, STATED_AMBIENT_K, UNSTATED_AMBIENT_K, Coordinates
from benchkit.stage.operate import solve_units
from benchkit.stage.readouts import Powered
from tests.stage.catalogue import few
from tests.stage.designs import breadboard, tern
from tests.stage.unit_readings import check_slopes, drawn_z, fault_of

RAILS = ("rail+ 0", "rail- 0")
COLD = Condition(positive_v=15.0, negative_v=-15.0, limit_a=0.5, trimmer="least", ambient_c=25.0)
WARM = Condition(positive_v=35.0, negative_v=-35.0, limit_a=2.0, trimmer=0.5, when="warm")
POINTS = (
    "output", "spread", "spread.lower", "rail+.current", "driver.resistor", "emitter.upper.1", "emitter.lower.1",
    "output.upper.1.vbe", "rail+",
)  # fmt: skip
FAULTS = (
    "healthy", "spreader.lower: short", "driver.upper: leaky", "stopper.upper.1: ten times high",
    "output.lower.1: base-emitter short", "emitter.upper.1: open", "spreader.upper: ten times low",
)  # fmt: skip


def _faults(design: Design, names: tuple[str, ...] = FAULTS) -> list[Fault]:
    return [fault_of(name, design) for name in names]


def _forward(
    design: Design, condition: Condition, coordinates: Coordinates, z: Array, faults: list[Fault]
) -> dict[str, Array]:
    """The same units through the forward model, with the meter at every point of every unit."""
    stated = condition.ambient_c
    ambient_k = UNSTATED_AMBIENT_K if stated is None else STATED_AMBIENT_K
    solved = solve_units(
        design, coordinates.parameters(z), condition, faults,
        rails_v=(
            condition.positive_v * (1.0 + RAIL_SHARE * coordinates.row(z, RAILS[0])),
            condition.negative_v * (1.0 + RAIL_SHARE * coordinates.row(z, RAILS[1])),
        ),
        room_c=(design.thermal.ambient_c if stated is None else stated) + ambient_k * coordinates.row(z, AMBIENT),
        loading="each",
    )  # fmt: skip
    assert solved.converged.all()
    return solved.points


@pytest.mark.parametrize("condition", [COLD, WARM], ids=["cold", "warm"])
def test_readings_are_those_of_the_forward_model(condition: Condition) -> None:
    design = tern()
    coordinates = Coordinates(design, RAILS)
    faults = _faults(design, FAULTS if condition is COLD else FAULTS[:4])
    z = drawn_z(coordinates, len(faults))
    found = Powered(design, coordinates, condition, POINTS, "", RAILS).at(z, faults, effort="full")
    assert found.good.all()
    expected = _forward(design, condition, coordinates, z, faults)
    for column, point in enumerate(POINTS):
        np.testing.assert_allclose(found.f[:, column], expected[point], rtol=2e-5, atol=5e-7, err_msg=point)


def test_the_voltmeter_is_in_the_reading() -> None:
    """Over an open emitter resistor the meter itself carries the current: its 10 Mohm is the reading's."""
    design = breadboard()
    condition = Condition(positive_v=10.0, negative_v=-10.0, limit_a=0.5, trimmer="least", ambient_c=25.0)
    coordinates = Coordinates(design, RAILS)
    faults = _faults(design, ("emitter.upper.1: open", "output.lower.1: missing", "spreader.transistor: open"))
    z = drawn_z(coordinates, len(faults), 8)
    points = ("emitter.upper.1", "output.lower.1.vbe", "spread", "output")
    found = Powered(design, coordinates, condition, points, "", RAILS).at(z, faults, effort="full")
    assert found.good.all()
    expected = _forward(design, condition, coordinates, z, faults)
    bare = solve_units(
        design, coordinates.parameters(z), condition, faults, loading="none",
    ).points  # fmt: skip
    assert any(np.abs(bare[point] / expected[point] - 1.0).max() > 0.05 for point in points)
    for column, point in enumerate(points):
        np.testing.assert_allclose(found.f[:, column], expected[point], rtol=1e-3, atol=2e-6, err_msg=point)


@pytest.mark.parametrize("condition", [COLD, replace(WARM, trimmer="least")], ids=["cold", "warm"])
def test_slopes_are_differences_of_full_solves(condition: Condition) -> None:
    """Warm with the loop from temperature to power and back closed."""
    design = tern()
    coordinates = Coordinates(design, RAILS)
    faults = _faults(design, FAULTS if condition is COLD else FAULTS[:4])
    points = POINTS if condition is COLD else (*POINTS, "heatsink")
    readout = Powered(design, coordinates, condition, points, "", RAILS)
    z = 0.5 * drawn_z(coordinates, len(faults), 5)
    found = readout.at(z, faults, effort="full")
    assert found.good.all()
    step = 0.02
    names = ("spreader.upper", "spreader.transistor.IS", "driver.upper.IS", "feed.upper.amps", AMBIENT, "rail+ 0")
    for name in names if condition is COLD else names[:4:3]:
        number = coordinates.index[name]
        moved = z.copy()
        moved[number] += step
        up = readout.at(moved, faults, found.solution, "full")
        moved[number] -= 2.0 * step
        check_slopes(found, up, readout.at(moved, faults, found.solution, "full"), number, step, 5e-3)


def test_closing_the_thermal_loop_matters() -> None:
    """The warm drop moves more with the spread than at fixed temperatures: that is what the loop adds."""
    design = tern()
    coordinates = Coordinates(design, RAILS)
    readout = Powered(design, coordinates, WARM, ("emitter.upper.1", "heatsink"), "", RAILS)
    z = np.zeros((len(coordinates), 1))
    number = coordinates.index["spreader.upper"]
    warm = readout.at(z, [HEALTHY], effort="full")
    temperature = solve_units(design, coordinates.parameters(z), WARM).temperatures_c
    ends = []
    for step in (0.01, -0.01):
        z[number] = step
        ends.append(solve_units(design, coordinates.parameters(z), WARM, temperatures_c=temperature).points)
    fixed = float((ends[0]["emitter.upper.1"] - ends[1]["emitter.upper.1"])[0] / 0.02)
    assert abs(warm.slope[0, 0, number]) > 1.02 * abs(fixed)
    assert warm.slope[0, 1, number] > 0.0


def test_a_start_gives_the_same_readings() -> None:
    design = breadboard()
    condition = Condition(positive_v=10.0, negative_v=-10.0, limit_a=0.5, trimmer="least")
    coordinates = Coordinates(design, RAILS)
    faults = _faults(design, ("healthy", "spreader.lower: short", "emitter.upper.1: open"))
    readout = Powered(design, coordinates, condition, ("spread", "output", "emitter.upper.1"), "", RAILS)
    z = drawn_z(coordinates, len(faults))
    first = readout.at(z, faults)
    again = readout.at(z, faults, readout.at(0.5 * z, faults).solution)
    np.testing.assert_allclose(again.f, first.f, rtol=1e-7, atol=1e-8)
    np.testing.assert_allclose(again.slope, first.slope, rtol=1e-4, atol=1e-6)


def test_each_unit_has_the_rails_that_it_is_held_at() -> None:
    """As if they had been set so, in a stage without a servo; what is not held stands at its setting."""
    design = breadboard()
    condition = Condition(positive_v=10.0, negative_v=-10.0, limit_a=25.0, trimmer="least", ambient_c=25.0)
    coordinates = Coordinates(design, RAILS)
    points = ("rail+", "rail-", "rail+.current", "output", "spread", "emitter.upper.1")
    names = ("healthy", "spreader.lower: short", "output.lower.1: missing", "emitter.upper.1: open")
    faults = _faults(design, (*names, "output.upper.1: leaky"))
    z = drawn_z(coordinates, len(faults))
    rails_v = np.array([(1.9, -0.7), (1.3, -6.0), (0.002, -10.0), (4.0, np.nan), (np.nan, -3.0)])
    readout = Powered(design, coordinates, Held(**vars(condition), held=(True, True)), points, "", RAILS)
    found = readout.at(z, faults, effort="full", rails_v=rails_v)
    assert found.good.all()
    for unit, fault in enumerate(faults):
        plus_v, minus_v = np.where(np.isnan(rails_v[unit]), (10.0, -10.0), rails_v[unit]).tolist()
        own = Powered(
            design, coordinates, replace(condition, positive_v=plus_v, negative_v=minus_v), points, "", RAILS
        ).at(z[:, [unit]], [fault], effort="full")
        np.testing.assert_allclose(found.f[unit], own.f[0], rtol=1e-5, atol=1e-8, err_msg=str(fault))
        np.testing.assert_allclose(found.slope[unit], own.slope[0], rtol=1e-3, atol=1e-5, err_msg=str(fault))
    assert np.ptp(found.f[:, 0]) > 5.0


@pytest.mark.parametrize("rails_v", [7.0, 9.0, 16.0])
def test_a_hypothesis_on_an_edge_takes_no_other_with_it(rails_v: float) -> None:
    """Among all faults some unit's warm balance has a singular matrix at these rails."""
    design = few()["double source servo lower tied 2 stopper"]
    condition = Condition(positive_v=rails_v, negative_v=-rails_v, limit_a=0.06, trimmer="least", when="warm")
    coordinates = Coordinates(design, RAILS)
    readout = Powered(design, coordinates, condition, ("output", "rail+.current"), "", RAILS)
    faults = [HEALTHY, *faults_of(design)]
    found = readout.at(np.zeros((len(coordinates), len(faults))), faults)
    alone = readout.at(np.zeros((len(coordinates), 1)), [HEALTHY])
    assert found.good[0]
    assert found.f[0] == pytest.approx(alone.f[0], rel=1e-6)
    assert found.good.mean() > 0.9
