"""Where a reading is heading: its final value with an interval, the time left, and whether it runs away.

Why not a single exponential
----------------------------
A stage warms up through several stores of heat, so that a reading may rise and then fall; one exponential through its
rise promises a final value far off, with a tiny standard error. So the design's own time constants are the basis, taken
as known only roughly, and the interval carries what the readings leave open: see `benchkit.measure.trend`.

Settled
-------
The predicted final value lies, with its interval, within `near` of where the trend is now; the slope with its interval
lies below the drift limit; what is left about the curve, hanging together counted, is no more than `near`. A small
standard deviation is no sign of rest: successive readings are no independent witnesses.

Running away
------------
A decay curves too, and a trend that turns from falling to rising both rises and bends upwards for a while. So trends
whose slowest part *grows* are weighed against the others. A reading runs away when these have nearly all the weight,
the bend at the last reading is above zero by its 95 % interval, and so is the slope, by enough to leave `near` within
one slowest time constant: a draught is none.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from typing import Final, Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from benchkit.measure.saturating import fit_saturating
from benchkit.measure.trend import Trend

Array = NDArray[np.float64]
Verdict = Literal["too early", "moving", "settled", "running away"]

MODEL_SHARE: Final = 0.17
"""Standard deviation of the logarithm of the slowest real time constant against the design's: thermal capacities are
known to some 30 %, and a rectangle of that half-width has this deviation; our own figure. The quicker ones are left
free around the design's."""
UNKNOWN_SHARE: Final = 0.5
"""The same where no design says anything."""
FIRST_MOMENTS_S: Final = 1.0
"""So long after a disturbance (s) no reading counts: the supply and the hand are still moving."""
LEAST_READINGS: Final = 8
LEAST_SPAN_S: Final = 5.0
FORGOTTEN: Final = 0.1
"""Share of the time since the disturbance whose readings no longer count: the quick parts bend most and say least."""
GROWING_FOR_SURE: Final = 0.999
GROWING_AT_REST: Final = 0.05
WIDEST: Final = 0.25
"""A 95 % interval wider than this share of the reading, either way, says nothing yet."""
_LAGS_AHEAD = 12.0


@dataclass(frozen=True, kw_only=True)
class Settling:
    """What a trend says about where it is going.

    Attributes
    ----------
    verdict : "too early", "moving", "settled" or "running away"
    now, rate : float
        The trend's value and slope (per second) at the last reading; when there are too few readings, the last of
        them (not a number without any) and 0.
    final : float or None
        Predicted final value; None when it is too early or there is none.
    low, high : float or None
        Its 95 % interval.
    left_s : float or None
        Time (s) until the trend stays within `near` of `final`; 0.0 when it does.
    rate_low, rate_high : float
        95 % interval of the slope.
    growing : float
        Probability that the slowest part of the trend grows.
    last_s : float
        Time of the last reading that counts.
    """

    verdict: Verdict
    now: float
    rate: float
    final: float | None = None
    low: float | None = None
    high: float | None = None
    left_s: float | None = None
    rate_low: float = -np.inf
    rate_high: float = np.inf
    growing: float = 0.0
    last_s: float = 0.0
    _origin_s: float = field(default=0.0, repr=False)
    _curve: tuple[float, Array, Array] | None = field(default=None, repr=False, compare=False)

    def at(self, times_s: ArrayLike) -> Array:
        """Give the predicted curve at absolute times (s); flat at `now` where nothing could be fitted."""
        x = np.asarray(times_s, np.float64) - self._origin_s
        if self._curve is None:
            return np.full(x.shape, self.now)
        level, amplitudes, per_s = self._curve
        return np.asarray(level + np.exp(np.minimum(-np.multiply.outer(x, per_s), 300.0)) @ amplitudes)


def predict(
    times_s: ArrayLike,
    values: ArrayLike,
    *,
    lags_s: Sequence[float],
    noise: float,
    near: float,
    drift_limit: float,
    since_s: float | None = None,
    model_share: float = MODEL_SHARE,
) -> Settling:
    """Predict where readings are heading.

    Parameters
    ----------
    times_s, values : array of shape (readings,)
        In order of time; readings that are not a number are left out.
    lags_s : sequence of float
        Time constants (s) of the design, such as `benchkit.stage.settling_times.lags_of` gives. Without any, one is
        taken from the readings themselves, and counts for little.
    noise : float
        Standard deviation of a single reading.
    near : float
        Half-width around the final value that counts as there.
    drift_limit : float
        Per second, above zero.
    since_s : float, optional
        Moment of the last disturbance, such as a trim or a step of the rails; earlier readings and the first moments
        after it don't count. Without it the first reading is taken for that moment.
    model_share : float
        Standard deviation of the logarithm of the slowest real time constant against that of `lags_s`.

    Returns
    -------
    Settling
    """
    if not (near > 0.0 and drift_limit > 0.0 and noise >= 0.0 and min(lags_s, default=1.0) > 0.0):
        raise ValueError(
            f"near {near}, drift limit {drift_limit}, noise {noise}, time constants {lags_s}: out of range"
        )
    t, y = np.asarray(times_s, np.float64), np.asarray(values, np.float64)
    kept = np.isfinite(t) & np.isfinite(y)
    if since_s is not None:
        kept &= t >= since_s + FIRST_MOMENTS_S
    t, y = t[kept], y[kept]
    if len(t) < LEAST_READINGS or t[-1] - t[0] < LEAST_SPAN_S:
        now = float(np.median(y[-5:])) if len(y) else float("nan")
        return Settling(verdict="too early", now=now, rate=0.0, last_s=float(t[-1]) if len(t) else 0.0)
    origin_s = float(t[0]) if since_s is None else since_s
    late = t - origin_s >= FORGOTTEN * (t[-1] - origin_s)
    x, y = t[late] - origin_s, y[late]
    if len(x) < LEAST_READINGS:
        x, y = t[-LEAST_READINGS:] - origin_s, np.asarray(values, np.float64)[kept][-LEAST_READINGS:]
    if not lags_s:
        lags_s, model_share = (_own_lag_s(x, y),), max(model_share, UNKNOWN_SHARE)
    trend = Trend(x, y, tuple(lags_s), noise, model_share)
    return _judged(trend, origin_s, max(lags_s), near, drift_limit)


def _judged(trend: Trend, origin_s: float, slowest_s: float, near: float, drift_limit: float) -> Settling:
    now, rate, bend = trend.now()[0], trend.rate(), trend.bend()
    grows = trend.growing > 0.5
    made = Settling(
        verdict="moving", now=now, rate=rate[0], rate_low=rate[1], rate_high=rate[2], growing=trend.growing,
        last_s=origin_s + trend.last_x, _origin_s=origin_s, _curve=trend.curve(growing=grows),
    )  # fmt: skip
    if trend.growing > GROWING_FOR_SURE and rate[1] * slowest_s > near and bend[1] > 0.0:
        return replace(made, verdict="running away")
    if grows:
        return made
    final, low, high = trend.final()
    if max(high - final, final - low) > WIDEST * trend.scale:
        return replace(made, verdict="too early")
    at_rest = max(abs(high - now), abs(low - now)) <= near and max(abs(rate[1]), abs(rate[2])) < drift_limit
    settled = at_rest and trend.growing < GROWING_AT_REST and trend.wander() <= near
    made = replace(made, verdict="settled" if settled else "moving", final=final, low=low, high=high)
    return replace(made, left_s=_left_s(made, final, near, _LAGS_AHEAD * trend.slowest_s))


def _left_s(made: Settling, final: float, near: float, longest_s: float) -> float:
    """Time (s) until the mean curve stays within `near` of the final value."""
    ahead_s = np.concatenate([[0.0], np.geomspace(0.5, max(longest_s, 1.0), 120)])
    away = np.abs(made.at(made.last_s + ahead_s) - final) - near
    outside = np.flatnonzero(away > 0.0)
    if not len(outside):
        return 0.0
    last = int(outside[-1])
    if last + 1 == len(ahead_s):
        return float(ahead_s[-1])
    part = away[last] / (away[last] - away[last + 1])
    return float(ahead_s[last] + part * (ahead_s[last + 1] - ahead_s[last]))


def _own_lag_s(x: Array, y: Array) -> float:
    """Time constant (s) of a single saturating curve through the readings, within what they can show."""
    span_s = float(x[-1] - x[0])
    found = fit_saturating(x - x[0], y - y[0], (float(y[-1] - y[0]), 2.0 / span_s))
    lag_s = 1.0 / found.b2 if found.converged else span_s
    return min(max(lag_s, 0.1 * span_s), 10.0 * span_s)
