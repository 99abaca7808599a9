"""How much of an answer to the screw even the slowest healthy unit would have shown by now.

A unit whose reading is known stands somewhere on its own curve of reading against turns.  From there so many turns do
so much; the least of all drawn units is what may be expected.  Where no model of units is at hand, the one figure that
the adviser goes by has to do, and near least bias nothing is expected of it.
"""

from __future__ import annotations

import math
from typing import Final, Protocol

import numpy as np
from numpy.typing import NDArray

from benchkit.judge.screw import Scale

NOISES: Final = 3.0
"""A reading is known within so many times its scatter."""

FAINT: Final = 0.05
"""Below this share of the target the one figure of the adviser says nothing of what comes next."""

UNSURE: Final = 0.5
"""How much of what the one figure says may be expected of a unit."""


class Answers(Protocol):
    """Whoever knows what may be expected."""

    def least_change(self, value: float, turns: float, noise: float) -> float:
        """Return by how much a healthy unit's reading moves at least, not negative.

        Parameters
        ----------
        value : float
            The reading from which the screw is turned.
        turns : float
            Positive for more bias.
        noise : float
            Standard deviation of a reading.
        """


class OfUnits:
    """By the curves of drawn units.

    Parameters
    ----------
    turns : array, shape (steps,)
        From the least-bias end, rising.
    values : array, shape (steps, units)
        Readings; a unit with a nan is left out.
    """

    def __init__(self, turns: NDArray[np.float64], values: NDArray[np.float64]) -> None:
        whole = ~np.isnan(values).any(axis=0)
        if not whole.any():
            raise ValueError("no unit has a reading all along its track")
        self._turns = turns
        # Between the steps a reading grows about by a constant factor, never by a constant amount.
        rising = np.maximum.accumulate(np.maximum(values[:, whole], 1e-12), axis=0)
        self._logs = [np.log(curve) for curve in rising.T]

    def least_change(self, value: float, turns: float, noise: float) -> float:
        """Return by how much the slowest unit's reading moves at least."""
        # The place where a move of this kind does least, among those at which the reading may be.
        place = math.log(max(value - math.copysign(NOISES * noise, turns), 1e-12))
        least = math.inf
        for logs in self._logs:
            here = self._place(logs, place, turns)
            there = min(max(here + turns, 0.0), float(self._turns[-1]))
            before, after = (math.exp(float(np.interp(one, self._turns, logs))) for one in (here, there))
            least = min(least, abs(after - before))
        return least

    def _place(self, logs: NDArray[np.float64], log: float, turns: float) -> float:
        """Return where a unit reads so much: the first such place before a move up, the last one before a move down."""
        after = int(np.searchsorted(logs, log, side="left" if turns > 0.0 else "right"))
        if after in (0, len(logs)):
            return float(self._turns[min(after, len(logs) - 1)])
        share = (log - logs[after - 1]) / max(logs[after] - logs[after - 1], 1e-12)
        return float(self._turns[after - 1] + share * (self._turns[after] - self._turns[after - 1]))


class OfSlope:
    """By the change of what follows the screw evenly, for each turn."""

    def __init__(self, scale: Scale, slope: float) -> None:
        self._scale, self._slope = scale, slope

    def least_change(self, value: float, turns: float, noise: float) -> float:
        """Return by how much a reading moves at least; nothing is expected near least bias."""
        scale = self._scale
        if value - scale.standing < max(FAINT * (scale.target - scale.standing), NOISES * scale.floor):
            return 0.0
        here = scale.even(value)
        return abs(scale.value_at(here + UNSURE * turns * self._slope) - scale.value_at(here))
