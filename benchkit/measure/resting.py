"""Is a reading at rest, and is the probe on the point at all: judged reading by reading.

At rest
-------
A small standard deviation is no sign of rest: readings that follow each other closely hang together, and what creeps
slowly scatters little. So a reading is at rest when, over a whole window and with enough readings in it,

* they lie within the stated spread, from the lowest to the highest, and
* their slope is below the drift limit *with its uncertainty*: two standard errors, from the scatter about the line and
  widened for readings that hang together by sqrt((1 + r)/(1 - r)), r the correlation of neighbours (the usual result
  for an autoregressive series of first order, common practice). Scatter and correlation are those of up to two windows,
  so that a quiet stretch of something that wanders is not taken for rest.

A reading that leaves the spread starts the window again; what came before it says nothing about what comes after.

On the point
------------
An open lead shows itself by what it picks up: no number at all, an overload, hum that makes successive readings jump,
or next to nothing where the point has something. Where nothing is expected at the point, next to nothing says nothing,
and only the others tell. These are rules of the trade (common practice), and their figures are ours.
"""

from __future__ import annotations

import math
from collections import deque
from dataclasses import dataclass
from itertools import pairwise
from typing import Final, Literal

Placed = Literal["unknown", "on", "off", "moving"]

SURE: Final = 2.0
"""Standard errors of the slope that count against it."""
WINDOWS_KEPT: Final = 2.0
MOST_TOGETHER: Final = 0.95
"""Correlation of neighbours above this is taken as this: it can't be told from so few readings."""

LOOKED_AT: Final = 5
"""So many of the last readings tell where the probe is."""
HUM_NOISES: Final = 30.0
HUM_SHARE: Final = 0.2
STEP_NOISES: Final = 12.0
STEP_SHARE: Final = 0.02
NOTHING_SHARE: Final = 0.1
"""Below this share of the nearest limit a reading is next to nothing."""


@dataclass(frozen=True)
class RestView:
    """How far a reading has come to rest.

    Attributes
    ----------
    at_rest : bool
    share : float
        From 0 to 1 how much of the window is behind it; 1 only at rest.
    value : float or None
        Mean over the window, at rest.
    why : str
        What it waits for, in plain words.
    """

    at_rest: bool
    share: float
    value: float | None
    why: str


class Rest:
    """Judges a stream of readings.

    Parameters
    ----------
    window_s : float
        How long a reading has to stay (s).
    least : int
        How many readings the window has to hold, 3 or more.
    drift_limit : float
        Largest slope, per second.
    spread : float
        Largest distance from the lowest to the highest reading in the window.
    """

    def __init__(self, *, window_s: float, least: int, drift_limit: float, spread: float) -> None:
        if not (window_s > 0.0 and least >= 3 and drift_limit > 0.0 and spread > 0.0):
            raise ValueError(f"window {window_s} s, least {least}, drift limit {drift_limit}, spread {spread}")
        self.window_s, self.least, self.drift_limit, self.spread = window_s, least, drift_limit, spread
        self._kept: deque[tuple[float, float]] = deque()

    def clear(self) -> None:
        """Forget everything: the probe has moved."""
        self._kept.clear()

    def add(self, t_s: float, value: float) -> RestView:
        """Take a reading; a later one than the last, or all before it are forgotten."""
        if not (math.isfinite(t_s) and math.isfinite(value)) or (self._kept and t_s <= self._kept[-1][0]):
            self.clear()
        if not (math.isfinite(t_s) and math.isfinite(value)):
            return RestView(False, 0.0, None, "no reading")
        self._kept.append((t_s, value))
        left = self._drop_old(t_s)
        window = [one for one in self._kept if one[0] >= t_s - self.window_s * (1.0 + 1e-9)]
        span_s = window[-1][0] - window[0][0]
        step_s = span_s / max(len(window) - 1, 1)
        # One interval short of the window is all of it: readings come when they come.
        full_s = max(self.window_s - step_s * (1.0 + 1e-9), 0.0) if len(window) > 1 else self.window_s
        share = min(span_s / self.window_s, len(window) / self.least, 0.99)
        if span_s < full_s or len(window) < self.least:
            why = "it has just moved" if left else f"at rest {span_s:.1f} s of {self.window_s:.1f} s"
            if span_s >= full_s:
                why = f"{len(window)} of {self.least} readings"
            return RestView(False, share, None, why)
        slope, error = self._drift(window)
        if abs(slope) > self.drift_limit:
            return RestView(False, 0.5 * share, None, "rising" if slope > 0.0 else "falling")
        if abs(slope) + SURE * error > self.drift_limit:
            return RestView(False, 0.9 * share, None, "it wanders: not yet sure that it stays")
        return RestView(True, 1.0, math.fsum(value for _, value in window) / len(window), "at rest")

    def _drop_old(self, now_s: float) -> bool:
        """Leave out what is too old, and all up to the last reading that lies outside the spread."""
        while self._kept[0][0] < now_s - WINDOWS_KEPT * self.window_s:
            self._kept.popleft()
        low = high = self._kept[-1][1]
        inside = 0
        for _, value in reversed(self._kept):
            low, high = min(low, value), max(high, value)
            if high - low > self.spread:
                break
            inside += 1
        left = len(self._kept) > inside
        while len(self._kept) > inside:
            self._kept.popleft()
        return left

    def _drift(self, window: list[tuple[float, float]]) -> tuple[float, float]:
        """Slope over the window, and its standard error."""
        slope, scatter_here, _ = _line(window)
        _, scatter, together = _line(list(self._kept))
        mean_t = math.fsum(t for t, _ in window) / len(window)
        spread_t = math.sqrt(math.fsum((t - mean_t) ** 2 for t, _ in window))
        r = min(max(together, 0.0), MOST_TOGETHER)
        return slope, max(scatter, scatter_here) / spread_t * math.sqrt((1.0 + r) / (1.0 - r))


def _line(readings: list[tuple[float, float]]) -> tuple[float, float, float]:
    """Slope of a straight line, scatter about it (n - 2), and correlation of neighbouring residuals."""
    many = len(readings)
    mean_t = math.fsum(t for t, _ in readings) / many
    mean_v = math.fsum(v for _, v in readings) / many
    spread = math.fsum((t - mean_t) ** 2 for t, _ in readings)
    slope = math.fsum((t - mean_t) * (v - mean_v) for t, v in readings) / spread
    off = [v - mean_v - slope * (t - mean_t) for t, v in readings]
    square = math.fsum(one * one for one in off)
    if square <= 0.0:
        return slope, 0.0, 0.0
    together = math.fsum(a * b for a, b in pairwise(off)) / square
    # Residuals of a line through few readings look less alike than the readings are: by some 2/n (our own figure).
    return slope, math.sqrt(square / (many - 2)), together + 2.0 / many


class Probe:
    """Tells from the readings alone where the probe is.

    Parameters
    ----------
    noise : float
        Standard deviation of a reading with the probe on the point.
    low, high : float, optional
        Limits that are known for the point: they tell whether next to nothing can be a reading there.
    """

    def __init__(self, *, noise: float, low: float | None = None, high: float | None = None) -> None:
        self.noise = noise
        ends = [abs(end) for end in (low, high) if end is not None]
        one_side = low is not None and high is not None and low * high > 0.0
        self._nothing = NOTHING_SHARE * min(ends) if one_side else 0.0
        self._size = max(ends, default=0.0)
        self._last: deque[float | None] = deque(maxlen=LOOKED_AT)
        self._last_s = -math.inf

    def clear(self) -> None:
        """Forget what was read."""
        self._last.clear()
        self._last_s = -math.inf

    def add(self, t_s: float, value: float | None) -> Placed:
        """Take a reading, None for an overload or no answer; say where the probe is."""
        if t_s < self._last_s:
            self.clear()
        self._last_s = t_s
        self._last.append(value if value is not None and math.isfinite(value) else None)
        if self._last[-1] is None:
            return "off"
        numbers = [one for one in self._last if one is not None]
        if len(numbers) < min(3, len(self._last)) or len(self._last) < 3:
            return "unknown"
        if abs(numbers[-1]) < self._nothing and abs(numbers[-2]) < self._nothing:
            return "off"
        typical = max(self._size, abs(_median(numbers)))
        steps = [b - a for a, b in pairwise(numbers)]
        hum = max(HUM_NOISES * self.noise, HUM_SHARE * typical)
        step = max(STEP_NOISES * self.noise, STEP_SHARE * typical)
        turns = sum(1 for a, b in pairwise(steps) if a * b < 0.0 and min(abs(a), abs(b)) > hum)
        if turns:
            return "off"
        # A single step is a probe that found its point; the readings after it decide.
        if any(abs(one) > step for one in steps[-2:]) or None in self._last:
            return "moving"
        return "on"


def _median(values: list[float]) -> float:
    ordered = sorted(values)
    half = len(ordered) // 2
    return ordered[half] if len(ordered) % 2 else 0.5 * (ordered[half - 1] + ordered[half])
