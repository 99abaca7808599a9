"""The simulated unit's temperatures: the stage's heat nodes, stepped with the powers held still over a step.

The nodes, their time constants and what they head for are those of `benchkit.stage.heat`; at rest they are the
temperatures that predictions use.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Final

import numpy as np

from benchkit.stage.design import Design
from benchkit.stage.heat import HeatNodes, heat_nodes

LARGEST_STEP_K: Final = 0.4
LONGEST_STEP_S: Final = 10.0
HOTTEST_C: Final = 400.0


class Warmth:
    """Temperatures of one unit, all starting at the ambient temperature."""

    def __init__(self, design: Design) -> None:
        self._nodes = heat_nodes(design)
        self._ambient_c = design.thermal.ambient_c
        self._x = np.zeros(len(self._nodes.names))
        self.highest_sink_c = self._ambient_c

    @property
    def parts(self) -> tuple[str, ...]:
        """Names of what can be heated."""
        return self._nodes.parts

    def temperatures_c(self) -> dict[str, float]:
        """Return the junctions (degC) by part name, and ``heatsink``."""
        celsius = np.minimum(self._ambient_c + self._nodes.shows @ self._x, HOTTEST_C)
        return dict(zip(self._nodes.names, celsius.tolist(), strict=True))

    def step(self, powers_w: Mapping[str, float], seconds: float) -> None:
        """Move all nodes by `seconds` with the powers (W, by part name) held still."""
        share = -np.expm1(-seconds / self._nodes.lag_s)
        self._x = np.minimum(self._x + share * (self._goals(powers_w) - self._x), HOTTEST_C)
        self.highest_sink_c = max(self.highest_sink_c, self._ambient_c + float(self._x[-1]))

    def cool(self, seconds: float) -> None:
        """Move all nodes by `seconds` without any power."""
        nothing = dict.fromkeys(self._nodes.parts, 0.0)
        while seconds > 0.0:
            step_s = min(seconds, LONGEST_STEP_S)
            self.step(nothing, step_s)
            seconds -= step_s

    def longest_step_s(self, powers_w: Mapping[str, float]) -> float:
        """Return how long a step (s) may be, so that no node moves by more than `LARGEST_STEP_K`."""
        longest = LONGEST_STEP_S
        gaps = np.abs(np.minimum(self._goals(powers_w), HOTTEST_C) - self._x)
        for gap, lag_s in zip(gaps.tolist(), self._nodes.lag_s.tolist(), strict=True):
            if gap > LARGEST_STEP_K:
                longest = min(longest, -lag_s * math.log1p(-LARGEST_STEP_K / gap))
        return longest

    def spoil(self, nodes: HeatNodes) -> None:
        """Go on with other nodes of the same names, from the temperatures that are: something has come loose."""
        self._nodes = nodes

    def _goals(self, powers_w: Mapping[str, float]) -> np.ndarray[tuple[int, ...], np.dtype[np.float64]]:
        return self._nodes.goals(self._x, np.array([powers_w[part] for part in self._nodes.parts]))
