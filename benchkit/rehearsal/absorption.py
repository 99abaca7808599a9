"""What large capacitors give back after they were discharged: dielectric absorption, in its simplest form.

Each rail's reservoir has a second, slow capacitance behind a resistance: `SHARE` of its own and a time constant of
`LAG_S`.  While the rail stands at a voltage the slow part follows; when the rail has been brought down, the slow part
lifts it again, against whatever bleeds it.  A second look after a minute finds what the first could not.  Share and
time are our own figures, of the size known of aluminium electrolytics (a few per cent within minutes).

Only reservoirs count: 100 uF beside the devices hold nothing that could bite.
"""

from __future__ import annotations

import math
from typing import Final

import numpy as np

SHARE: Final = 0.03
LAG_S: Final = 40.0
OPEN_OHM: Final = 1e9

_NOTHING_V = 1e-4


class Absorption:
    """One rail's slow charge.

    Parameters
    ----------
    reservoir_f : float
        The reservoir (F); 0 for none.
    beside_f : float
        What else stands on the rail (F).
    bleed_ohm : float
        What bleeds the rail while it is low; `math.inf` for nothing.
    """

    def __init__(self, reservoir_f: float, beside_f: float, bleed_ohm: float) -> None:
        self._slow_f = SHARE * reservoir_f
        self._quick_f = reservoir_f + beside_f
        self._bleed_ohm = min(bleed_ohm, OPEN_OHM)
        self.slow_v = 0.0
        self.back_v = 0.0
        """What the rail has come back to while nothing feeds it (V)."""

    def follow(self, rail_v: float, seconds: float) -> None:
        """Let the slow part follow a rail that is held at a voltage for some time."""
        self.back_v = 0.0
        if self._slow_f:
            self.slow_v += (rail_v - self.slow_v) * -math.expm1(-seconds / LAG_S)

    def rest(self, seconds: float) -> None:
        """Let time pass with nothing feeding the rail, which was low at first."""
        if not self._slow_f or max(self.slow_v, self.back_v) < _NOTHING_V:
            self.slow_v = self.back_v = 0.0
            return
        slow_ohm = LAG_S / self._slow_f
        between, away = 1.0 / slow_ohm, 1.0 / self._bleed_ohm
        rates = np.array(
            [[-(between + away) / self._quick_f, between / self._quick_f], [between / self._slow_f, -1.0 / LAG_S]]
        )
        values, vectors = np.linalg.eig(rates)
        parts = np.linalg.solve(vectors, np.array([self.back_v, self.slow_v]))
        back_v, slow_v = (vectors @ (np.exp(values * seconds) * parts)).real
        self.back_v, self.slow_v = float(back_v), float(slow_v)
