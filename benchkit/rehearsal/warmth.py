"""The simulated unit's temperatures: a few first-order nodes, stepped with the powers held still over a step.

Nodes and their time constants
------------------------------
* Heat sink: heated by all output devices; resistance and capacity of the design.
* Output junctions: above the sink; `JUNCTION_LAG_S`.
* Drivers and pre-drivers: their own heating with `DRIVER_LAG_S`, on top of their share of the sink's rise.
* Spreader: what it sees of the sink and its own heating, both with the design's lag (without one, only its own heating
  lags, by `SPREADER_LAG_S`).

At rest they are the temperatures of `benchkit.stage.heat`; a test holds that.  The time constants of junctions and
drivers are ours, of the size that such devices have; the design format states none.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Final

from benchkit.stage.design import Design
from benchkit.stage.points import transistors_of

JUNCTION_LAG_S: Final = 1.0
DRIVER_LAG_S: Final = 25.0
SPREADER_LAG_S: Final = 15.0
LARGEST_STEP_K: Final = 0.4
LONGEST_STEP_S: Final = 10.0
HOTTEST_C: Final = 400.0


class Warmth:
    """Temperatures of one unit, all starting at the ambient temperature."""

    def __init__(self, design: Design) -> None:
        self._thermal = design.thermal
        self._parts = transistors_of(design)
        self._sink_k = 0.0
        self._own_k = {part.name: 0.0 for part in self._parts}
        self.highest_sink_c = self._thermal.ambient_c

    def temperatures_c(self) -> dict[str, float]:
        """Return the junctions (degC) by part name, and ``heatsink``."""
        thermal = self._thermal
        result = {"heatsink": thermal.ambient_c + self._sink_k}
        for part in self._parts:
            own_k = self._own_k[part.name]
            if part.role == "output":
                base_k = self._sink_k
            elif part.role == "spreader":
                base_k = 0.0 if thermal.spreader_lag_s > 0.0 else thermal.spreader_tracking * self._sink_k
            else:
                base_k = (thermal.driver_tracking or 0.0) * self._sink_k
            result[part.name] = min(thermal.ambient_c + base_k + own_k, HOTTEST_C)
        return result

    def step(self, powers_w: Mapping[str, float], seconds: float) -> None:
        """Move all nodes by `seconds` with the powers (W, by part name) held still."""
        for name, (goal, lag_s) in self._goals(powers_w).items():
            share = -math.expm1(-seconds / lag_s) if lag_s > 0.0 else 1.0
            if name == "heatsink":
                self._sink_k = min(self._sink_k + share * (goal - self._sink_k), HOTTEST_C)
            else:
                self._own_k[name] = min(self._own_k[name] + share * (goal - self._own_k[name]), HOTTEST_C)
        self.highest_sink_c = max(self.highest_sink_c, self._thermal.ambient_c + self._sink_k)

    def cool(self, seconds: float) -> None:
        """Move all nodes by `seconds` without any power."""
        nothing = dict.fromkeys(self._own_k, 0.0)
        while seconds > 0.0:
            step_s = min(seconds, LONGEST_STEP_S)
            self.step(nothing, step_s)
            seconds -= step_s

    def longest_step_s(self, powers_w: Mapping[str, float]) -> float:
        """Return how long a step (s) may be, so that no node moves by more than `LARGEST_STEP_K`."""
        longest = LONGEST_STEP_S
        for name, (goal, lag_s) in self._goals(powers_w).items():
            now = self._sink_k if name == "heatsink" else self._own_k[name]
            gap = abs(min(goal, HOTTEST_C) - now)
            if gap > LARGEST_STEP_K and lag_s > 0.0:
                longest = min(longest, -lag_s * math.log1p(-LARGEST_STEP_K / gap))
        return longest

    def _goals(self, powers_w: Mapping[str, float]) -> dict[str, tuple[float, float]]:
        """Where each node is heading (K) and its time constant (s)."""
        thermal = self._thermal
        sink_w = sum(powers_w[part.name] for part in self._parts if part.role == "output")
        sink_lag_s = thermal.heatsink_k_per_w * thermal.heatsink_capacity_j_per_k
        goals = {"heatsink": (thermal.heatsink_k_per_w * sink_w, sink_lag_s)}
        for part in self._parts:
            power_w = powers_w[part.name]
            if part.role == "output":
                goals[part.name] = (thermal.junction_to_heatsink_k_per_w * power_w, JUNCTION_LAG_S)
            elif part.role == "spreader":
                goal = thermal.spreader_to_ambient_k_per_w * power_w
                lag_s = SPREADER_LAG_S
                if thermal.spreader_lag_s > 0.0:
                    goal += thermal.spreader_tracking * self._sink_k
                    lag_s = thermal.spreader_lag_s
                goals[part.name] = (goal, lag_s)
            else:
                goals[part.name] = (thermal.driver_to_ambient_k_per_w * power_w, DRIVER_LAG_S)
        return goals
