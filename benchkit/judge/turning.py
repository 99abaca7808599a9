"""How far to turn the screw from here, and the words for it: arithmetic of the adviser in `benchkit.judge.trimming`."""

from __future__ import annotations

import math
from typing import Final

from benchkit import quantities
from benchkit.judge.screw import ONE_TURN, Scale, amount_words, rounded_down

NEAR: Final = 0.5
"""Within this share of the tolerance around the target nothing needs to be turned any more."""

LEAST_NEAR: Final = 0.1
"""The same for a meter that leaves nearly all of the tolerance open: nearer no hand has to come."""

MOST_TURNS: Final = 2.0
"""Never more in one go."""

UNKNOWN_SHARE: Final = 0.5
"""Of what the model says, as long as this unit has not answered a move."""

ONE_STEP: Final = 1.0
"""So many turns at most go to the target in one step; more are too far for a hand and for a slope learned half (our own
figure: two turns that became two and a half took a healthy unit into its current limit)."""

FIRST_STEP: Final = 0.6
"""The first step's share of more than that, down to `ONE_STEP`."""

BLIND_TURNS: Final = 0.25
"""The first move where there is no model."""

SEVERAL: Final = 1.5
"""From so many times the most on, it is said how many turns there are to go."""

SLACK_S: Final = 10.0
"""So long the word about slack stands, once in a trim (s)."""

SLACK: Final = "; come from below, so that slack is taken up"
"""Of the screw: common practice."""


def near(half: float, guard: float) -> float:
    """Return how far from the target nothing needs to be turned any more.

    Parameters
    ----------
    half : float
        From the target to a limit.
    guard : float
        How far inside the limits a reading has to be for its meter to be sure of it.
    """
    return max(min(NEAR * half, half - guard), LEAST_NEAR * half)


def coarse_turns(turns: float) -> str:
    """Say how many turns there are to go, as coarsely as it is known.

    Examples
    --------
    >>> coarse_turns(3.4), coarse_turns(7.2), coarse_turns(12.0), coarse_turns(23.0)
    ('3 to 5', '5 to 10', '10 to 20', 'more than 20')
    """
    for low, high in ((2, 3), (3, 5), (5, 10), (10, 20)):
        if turns < high:
            return f"{low} to {high}"
    return "more than 20"


def _in_steps(turns: float) -> float:
    """Return how much of so many turns is advised in one step."""
    return turns if turns <= ONE_STEP else max(ONE_STEP, FIRST_STEP * turns)


class Turning:
    """Amounts of turns on one scale.

    Parameters
    ----------
    scale : Scale
    low, high : float
        Limits of the reading.
    more_way : str
        The way to turn for more bias: "clockwise" or "anticlockwise".
    track : float
        Turns from end to end; 0 where that is not known.
    settled_share : float
        How much more a move does once all has come to rest than at once.
    unit : str
        Of the reading.
    """

    def __init__(
        self, scale: Scale, low: float, high: float, *, more_way: str, track: float, settled_share: float, unit: str
    ) -> None:
        self._scale, self._low, self._high = scale, low, high
        self._ways = (more_way, "clockwise" if more_way == "anticlockwise" else "anticlockwise")
        self._track, self._unit = track, unit
        self._settled_share = settled_share if 0.2 < settled_share < 5.0 else 1.0
        self._slack_s: float | None = None

    @property
    def most(self) -> float:
        """The most turns in one go."""
        return min(MOST_TURNS, 0.25 * self._track) if self._track else MOST_TURNS

    def missing(self, aim: float, slope: float, *, by_rest: bool) -> float:
        """Return the turns from a reading, or where it will rest, to the target."""
        missing = self._scale.even(self._scale.target) - self._scale.even(aim)
        return missing / (slope * (self._settled_share if by_rest else 1.0))

    def wanted(self, value: float, aim: float, slope: float | None, *, by_model: bool, by_rest: bool) -> float:
        """Return the turns from here to the target, as far as they can be advised in one go."""
        if slope is None:
            missing = self._scale.even(self._scale.target) - self._scale.even(aim)
            return math.copysign(min(BLIND_TURNS, 0.25 * self._track), missing)
        turns = self.missing(aim, slope, by_rest=by_rest)
        if by_model:
            turns *= UNKNOWN_SHARE
        # Rounded towards too little, because words are coarse: what is missing then is another small move.
        turns = math.copysign(rounded_down(min(_in_steps(abs(turns)), self.most), self._track), turns)
        # On the way to a rest that is known, the reading of this moment never goes far over the limits.
        top = self._scale.even(self._high + 0.5 * (self._high - self._scale.target))
        if by_rest and turns > 0.0:
            turns = min(turns, max(top - self._scale.even(value), 0.0) / slope)
        return turns

    def amount(self, turns: float) -> str:
        """Say an amount with its way."""
        way = self._ways[0] if turns > 0.0 else self._ways[1]
        return f"{amount_words(abs(turns), self._track)} {way}"

    def of_how_many(self, turns: float, aim: float, slope: float | None, *, by_rest: bool) -> str:
        """Say how many turns there are to go where one move is far from enough; "" else, or where nobody knows."""
        if slope is None or abs(turns) < 0.9 * self.most or 0.0 < self._track <= ONE_TURN:
            return ""
        whole = abs(self.missing(aim, slope, by_rest=by_rest))
        if self._track:
            whole = min(whole, self._track)
        if whole <= SEVERAL * self.most or whole < 2.5:
            return ""
        return f"; {coarse_turns(whole)} turns to go from here"

    def slack(self, t_s: float) -> str:
        """Say once how a screw's slack is taken up."""
        if self._slack_s is None:
            self._slack_s = t_s
        return SLACK if t_s == self._slack_s or t_s - self._slack_s < SLACK_S else ""

    def inside(self, value: float, rest: float | None, words: str) -> str:
        """Say what is still to do inside the limits, away from the target; that it is inside the mood says."""
        aim = value if rest is None else rest
        if not self._low <= aim <= self._high:
            return f"but still {'rising' if aim > value else 'falling'}: {words}"
        target = self._scale.target
        off = quantities.show(abs(aim - target), self._unit, 2)
        side = "above" if aim > target else "below"
        return f"{off} {side} the target: {words}" if rest is None else f"will rest {off} {side}: {words}"
