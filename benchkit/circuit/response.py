"""First-order response of solved circuits: where every node goes when values move a little.

Strategy
--------
At a solution the residual F(x, v) is zero. A small change of the values leaves F(x, v + dv) at the old voltages, and
the nodes follow by dx = -J^-1 (F(x, v + dv) - F(x, v)), with J the matrix of Newton's method. F is evaluated with the
changed values themselves, so that any change of any value is covered and no law is written a second time; many
directions of many units are one batch. The changes must be small against what bends the laws: a millionth of a part's
spread is.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit.devices import Array
from benchkit.circuit.elimination import Index
from benchkit.circuit.equations import Batch
from benchkit.circuit.solution import Solution
from benchkit.circuit.stacks import each_its_own

Matrix = NDArray[np.float64]


class Response:
    """Solved units with their matrices inverted, ready for changes.

    Attributes
    ----------
    solution : Solution
    inverse : array of shape (units, size, size)
        Of each unit's matrix J; not a number where that is singular.
    """

    def __init__(self, solution: Solution) -> None:
        self.solution = solution
        with np.errstate(all="ignore"):
            batch = Batch(solution.plan, solution.values, solution.units)
            values = batch.matrix(batch.evaluate(solution.x, None), None)
        structure = solution.plan.structure
        matrix = np.zeros((solution.units, structure.size, structure.size))
        matrix[:, structure.rows, structure.columns] = values.T
        self.inverse = _inverse(matrix)

    def moved(self, values: Mapping[str, Array], directions: int, units: Index | slice = slice(None)) -> Solution:
        """Move units to first order.

        Parameters
        ----------
        values : mapping of str to arrays
            Complete values, direction after direction: each array of shape (directions * units,) or (1,). The last
            direction holds the unchanged values.
        directions : int
        units : index or slice
            Which of the units; all if left out.

        Returns
        -------
        Solution
            Of directions * units units, direction after direction: what can be asked of a solution (readings,
            currents, powers) can be asked of it, and the differences to the last direction are the first-order changes.
        """
        origin, plan = self.solution, self.solution.plan
        x, inverse = origin.x[:, units], self.inverse[units]
        count = x.shape[1]
        with np.errstate(all="ignore"):
            batch = Batch(plan, values, directions * count)
            tiled = np.tile(x, directions)
            linear = batch.evaluate(tiled, None)
            left = plan.sum_currents(linear.currents, tiled, batch.volts).reshape(plan.size, directions, count)
            change = inverse @ np.moveaxis(left[:, -1:] - left, 2, 0)
        tiled += np.moveaxis(change, 0, 2).reshape(plan.size, directions * count)
        converged = np.tile(origin.converged[units], directions)
        return Solution(
            origin.netlist, plan, dict(values), tiled, converged,
            np.tile(origin.iterations[units], directions), np.tile(origin.residual_a[units], directions),
        )  # fmt: skip

    def resistance(self, red: str, black: str) -> Array:
        """Source resistance [ohm] that a meter between two nodes sees, to first order; shape (units,)."""
        index, size = self.solution.plan.index, self.solution.plan.size
        ends = [(index[node], sign) for node, sign in ((red, 1.0), (black, -1.0)) if index[node] < size]
        result = np.zeros(self.solution.units)
        for a, sign_a in ends:
            for b, sign_b in ends:
                result += sign_a * sign_b * self.inverse[:, a, b]
        return result


def _inverse(matrix: Matrix) -> Matrix:
    scale = np.abs(matrix).max(axis=2)
    scale[~(scale > 0.0)] = 1.0
    matrix = matrix / scale[:, :, None]
    result = each_its_own(np.linalg.inv, matrix)
    return np.asarray(result / scale[:, None, :])
