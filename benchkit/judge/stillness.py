"""Whether a reading stands still, or only creeps: its last moments, on what follows the screw evenly."""

from __future__ import annotations

from collections import deque
from typing import Final

from benchkit.judge.screw import Scale

CALM_S: Final = 0.8
CALM_SHARE: Final = 0.15
"""A stretch so long (s) in which the reading moves by less than this share of the tolerance is calm."""


class Stillness:
    """Looks at a stretch of readings.

    Parameters
    ----------
    scale : Scale
    tolerance : float
        Half of the distance between the limits.
    calm_s : float
        How long a stretch has to be; 0 where each reading counts for itself.
    """

    def __init__(self, scale: Scale, tolerance: float, calm_s: float) -> None:
        self._scale = scale
        self._share = CALM_SHARE * tolerance * scale.steepness(scale.target)
        self.calm_s = calm_s
        self._window: deque[tuple[float, float]] = deque()

    @property
    def last(self) -> tuple[float, float] | None:
        """The newest reading with its time."""
        return self._window[-1] if self._window else None

    def clear(self) -> None:
        """Forget the stretch: what comes is of another place."""
        self._window.clear()

    def limit(self, value: float, noise: float) -> float:
        """Return by how much (of what follows the screw evenly) a calm reading may move."""
        return max(3.0 * noise * self._scale.steepness(value), self._share)

    def add(self, t_s: float, value: float, noise: float) -> bool:
        """Take a reading; return whether it stands still over the stretch."""
        self._window.append((t_s, value))
        while self._window[0][0] < t_s - self.calm_s - 1e-9:
            self._window.popleft()
        if self.calm_s == 0.0:
            return True
        span_s = t_s - self._window[0][0]
        if len(self._window) < 3 or span_s < 0.6 * self.calm_s:
            return False
        half = len(self._window) // 2
        values = [self._scale.even(one) for _, one in self._window]
        first, second = values[:half], values[half:]
        moved = abs(sum(second) / len(second) - sum(first) / len(first))
        still = self.limit(value, noise)
        return max(values) - min(values) <= 2.0 * still and moved <= still
