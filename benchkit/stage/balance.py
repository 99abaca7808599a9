"""Temperatures in balance: where the powers that junctions cause are those that keep them at their temperatures.

Strategy
--------
With T the temperatures and g(T) those that their powers lead to at rest, solve F = g(T) - T = 0 by Broyden's method,
each unit with a matrix of its own (it starts as "g does not move", unless a better one is given). A round costs one
solve of the units that are not at rest yet; units at rest, without a solution or hotter than anything leave.

No step is taken towards a state that runs away: where the matrix says that the loop gain has passed one (its
determinant is not above `LEAST_DETERMINANT`), the unit takes the plain step to g(T), which leads away from an unstable
balance and on to `HOTTEST_C` where there is none.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]
Index = NDArray[np.intp]

REST_K = 1e-5
"""Temperatures that would still move by less than this (K) are at rest; a last step comes on top."""
MOST_ROUNDS = 40
HOTTEST_C = 400.0
COLDEST_C = -60.0
LONGEST_STEP_K = 60.0
LEAST_DETERMINANT = 0.02

Next = Callable[[Index, Array], tuple[Array, Mask]]
"""Gives, for some units (their numbers) at temperatures of shape (names, those units), g and who has a solution."""


def settle(
    at: Array, goes: Array, solved: Mask, following: Next, matrix: Array | None = None, within_k: float = REST_K
) -> tuple[Array, Mask]:
    """Find the temperatures of units at rest.

    Parameters
    ----------
    at : array of shape (names, units)
        Temperatures (degC) to start from.
    goes : array of shape (names, units)
        Where they lead, g(T).
    solved : array of bool of shape (units,)
        Units that had a solution there.
    following : callable
        See `Next`.
    matrix : array of shape (units, names, names), optional
        1 - dg/dT to start with.
    within_k : float
        What counts as rest, instead of `REST_K`.

    Returns
    -------
    temperatures : array of shape (names, units)
    at_rest : array of bool of shape (units,)
    """
    at = at.copy()
    count, units = at.shape
    slope = np.broadcast_to(np.eye(count), (units, count, count)).copy()
    if matrix is not None:
        usable = np.isfinite(matrix).all(axis=(1, 2))
        slope[usable] = matrix[usable]
    at_rest = np.zeros(units, np.bool_)
    live = np.arange(units)
    for _ in range(MOST_ROUNDS):
        lack = goes - at[:, live]
        resting = np.abs(lack).max(axis=0) < within_k
        before, moved = at[:, live], _moved(at[:, live], lack, slope[live])
        at[:, live] = np.where(solved, moved, before)
        at_rest[live] = resting & solved
        keep = np.flatnonzero(~resting & solved & (moved.max(axis=0) < HOTTEST_C))
        if not len(keep):
            break
        step, lack, live = at[:, live[keep]] - before[:, keep], lack[:, keep], live[keep]
        goes, solved = following(live, at[:, live])
        slope[live] = _updated(slope[live], step, lack - (goes - at[:, live]))
    return at, at_rest


def _moved(at: Array, lack: Array, slope: Array) -> Array:
    """Temperatures after a step of each unit."""
    with np.errstate(over="ignore"):  # beyond every number is stable too
        stable = np.linalg.det(slope) > LEAST_DETERMINANT
    matrix = np.where(stable[:, None, None], slope, np.eye(len(at)))
    step = np.linalg.solve(matrix, lack.T[:, :, None])[:, :, 0].T
    longest = np.abs(step).max(axis=0)
    step *= np.minimum(1.0, LONGEST_STEP_K / np.maximum(longest, 1e-12))
    return np.clip(at + step, COLDEST_C, HOTTEST_C)


def _updated(slope: Array, step: Array, change: Array) -> Array:
    """Matrices that map each unit's step to the change that it made (Broyden's rank-one update)."""
    missed = change.T - np.einsum("uij,ju->ui", slope, step)
    length = np.maximum((step**2).sum(axis=0), 1e-18)
    result = slope + (missed / length[:, None])[:, :, None] * step.T[:, None, :]
    usable = np.isfinite(result).all(axis=(1, 2))
    return np.asarray(np.where(usable[:, None, None], result, slope))
