"""Where the trimmer of a unit stands that comes into a repair shop: around its target, some of them far off.

Somebody has set it once, for the parts that it has now: its screw is where the target was met, within `USUAL` of the
drop either way (a standard deviation of its logarithm: age, another room, another meter).  One in `FAR_OFF_ONE_IN` has
been turned at, and stands up to `FAR_OFF_TURNS` turns from there.  Our own figures.
"""

from __future__ import annotations

import math
from functools import lru_cache
from typing import Final

from benchkit.stage.design import Design
from benchkit.stage.draws import Parameters, seeds
from benchkit.stage.operate import solve_units
from benchkit.stage.trimmer import full_rails
from benchkit.stage.trimmer_slope import slope

USUAL: Final = 0.15
FAR_OFF_ONE_IN: Final = 6
FAR_OFF_TURNS: Final = 2.0


def found_travel(design: Design, parameters: Parameters, seed: int) -> float:
    """Return the travel from the least-bias end, 0...1; 0 without a trimmer.

    Parameters
    ----------
    design : Design
    parameters : mapping
        Of the one unit, without its fault.
    seed : int
        The unit's; what is drawn here comes from a child of its own.
    """
    trimmer = design.spreader.trimmer
    if trimmer is None:
        return 0.0
    rng = seeds("unit", seed).spawn(2)[1]
    solved = solve_units(design, parameters, full_rails(design), loading="none")
    if not bool(solved.converged[0]):
        solved = solve_units(design, parameters, full_rails(design, when="cold"), loading="none")
    target = 0.5 if solved.position is None else float(solved.position[0])
    if rng.integers(FAR_OFF_ONE_IN) == 0:
        off_turns = FAR_OFF_TURNS * float(rng.uniform(-1.0, 1.0))
    else:
        drop_v = float(solved.points["emitter.upper.1"][0])
        off_turns = USUAL * float(rng.standard_normal()) * drop_v / max(abs(_per_turn_v(design)), 1e-6)
    off_turns = math.copysign(min(abs(off_turns), FAR_OFF_TURNS), off_turns)
    return min(max(target + off_turns / trimmer.turns, 0.0), 1.0)


@lru_cache(maxsize=64)
def _per_turn_v(design: Design) -> float:
    found = slope(design)
    return found.settled_drop_v_per_turn or found.drop_v_per_turn
