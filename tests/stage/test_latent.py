"""Units as points in standard normal space."""

from __future__ import annotations

from statistics import NormalDist

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchkit.stage.design import Design
from benchkit.stage.draws import draw, nominal, seeds, spreads
from benchkit.stage.latent import AMBIENT, Coordinates, share_below, tiled
from tests.stage.designs import breadboard, tern

DESIGNS = pytest.mark.parametrize("design", [breadboard(), tern()], ids=lambda one: str(one.name))


@given(st.floats(-8.0, 8.0))
def test_share_below_is_the_normal_distribution(z: float) -> None:
    assert float(share_below(np.array(z))) == pytest.approx(NormalDist().cdf(z), abs=2e-6)


@DESIGNS
def test_the_middle_is_the_nominal_unit(design: Design) -> None:
    coordinates = Coordinates(design, ("place",))
    made = coordinates.parameters(np.zeros((len(coordinates), 2)))
    expected = nominal(design)
    assert made.keys() == expected.keys()
    for key, value in expected.items():
        np.testing.assert_allclose(made[key], value, rtol=1e-12, atol=1e-15, err_msg=key)


@DESIGNS
def test_every_value_that_varies_has_a_coordinate_of_its_own(design: Design) -> None:
    coordinates = Coordinates(design, ("a", "b"))
    varying = [key for key, _, (kind, _) in spreads(design) if kind != "exact"]
    assert coordinates.names == (*varying, AMBIENT, "a", "b")
    assert len(set(coordinates.names)) == len(coordinates)
    count = len(coordinates)
    z = np.concatenate([np.eye(count), np.zeros((count, 1))], axis=1)
    made = coordinates.parameters(z)
    for number, name in enumerate(coordinates.names):
        moved = {key for key, value in made.items() if value.size > 1 and value[number] != value[-1]}
        assert moved == ({name} if name in varying else set())


@DESIGNS
def test_standard_normal_coordinates_give_the_distribution_of_the_draws(design: Design) -> None:
    """Quantiles of 4,000 units each way agree within what so many can say (five standard errors at the median)."""
    units = 4000
    coordinates = Coordinates(design)
    mine = coordinates.parameters(np.random.default_rng(4).standard_normal((len(coordinates), units)))
    drawn = draw(design, units, seeds("unit", 4))
    for key, value, (kind, size) in spreads(design):
        if kind == "exact":
            assert mine[key].size == 1
            continue
        if kind == "uniform":
            assert np.abs(mine[key] / value - 1.0).max() <= size
        width = float(np.ptp(np.quantile(drawn[key], [0.05, 0.95])))
        for q in (0.1, 0.5, 0.9):
            assert float(np.quantile(mine[key], q)) == pytest.approx(
                float(np.quantile(drawn[key], q)), abs=0.08 * width
            )


def test_a_place_and_its_slope() -> None:
    coordinates = Coordinates(breadboard(), ("place",))
    z = np.zeros((len(coordinates), 5))
    z[-1] = [-2.0, -0.5, 0.0, 1.0, 3.0]
    share, slope = coordinates.place_and_slope(z, "place")
    np.testing.assert_array_equal(share, coordinates.place(z, "place"))
    assert (np.diff(share) > 0.0).all()
    assert share[2] == pytest.approx(0.5)
    step = 0.05
    up, down = z.copy(), z.copy()
    up[-1] += step
    down[-1] -= step
    found = (coordinates.place(up, "place") - coordinates.place(down, "place")) / (2.0 * step)
    np.testing.assert_allclose(slope, found, rtol=5e-3)
    np.testing.assert_array_equal(coordinates.row(z, "place"), z[-1])


def test_tiled_moves_one_coordinate_at_a_time() -> None:
    z = np.arange(6.0).reshape(3, 2)
    found = tiled(z, 0.5, unmoved=1).reshape(3, 5, 2)
    expected = np.zeros((3, 5))
    expected[:, :3] = 0.5 * np.eye(3)
    np.testing.assert_array_equal(found - z[:, None, :], np.repeat(expected[:, :, None], 2, axis=2))
    assert z[0, 0] == 0.0
