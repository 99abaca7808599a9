"""What a turn of the trimmer does: to one emitter drop, and to the quiescent current.

Strategy: the nominal unit's own first-order response (`benchkit.circuit.response`) to a small turn. *At once* is with
all junctions as warm as they were; *settled* adds what the temperatures make of it: dT = rest * dP is solved together
with dP = (dP/dtravel) + (dP/dT) dT, by the same heat equations as everywhere (`benchkit.stage.heat`).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from benchkit.circuit.response import Response
from benchkit.errors import ModelError
from benchkit.stage.design import Design
from benchkit.stage.draws import Array, nominal
from benchkit.stage.heat import heat_nodes
from benchkit.stage.operate import Solved, solve_units
from benchkit.stage.runs import set_trimmer
from benchkit.stage.topologies import build
from benchkit.stage.trimmer import at_target, full_rails

_TURN = 1e-6
_WARMER_K = 1e-4


@dataclass(frozen=True, kw_only=True)
class Slope:
    """What a turn of the screw towards more bias does to the nominal unit at the target.

    Attributes
    ----------
    travel : float
        Where it was taken: at the target, or at the end of the track that is nearest to it.
    drop_v_per_turn, current_a_per_turn : float
        Change of one emitter drop (V) and of the quiescent current of all pairs together (A), temperatures held.
    settled_drop_v_per_turn, settled_current_a_per_turn : float or None
        The same when all has come to rest again; None for a target that is set cold, or where nothing comes to rest.
    """

    travel: float
    drop_v_per_turn: float
    current_a_per_turn: float
    settled_drop_v_per_turn: float | None
    settled_current_a_per_turn: float | None


def slope(design: Design) -> Slope:
    """Work out what a turn does to the nominal unit at the target.

    Raises
    ------
    ModelError
        As `at_target`, or when the nominal unit has no state at the end that is nearest to its target.
    """
    unit, travel = at_target(design)
    if not unit.converged[0]:
        raise ModelError(f"{design.name} has no operating point where its trimmer is nearest to the target", "one")
    return slope_at(design, min(max(travel, 0.0), 1.0), unit.temperatures_c, warm=design.target.when == "warm")


def slope_at(
    design: Design, travel: float, temperatures_c: Mapping[str, float | Array] | None = None, *, warm: bool = False
) -> Slope:
    """Work out what a turn does to the nominal unit on full rails, anywhere on the track.

    Parameters
    ----------
    design : Design
    travel : float
        From the least-bias end, 0 to 1.
    temperatures_c : mapping, optional
        As for `solve_units`; without, all is at the ambient temperature.
    warm : bool
        Whether these are temperatures at rest, so that there is a slope when all has come to rest again.

    Raises
    ------
    ModelError
        Without a trimmer, or without an operating point there.
    """
    trimmer = design.spreader.trimmer
    if trimmer is None:
        raise ModelError(f"{design.name} has no trimmer", "a trimmer, where its slope is asked for")
    condition = full_rails(design, trimmer=travel, when="cold")
    here = solve_units(design, nominal(design), condition, temperatures_c=temperatures_c, loading="none")
    if not here.converged[0]:
        raise ModelError(f"{design.name} has no operating point at {travel:.0%} of its trimmer's travel", "one")
    turned = _derivatives(design, here, travel)
    per_turn = 1.0 / trimmer.turns
    settled_v, settled_a = turned.settled(design) if warm else (None, None)
    return Slope(
        travel=travel,
        drop_v_per_turn=float(turned.drop[0]) * per_turn,
        current_a_per_turn=float(turned.current[0]) * per_turn,
        settled_drop_v_per_turn=None if settled_v is None else settled_v * per_turn,
        settled_current_a_per_turn=None if settled_a is None else settled_a * per_turn,
    )


@dataclass(frozen=True)
class _Derivatives:
    """First-order changes by the travel (first) and by each transistor's temperature (1/K).

    Shapes: drop and current (1 + parts,), power (parts, 1 + parts).
    """

    drop: Array
    current: Array
    power: Array

    def settled(self, design: Design) -> tuple[float | None, float | None]:
        """Change of drop and current by the travel with the temperatures following; None where they run away."""
        parts = len(heat_nodes(design).parts)
        rest = heat_nodes(design).rest[:parts]
        loop = rest @ self.power[:, 1:]
        if float(np.max(np.linalg.eigvals(loop).real)) >= 1.0:
            return None, None
        warmer = np.linalg.solve(np.eye(parts) - loop, rest @ self.power[:, 0])
        return (
            float(self.drop[0] + self.drop[1:] @ warmer), float(self.current[0] + self.current[1:] @ warmer),
        )  # fmt: skip


def _derivatives(design: Design, here: Solved, place: float) -> _Derivatives:
    parts = heat_nodes(design).parts
    step = _TURN if place < 0.5 else -_TURN
    directions = len(parts) + 2
    values = dict(here.solution.values)
    sections = {"spreader.trimmer.track": nominal(design)["spreader.trimmer.track"]}
    travel = np.full(directions, place)
    travel[0] += step
    set_trimmer(design, sections, travel)
    values |= {key: array for key, array in sections.items() if key in values}
    for index, part in enumerate(parts, 1):
        kelvin = np.repeat(values[f"{part}.kelvin"], directions)
        kelvin[index] += _WARMER_K
        values[f"{part}.kelvin"] = kelvin
    moved = Response(here.solution).moved(values, directions)
    steps = np.array([step, *[_WARMER_K] * len(parts)])

    def change(array: Array) -> Array:
        return np.asarray((array[:-1] - array[-1]) / steps)

    upper, lower = (moved.voltage(node) for node in build(design).between["emitter.pair.1"])
    currents = [moved.current(f"emitter.upper.{n}") for n in range(1, design.output.pairs + 1)]
    return _Derivatives(
        drop=change((upper - lower) / 2.0),
        current=change(np.asarray(np.sum(currents, axis=0))),
        power=np.array([change(moved.transistor(part).power_w) for part in parts]),
    )
