"""Whether the probes have left the point that was read last.

Rules
-----
* They have when they were seen off for `OFF_S` in `LEAST_OFF` readings: no number, hum, next to nothing, or away from
  both the last point's level and the limits of the next.  Single readings never count.
* Or when a new level has come by a step and rests, farther from the old one than `STEP_NOISES` and `STEP_SHARE`; but
  not where the old level lies inside the limits of the next point: the unit itself may have moved by as much.
* What drifts away from the old level takes it along, and is no step; nor has anything arrived that glides into the
  limits, as the charge of a lead in the air does.
"""

from __future__ import annotations

from collections import deque
from typing import Final

OFF_S: Final = 0.4
LEAST_OFF: Final = 3
STEP_NOISES: Final = 5.0
STEP_SHARE: Final = 0.02
LEVEL_READINGS: Final = 3
LEVEL_KEPT: Final = 8
NOTHING_SHARE: Final = 0.1
"""Below this share of the nearest limit a reading is next to nothing."""


class Leaving:
    """Watches a stream of readings, from the moment at which the next point was asked for.

    Parameters
    ----------
    low, high : float or None
        Limits of the next point.
    noise : float
        Standard deviation of a reading.
    """

    def __init__(self, low: float | None, high: float | None, noise: float) -> None:
        self._low, self._high, self._noise = low, high, noise
        self._nothing = 0.0
        if low is not None and high is not None and low * high > 0.0:
            self._nothing = NOTHING_SHARE * min(abs(low), abs(high))
        self._level: float | None = None
        self._lately: deque[float] = deque(maxlen=LEVEL_KEPT)
        self._off_since_s: float | None = None
        self._off_many = 0
        self._on_many = 0
        self._stepped = False
        self._left = False
        self._last: tuple[float | None, bool] = (None, False)

    def add(self, t_s: float, value: float | None, *, hums: bool) -> None:
        """Take a reading; None for an overload or no number, `hums` when it jumps like a lead in the air."""
        if self._is_off(value, hums=hums):
            if self._off_since_s is None:
                self._off_since_s, self._off_many = t_s, 0
            self._off_many += 1
            self._on_many = 0
            if self._off_many >= LEAST_OFF and t_s - self._off_since_s >= OFF_S - 1e-9:
                self._left = True
        else:
            self._on_many += 1
            last, hummed = self._last
            if self._off_since_s is not None and last is not None and value is not None and not hummed:
                self._left = self._left and (self._on_many > 1 or self._apart(value, last))
            if self._on_many > 1:  # one that happens to lie elsewhere is no end of it
                self._off_since_s = None
        if value is not None:
            self._follow(value, self._last[0])
        self._last = value, hums

    def has_left(self, resting: float) -> bool:
        """Whether what rests there now is of another point than before."""
        if self._left:
            return True
        old = self._level
        if old is None or not self._stepped or self._inside(old):
            return False
        return self._apart(resting, old)

    def _is_off(self, value: float | None, *, hums: bool) -> bool:
        if value is None:
            return True
        if self._level is not None and not self._apart(value, self._level):
            return False
        return hums or abs(value) < self._nothing or not self._inside(value)

    def _inside(self, value: float) -> bool:
        if self._low is None or self._high is None:
            return True
        return self._low <= value <= self._high

    def _apart(self, value: float, old: float) -> bool:
        return abs(value - old) > max(STEP_NOISES * self._noise, STEP_SHARE * max(abs(value), abs(old)))

    def _follow(self, value: float, last: float | None) -> None:
        """Learn the old level, and follow it as long as it only drifts."""
        if self._level is not None:
            if self._apart(value, self._level):
                if not self._stepped and last is not None and not self._apart(value, last):
                    self._lately.clear()
                    self._lately.append(value)
                    self._level = value
                else:
                    self._stepped = True
            elif not self._left:
                self._stepped = False
                self._lately.append(value)
                self._level = sum(self._lately) / len(self._lately)
            return
        if self._lately and self._apart(value, self._lately[-1]):
            self._lately.clear()
        self._lately.append(value)
        if len(self._lately) >= LEVEL_READINGS and not self._left:
            self._level = sum(self._lately) / len(self._lately)
