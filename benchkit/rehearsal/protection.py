"""What a channel of the simulated supply does to protect what hangs on it, by itself.

Over-voltage: as soon as the voltage at an output that is on stands above the level, the output goes off.
Over-current: where it is switched on, an output that its current limit has held for longer than the delay goes off.
Either stays off until it is cleared, whatever is sent meanwhile; with the cause still there it trips again.

The delay that a channel starts with, `DELAY_S`, is our own figure: longer than a few hundred microfarads take to
charge at a small limit and than a limit check into a short lasts, and far too long to save a part by itself.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final, Literal

DELAY_S: Final = 2.0
MOST_DELAY_S: Final = 10.0
LOOK_S: Final = 0.02
"""How often it looks at least (s): a limit that holds for less than that may be missed."""

Tripped = Literal["", "over-voltage", "over-current"]


@dataclass
class Protection:
    """One channel's.

    Parameters
    ----------
    level_v : float
        Over-voltage level.
    current_on : bool
        Over-current protection is on.
    delay_s : float
        How long the limit may hold the channel before that counts.
    """

    level_v: float
    current_on: bool = False
    delay_s: float = DELAY_S
    tripped: Tripped = ""
    held_s: float = 0.0

    def look(self, volts: float, in_limit: bool, seconds: float) -> Tripped:
        """Judge a channel that is on after some time; return why it has to go off, or nothing."""
        self.held_s = self.held_s + seconds if in_limit else 0.0
        if volts > self.level_v:
            self.tripped = "over-voltage"
        elif self.current_on and in_limit and self.held_s >= self.delay_s:
            self.tripped = "over-current"
        return self.tripped

    def patience_s(self) -> float:
        """Return how long a channel that is on may go unseen (s)."""
        return max(self.delay_s - self.held_s, LOOK_S) if self.current_on else math.inf

    def clear(self) -> None:
        """Forget a trip."""
        self.tripped, self.held_s = "", 0.0
