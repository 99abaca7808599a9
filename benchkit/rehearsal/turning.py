"""The stand-in's hand on the screw: it follows the advice on the screen, about as well as a hand does.

Rules
-----
* After a move it waits until the reading has stood for `REACTION_S`, as somebody does who looks before turning on.
* It turns by what is advised, with a scatter of `SCATTER` (standard deviation of one), and never by less than
  `LEAST_TURNS`: finer than that no hand turns a screw.
* When nothing is to be turned it keeps its hand off; what is at rest the session takes by itself, or the hand takes it
  after `OWN_TAKE_S`.
* A reading that is gone is waited for; so is one that does not answer, after the moves that are advised.  What does not
  come back is given up, in words.

Where a picture holds no advice (an older session), it looks for the target by itself; see `searched`.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass, field
from typing import Final

import numpy as np

from benchkit.session.front import LiveView, Reply

REACTION_S: Final = 1.5
SCATTER: Final = 0.15
LEAST_TURNS: Final = 0.005
OWN_TAKE_S: Final = 150.0
GONE_S: Final = 40.0
MOST_FOLDED: Final = 3
MOST_ASKED: Final = 4000
"""So often may one trim be asked about before the hand gives up."""

HOLD: Final = Reply(choice="turn", turns=0.0)
"""The hand stays off the screw."""

_SAME_SHARE: Final = 0.03
_SAME_MOVES: Final = 3


@dataclass
class Turning:
    """One trim.

    Parameters
    ----------
    turns : float
        Of the screw from end to end.
    rng : numpy.random.Generator
        For how exactly the hand turns.
    """

    turns: float
    rng: np.random.Generator
    moves: list[tuple[float, float]] = field(default_factory=list)
    _asked: int = 0
    _moved_s: float = -math.inf
    _since_s: float | None = None
    _mood: str = ""
    _folded: int = 0

    def reply(self, live: LiveView | None) -> Reply:
        """Answer a trim's question by the newest picture."""
        self._asked += 1
        if self._asked > MOST_ASKED:
            return _end("It takes too long: the reading does not come to rest inside the limits.")
        if live is None:
            return _end("There is no reading.")
        if not live.advice:
            return searched(self, live)
        now_s = live.trend[-1][0] if live.trend else 0.0
        if live.mood != self._mood:
            self._mood, self._since_s = live.mood, None
        for_s = self._stood_s(now_s)
        if live.mood == "gone" or live.value is None:
            return HOLD if self._waits(for_s) else _end("The reading is gone and does not come back.")
        if live.mood == "running away":
            return HOLD  # the supply goes off by itself
        if now_s - self._moved_s < REACTION_S:
            return HOLD
        if live.mood == "folded back":
            self._folded += 1
            if self._folded > MOST_FOLDED or live.advised_turns is None:
                return _end("The supply is in its limit, and turning back does not bring it out.")
        elif live.advised_turns is None:
            if live.mood == "no response":
                return HOLD if self._waits(for_s) else _end(f"The reading does not follow: {live.advice}.")
            if live.inside and for_s > OWN_TAKE_S:
                return Reply(choice="take")
            return HOLD
        return self._turn(live.advised_turns, live, now_s)

    def _turn(self, advised: float, live: LiveView, now_s: float) -> Reply:
        if abs(sum(turned for turned, _ in self.moves) + advised) > 1.3 * self.turns:
            return _end("The screw is at its end and the target is not reached.")
        turned = advised * (1.0 + SCATTER * float(self.rng.standard_normal()))
        turned = math.copysign(max(abs(turned), LEAST_TURNS), advised)
        self.moves.append((turned, live.value or 0.0))
        self._moved_s, self._since_s = now_s, None
        return Reply(choice="turn", turns=turned)

    def _stood_s(self, now_s: float) -> float:
        """How long the present mood has lasted, by the trend's clock; a reading that is gone has none."""
        if self._since_s is None:
            self._since_s, self._since_asked = now_s, self._asked
        return max(now_s - self._since_s, 0.25 * (self._asked - self._since_asked))

    def _waits(self, for_s: float) -> bool:
        return for_s < GONE_S

    _since_asked: int = 0


def searched(hand: Turning, live: LiveView) -> Reply:
    """Look for the target without advice: by the logarithm of the reading, and by what the last move did to it."""
    if live.value is None:
        return _end("There is no reading.")
    middle, half = (live.low + live.high) / 2.0, (live.high - live.low) / 2.0
    if abs(live.value - middle) < 0.3 * half:
        return Reply(choice="take")
    moves = hand.moves
    here = sum(turns for turns, _ in moves)
    wanted = math.log(live.target / max(live.value, 1e-6))
    if abs(here) > 1.3 * hand.turns or len(moves) > 200:
        return _end("The screw is at its end and the target is not reached.")
    if wanted < 0.0 and _at_least_end(moves, live.value):
        if live.low <= live.value <= live.high:
            return Reply(choice="take")
        return _end("The screw is at its least-bias end and the reading is still above.")
    step = math.copysign(0.25, wanted)
    if moves:
        turned, before = moves[-1]
        slope = math.log(max(live.value, 1e-6) / max(before, 1e-6)) / turned
        if slope > 0.05:
            step = wanted / slope
    most = 0.5 if live.value < 0.1 * live.target else 0.35
    step = max(-most, min(most, step)) * (1.0 + 0.1 * float(hand.rng.standard_normal()))
    if abs(step) < 0.004:
        step = math.copysign(0.004, step)
    moves.append((step, live.value))
    return Reply(choice="turn", turns=step)


def _at_least_end(moves: list[tuple[float, float]], value: float) -> bool:
    """Whether the screw has been turned for less bias again and again, and the reading hardly followed."""
    last = moves[-_SAME_MOVES:]
    if len(last) < _SAME_MOVES or any(turns >= 0.0 for turns, _ in last):
        return False
    readings = [before for _, before in last] + [value]
    return all(abs(after - before) <= _SAME_SHARE * abs(before) for before, after in itertools.pairwise(readings))


def _end(why: str) -> Reply:
    return Reply(choice="end", text=why)
