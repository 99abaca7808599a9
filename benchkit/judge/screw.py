"""How a reading follows the trimmer's screw, and the words for how far a hand turns it.

A stage's answer to its bias is a junction and a resistor in series: far below the knee the emitter drop v grows
exponentially with the screw, far above it linearly.  u = v + knee*ln(v/target) follows the screw evenly on both sides
(circuit theory: V = I*R + n*VT*ln I).  For a reading that follows evenly by itself the knee is 0.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

KNEE_V: Final = 0.03
"""Of one emitter drop (V): a little more than kT/q = 26 mV, because the junctions of drivers and spreader move a little
too.  Our own, from the model: with it, double followers follow the screw within a tenth from 0.2 % to 400 % of the
target."""


@dataclass(frozen=True, kw_only=True)
class Scale:
    """Reading and u.

    Parameters
    ----------
    target, knee : float
        In the reading's unit.
    floor : float
        What lies less than this above `standing` can't be told from it.
    standing : float
        What is read without any bias: of a rail's current, what feeds and spreader draw.
    """

    target: float
    knee: float
    floor: float
    standing: float = 0.0

    def over(self, value: float) -> float:
        """Return what the bias adds to a reading, never less than `floor`."""
        return max(value - self.standing, self.floor)

    def even(self, value: float) -> float:
        """Return u at a reading."""
        over = self.over(value)
        return over + self.knee * math.log(over / (self.target - self.standing))

    def steepness(self, value: float) -> float:
        """Return du/dv at a reading."""
        return 1.0 + self.knee / self.over(value)

    def value_at(self, u: float) -> float:
        """Return the reading at u, by Newton's method on its logarithm.

        Started above the root, where the function is convex, it comes down to it without ever passing it.
        """
        if not self.knee:
            return self.standing + max(u, self.floor)
        target = self.target - self.standing
        start = log = math.log(max(u, target) / target)
        for _ in range(60):
            over = target * math.exp(log)
            step = (over + self.knee * log - u) / (over + self.knee)
            log -= step
            if abs(step) < 1e-10:
                break
        return self.standing + max(target * math.exp(min(log, start)), self.floor)


_AMOUNTS: Final = (
    (0.06, "a touch", 0.04),
    (0.18, "an eighth of a turn", 0.125),
    (0.37, "a quarter turn", 0.25),
    (0.62, "half a turn", 0.5),
    (0.87, "three quarters of a turn", 0.75),
    (1.25, "one turn", 1.0),
    (1.75, "one and a half turns", 1.5),
    (math.inf, "two turns", 2.0),
)
"""Up to so many turns: the words, and what they are taken for."""

ONE_TURN: Final = 1.5
"""A screw with no more than this from end to end is turned by degrees."""


def amount_words(turns: float, track: float) -> str:
    """Say an amount as a person turns by it; on a screw of about one turn, in degrees.

    Parameters
    ----------
    turns : float
        Not negative.
    track : float
        Turns from end to end; 0 where that is not known.
    """
    if 0.0 < track <= ONE_TURN:
        degrees = 360.0 * turns
        return "a touch" if degrees < 7.5 else f"about {max(10, 5 * round(degrees / 5.0))} degrees"
    return next(words for most, words, _ in _AMOUNTS if turns < most)


def rounded_down(turns: float, track: float) -> float:
    """Return the largest amount that there are words for and that is no more than `turns`, or else `turns` itself."""
    if 0.0 < track <= ONE_TURN:
        return turns
    return max((taken for _, _, taken in _AMOUNTS if taken <= turns), default=turns)


def taken_for(turns: float, track: float) -> float:
    """Return how far a hand turns that was told the words for an amount."""
    if 0.0 < track <= ONE_TURN:
        return turns
    return next(taken for most, _, taken in _AMOUNTS if turns < most)
