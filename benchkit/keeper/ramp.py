"""The way of both rails from where they are to where they shall be: plain arithmetic, no clock, no instrument.

Both rails move in the same steps, so that they arrive together and keep the ratio of their ways.
"""

from __future__ import annotations

import math

STEP_S = 0.25
"""A ramp moves in steps of this length at most; each is read back and judged by the watch, s."""


class Ramp:
    """One way of both rails.

    Parameters
    ----------
    request : int
        Who asked for it.
    positive_v, negative_v : float
        Where the rails go, V.
    limit_a : float
        For each rail, A.
    ramp_s : float
        How long the way takes at least, s; 0 goes there in one step.
    protection_v : (float, float) or None
        For the supply's own over-voltage protection, V, positive rail first; magnitudes.  None: the usual.
    over_current : bool
        Whether its over-current protection is on at the end of the way.

    Attributes
    ----------
    done_steps : int
        How many steps have been carried out.
    busy : bool
        A step has been sent and not been read back.
    """

    def __init__(
        self,
        request: int,
        positive_v: float,
        negative_v: float,
        limit_a: float,
        ramp_s: float,
        protection_v: tuple[float, float] | None = None,
        *,
        over_current: bool = True,
    ) -> None:
        self.request = request
        self.to_v = (positive_v, negative_v)
        self.limit_a = limit_a
        self.protection_v = protection_v
        self.over_current = over_current
        self.steps = max(1, math.ceil(max(ramp_s, 0.0) / STEP_S - 1e-9))
        self.step_s = max(ramp_s, 0.0) / self.steps
        self.done_steps = 0
        self.busy = True
        self._from_v = (0.0, 0.0)
        self._due_s = math.inf

    @property
    def share(self) -> float:
        """How far it has come, 0 to 1."""
        return self.done_steps / self.steps

    @property
    def finished(self) -> bool:
        """Whether the last step has been carried out."""
        return self.done_steps >= self.steps

    def begin(self, from_v: tuple[float, float], now_s: float) -> None:
        """Start from where the rails are set."""
        self._from_v = from_v
        self.busy = False
        self._due_s = now_s + self.step_s

    def farthest_v(self) -> tuple[float, float]:
        """Return where each rail is farthest from zero on the way, V."""
        (a, b), (c, d) = self._from_v, self.to_v
        return (max(a, c), min(b, d))

    def due(self, now_s: float) -> bool:
        """Whether the next step is to be taken."""
        return not self.busy and not self.finished and now_s >= self._due_s

    def next_v(self) -> tuple[float, float]:
        """Return where the next step goes, V; the last one goes exactly to the end."""
        if self.done_steps + 1 >= self.steps:
            return self.to_v
        share = (self.done_steps + 1) / self.steps
        (a, b), (c, d) = self._from_v, self.to_v
        return (a + share * (c - a), b + share * (d - b))

    def step_done(self, now_s: float) -> None:
        """Note that a step has been read back; the next one comes a step's time after this one was due, or later."""
        self.done_steps += 1
        self.busy = False
        self._due_s = max(self._due_s + self.step_s, now_s)
