"""A reading's trend as a mixture of sums of exponentials: value, slope, bend and final value, each with an interval.

The trend of readings is taken as

    y(x) = final + A e^(-x/L) + B e^(-2x/L) + C (x/L) e^(-x/L) + sum of A_k e^(-x/l_k)

with x the time since the last disturbance and L the slowest time constant, which is known only roughly. So there is a
grid of values of L around the design's, and for each value, and for each of some sizes that the slowest part
may have, a linear regression (Bayes: Gaussian priors on the amplitudes, the final value as good as free), with the
weight that its evidence gives it. In it

* the second power belongs to a loop that isn't linear: its time constant moves on the way, to second order by
  e^(-2x/L);
* the part with x/L carries values of L between those of the grid;
* both of these are in proportion to A, so that there are two rounds: the first finds how large A is, the second allows
  them their share of it. As shares of the size that A might have had they would stand for several times as much, and
  the intervals after a trim would hold 98 % of the time;
* the l_k are spaced closely around and between the design's other time constants, so that these needn't be known well
  either, and what bends in the quick parts has room; from cold a quick part can be nearly as large as the reading, and
  what its prior forbids it turns up in the slow part, always with the same sign;
* a few time constants are much longer than the design's, and some slowest parts *grow*, both with little weight
  beforehand.

Readings are averaged in blocks that grow with time (`MOST_BLOCKS` at most), so that a thousand readings take the same
few milliseconds as fifty. Scatter above the stated one, in steps from reading to reading or about the best curve,
widens everything.
"""

from __future__ import annotations

from typing import Final

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

MOST_BLOCKS: Final = 120
MOST_TOGETHER: Final = 0.95
"""Correlation of neighbouring residuals above this is taken as this."""
FLOOR: Final = 5e-5
"""Standard deviation of a final value that nobody can promise to go below, as a share of the reading; our own."""
LEAST_NOISE: Final = 2e-5
"""Scatter that is taken at least, as a share of the reading."""

_GROWING_PRIOR = 0.02
_LONG_TAIL = 0.002
_AMPLITUDES = np.array([0.001, 0.01, 0.1])
"""Sizes that the slowest part may have, as shares of the reading, each as likely as the others; simulated warm-ups show
0.3 % to 12 % from cold, 0.1 % to 10 % after a trim. A size far below would promise, where noise hides the slow part,
that there is none."""
_FAST_AMPLITUDE = 1.0
"""Of each quick part, as a share of the reading."""
_BEND_SHARE = 0.05
"""Of the second power, as a share of the slowest part: in simulated warm-ups some 3 %, nine tenths below 10 %."""
_KEPT = 1e-9
"""Least weight with which a slowest part goes into the second round."""
_SLOW = np.linspace(-2.4, 2.4, 9)
"""Factors on the slowest time constant, in standard deviations of their logarithm."""
_SHOULDER = 0.35
"""Part of that deviation that is no rectangle: 6 % of the time constant, by which units of one build differ."""
_LONGER = np.array([2.0, 4.0])
_GROWTHS = np.geomspace(0.1, 12.0, 10)
"""Growth rates, in units of the slowest time constant's rate."""
_RATIO = 1.4
"""Between neighbouring quicker time constants. With 1.5 those of the design show through (the intervals from cold hold
1 % to 3 % less, all on one side), with 1.8 those from cold hold 70 %."""
_APART = 1e-3


class Trend:
    """The mixture, fitted.

    Parameters
    ----------
    x, y : array of shape (readings,)
        Times (s) since the last disturbance, rising, and readings.
    lags_s : sequence of float
        The design's time constants (s), one or more.
    noise : float
        Standard deviation of a reading.
    share : float
        Standard deviation of the logarithm of the slowest time constant.

    Attributes
    ----------
    level : float
        What amplitudes and values are told from: a reading of the end.
    scale : float
        Size of the readings.
    last_x : float
        Time of the last reading.
    growing : float
        Probability that the slowest part grows.
    """

    def __init__(self, x: Array, y: Array, lags_s: tuple[float, ...], noise: float, share: float) -> None:
        self.last_x = float(x[-1])
        self.level = float(np.median(y[-5:]))
        self.scale = max(abs(self.level), float(np.ptp(y)), 1e-12)
        steps = np.diff(y)
        scatter = 1.4826 * float(np.median(np.abs(steps - np.median(steps)))) / np.sqrt(2.0)
        self._noise = max(noise, scatter, LEAST_NOISE * self.scale)
        self._x, self._y, self._many = _blocks(x, y - self.level)
        self._grid(sorted(lags_s, reverse=True), share)
        self._solve()
        misfit = self._misfit()
        if misfit > 1.0:
            self._noise *= np.sqrt(misfit)
            self._solve()
        self.growing = float(self._weight[self._grows].sum())
        self._second_round()

    @property
    def slowest_s(self) -> float:
        """Likeliest time constant (s) of the slowest part that does not grow."""
        return 1.0 / float(self._per_s[self._best, 0])

    def _grid(self, ordered: list[float], share: float) -> None:
        """Make rates (per s), prior weights and columns; all sizes of one slowest part stand beside each other."""
        weight = _known_within(_SLOW)
        weight *= (1.0 - _LONG_TAIL) / weight.sum()
        first = np.concatenate([np.exp(-share * _SLOW), 1.0 / _LONGER, -_GROWTHS]) / ordered[0]
        stays = np.concatenate([weight, np.full(len(_LONGER), _LONG_TAIL / len(_LONGER))])
        prior = np.concatenate([(1.0 - _GROWING_PRIOR) * stays, np.full(len(_GROWTHS), _GROWING_PRIOR / len(_GROWTHS))])
        sizes = len(_AMPLITUDES)
        self._log_prior = np.log(np.repeat(prior, sizes) / sizes)
        faster = _spectrum(ordered)
        self._per_s = np.empty((len(first), 2 + len(faster)))
        self._per_s[:, 0], self._per_s[:, 1], self._per_s[:, 2:] = first, 2.0 * first, 1.0 / faster
        decays = self._decays(self._x)
        between = first[:, None, None] * self._x[None, :, None] * decays[:, :, :1]
        self._columns = np.concatenate([np.ones_like(between), decays, between], axis=2)
        self._per_s = np.repeat(self._per_s, sizes, axis=0)
        self._grows = self._per_s[:, 0] < 0.0
        slow = np.tile(_AMPLITUDES, len(first)) * self.scale
        spread = np.full((len(self._per_s), self._columns.shape[2]), _FAST_AMPLITUDE * self.scale)
        self._between = max(share, 1e-3) * (_SLOW[1] - _SLOW[0]) / np.sqrt(12.0)
        spread[:, 0], spread[:, 1], spread[:, 2], spread[:, -1] = (
            10.0 * self.scale,
            slow,
            _BEND_SHARE * slow,
            self._between * slow,
        )
        self._wanted = 1.0 / spread**2

    def _second_round(self) -> None:
        """Regress again, with what is in proportion to the slowest part in proportion to its size as found.

        Whether the slowest part grows has been weighed in the first round; that stays. In the second, what wanders
        without any exponential in it would count as growing, because the second power couldn't follow it.
        """
        sizes = len(_AMPLITUDES)
        kept = self._weight.reshape(-1, sizes).sum(axis=1) > _KEPT
        kept[self._best // sizes] = True
        self._columns, every = self._columns[kept], np.repeat(kept, sizes)
        found = np.sqrt(self._b[every, 1] ** 2 + self._cover[every, 1, 1])
        self._per_s, self._grows = self._per_s[every], self._grows[every]
        self._log_prior, self._wanted = self._log_prior[every], self._wanted[every]
        rests = ~self._grows
        self._wanted[rests, 2] = (_BEND_SHARE * found[rests]) ** -2
        self._wanted[rests, -1] = (self._between * found[rests]) ** -2
        self._solve()
        for which, share in ((self._grows, self.growing), (rests, 1.0 - self.growing)):
            self._weight[which] *= share / max(float(self._weight[which].sum()), 1e-300)

    def _decays(self, x: Array) -> Array:
        """Shape (grid, times, parts); growing parts are one at the last reading, the others at x = 0."""
        from_x = np.where(self._per_s < 0.0, self.last_x, 0.0)
        return np.asarray(np.exp(-self._per_s[:, None, :] * (x[None, :, None] - from_x[:, None, :])))

    def _solve(self) -> None:
        """Regress at every point of the grid, and weigh the points."""
        by = np.sqrt(self._many) / self._noise
        columns, y, sizes = self._columns * by[None, :, None], self._y * by, len(_AMPLITUDES)
        normal = np.repeat(np.swapaxes(columns, 1, 2) @ columns, sizes, axis=0)
        parts = np.arange(normal.shape[1])
        normal[:, parts, parts] += self._wanted
        root = np.linalg.cholesky(normal)
        inverse = np.linalg.inv(root)
        self._cover = np.swapaxes(inverse, 1, 2) @ inverse
        aim = np.repeat(np.einsum("gmp,m->gp", columns, y), sizes, axis=0)
        self._b = (self._cover @ aim[:, :, None])[:, :, 0]
        curves = columns @ np.swapaxes(self._b.reshape(-1, sizes, len(parts)), 1, 2)
        self._off = y - np.swapaxes(curves, 1, 2).reshape(len(self._b), -1)
        fit = np.einsum("gm,gm->g", self._off, self._off) + (self._b**2 * self._wanted).sum(axis=1)
        logs = -0.5 * fit - np.log(np.diagonal(root, axis1=1, axis2=2)).sum(axis=1)
        logs += 0.5 * np.log(self._wanted).sum(axis=1) + self._log_prior
        self._best = int(np.argmax(np.where(self._grows, -np.inf, logs)))
        weight = np.exp(logs - logs.max())
        self._weight = weight / weight.sum()

    def _misfit(self) -> float:
        """By how much the variance of what is left exceeds the stated one; 1.0 where it doesn't for sure."""
        free = max(len(self._x) - self._columns.shape[2], 1)
        off = self._off[self._best]
        excess = float(off @ off) / free
        return excess if excess > 1.0 + 2.0 * np.sqrt(2.0 / free) else 1.0

    def wander(self) -> float:
        """Two standard deviations of what the best curve leaves, widened where residuals hang together."""
        off = self._off[self._best] / np.sqrt(self._many) * self._noise
        square = max(float(off @ off), 1e-300)
        # So few residuals look less alike than they are, by some 2/n (our own figure).
        together = min(max(float(off[1:] @ off[:-1]) / square + 2.0 / len(off), 0.0), MOST_TOGETHER)
        return 2.0 * float(np.sqrt(square / len(off) * (1.0 + together) / (1.0 - together)))

    def now(self) -> tuple[float, float, float]:
        """Value at the last reading, and its 95 % interval."""
        here, fall = self._here()
        z = self._per_s[:, :1] * self.last_x
        return self._of(np.concatenate([np.ones_like(z), here, z * fall], axis=1))

    def rate(self) -> tuple[float, float, float]:
        """Slope (per s) at the last reading, and its 95 % interval."""
        here, fall = self._here()
        slow = self._per_s[:, :1]
        z = slow * self.last_x
        return self._of(np.concatenate([np.zeros_like(z), -self._per_s * here, slow * (1.0 - z) * fall], axis=1))

    def bend(self) -> tuple[float, float, float]:
        """Second derivative (per s²) at the last reading, and its 95 % interval."""
        here, fall = self._here()
        slow = self._per_s[:, :1]
        z = slow * self.last_x
        return self._of(np.concatenate([np.zeros_like(z), self._per_s**2 * here, slow**2 * (z - 2.0) * fall], axis=1))

    def final(self) -> tuple[float, float, float]:
        """Final value of trends that don't grow, and its 95 % interval; not a number where these have no weight."""
        row = np.zeros_like(self._b)
        row[:, 0] = 1.0
        return self._of(row, np.where(self._grows, 0.0, self._weight), FLOOR * self.scale, self.level)

    def _here(self) -> tuple[Array, Array]:
        here = self._decays(np.array([self.last_x]))[:, 0, :]
        return here, here[:, :1]

    def _of(
        self, row: Array, weight: Array | None = None, floor: float = 0.0, level: float | None = None
    ) -> tuple[float, float, float]:
        """Mean and 95 % interval of row . b over the mixture; `row` of shape (grid, columns)."""
        weight = self._weight if weight is None else weight
        total = float(weight.sum())
        if total <= 0.0:
            return float("nan"), -np.inf, np.inf
        level = self.level * float(row[0, 0]) if level is None else level
        mean = np.einsum("gp,gp->g", row, self._b) + level
        sd = np.sqrt(np.maximum(np.einsum("gp,gpq,gq->g", row, self._cover, row), 0.0) + floor**2)
        return _interval(mean, sd, weight / total)

    def curve(self, *, growing: bool) -> tuple[float, Array, Array]:
        """Mean curve of all that grow, or of all others: constant, amplitudes at x = 0, and rates (per s)."""
        weight = np.where(self._grows == growing, self._weight, 0.0)
        keep = np.flatnonzero(weight > 1e-4 * weight.sum())
        if not len(keep):
            return self.level, np.empty(0), np.empty(0)
        share = weight[keep] / weight[keep].sum()
        per_s, b = self._per_s[keep], self._b[keep]
        at_zero = np.exp(per_s * np.where(per_s < 0.0, self.last_x, 0.0))
        amplitudes = share[:, None] * b[:, 1:-1] * at_zero
        # r x e^(-r x) is written as the difference of two exponentials whose rates lie a little apart.
        apart, slow = share * b[:, -1] * at_zero[:, 0] / (2.0 * _APART), per_s[:, 0]
        return (
            self.level + float(share @ b[:, 0]),
            np.concatenate([amplitudes.ravel(), apart, -apart]),
            np.concatenate([per_s.ravel(), slow * (1.0 - _APART), slow * (1.0 + _APART)]),
        )


def _known_within(deviations: Array) -> Array:
    """Weight (not normed) of a value so many standard deviations off, for one that is known to lie within bounds.

    A rectangle with shoulders: only bounds are known of a thermal capacity (JCGM 100, 4.3.7), and units differ a little
    on top. A normal distribution of the same deviation has tails that this doesn't fill: with it intervals hold 1 % to
    2 % more often than they state.
    """
    half = np.sqrt(3.0 * (1.0 - _SHOULDER**2))
    return _normal_below((half - deviations) / _SHOULDER) - _normal_below((-half - deviations) / _SHOULDER)


def _spectrum(ordered: list[float]) -> Array:
    """Time constants (s) of the faster parts: closely spaced around and between the design's, the longest first."""
    slowest = min(1.3 * (ordered[1] if len(ordered) > 1 else 0.1 * ordered[0]), 0.6 * ordered[0])
    fastest = 0.7 * min(ordered[-1], slowest)
    count = max(2, 1 + int(np.ceil(np.log(slowest / fastest) / np.log(_RATIO))))
    return np.geomspace(slowest, fastest, count)


def _blocks(x: Array, y: Array) -> tuple[Array, Array, Array]:
    """Average in blocks that grow with time: times, values, and how many readings each holds."""
    if len(x) <= MOST_BLOCKS:
        return x, y, np.ones(len(x))
    even = (x - x[0]) / float(x[-1] - x[0])
    grown = np.log1p(even * 30.0) / np.log(31.0)
    label = np.floor((0.5 * even + 0.5 * grown) * (MOST_BLOCKS - 1e-9)).astype(np.intp)
    _, row, many = np.unique(label, return_inverse=True, return_counts=True)
    return np.bincount(row, x) / many, np.bincount(row, y) / many, many.astype(np.float64)


def _interval(mean: Array, sd: Array, weight: Array) -> tuple[float, float, float]:
    """Mean and central 95 % interval of a mixture of normal distributions."""
    keep = weight > 1e-6
    mean, sd, weight = mean[keep], np.maximum(sd[keep], 1e-300), weight[keep] / weight[keep].sum()
    lowest, highest = float((mean - 6.0 * sd).min()), float((mean + 6.0 * sd).max())
    ends: list[float] = []
    for wanted in (0.025, 0.975):
        low, high = lowest, highest
        for _ in range(3):
            places = np.linspace(low, high, 33)
            below = _normal_below((places[:, None] - mean) / sd) @ weight
            at = int(np.clip(np.searchsorted(below, wanted), 1, len(places) - 1))
            low, high = float(places[at - 1]), float(places[at])
        ends.append(0.5 * (low + high))
    return float(weight @ mean), ends[0], ends[1]


def _normal_below(z: Array) -> Array:
    """Standard normal distribution function, to 1e-7 (Abramowitz and Stegun, 26.2.17, from memory)."""
    size = np.abs(z)
    k = 1.0 / (1.0 + 0.2316419 * size)
    tail = k * (0.319381530 + k * (-0.356563782 + k * (1.781477937 + k * (-1.821255978 + k * 1.330274429))))
    above = tail * np.exp(-0.5 * size * size) / np.sqrt(2.0 * np.pi)
    return np.asarray(np.where(z < 0.0, above, 1.0 - above))
