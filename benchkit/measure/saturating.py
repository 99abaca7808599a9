"""A single saturating curve, y = b1 (1 - exp(-b2 x)), fitted by least squares.

For what rises towards one value with one time constant that nobody knows. Gauss-Newton with Marquardt's damping; after
each step the best b1 for the new b2 (in b1 the curve is linear), so that a poor start of b1 costs nothing. b2 never
changes by more than a factor of `LONGEST_STEP` in a step, so that a poor start can't throw it to where the curve says
nothing. Small arguments go through expm1.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

Array = NDArray[np.float64]

LONGEST_STEP: Final = 3.0
MOST_STEPS: Final = 200
CONVERGED: Final = 1e-9
"""Relative change of b2 in a step that counts as none."""


@dataclass(frozen=True, kw_only=True)
class Saturating:
    """A fitted curve.

    Attributes
    ----------
    b1, b2 : float
        Final value, and rate in 1/(unit of x).
    u_b1, u_b2 : float
        Standard errors.
    residual_deviation : float
        With n - 2 degrees of freedom.
    converged : bool
        Whether the steps came to an end; nothing else is worth anything without it.
    steps : int
    """

    b1: float
    b2: float
    u_b1: float
    u_b2: float
    residual_deviation: float
    converged: bool
    steps: int

    def at(self, x: ArrayLike) -> Array:
        """Give the curve's values."""
        return np.asarray(-self.b1 * np.expm1(-self.b2 * np.asarray(x, np.float64)))


def fit_saturating(x: ArrayLike, y: ArrayLike, start: tuple[float, float]) -> Saturating:
    """Fit y = b1 (1 - exp(-b2 x)).

    Parameters
    ----------
    x, y : array of shape (points,)
        At least three points.
    start : tuple of float
        First values of b1 (it need only be a number) and b2, which has to be above zero.

    Returns
    -------
    Saturating
    """
    x, y = np.asarray(x, np.float64), np.asarray(y, np.float64)
    if len(x) < 3 or len(x) != len(y) or not (np.isfinite(x).all() and np.isfinite(y).all()):
        raise ValueError(f"{len(x)} and {len(y)} points: wanted as many of both, three or more, all of them numbers")
    if not (math.isfinite(start[0]) and 0.0 < start[1] < math.inf):
        raise ValueError(f"start {start}: wanted a number, and a rate above zero")
    b2, steps, damping, converged = float(start[1]), 0, 1e-3, False
    b1, square = _best(x, y, b2)
    while steps < MOST_STEPS and not converged:
        steps += 1
        slopes, off = _slopes(x, b1, b2), y + b1 * np.expm1(-b2 * x)
        size = np.sqrt(np.maximum((slopes**2).sum(axis=0), 1e-300))
        scaled = slopes / size
        step = np.linalg.lstsq(scaled.T @ scaled + damping * np.eye(2), scaled.T @ off, rcond=None)[0] / size
        new2 = min(max(b2 + float(step[1]), b2 / LONGEST_STEP), b2 * LONGEST_STEP)
        new1, new_square = _best(x, y, new2)
        small = abs(new2 - b2) <= CONVERGED * b2
        if new_square <= square:
            b1, b2, square, damping = new1, new2, new_square, 0.1 * damping
        else:
            damping = max(10.0 * damping, 1e-9)
        # Beside the minimum, sums of squares differ by rounding alone: a small step is the end either way.
        converged = small and damping < 1e3
    deviation = math.sqrt(square / (len(x) - 2))
    cover = np.linalg.pinv(_slopes(x, b1, b2) * [1.0, b2])
    u1, u2 = (deviation * np.sqrt((cover**2).sum(axis=1))).tolist()
    return Saturating(
        b1=b1, b2=b2, u_b1=u1, u_b2=u2 * b2, residual_deviation=deviation, converged=converged, steps=steps
    )


def _best(x: Array, y: Array, b2: float) -> tuple[float, float]:
    """Return the best b1 for a b2, in which the curve is linear, and the sum of squares that it leaves."""
    shape = -np.expm1(-b2 * x)
    b1 = float(shape @ y) / max(float(shape @ shape), 1e-300)
    off = y - b1 * shape
    return b1, float(off @ off)


def _slopes(x: Array, b1: float, b2: float) -> Array:
    return np.column_stack([-np.expm1(-b2 * x), b1 * x * np.exp(-b2 * x)])
