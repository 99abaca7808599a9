"""Uncertainty after the GUM (JCGM 100:2008): type A and B, combination with correlations, coverage, ratios, lines.

Everything here is arithmetic on plain numbers. Standard uncertainties are in the unit of their quantity; correlation
coefficients lie between -1 and 1. Where vectors and matrices come in, numpy is imported by the function that needs it.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from statistics import NormalDist, fmean, stdev
from typing import TYPE_CHECKING

from benchkit.measure.accuracy import Accuracy
from benchkit.measure.readings import Reading

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import ArrayLike, NDArray


@dataclass(frozen=True)
class TypeA:
    """What repeated readings say (JCGM 100, 4.2).

    Attributes
    ----------
    mean : float
    standard_deviation : float
        Of a single reading, n - 1 in the denominator; 0.0 for a single one.
    standard_uncertainty : float
        Of the mean.
    degrees_of_freedom : float
        n - 1; infinite for a single reading, whose scatter is not known from itself.
    """

    mean: float
    standard_deviation: float
    standard_uncertainty: float
    degrees_of_freedom: float


@dataclass(frozen=True)
class Line:
    """A straight line y = intercept + slope·(x - x0), fitted by least squares with equal weights (JCGM 100, H.3).

    Attributes
    ----------
    intercept, slope : float
    u_intercept, u_slope : float
        Standard uncertainties.
    correlation : float
        Of intercept and slope.
    residual_deviation : float
        s, with n - 2 degrees of freedom.
    x0 : float
        Where the intercept is taken.
    """

    intercept: float
    slope: float
    u_intercept: float
    u_slope: float
    correlation: float
    residual_deviation: float
    x0: float

    def at(self, x: float) -> tuple[float, float]:
        """Give the line's value at x and its standard uncertainty."""
        step = x - self.x0
        variance = (
            self.u_intercept**2
            + (step * self.u_slope) ** 2
            + 2.0 * step * self.u_intercept * self.u_slope * self.correlation
        )
        return self.intercept + step * self.slope, math.sqrt(max(0.0, variance))


def rectangular(half_width: float) -> float:
    """Give the standard uncertainty of a rectangular distribution, half-width/√3 (JCGM 100, 4.3.7)."""
    if not (math.isfinite(half_width) and half_width >= 0):
        raise ValueError(f"{half_width} is no half-width")
    return half_width / math.sqrt(3.0)


def type_a(samples: Sequence[float]) -> TypeA:
    """Evaluate repeated, independent readings (JCGM 100, 4.2).

    Parameters
    ----------
    samples : sequence of float
        At least one; readings that drift or hang together need more than this.
    """
    if not samples:
        raise ValueError("no samples")
    if len(samples) == 1:
        return TypeA(samples[0], 0.0, 0.0, math.inf)
    deviation = stdev(samples)
    return TypeA(fmean(samples), deviation, deviation / math.sqrt(len(samples)), len(samples) - 1.0)


def combine(contributions: Sequence[float], correlations: Mapping[tuple[int, int], float] | None = None) -> float:
    """Combine contributions c_i·u(x_i), signs kept, into one standard uncertainty (JCGM 100, 5.1.2 and 5.2.2).

    Parameters
    ----------
    contributions : sequence of float
        Sensitivity times standard uncertainty of each input, in the result's unit.
    correlations : mapping of (int, int) to float, optional
        Correlation coefficient of each correlated pair of inputs, by position; each pair once.
    """
    variance = math.fsum(part * part for part in contributions)
    for (first, second), correlation in (correlations or {}).items():
        if first == second or not -1.0 <= correlation <= 1.0:
            raise ValueError(f"inputs {first} and {second} can't be correlated by {correlation}")
        variance += 2.0 * contributions[first] * contributions[second] * correlation
    return math.sqrt(max(0.0, variance))


def coverage_factor(coverage: float, degrees_of_freedom: float = math.inf) -> float:
    """Two-sided coverage factor k (JCGM 100, 6.3 and G.3).

    Parameters
    ----------
    coverage : float
        Probability wanted inside ±k·u, above 0 and below 1.
    degrees_of_freedom : float
        Of the uncertainty; infinite takes the normal distribution, otherwise Student's t.

    Returns
    -------
    float
        1.960 for 0.95, 2.576 for 0.99; 4.303 for 0.95 with two degrees of freedom.
    """
    if not 0.0 < coverage < 1.0:
        raise ValueError(f"{coverage} is no coverage")
    if degrees_of_freedom == math.inf:
        return NormalDist().inv_cdf(0.5 + coverage / 2.0)
    if not degrees_of_freedom > 0:
        raise ValueError(f"{degrees_of_freedom} degrees of freedom")
    from scipy.special import stdtrit

    return float(stdtrit(degrees_of_freedom, 0.5 + coverage / 2.0))


def effective_degrees_of_freedom(parts: Sequence[tuple[float, float]]) -> float:
    """Degrees of freedom of a combined uncertainty (Welch-Satterthwaite, JCGM 100, G.4.1).

    Parameters
    ----------
    parts : sequence of (float, float)
        Each contribution c_i·u(x_i) and its degrees of freedom (may be infinite); uncorrelated.
    """
    total = math.fsum(u * u for u, _ in parts)
    weight = math.fsum(u**4 / dof for u, dof in parts if dof != math.inf)
    return math.inf if weight == 0.0 else total * total / weight


def propagate(
    function: Callable[[NDArray[np.float64]], ArrayLike], values: ArrayLike, covariance: ArrayLike
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Propagate a covariance through a function (JCGM 100, 5.2.2; JCGM 102, 6.2), derivatives by central differences.

    Parameters
    ----------
    function : callable
        Takes inputs of shape (n,), gives outputs of shape (m,) or a number.
    values : array of shape (n,)
        The inputs.
    covariance : array of shape (n, n)
        Of the inputs.

    Returns
    -------
    outputs : array of shape (m,)
    covariance : array of shape (m, m)
    """
    import numpy as np

    x = np.asarray(values, dtype=np.float64)
    v = np.asarray(covariance, dtype=np.float64)
    if v.shape != (x.size, x.size):
        raise ValueError(f"{x.size} inputs and a covariance of shape {v.shape}")
    columns = []
    for index, deviation in enumerate(np.sqrt(np.diag(v))):
        step = max(float(deviation) * 1e-2, abs(float(x[index])) * 1e-6, 1e-12)
        shift = np.zeros_like(x)
        shift[index] = step
        up = np.atleast_1d(np.asarray(function(x + shift), dtype=np.float64))
        down = np.atleast_1d(np.asarray(function(x - shift), dtype=np.float64))
        columns.append((up - down) / (2.0 * step))
    jacobian = np.stack(columns, axis=1)
    outputs = np.atleast_1d(np.asarray(function(x), dtype=np.float64))
    return outputs, jacobian @ v @ jacobian.T


def coverage_interval(draws: ArrayLike, coverage: float) -> tuple[float, float]:
    """Give the probabilistically symmetric interval that holds a share of draws (JCGM 101:2008, 7.7.2).

    Parameters
    ----------
    draws : array of shape (n,)
        Of one quantity.
    coverage : float
        Share of the draws inside, above 0 and below 1.

    Returns
    -------
    low, high : float
        In the draws' unit.
    """
    import numpy as np

    values = np.asarray(draws, dtype=np.float64)
    if not 0.0 < coverage < 1.0 or values.ndim != 1 or values.size < 2:
        raise ValueError(f"no interval of {coverage} from draws of shape {values.shape}")
    low, high = np.quantile(values, [0.5 - coverage / 2.0, 0.5 + coverage / 2.0])
    return float(low), float(high)


def fit_line(x: Sequence[float], y: Sequence[float], x0: float = 0.0) -> Line:
    """Fit a straight line by least squares, equal weights, only y uncertain (JCGM 100, H.3).

    Parameters
    ----------
    x, y : sequence of float
        At least three points, not all at the same x.
    x0 : float
        Where the intercept is wanted.
    """
    n = len(x)
    if n != len(y) or n < 3:
        raise ValueError(f"{n} and {len(y)} values make no line with a residual")
    mean_x, mean_y = fmean(x), fmean(y)
    sxx = math.fsum((xi - mean_x) ** 2 for xi in x)
    if sxx == 0.0:
        raise ValueError("all points are at the same x")
    slope = math.fsum((xi - mean_x) * (yi - mean_y) for xi, yi in zip(x, y, strict=True)) / sxx
    residuals = (yi - mean_y - slope * (xi - mean_x) for xi, yi in zip(x, y, strict=True))
    s = math.sqrt(math.fsum(r * r for r in residuals) / (n - 2))
    offset = mean_x - x0
    u_slope = s / math.sqrt(sxx)
    u_intercept = s * math.sqrt(1.0 / n + offset * offset / sxx)
    correlation = 0.0 if u_intercept == 0.0 else -offset * u_slope / u_intercept
    return Line(mean_y - slope * offset, slope, u_intercept, u_slope, correlation, s, x0)


def make_reading(
    point: str,
    samples: float | Sequence[float],
    unit: str,
    *,
    function: str,
    accuracy: Accuracy,
    meter: str = "",
    range: float | None = None,
    step: float | None = None,
) -> Reading:
    """Make a reading with its uncertainty: the meter's specification and, for repeated readings, their type A part.

    Parameters
    ----------
    point, unit, function : str
        As in `Reading`.
    samples : float or sequence of float
        One value or several, in `unit`.
    accuracy : Accuracy
        The meter's specification.
    meter : str
        The meter's name; the specification's name when left out.
    range : float, optional
        Full scale it was taken on; otherwise the smallest that holds it.
    step : float, optional
        The last digit that was written down, where it is finer than the specification's: then the meter has finer
        steps than was assumed. A coarser one says nothing.

    Returns
    -------
    Reading
        Of the mean, with ``own_uncertainty`` holding what doesn't cancel in a ratio.

    Raises
    ------
    EntryError
        When the specification does not cover the reading.
    """
    values = [samples] if isinstance(samples, int | float) else list(samples)
    repeated = type_a(values)
    row = accuracy.row(function, repeated.mean, range)
    if step is not None and step < row.resolution:
        row = replace(row, resolution=step)
    return Reading(
        point=point,
        value=repeated.mean,
        unit=unit,
        standard_uncertainty=combine([rectangular(row.half_width(repeated.mean)), repeated.standard_uncertainty]),
        own_uncertainty=combine([rectangular(row.rest_half_width()), repeated.standard_uncertainty]),
        meter=meter or accuracy.name,
        function=function,
        range=row.full_scale,
        samples=len(values),
    )


def same_gain(first: Reading, second: Reading) -> bool:
    """Whether two readings share their gain error: the same meter, function and range, all of them known."""
    return (
        bool(first.meter)
        and (first.meter, first.function, first.range) == (second.meter, second.function, second.range)
        and first.range is not None
        and first.own_uncertainty is not None
        and second.own_uncertainty is not None
    )


def relative_uncertainty_of_ratio(first: Reading, second: Reading) -> float | None:
    """Relative standard uncertainty of first/second.

    With a shared gain only the range and counts parts (and the scatter) remain; otherwise all of both counts.

    Parameters
    ----------
    first, second : Reading
        Two numbers other than zero.

    Returns
    -------
    float or None
        None when a reading is an overload, zero, or of unknown uncertainty.
    """
    parts = []
    shared = same_gain(first, second)
    for one in (first, second):
        u = one.own_uncertainty if shared else one.standard_uncertainty
        if not one.value or u is None:
            return None
        parts.append(u / abs(one.value))
    return combine(parts)
