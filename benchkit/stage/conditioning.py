"""What some readings of a unit say about others: limits conditioned on an ensemble of units.

Given are the readings of an ensemble: known ones, with the noise that they would be read with, and wanted ones, true.
One fit answers for any number of units whose known readings came in.

1. Readings span decades (an emitter drop with the trimmer anywhere) and pass through zero (an offset), so everything is
   worked on asinh(reading/scale), to zero mean and unit variance (`Column`).
2. The known ones are turned into uncorrelated directions of unit variance. The few of their combinations that say most
   about the wanted ones, each of these counted in its own scatter, are the main directions.
3. Least squares of the wanted on all directions, on products of the main ones, and on a piecewise cubic along the first
   one, whose slope in the next ones may vary along it. Residuals are those of a fit without the unit itself, r/(1 - its
   leverage), so that a fit with many terms promises no more than it keeps.
4. How far the residuals scatter is fitted too (log of their size, on the main directions).
5. The limits are empirical quantiles of residual over scatter: no law of distribution is supposed.

A unit whose known readings don't go together as those of any unit of the ensemble do is odd, and the fit says nothing
about it: it lies farther out than the outermost unit by `ODD`, all readings together, one by itself, or one against
what the rest let expect.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.stage.quantiles import Array, interval

Matrix = NDArray[np.float64]
Mask = NDArray[np.bool_]

ODD = 1.25
"""How much farther out than the ensemble's outermost unit an odd one lies."""
LEAST_UNITS = 400
"""Fewer units than this narrow nothing."""
UNITS_PER_TERM = 4
"""So many units a term of the fit needs; with fewer the fit has straight terms only, and then none."""
MAIN = 6
"""Most main directions."""
KNOTS = 6
"""Inner knots along the first main direction."""
_SCATTER_MAIN = 3
_LEAST_EIGENVALUE = 1e-10
_RIDGE = 1e-7
_SCATTER_RIDGE = 1e-3
_LEAST_RESIDUAL = 1e-2
_TINY = 1e-12


@dataclass(frozen=True)
class Column:
    """One reading of an ensemble on its own scale.

    Attributes
    ----------
    scale : float
        Where asinh(reading/scale) turns from straight to logarithmic, in the reading's unit.
    middle, size : float
        Mean and standard deviation of asinh(reading/scale).
    standard : array of shape (units,)
        (asinh(reading/scale) - middle)/size.
    """

    scale: float
    middle: float
    size: float
    standard: Array

    @classmethod
    def of(cls, readings: Array, floor: float = 0.0) -> Column:
        """Scale a reading: of either sign by its extent, of one sign by its small values, but not below a floor."""
        low, high, small = *np.quantile(readings, (0.002, 0.998)), np.quantile(np.abs(readings), 0.1)
        either_sign = low < 0.0 < high
        scale = max(float(high - low if either_sign else small), floor, _TINY)
        curved = np.arcsinh(readings / scale)
        middle, size = float(curved.mean()), max(float(curved.std()), _TINY)
        return cls(scale, middle, size, (curved - middle) / size)

    def forward(self, readings: Array) -> Array:
        """Readings on the column's scale."""
        return np.asarray((np.arcsinh(readings / self.scale) - self.middle) / self.size)

    def back(self, standard: Array) -> Array:
        """Readings in their own unit."""
        return np.asarray(self.scale * np.sinh(np.clip(standard * self.size + self.middle, -600.0, 600.0)))


class Conditioned:
    """The wanted readings, given the known ones.

    Parameters
    ----------
    known, wanted : sequence of Column
        Of the same units; the known ones with noise. At least one each.
    rows : array of int
        Units to use, at least `LEAST_UNITS`.
    outside : float
        Share of units outside the limits, both sides together.
    """

    def __init__(
        self, known: Sequence[Column], wanted: Sequence[Column], rows: NDArray[np.intp], outside: float
    ) -> None:
        self._known, self._wanted = tuple(known), tuple(wanted)
        units = len(rows)
        z = np.stack([column.standard[rows] for column in known], axis=1)
        y = np.stack([column.standard[rows] for column in wanted], axis=1)
        self._zero = z.mean(axis=0)
        z = z - self._zero
        values, vectors = np.linalg.eigh(z.T @ z / units)
        keep = values > _LEAST_EIGENVALUE * max(float(values[-1]), _TINY)
        keep[: max(0, len(keep) - units // UNITS_PER_TERM)] = False
        self._white = vectors[:, keep] / np.sqrt(values[keep])
        t = z @ self._white
        self._against_others = self._white @ self._white.T
        self._against_others /= np.sqrt(np.maximum(np.diag(self._against_others), _TINY))
        self._farthest = [ODD * out.max(axis=0) for out in self._distances(z, t)]
        self._set_main(t, y)
        f = self._terms(t)
        self._gram = f.T @ f / units
        self._gram[np.diag_indices_from(self._gram)] += _RIDGE * np.diag(self._gram)
        self._factor = np.linalg.inv(np.linalg.cholesky(self._gram)).T
        self._units = units
        self._coefficients = self._factor @ (self._factor.T @ (f.T @ y / units))
        leverage = self._leverage(f)
        residual = (y - f @ self._coefficients) / (1.0 - np.minimum(leverage, 0.5))[:, None]
        scatter = self._fit_scatter(t, residual) * np.sqrt(1.0 + leverage)[:, None]
        relative = np.ascontiguousarray((residual / scatter).T)
        limits = np.array([interval(row, outside / 2.0) for row in relative])
        self._low, self._high = limits[:, 0], limits[:, 1]

    def limits_many(self, values: Matrix) -> tuple[Matrix, Matrix, Mask]:
        """Limits of the wanted readings of units whose known readings came in.

        Parameters
        ----------
        values : array of shape (units, known)

        Returns
        -------
        low, high : arrays of shape (units, wanted)
        odd : array of bool of shape (units,)
            These units' limits mean nothing.
        """
        _, t, odd = self._placed(values)
        f = self._terms(t)
        middle = f @ self._coefficients
        scatter = self._scatter(t) * np.sqrt(1.0 + self._leverage(f))[:, None]
        low, high = middle + self._low * scatter, middle + self._high * scatter
        ends = []
        for end in (low, high):
            columns = zip(self._wanted, end.T, strict=True)
            ends.append(np.stack([column.back(standard) for column, standard in columns], axis=1))
        return ends[0], ends[1], odd

    def oddest(self, values: Array) -> int:
        """Return which known reading of a unit, of shape (known,), is farthest out, by itself or against the others."""
        z, t, _ = self._placed(values[None, :])
        shares = [
            out[0] / np.maximum(most, _TINY) for out, most in zip(self._distances(z, t), self._farthest, strict=True)
        ]
        return int(np.argmax(np.maximum(shares[1], shares[2])))

    def _placed(self, values: Matrix) -> tuple[Matrix, Matrix, Mask]:
        columns = zip(self._known, values.T, strict=True)
        z = np.stack([column.forward(given) for column, given in columns], axis=1) - self._zero
        t = z @ self._white
        far = [out > most for out, most in zip(self._distances(z, t), self._farthest, strict=True)]
        return z, t, far[0] | far[1].any(axis=1) | far[2].any(axis=1)

    def _distances(self, z: Matrix, t: Matrix) -> tuple[Array, Matrix, Matrix]:
        """How far out units lie: all known readings together, each by itself, each against what the rest let expect."""
        return np.sqrt(np.einsum("uk,uk->u", t, t)), np.abs(z), np.abs(z @ self._against_others)

    def _set_main(self, t: Matrix, y: Matrix) -> None:
        units = len(t)
        straight = t.T @ y / units
        left = np.maximum((y - y.mean(axis=0) - t @ straight).std(axis=0), 1e-3)
        directions, _, weights = np.linalg.svd(straight / left, full_matrices=False)
        largest = np.argmax(np.abs(weights), axis=1)
        self._main = (directions * np.sign(weights[np.arange(len(weights)), largest]))[:, :MAIN]
        d = t @ self._main
        self._reach = np.stack([d.min(axis=0), d.max(axis=0)])
        self._knots = np.quantile(d[:, 0], np.linspace(0.0, 1.0, KNOTS + 2)[1:-1])
        self._curved = True
        self._middle, self._size = np.zeros(1), np.ones(1)
        if self._raw_terms(t[:2]).shape[1] * UNITS_PER_TERM > units:
            self._curved = False
        f = self._raw_terms(t)
        self._middle, self._size = f.mean(axis=0), np.maximum(f.std(axis=0), _TINY)
        self._middle[0], self._size[0] = 0.0, 1.0

    def _along(self, t: Matrix) -> Matrix:
        """Place of units along the main directions, not beyond the ensemble's own."""
        return np.asarray(np.clip(t @ self._main, *self._reach))

    def _terms(self, t: Matrix) -> Matrix:
        return np.asarray((self._raw_terms(t) - self._middle) / self._size)

    def _raw_terms(self, t: Matrix) -> Matrix:
        parts = [np.ones((len(t), 1)), t]
        if self._curved:
            d = self._along(t)
            first, second = np.triu_indices(d.shape[1])
            beyond = np.maximum(d[:, :1] - self._knots, 0.0)
            parts += [d[:, first] * d[:, second], d[:, :1] ** 3, beyond**3]
            for other in range(1, min(d.shape[1], 1 + _SCATTER_MAIN)):
                parts += [d[:, :1] ** 2 * d[:, other : other + 1], beyond[:, 1::2] ** 2 * d[:, other : other + 1]]
        return np.concatenate(parts, axis=1)

    def _leverage(self, f: Matrix) -> Array:
        half = f @ self._factor
        return np.asarray(np.einsum("uf,uf->u", half, half) / self._units)

    def _scatter_terms(self, t: Matrix) -> Matrix:
        if not self._curved:
            return np.ones((len(t), 1))
        along = self._along(t)
        d = along[:, :_SCATTER_MAIN]
        first, second = np.triu_indices(d.shape[1])
        beyond = np.maximum(d[:, :1] - self._knots, 0.0)
        return np.concatenate([np.ones((len(t), 1)), d, d[:, first] * d[:, second], beyond], axis=1)

    def _fit_scatter(self, t: Matrix, residual: Matrix) -> Matrix:
        s = self._scatter_terms(t)
        self._scatter_size = np.sqrt(np.mean(residual**2, axis=0)) + _TINY
        log = np.log(np.abs(residual) / self._scatter_size + _LEAST_RESIDUAL)
        gram = s.T @ s / len(s)
        gram[np.diag_indices_from(gram)] += _SCATTER_RIDGE
        self._scatter_coefficients = np.linalg.solve(gram, s.T @ log / len(s))
        self._scatter_reach = np.quantile(s @ self._scatter_coefficients, (0.002, 0.998), axis=0)
        return self._scatter(t)

    def _scatter(self, t: Matrix) -> Matrix:
        fitted = self._scatter_terms(t) @ self._scatter_coefficients
        return np.asarray(np.exp(np.clip(fitted, *self._scatter_reach)) * self._scatter_size)
