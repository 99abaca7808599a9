"""What healthy units read at a test point all along their trimmers' tracks.

Near least bias a drop hardly moves for some turns, and for how many differs from unit to unit by more than a turn.
All drawn units at all places of the track are solved as one batch, cold: cold is where least moves.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import lru_cache
from typing import Final

import numpy as np

from benchkit.errors import ModelError
from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design
from benchkit.stage.draws import Array, draw, seeds, take
from benchkit.stage.operate import solve_units

UNITS: Final = 40
STEPS: Final = 17


@dataclass(frozen=True, eq=False)
class Curves:
    """Readings of drawn units.

    Attributes
    ----------
    turns : array, shape (steps,)
        From the least-bias end, rising.
    values : array, shape (steps, units)
        In the point's unit; nan where a unit has no operating point.
    """

    turns: Array
    values: Array


@lru_cache(maxsize=32)
def curves(design: Design, point: str, condition: Condition, units: int = UNITS, seed: int = 0) -> Curves:
    """Solve drawn units along their tracks.

    Parameters
    ----------
    design : Design
    point : str
    condition : Condition
        Rails, and the resistor in the fuse's place; its trimmer, its limit and whether it is warm don't count.
    units : int
    seed : int
        For the units that are drawn.

    Raises
    ------
    ModelError
        Without a trimmer, when the point is none of the design's, or when no unit has an operating point.
    """
    trimmer = design.spreader.trimmer
    if trimmer is None:
        raise ModelError(f"{design.name} has no trimmer", "a trimmer, where its answer is asked for")
    travel = np.linspace(0.0, 1.0, STEPS)
    which = np.tile(np.arange(units), STEPS)
    cold = replace(condition, when="cold", trimmer=0.5, limit_a=None, target_share=1.0)
    solved = solve_units(
        design, take(draw(design, units, seeds("limits", seed)), which), cold, position=np.repeat(travel, units),
        loading="none",
    )  # fmt: skip
    if point not in solved.points:
        raise ModelError(f"{design.name} has no test point {point}", "one that its plan reads under power")
    if not np.any(solved.converged):
        raise ModelError(f"{design.name} has no operating point along its trimmer's track", "one")
    values = np.where(solved.converged, solved.points[point], np.nan).reshape(STEPS, units)
    return Curves(turns=travel * trimmer.turns, values=np.asarray(values))
