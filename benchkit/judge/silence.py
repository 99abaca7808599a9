"""A reading that does not follow the screw: when that is to be said, and how far may still be turned.

Rules
-----
* Nothing is said before even the slowest healthy unit (`benchkit.judge.answers`) would have shown a change that stands
  out of the noise.
* Then come `MOST_MORE_TURNS` turns more, and the word stop.
* However slow units may be: a screw that has been turned by its whole track without any answer is the end of it.
* Where nobody knows how far a hand has turned, the words carry the number of turns after which it is to stop.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Final

from benchkit.judge.answers import Answers

MOST_MORE_TURNS: Final = 2.0
"""So many turns more, after those in which any healthy unit would have answered."""

PATIENCE_S: Final = 12.0
"""So long may advice stand and nothing move before the words ask whether the screw was turned (s)."""

SEEN_NOISES: Final = 8.0
"""A change of so many times the scatter of a reading would have been seen."""

ANSWERED_SHARE: Final = 0.3
"""A reading that has moved by this share of the least that is due has answered."""

LEAST_TURNS: Final = 0.06
LONGEST_TRACK: Final = 30.0
"""Taken for the track where nobody knows it (turns); trimmers with more are not made (from memory)."""

_WHY: Final = "wiper open, or the probes are on another point"


class Silence:
    """Keeps count from the first advice that is not answered.

    Parameters
    ----------
    track : float
        Turns from end to end; 0 where that is not known.
    amount : callable
        Says turns in words, with the way.
    """

    def __init__(self, track: float, amount: Callable[[float], str]) -> None:
        self._track = track or LONGEST_TRACK
        self._amount = amount
        self._since: tuple[float, float] | None = None
        self._spent = 0.0
        self._noticed: float | None = None
        self.knows_turns = False

    def watches_turns(self) -> None:
        """Take note that whoever turns will say so: what nobody has said was not turned."""
        self.knows_turns = True

    def told(self, t_s: float, value: float) -> None:
        """Take note that advice stands since now, unless some does already."""
        if self._since is None:
            self._since = t_s, value

    def turned(self, turns: float) -> None:
        """Take note of a move that is known of."""
        self._spent += turns
        self.knows_turns = True

    def answered(self) -> None:
        """The reading has followed."""
        self._since, self._spent, self._noticed = None, 0.0, None

    def hushed(self) -> None:
        """No advice stands any more."""
        self._since = None

    def look(
        self, t_s: float, value: float, advised: float, answers: Answers | None, noise: float
    ) -> tuple[str, float | None] | None:
        """Say that the reading does not follow, and what more may be turned; None while it may yet.

        Parameters
        ----------
        t_s, value : float
        advised : float
            The turns that stand on the screen.
        answers : Answers or None
            What may be expected.
        noise : float
        """
        if self._since is None or not advised:
            return None
        since_s, before = self._since
        spent = self._spent if self.knows_turns else advised if t_s - since_s > PATIENCE_S else 0.0
        if abs(spent) < LEAST_TURNS:
            return None
        due = 0.0 if answers is None else answers.least_change(before, spent, noise)
        whole = self.knows_turns and abs(spent) >= self._track
        if due <= SEEN_NOISES * noise and not whole:
            return None
        if abs(value - before) > max(ANSWERED_SHARE * due, 3.0 * noise):
            return None
        more = math.copysign(min(abs(advised), MOST_MORE_TURNS), spent)
        if not self.knows_turns:
            way = self._amount(spent).rsplit(" ", 1)[1]
            return f"nothing has moved. If the screw was turned {way}: two turns more at most, then {_WHY}", more
        if self._noticed is None:
            self._noticed = spent
        if whole or abs(spent - self._noticed) > MOST_MORE_TURNS - LEAST_TURNS:
            why = f"{_WHY[0].upper()}{_WHY[1:].replace(', or', ', screw at its end, or')}"
            return f"no response after {abs(spent):.1f} turns: stop. {why}", None
        left = MOST_MORE_TURNS - abs(spent - self._noticed)
        more = math.copysign(min(abs(more), left), spent)
        return f"no response yet: {self._amount(more)}; two turns more at most", more

    def hint(self, value: float, advised: float, answers: Answers | None, noise: float) -> str:
        """Say after how many turns without an answer it is to stop, where the advised ones may not show; "" else."""
        if answers is None or not advised or answers.least_change(value, advised, noise) > SEEN_NOISES * noise:
            return ""
        for turns in range(math.ceil(abs(advised)), math.ceil(self._track)):
            if answers.least_change(value, math.copysign(turns, advised), noise) > SEEN_NOISES * noise:
                return f"; nothing after {turns + MOST_MORE_TURNS:.0f} turns: stop"
        return "; nothing after the whole track: stop"
