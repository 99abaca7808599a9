"""Balances of made-up temperature laws whose answers are known."""

from __future__ import annotations

import numpy as np
import pytest

from benchkit.stage.balance import HOTTEST_C, Array, Index, Mask, settle


def _law(loop: Array, push_c: Array) -> object:
    """g(T) = push + loop @ T for each unit, with a solution everywhere."""

    def following(which: Index, at: Array) -> tuple[Array, Mask]:
        return push_c[:, which] + np.einsum("uij,ju->iu", loop[which], at), np.ones(len(which), np.bool_)

    return following


def test_linear_laws_come_to_rest() -> None:
    rng = np.random.default_rng(1)
    units, names = 300, 6
    loop = rng.normal(0.0, 0.12, (units, names, names))
    loop[:, 0] -= 0.3
    push_c = rng.uniform(25.0, 60.0, (names, units))
    following = _law(loop, push_c)
    began = np.full((names, units), 25.0)
    goes, solved = following(np.arange(units), began)  # type: ignore[operator]
    at, at_rest = settle(began, goes, solved, following)  # type: ignore[arg-type]
    expected = np.linalg.solve(np.eye(names) - loop, push_c.T[:, :, None])[:, :, 0].T
    stable = np.linalg.eigvals(loop).real.max(axis=1) < 0.9
    inside = (expected < 300.0).all(axis=0) & (expected > -50.0).all(axis=0)
    assert np.count_nonzero(stable & inside) > 250
    assert at_rest[stable & inside].all()
    assert at[:, stable & inside] == pytest.approx(expected[:, stable & inside], abs=1e-5)


@pytest.mark.parametrize(("gain", "rests"), [(0.5, True), (0.9, True), (1.1, False), (3.0, False)])
def test_no_rest_from_a_gain_of_one_on(gain: float, rests: bool) -> None:
    """g(T) = 30 + gain*(T - 25): from 25 degC upwards there is no balance above a gain of one."""

    def following(which: Index, at: Array) -> tuple[Array, Mask]:
        return 30.0 + gain * (at - 25.0), np.ones(len(which), np.bool_)

    began = np.full((1, 1), 25.0)
    at, at_rest = settle(began, *following(np.arange(1), began), following)
    assert bool(at_rest[0]) == rests
    if rests:
        assert at[0, 0] == pytest.approx(25.0 + 5.0 / (1.0 - gain), abs=1e-4)
    else:
        assert at[0, 0] == HOTTEST_C


def test_the_lower_of_two_balances_is_found() -> None:
    """T = 25 + 4*exp((T - 25)/20) has two balances; the upper one is unstable, its slope is above one."""

    def following(which: Index, at: Array) -> tuple[Array, Mask]:
        return 25.0 + 4.0 * np.exp((at - 25.0) / 20.0), np.ones(len(which), np.bool_)

    for start_c in (25.0, 35.0, 50.0):
        began = np.full((1, 1), start_c)
        at, at_rest = settle(began, *following(np.arange(1), began), following)
        assert at_rest[0]
        assert 0.2 * (at[0, 0] - 25.0) / 4.0 < 1.0
        assert at[0, 0] - 25.0 == pytest.approx(4.0 * np.exp((at[0, 0] - 25.0) / 20.0), abs=1e-4)
        assert (at[0, 0] - 25.0) / 20.0 < 1.0


def test_units_without_a_solution_are_not_at_rest() -> None:
    def following(which: Index, at: Array) -> tuple[Array, Mask]:
        return np.full(at.shape, 40.0), which != 1

    began = np.full((2, 3), 25.0)
    at, at_rest = settle(began, *following(np.arange(3), began), following)
    assert at_rest.tolist() == [True, False, True]
    assert at[:, 0] == pytest.approx(40.0)
