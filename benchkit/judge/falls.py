"""A reading that falls away at once: a wiper that has opened, or a probe that has slipped."""

from __future__ import annotations

from collections import deque
from typing import Final

from benchkit.judge.advice import Mood
from benchkit.judge.screw import Scale
from benchkit.judge.trust import CURRENT_FELL_TO, SLIPPED

FELL_TO: Final = 0.35
"""A reading that falls at once below this share of itself, without having been told to, has fallen away."""

SEEN_NOISES: Final = 10.0
"""A reading that is less than so many times its scatter can't be seen to fall away."""

CURRENT_SHARE: Final = 0.05
"""Below this share of the target the supply's current doesn't tell whether the bias has gone."""

LEAST_TURNS: Final = 0.03
"""Less than this is no move of a screw."""

PEAK_S: Final = 0.6
"""So far back a trusted reading counts as the one that a fall came from (s)."""

PEAK_SHARE: Final = 1.5
"""What was above this share of the target was no bias on its way up."""

START_SHARE: Final = 1.2
"""A reading that falls at once to no more than so many times where the trim began is back there (our own figure)."""

ROSE_TO: Final = 1.5
"""It has to have come so far above that before."""

NEAR_LEAST: Final = 0.15
"""Only a trim that began below this share of the target began at about least bias (our own figure)."""

_FELL: Final = "the reading fell at once to about least bias while turning"


class Falls:
    """Tells a fall from a move.

    Parameters
    ----------
    scale : Scale
    """

    def __init__(self, scale: Scale) -> None:
        self._scale = scale
        self._trusted: deque[tuple[float, float]] = deque()
        self._start: float | None = None

    def trusted(self, t_s: float, value: float) -> None:
        """Take note of a reading that is known to be of the point, calm or not."""
        self._start = value if self._start is None else self._start
        self._trusted.append((t_s, value))
        while self._trusted[0][0] < t_s - PEAK_S:
            self._trusted.popleft()

    @property
    def peak(self) -> tuple[float, float] | None:
        """Where the last trusted readings had got to, with the time: a wiper may open on the way up."""
        peak = max(self._trusted, key=lambda one: one[1], default=None)
        return None if peak is None or peak[1] > PEAK_SHARE * self._scale.target else peak

    def away(self, before: float, value: float, turned: float, slope: float | None, noise: float) -> bool:
        """Whether a reading has fallen away, by far more than a move of so many turns does.

        Parameters
        ----------
        before, value : float
        turned : float
            Positive for more bias.
        slope : float or None
            Change of what follows the screw evenly, for each turn.
        noise : float
        """
        scale = self._scale
        seen = max(SEEN_NOISES * noise, 3.0 * scale.floor if scale.standing else 0.0)
        if before - scale.standing <= seen or value - scale.standing > FELL_TO * (before - scale.standing):
            return False
        if turned >= -LEAST_TURNS or slope is None:
            return turned >= -LEAST_TURNS
        return scale.even(value) - scale.even(before) < 3.0 * turned * slope

    def to_the_start(self, before: float, value: float, turned: float, noise: float) -> bool:
        """Whether a reading fell at once to where the trim began, at about least bias, and not to nothing.

        There a wiper that opens leaves half of what there was, too much for `away`. Only for a fall that is known to
        have been at once: a hand that turns all the way back does the same more slowly.
        """
        scale, start = self._scale, self._start
        if start is None or turned < -LEAST_TURNS or before - value <= SEEN_NOISES * noise:
            return False
        least = scale.over(start)
        if not 0.0 < least < NEAR_LEAST * (scale.target - scale.standing):
            return False
        return scale.over(before) >= ROSE_TO * least and least / START_SHARE <= scale.over(value) <= START_SHARE * least

    def current_tells(self, before: float) -> bool:
        """Whether there was so much bias that the supply's current tells when it goes."""
        return self._scale.over(before) >= CURRENT_SHARE * (self._scale.target - self._scale.standing)

    def with_current(self, before: float, before_a: float, now_a: float) -> bool:
        """Whether the supply's current says that the bias has gone."""
        return now_a < CURRENT_FELL_TO * before_a and self.current_tells(before)


def fell_first(before_a: float | None, now_a: float) -> bool:
    """Whether the supply's current fell while the reading stands: it may show what the meter shows next."""
    return before_a is not None and now_a < CURRENT_FELL_TO * before_a


def fall_words(before_a: float | None, now_a: float | None) -> tuple[Mood, str]:
    """Say what a fall means, by the supply's current before and since; None where that is not known."""
    if now_a is None or before_a is None:
        return "no response", f"{_FELL}: is the probe on the point? Then the wiper has opened"
    if now_a < CURRENT_FELL_TO * before_a:
        return "no response", f"{_FELL}, and the supply's current with it: the wiper has opened"
    return "gone", SLIPPED
