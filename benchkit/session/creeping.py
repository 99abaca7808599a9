"""Where a live reading is heading: the trend that is kept of it, its noise, and what is said of its rest.

Rules
-----
* Digits never wait for a fit: readings go in with `add`, and `look` works out the prediction afterwards, at most every
  `LOOK_S` of the session's time.
* The trend holds the last readings one by one, and all before them averaged in steps that grow when there get too many.
* Averages have less scatter than single readings, and the prediction is told so; what successive readings have in
  common is counted there (`benchkit.measure.settling`).
"""

from __future__ import annotations

import math
import statistics
from collections import deque
from dataclasses import dataclass
from typing import TYPE_CHECKING, Final

from benchkit import quantities

if TYPE_CHECKING:
    from benchkit.measure.settling import Settling

SINGLE: Final = 60
"""So many of the last readings are kept one by one."""

MOST_MEANS: Final = 240
FIRST_STEP_S: Final = 1.0

LOOK_S: Final = 1.0
"""A prediction is made anew no more often than this (s, the session's time)."""

CURVE_POINTS: Final = 40
LEAST_CURVE_S: Final = 20.0
MOST_CURVE_S: Final = 600.0

TRUSTED_SHARE: Final = 0.5
"""A predicted rest is aimed by when its interval is no wider than this share of the limits' width."""

LEAST_STEPS: Final = 5


class Trend:
    """Readings over time, at most a few hundred points whatever comes."""

    def __init__(self) -> None:
        self._single: deque[tuple[float, float]] = deque()
        self._means: list[tuple[float, float, int]] = []
        self._step_s = FIRST_STEP_S
        self._open: list[tuple[float, float]] = []

    def add(self, t_s: float, value: float) -> None:
        """Take a reading in; times never go back."""
        self._single.append((t_s, value))
        if len(self._single) > SINGLE:
            self._leave(self._single.popleft())

    def _leave(self, reading: tuple[float, float]) -> None:
        if self._open and reading[0] - self._open[0][0] >= self._step_s:
            self._close()
        self._open.append(reading)

    def _close(self) -> None:
        count = len(self._open)
        t_s, value = (math.fsum(column) / count for column in zip(*self._open, strict=True))
        self._means.append((t_s, value, count))
        self._open = []
        if len(self._means) > MOST_MEANS:
            self._step_s *= 2.0
            pairs = zip(self._means[0::2], self._means[1::2], strict=False)
            odd = self._means[-1:] if len(self._means) % 2 else []
            self._means = [_joined(first, second) for first, second in pairs] + odd

    def points(self, since_s: float = -math.inf) -> tuple[tuple[float, float], ...]:
        """Give (seconds, value), oldest first."""
        means = [(t_s, value) for t_s, value, _ in self._means]
        return tuple(point for point in (*means, *self._open, *self._single) if point[0] >= since_s)

    def noise(self, since_s: float = -math.inf) -> float:
        """Standard deviation of a single reading, from how three in a row differ from a straight line; 0 if unknown.

        Second differences of readings that are independent have six times their variance; the median of their sizes
        is 0.6745 of their standard deviation.  Moves of the screw among few readings pass for noise: leave them out.
        """
        values = [value for t_s, value in self._single if t_s > since_s]
        bends = [abs(values[n - 1] - 2.0 * values[n] + values[n + 1]) for n in range(1, len(values) - 1)]
        if len(bends) < LEAST_STEPS:
            return 0.0
        return statistics.median(bends) / 0.6745 / math.sqrt(6.0)

    @property
    def last(self) -> tuple[float, float] | None:
        """The newest reading with its time."""
        return self._single[-1] if self._single else None

    def __len__(self) -> int:
        return len(self._means) + len(self._open) + len(self._single)


def _joined(first: tuple[float, float, int], second: tuple[float, float, int]) -> tuple[float, float, int]:
    count = first[2] + second[2]
    mean = [(first[2] * first[n] + second[2] * second[n]) / count for n in (0, 1)]
    return mean[0], mean[1], count


@dataclass(frozen=True, kw_only=True)
class Told:
    """What a screen is told of a creeping reading; the fields are those of `benchkit.session.front.LiveView`."""

    rate_text: str = ""
    settles_text: str = ""
    predicted: tuple[tuple[float, float], ...] = ()
    settles_low: float | None = None
    settles_high: float | None = None


class Creep:
    """Follows one reading.

    Parameters
    ----------
    unit : str
    low, high : float
        The limits that it should end in.
    lags_s : tuple of float
        Thermal time constants of the design (s); without any, nothing is predicted.
    drift_limit : float
        Per second; a reading that moves faster has not settled.
    since_s : float
        The moment of the last disturbance, in the session's time.
    """

    def __init__(
        self, unit: str, low: float, high: float, lags_s: tuple[float, ...], drift_limit: float, since_s: float
    ) -> None:
        self.trend = Trend()
        self.settling: Settling | None = None
        self.lags_s = lags_s
        self._unit = unit
        self._low, self._high = low, high
        self._near = 0.25 * (high - low) / 2.0
        self._drift_limit = drift_limit
        self._since_s = since_s
        self._looked_s = -math.inf
        self._noise = 0.0

    @property
    def noise(self) -> float:
        """Standard deviation of a single reading, from undisturbed stretches alone; 0 as long as it is unknown."""
        self._noise = self.trend.noise(self._since_s) or self._noise
        return self._noise

    def add(self, t_s: float, value: float) -> None:
        """Take a reading in."""
        self.trend.add(t_s, value)

    def disturbed(self, t_s: float) -> None:
        """Take note that the screw or the rails have moved: what was before says nothing of what comes."""
        if t_s > self._since_s:
            self._since_s, self.settling = t_s, None

    def look(self, now_s: float, every_s: float = LOOK_S) -> Settling | None:
        """Work out the prediction anew, if it is time to: `every_s` after the last one."""
        if not self.lags_s or now_s - self._looked_s < every_s:
            return self.settling
        from benchkit.measure.settling import predict

        self._looked_s = now_s
        points = self.trend.points(self._since_s)
        if not points:
            return None
        times_s, values = zip(*points, strict=True)
        self.settling = predict(
            times_s, values, lags_s=self.lags_s, noise=self.noise, near=self._near,
            drift_limit=self._drift_limit, since_s=self._since_s,
        )  # fmt: skip
        return self.settling

    @property
    def rest(self) -> float | None:
        """Where it will come to rest, where that is known well enough to aim by."""
        found = self.settling
        if found is None or found.final is None or found.low is None or found.high is None:
            return None
        if found.high - found.low > TRUSTED_SHARE * (self._high - self._low):
            return None
        return found.final

    @property
    def running_away(self) -> bool:
        """It rises by itself, faster and faster."""
        return self.settling is not None and self.settling.verdict == "running away"

    def told(self, now_s: float) -> Told:
        """Put what is known into words and a curve."""
        found = self.settling
        if found is None or found.verdict == "too early":
            return Told()
        rate_text = rate_words(found.rate, self._unit, self._drift_limit)
        if found.final is None or found.low is None or found.high is None:
            return Told(rate_text=rate_text, predicted=_curve(found, now_s))
        return Told(
            rate_text=rate_text,
            settles_text=rest_words(found, self._unit, now_s),
            predicted=_curve(found, now_s),
            settles_low=found.low,
            settles_high=found.high,
        )


def rate_words(per_s: float, unit: str, still: float) -> str:
    """Say how fast a reading moves: "rising 0.12 mV/min"; one that moves by less than a tenth of `still` rests."""
    if abs(per_s) < 0.1 * still:
        return "hardly moving"
    return f"{'rising' if per_s > 0.0 else 'falling'} {quantities.show(abs(60.0 * per_s), unit, 2)}/min"


def rest_words(found: Settling, unit: str, now_s: float) -> str:
    """Say where a reading will rest, how surely, and when: "will rest at 20.4 mV ± 0.2 mV, in 1 min 40 s"."""
    assert found.final is not None
    assert found.low is not None
    assert found.high is not None
    spread = max(found.high - found.final, found.final - found.low)
    place = quantities.show(found.final, unit, 3)
    sure = f"{place} ± {quantities.show(spread, unit, 2)}" if spread > 0.0 else place
    left_s = None if found.left_s is None else found.left_s - (now_s - found.last_s)
    if left_s is None:
        return f"will rest at {sure}"
    if left_s <= 0.0:
        return f"rests at {sure}"
    return f"will rest at {sure}, in {left_words(left_s)}"


def left_words(seconds: float, *, exact: bool = False) -> str:
    """Say a time as a person counts it: "12 s", "1 min 40 s", "12 min"; with the seconds of a long one if `exact`."""
    whole = max(round(seconds), 1)
    if whole < 60:
        return f"{whole} s"
    minutes, rest = divmod(whole, 60)
    return f"{minutes} min" if rest == 0 or (minutes >= 10 and not exact) else f"{minutes} min {rest} s"


def _curve(found: Settling, now_s: float) -> tuple[tuple[float, float], ...]:
    ahead_s = MOST_CURVE_S if found.left_s is None else min(max(2.5 * found.left_s, LEAST_CURVE_S), MOST_CURVE_S)
    if found.verdict == "running away":
        ahead_s = LEAST_CURVE_S
    times_s = [now_s + ahead_s * n / (CURVE_POINTS - 1) for n in range(CURVE_POINTS)]
    values = (float(value) for value in found.at(times_s))
    return tuple(point for point in zip(times_s, values, strict=True) if math.isfinite(point[1]))
