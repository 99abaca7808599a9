"""Limits from an ensemble: the interval that holds 99.73 % of units.

The limits are empirical quantiles at 0.135 % and 99.865 %, because readings are skewed and no normal law fits them. Two
corrections keep them honest for a finite ensemble:

* Plotting positions k/(n + 1): the k-th smallest of n units has, on average, exactly that share of all units below it,
  whatever the distribution (W. Weibull 1939, from memory). With k/n the limits would hold too few of the next units.
* Below 740 units the quantile lies beyond the outermost unit. Then the line through the outermost unit and the one at
  ten times its rank, on the scale of normal quantiles, is carried on; such limits are rough, and it is better to solve
  more units.

A smoothed tail (a weighted fit on normal quantiles) was tried: its limits scatter by a fifth less, but are biased for
short-tailed readings, where one resistor's tolerance rules.

A unit that reads overload counts as an infinite reading.
"""

from __future__ import annotations

import math
from statistics import NormalDist

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

OUTSIDE_EACH_SIDE = 0.00135
"""Share of units beyond each limit: 99.73 % lie between."""
LEAST_UNITS = 50
"""Fewer units than this give no limits."""


def interval(values: Array, outside_each_side: float = OUTSIDE_EACH_SIDE) -> tuple[float, float]:
    """Lower and upper limit of a reading.

    Parameters
    ----------
    values : array of shape (units,)
        At least `LEAST_UNITS`; infinities are overloads.
    outside_each_side : float
        Share of units beyond each limit.

    Returns
    -------
    low, high : float
        Infinite where the tail is.

    Raises
    ------
    ValueError
        For too few units, or for values that are not numbers.
    """
    if values.size < LEAST_UNITS:
        raise ValueError(f"{values.size} units are too few for limits")
    if np.isnan(values).any():
        raise ValueError("a reading is not a number")
    ordered = np.sort(values)
    return _tail(ordered, outside_each_side), -_tail(-ordered[::-1], outside_each_side)


def _tail(ordered: Array, share: float) -> float:
    """The quantile at a share of ascending values."""
    units = ordered.size
    place = share * (units + 1) - 1.0
    if place >= 0.0:
        below = math.floor(place)
        first, second = float(ordered[below]), float(ordered[below + 1])
        if math.isinf(first) or math.isinf(second):
            return first
        return first + (place - below) * (second - first)
    outermost, inner = float(ordered[0]), float(ordered[9])
    if math.isinf(outermost) or math.isinf(inner):
        return outermost
    normal = NormalDist()
    aim, first_z, inner_z = (normal.inv_cdf(p) for p in (share, 1 / (units + 1), 10 / (units + 1)))
    return outermost + (aim - first_z) * (inner - outermost) / (inner_z - first_z)
