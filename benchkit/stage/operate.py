"""Operating points of units under a condition: trimmer, heat, faults and meter, around one batched solve.

How a powered condition is solved
---------------------------------
1. Values: a parameter set (`benchkit.stage.draws`), rails and limit of the condition, junctions at their
   temperature.
2. Trimmer: a travel gives its resistance. "target" replaces the trimmer by an unknown conductance whose condition is
   that the drop over both emitter resistors of pair 1 is twice the target drop; the trimmer's resistance is read off
   the solution, for every unit at once. A unit whose resistance lies outside its track is out of reach: it is clipped
   to the track's end and solved again. A trimmer that divides (arm "between") has two sections of one sum: one is
   unknown, the other follows, four times over.
3. Warm: solve, heat, solve again, until no junction moves (`benchkit.stage.balance`), so that a stage near its runaway
   margin takes few rounds too; a unit that doesn't come to rest is one that did not converge.
4. Faults come last and are values: a unit that was trimmed is trimmed healthy and then has its fault.

The trimmer's law: the section from the wiper to an end is end resistance + travel * (track - 2 * end resistance).

Readings include the voltmeter's 10 Mohm across the point. Each point's reading is solved with the meter for one unit
(the nominal one, or with ``loading="each"`` every unit), and the ratio to the bare voltage is applied to the others:
the whole effect is below 1e-3 in any healthy stage, and its variation from unit to unit is second order.

Below ``works_from`` a servo doesn't regulate and nobody can say what it sends: each unit's servo is a source of some
share of its most.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import lru_cache
from typing import Literal

import numpy as np

from benchkit.circuit.solve import Solution
from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design
from benchkit.stage.draws import Array, Parameters, nominal
from benchkit.stage.faults import HEALTHY, Fault
from benchkit.stage.points import transistors_of
from benchkit.stage.runs import Faults, Mask, Run, State, trimmer_travel

Loading = Literal["nominal", "each", "none"]
_LIFT_FROM = 8
"""So many units start from the nominal unit's solution."""


@dataclass(frozen=True, kw_only=True)
class Solved:
    """Operating points of units; every array has the shape (units,).

    Attributes
    ----------
    points : dict of str to array
        Readings by point name, in the point's unit, for every modelled powered point of the condition.
    powers_w : dict of str to array
        What heats each transistor.
    temperatures_c : dict of str to array
        Junctions by part, and ``heatsink``.
    converged : array of bool
    position : array or None
        The trimmer's travel from the least-bias end; None without a trimmer.
    unclipped : array or None
        With "target": the travel that would meet the target, outside 0..1 where it is out of reach.
    in_reach : array of bool
        Whether the target was met (true where none was asked for).
    solution : Solution
        The circuit's own, for whoever needs another node.
    """

    units: int
    points: dict[str, Array]
    powers_w: dict[str, Array]
    temperatures_c: dict[str, Array]
    converged: Mask
    position: Array | None
    unclipped: Array | None
    in_reach: Mask
    solution: Solution = field(repr=False)


def solve_units(
    design: Design,
    parameters: Parameters,
    condition: Condition,
    faults: Faults = None,
    *,
    temperatures_c: Mapping[str, float | Array] | None = None,
    rails_v: tuple[Array, Array] | None = None,
    position: Array | float | None = None,
    room_c: Array | None = None,
    start: Solved | None = None,
    loading: Loading = "nominal",
) -> Solved:
    """Solve units under a powered condition.

    Parameters
    ----------
    design : Design
    parameters : mapping
        From `nominal` or `draw`; arrays of shape (units,) or ().
    condition : Condition
    faults : Fault, sequence of Fault or None per unit, or None
    temperatures_c : mapping, optional
        Junction temperature (degC) of each transistor by part name, and ``heatsink``; overrides the condition's `when`.
        What is left out is at the ambient temperature.
    rails_v : two arrays, optional
        Rails of each unit (V), instead of the condition's.
    position : array or float, optional
        The trimmer's travel of each unit, instead of the condition's.
    room_c : array, optional
        Ambient temperature of each unit (degC), instead of the condition's.
    start : Solved, optional
        Where to start: of one unit, or of as many.
    loading : "nominal", "each" or "none"
        Whose circuit tells what the voltmeter takes away.

    Returns
    -------
    Solved
    """
    units = units_in(parameters)
    if isinstance(faults, Sequence):
        units = max(units, len(faults))
    for array in (rails_v or ()) if position is None else (*(rails_v or ()), np.asarray(position)):
        units = max(units, np.asarray(array).size)
    run = Run(design, parameters, condition, faults, units, rails_v, room_c)
    warm = condition.when == "warm" and temperatures_c is None
    temperature = _given_temperatures(design, run.ambient_c, temperatures_c, units)
    if warm and start is not None and bool(start.converged.all()):
        temperature = {name: np.broadcast_to(v, units).copy() for name, v in start.temperatures_c.items()}
    given = start is not None
    if start is None and units >= _LIFT_FROM:
        start = _nominal_start(design, replace(condition, when="cold"))
    first = start.solution if start is not None and bool(start.converged.all()) else None

    unclipped: Array | None = None
    in_reach = np.ones(units, dtype=np.bool_)
    find = condition.trimmer == "target" and position is None and design.spreader.trimmer is not None
    healthy = faults is None or faults == HEALTHY
    if find:
        state = run.find_trimmer(temperature, first, warm)
        unclipped = state.position
        in_reach = (unclipped >= 0.0) & (unclipped <= 1.0) & state.converged
        travel = np.clip(np.where(np.isfinite(unclipped), unclipped, 0.0), 0.0, 1.0)
        final = state
        again = np.ones(units, np.bool_) if not healthy else ~in_reach
        if bool(again.any()):
            beside = _beside(run, travel) if not healthy else None
            final = run.fixed(travel, state.temperature, beside or state.solution, warm)
        place: Array | None = travel
    else:
        place = trimmer_travel(design, parameters, condition.trimmer if position is None else position, units)
        beside = None if healthy or given else _beside(run, place)
        final = run.fixed(place, temperature, beside or first, warm)
    points = run.readings(final)
    if loading != "none":
        ratios = loading_ratios(design, condition) if loading == "nominal" else run.own_ratios(place, final)
        for name, ratio in ratios.items():
            points[name] = points[name] * ratio
    return Solved(
        units=units,
        points=points,
        powers_w=final.powers_w,
        temperatures_c=final.temperature,
        converged=final.converged,
        position=place,
        unclipped=unclipped,
        in_reach=in_reach,
        solution=final.solution,
    )


def units_in(parameters: Parameters) -> int:
    """Number of units in a parameter set (1 when nothing varies)."""
    return max((value.size for value in parameters.values()), default=1)


def _beside(run: Run, travel: Array | None) -> dict[str, Array] | None:
    """Start of faulty units: the nominal unit with each one's fault, at a typical travel; None when not worth it."""
    if run.faults is None or isinstance(run.faults, Fault) or run.units < _LIFT_FROM:
        return None
    distinct = list(dict.fromkeys(run.faults))
    if run.units < 4 * len(distinct):
        return None
    pilots = Run(run.design, nominal(run.design), replace(run.condition, when="cold"), distinct, len(distinct), None)
    temperature = _given_temperatures(run.design, run.ambient_c, None, len(distinct))
    middle = None if travel is None else np.full(len(distinct), np.median(travel))
    solution = pilots.fixed(middle, temperature, None, False).solution
    number = {fault: index for index, fault in enumerate(distinct)}
    return run.lifted(solution, np.array([number[fault] for fault in run.faults], dtype=np.intp))


@lru_cache(maxsize=256)
def _nominal_start(design: Design, condition: Condition) -> Solved:
    return solve_units(design, nominal(design), condition, loading="none")


@lru_cache(maxsize=256)
def loading_ratios(design: Design, condition: Condition) -> dict[str, float]:
    """What a voltmeter's input resistance makes of each voltage point of the nominal unit: reading / bare voltage."""
    solved = solve_units(design, nominal(design), condition, loading="none")
    run = Run(design, nominal(design), condition, None, 1, None)
    state = State(
        solution=solved.solution, temperature=solved.temperatures_c, converged=solved.converged,
        powers_w=solved.powers_w, points_bare=solved.points, position=np.zeros(1),
    )  # fmt: skip
    return {name: float(ratio[0]) for name, ratio in run.own_ratios(solved.position, state).items()}


def _given_temperatures(
    design: Design, ambient_c: Array | float, given: Mapping[str, float | Array] | None, units: int
) -> dict[str, Array]:
    names = [part.name for part in transistors_of(design)] + ["heatsink"]
    given = given or {}
    return {name: np.broadcast_to(np.asarray(given.get(name, ambient_c), np.float64), units).copy() for name in names}
