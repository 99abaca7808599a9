"""Sparse elimination along a unit axis: one pivot order, worked out once, serves every unit of a batch.

Strategy
--------
The matrices of all units share their structure. Each entry that is not always zero has a *slot*; the values of a slot
for all units lie beside each other, so that one elimination step is one vector operation over the units, whatever
interpreter overhead it has.

* `Structure` lists the slots that a circuit fills.
* `choose_order` picks the pivots on the values of a few units: the lowest Markowitz count (entries that could fill in)
  among entries that are no smaller than a threshold times the largest in their column, in *each* of those units.
* `Order` is the outcome as a fixed program of slots: which to divide, which products to take off which slots.

An order can be bad for a unit whose values are unlike those that it was chosen on. That shows in the residual of the
linear equations; the caller checks it and tries another order, then `solve_dense`.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit.stacks import each_its_own

Array = NDArray[np.float64]
Index = NDArray[np.intp]

PIVOT_THRESHOLD = 1e-3
"""Smallest pivot, as a share of the largest entry left in its column."""
LINEAR_TOLERANCE = 1e-9
"""Largest residual of a linear equation, as a share of the magnitudes in its row."""


class Structure:
    """Which entries of an n-by-n matrix can differ from zero.

    Slots are numbered row by row.
    """

    def __init__(self, size: int, entries: set[tuple[int, int]]) -> None:
        self.size = size
        self.entries = sorted(entries)
        self.slot = {entry: k for k, entry in enumerate(self.entries)}
        self.rows: Index = np.array([i for i, _ in self.entries], dtype=np.intp)
        self.columns: Index = np.array([j for _, j in self.entries], dtype=np.intp)

    @property
    def slots(self) -> int:
        """Number of slots."""
        return len(self.entries)


@dataclass(frozen=True)
class PivotStep:
    """One step: the pivot's slot, its row, and per row below (slot, row, products to take off)."""

    slot: int
    row: int
    column: int
    below: tuple[tuple[int, int, tuple[tuple[int, int], ...]], ...]
    right: tuple[tuple[int, int], ...]


@dataclass(frozen=True)
class Order:
    """A pivot order and the program that follows from it; ``slots`` counts the fill-in too."""

    steps: tuple[PivotStep, ...]
    slots: int


def choose_order(structure: Structure, values: Array) -> Order:
    """Choose pivots on the matrices of a few units.

    Parameters
    ----------
    values : array, shape (slots, samples)
        The entries' values in the units to choose on.

    Raises
    ------
    numpy.linalg.LinAlgError
        When the structure itself is singular.
    """
    size, samples = structure.size, values.shape[1]
    slot = dict(structure.slot)
    work = np.zeros((size, size, samples))
    work[structure.rows, structure.columns] = values
    filled = np.zeros((size, size), dtype=np.bool_)
    filled[structure.rows, structure.columns] = True
    steps = []
    with np.errstate(all="ignore"):
        for _ in range(size):
            i, j = _best_pivot(work, filled)
            others = np.flatnonzero(filled[i])
            others = others[others != j]
            rows = np.flatnonzero(filled[:, j])
            rows = rows[rows != i]
            factor = work[rows, j] / work[i, j]
            work[rows[:, None], others] -= factor[:, None, :] * work[i, others]
            filled[rows[:, None], others] = True
            right = tuple((slot[i, c], c) for c in others.tolist())
            below = tuple(
                (slot[r, j], r, tuple((slot.setdefault((r, c), len(slot)), source) for source, c in right))
                for r in rows.tolist()
            )
            steps.append(PivotStep(slot[i, j], i, j, below, right))
            filled[i, :] = filled[:, j] = False
            work[i, :] = work[:, j] = 0.0
    return Order(tuple(steps), len(slot))


def _best_pivot(work: Array, filled: NDArray[np.bool_]) -> tuple[int, int]:
    """Row and column of the lowest Markowitz count among entries above the threshold; the larger share wins a tie."""
    if not filled.any():
        raise np.linalg.LinAlgError("structurally singular")
    magnitude = np.abs(work)
    largest = magnitude.max(axis=0)
    share = np.nan_to_num(magnitude / np.where(largest > 0.0, largest, np.inf)).min(axis=2)
    share[~filled] = -1.0
    count = (filled.sum(axis=1)[:, None] - 1) * (filled.sum(axis=0) - 1)
    key = np.where(share >= PIVOT_THRESHOLD, count - 0.5 * share, work.size * (2.0 - share))
    key[~filled] = np.inf
    i, j = np.unravel_index(int(key.argmin()), key.shape)
    return int(i), int(j)


class Factors:
    """A batch of factored matrices, for one or more right-hand sides.

    Parameters
    ----------
    values : array, shape (structure.slots, units)
        Left untouched.
    """

    def __init__(self, order: Order, values: Array) -> None:
        self._order = order
        units = values.shape[1]
        work = np.empty((order.slots, units))
        work[: len(values)] = values
        work[len(values) :] = 0.0
        self._slots = slots = list(work)
        scratch = np.empty(units)
        multiply, subtract, divide = np.multiply, np.subtract, np.divide
        self._inverse = inverse = np.empty((len(order.steps), units))
        for step, inverted in zip(order.steps, inverse, strict=True):
            divide(1.0, slots[step.slot], inverted)
            for slot, _, products in step.below:
                factor = slots[slot]
                multiply(factor, inverted, factor)
                for target, source in products:
                    multiply(factor, slots[source], scratch)
                    subtract(slots[target], scratch, slots[target])

    def solve(self, right: Array) -> Array:
        """Solve for one right-hand side of shape (size, units)."""
        work = right.copy()
        rows = list(work)
        result = np.empty_like(work)
        columns = list(result)
        scratch = np.empty(work.shape[1])
        multiply, subtract = np.multiply, np.subtract
        slots = self._slots
        for step in self._order.steps:
            source = rows[step.row]
            for slot, row, _ in step.below:
                multiply(slots[slot], source, scratch)
                subtract(rows[row], scratch, rows[row])
        for step, inverted in zip(reversed(self._order.steps), self._inverse[::-1], strict=True):
            value = rows[step.row]
            for slot, column in step.right:
                multiply(slots[slot], columns[column], scratch)
                subtract(value, scratch, value)
            multiply(value, inverted, columns[step.column])
        return result


def linear_residual(structure: Structure, values: Array, solution: Array, right: Array) -> tuple[Array, Array]:
    """Residual of A x = b, as (b - A x, sum of the magnitudes in each row), both of shape (size, units)."""
    residual, scale = right.copy(), np.abs(right)
    rows, sizes, unknowns = list(residual), list(scale), list(solution)
    product = np.empty(right.shape[1])
    for (row, column), value in zip(structure.entries, values, strict=True):
        np.multiply(value, unknowns[column], product)
        np.subtract(rows[row], product, rows[row])
        np.abs(product, product)
        np.add(sizes[row], product, sizes[row])
    return residual, scale


def solve_dense(structure: Structure, values: Array, right: Array) -> Array:
    """Solve every unit's matrix by LAPACK, rows scaled; a unit whose matrix is singular comes back as not a number."""
    units = values.shape[1]
    matrix = np.zeros((units, structure.size, structure.size))
    matrix[:, structure.rows, structure.columns] = values.T
    scale = np.abs(matrix).max(axis=2)
    scale[~(scale > 0.0)] = 1.0
    matrix /= scale[:, :, None]
    vector = (right.T / scale)[:, :, None]
    result = each_its_own(_refined, matrix, vector)[:, :, 0]
    return np.ascontiguousarray(result.T)


def _refined(matrix: Array, vector: Array) -> Array:
    """Solve a stack of matrices, and once more for what is left where a row is not met to `LINEAR_TOLERANCE`.

    Partial pivoting keeps the error small against the largest numbers of a matrix, which a row of small ones may not
    notice; one step of refinement does (Skeel, Mathematics of Computation 35, 1980).
    """
    solved = np.asarray(np.linalg.solve(matrix, vector))
    left = vector - matrix @ solved
    terms = np.abs(matrix) @ np.abs(solved) + np.abs(vector)
    bad = ~(np.abs(left) <= LINEAR_TOLERANCE * terms).all(axis=(1, 2))
    if bad.any():
        solved[bad] += np.linalg.solve(matrix[bad], left[bad])
    return solved
