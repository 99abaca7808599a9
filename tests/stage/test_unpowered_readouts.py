"""Unpowered readings and their slopes against the forward model and differences of full solves."""

from __future__ import annotations

import numpy as np
import pytest

from benchkit.stage.conditions import Unpowered
from benchkit.stage.faults import Fault
from benchkit.stage.latent import AMBIENT, STATED_AMBIENT_K, Coordinates
from benchkit.stage.unpowered import OVER_RANGE, nominal_range, solve_unpowered
from benchkit.stage.unpowered_readouts import UnpoweredPoints
from tests.stage.designs import tern
from tests.stage.unit_readings import check_slopes, drawn_z, fault_of

OHMS = ("ohm.rails", "ohm.spreader.lower", "ohm.emitter.upper.1", "diode.output.upper.1")
FAULTS = (
    "healthy", "spreader.lower: short", "emitter.upper.1: open", "output.upper.1: base-emitter short",
    "spreader.lower: open",
)  # fmt: skip


@pytest.fixture(scope="module")
def cold_points() -> tuple[UnpoweredPoints, Coordinates, list[Fault]]:
    design = tern()
    coordinates = Coordinates(design)
    faults = [fault_of(name, design) for name in FAULTS]
    return UnpoweredPoints(design, coordinates, "least", 25.0, OHMS), coordinates, faults


def test_unpowered_readings_are_those_of_the_forward_model(
    cold_points: tuple[UnpoweredPoints, Coordinates, list[Fault]],
) -> None:
    readout, coordinates, faults = cold_points
    design = readout.design
    z = drawn_z(coordinates, len(faults), 6)
    found = readout.at(z, faults, effort="full")
    assert found.good.all()
    room_c = 25.0 + STATED_AMBIENT_K * coordinates.row(z, AMBIENT)
    for column, point in enumerate(OHMS):
        condition = Unpowered(point=point, trimmer="least", ambient_c=25.0)
        expected = solve_unpowered(design, coordinates.parameters(z), condition, faults, room_c=room_c).values
        over = found.f[:, column] > readout.most[column]
        assert over.tolist() == np.isinf(expected).tolist(), point
        np.testing.assert_allclose(found.f[~over, column], expected[~over], rtol=1e-6, err_msg=point)
        assert readout.most[column] == OVER_RANGE * nominal_range(design, point, "least").full_scale
    assert (found.f > readout.most).any()


def test_unpowered_slopes_are_differences_of_full_solves(
    cold_points: tuple[UnpoweredPoints, Coordinates, list[Fault]],
) -> None:
    readout, coordinates, faults = cold_points
    z = 0.5 * drawn_z(coordinates, len(faults), 9)
    found = readout.at(z, faults, effort="full")
    step = 0.02
    for name in ("spreader.lower", "emitter.upper.1", "output.upper.1.IS", AMBIENT):
        number = coordinates.index[name]
        moved = z.copy()
        moved[number] += step
        up = readout.at(moved, faults, found.solution, "full")
        moved[number] -= 2.0 * step
        check_slopes(found, up, readout.at(moved, faults, found.solution, "full"), number, step, 1e-2)


def test_slopes_that_are_known_are_kept_near_and_renewed_far_away(
    cold_points: tuple[UnpoweredPoints, Coordinates, list[Fault]],
) -> None:
    readout, coordinates, faults = cold_points
    z = np.zeros((len(coordinates), len(faults)))
    known = readout.at(z, faults)
    marked = np.full_like(known.slope, 7.0)
    moved = z.copy()
    moved[0, 0] += 3.0
    found = readout.near(moved, faults, known.solution, "borrow", marked, z)
    assert (found.slope[1:] == 7.0).all()
    fresh = readout.at(moved, faults)
    np.testing.assert_allclose(found.slope[0], fresh.slope[0], rtol=1e-4, atol=1e-4)
    np.testing.assert_allclose(found.f, fresh.f, rtol=1e-7, atol=1e-9)
