"""Time constants with which a design's readings come to rest.

From the closed loop where it can be had: the circuit answers to heat, so that what stands in a warm state's matrix
of rates (`benchkit.stage.loop_gain.rates`) is what a bench sees, slower than the heat sink alone where bias grows with
heat and faster where the spreader takes it back. Without a warm state the nodes' own lags have to do.

Rates that lie within `ALIKE` of each other are one: two devices of a half, or both drivers, can't be told apart in a
trend.
"""

from __future__ import annotations

from dataclasses import replace
from functools import lru_cache
from typing import Final

import numpy as np

from benchkit.errors import BenchkitError
from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design
from benchkit.stage.draws import Array, nominal
from benchkit.stage.electrothermal import warm_state
from benchkit.stage.heat import heat_nodes
from benchkit.stage.loop_gain import rates

ALIKE: Final = 1.25
"""Time constants whose ratio is below this are one."""


@lru_cache(maxsize=64)
def lags_of(design: Design, condition: Condition | None = None) -> tuple[float, ...]:
    """Return the time constants (s) of a design's nominal unit, the longest first; cached.

    Parameters
    ----------
    design : Design
    condition : Condition, optional
        Where the unit comes to rest; by default at full rails with the trimmer at the target.
    """
    nodes = heat_nodes(design)
    if condition is None:
        trimmer = "target" if design.spreader.trimmer is not None else "unknown"
        rails = design.rails
        condition = Condition(positive_v=rails.positive_v, negative_v=rails.negative_v, trimmer=trimmer)  # type: ignore[arg-type]
    try:
        state = warm_state(design, nominal(design), replace(condition, when="warm"))
    except BenchkitError:
        return merged(nodes.lag_s)
    if not state.rests[0]:
        return merged(nodes.lag_s)
    grows_per_s = np.linalg.eigvals(rates(nodes, state.slopes)[0]).real
    return merged(-1.0 / grows_per_s)


def merged(lags_s: Array) -> tuple[float, ...]:
    """Sort time constants (s), the longest first, and take those that are alike as one."""
    groups: list[list[float]] = []
    for lag_s in sorted(np.asarray(lags_s, np.float64).tolist(), reverse=True):
        if groups and groups[-1][0] < ALIKE * lag_s:
            groups[-1].append(lag_s)
        else:
            groups.append([lag_s])
    return tuple(float(np.exp(np.mean(np.log(group)))) for group in groups)
