"""Operating points of units under a condition: trimmer, heat, faults and meter, around one batched solve.

How a powered condition is solved
---------------------------------
1. Values: a parameter set (`benchkit.stage.draws`), rails and limit of the condition, junctions at their temperature.
2. Trimmer: a travel gives its resistance. "target" replaces the trimmer by an unknown conductance whose condition is
   that the drop over both emitter resistors of pair 1 is twice the target drop; the trimmer's resistance is read off the
   solution, for every unit at once. A unit whose resistance lies outside its track is out of reach: it is clipped to the
   track's end and solved again. A trimmer that divides (arm "between") has two sections of one sum: one is unknown, the
   other follows, three times over.
3. Warm: solve, heat, solve again, until no junction moves. The step is that of a secant on the heat sink's rise, so a
   stage near its runaway margin takes few rounds too; a unit that doesn't come to rest is one that did not converge.
4. Faults come last and are values: a unit that was trimmed is trimmed healthy and then has its fault.

The trimmer's law: the section from the wiper to an end is end resistance + travel * (track - 2 * end resistance).

Readings include the voltmeter's 10 Mohm across the point. Each point's reading is solved with the meter for one unit
(the nominal one, or with ``loading="each"`` every unit), and the ratio to the bare voltage is applied to the others: the
whole effect is below 1e-3 in any healthy stage, and its variation from unit to unit is second order.

Below ``works_from`` a servo doesn't regulate and nobody can say what it sends: each unit's servo is a source of some
share of its most.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from functools import lru_cache
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit.solve import Compiled, Solution, compile_netlist
from benchkit.stage.conditions import NO_LIMIT_A, Condition, TrimmerPosition
from benchkit.stage.design import ZERO_CELSIUS_K, Design, target_drop_v
from benchkit.stage.draws import Array, Parameters, nominal, take
from benchkit.stage.faults import HEALTHY, SERVO_OFF_A, Fault, apply
from benchkit.stage.heat import Heat, heat
from benchkit.stage.points import points_of, transistors_of
from benchkit.stage.topologies import VOLTMETER_OHM, StageNetlist, Variant, build

Faults = Fault | Sequence[Fault | None] | None
Loading = Literal["nominal", "each", "none"]
Mask = NDArray[np.bool_]
Index = NDArray[np.intp]
Start = Solution | dict[str, Array] | None
_Once = Callable[["_Run", Index, dict[str, Array], Start], tuple[Solution, Array]]

NO_METER_OHM = 1e15
_ROUNDS_BETWEEN = 4
_MOST_ROUNDS = 40
WARM_K = 1e-3
"""Junctions that move by less than this (K) are at rest."""
_HOTTEST_C = 400.0
_COLDEST_C = -60.0


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


@lru_cache(maxsize=64)
def compiled(design: Design, variant: Variant) -> Compiled:
    """Compile a design's netlist; cached."""
    return compile_netlist(build(design, variant).netlist)


def solve_units(
    design: Design,
    parameters: Parameters,
    condition: Condition,
    faults: Faults = None,
    *,
    temperatures_c: Mapping[str, float | Array] | None = None,
    rails_v: tuple[Array, Array] | None = None,
    position: Array | float | None = None,
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
    run = _Run(design, parameters, condition, faults, units, rails_v)
    warm = condition.when == "warm" and temperatures_c is None
    temperature = _given_temperatures(design, run.ambient_c, temperatures_c, units)
    if warm and start is not None:
        temperature = {name: np.broadcast_to(v, units).copy() for name, v in start.temperatures_c.items()}
    first = start.solution if start is not None else None

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
            final = run.fixed(travel, state.temperature, state.solution, warm)
        place: Array | None = travel
    else:
        place = trimmer_travel(design, parameters, condition.trimmer if position is None else position, units)
        final = run.fixed(place, temperature, first, warm)
    points = run.readings(final)
    if loading != "none":
        ratios = (
            loading_ratios(design, condition) if loading == "nominal" else run.own_ratios(place, final)
        )
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


@lru_cache(maxsize=256)
def loading_ratios(design: Design, condition: Condition) -> dict[str, float]:
    """What a voltmeter's input resistance makes of each voltage point of the nominal unit: reading / bare voltage."""
    solved = solve_units(design, nominal(design), condition, loading="none")
    run = _Run(design, nominal(design), condition, None, 1, None)
    state = _State(
        solution=solved.solution, temperature=solved.temperatures_c, converged=solved.converged,
        powers_w=solved.powers_w, points_bare=solved.points, position=np.zeros(1),
    )  # fmt: skip
    return {name: float(ratio[0]) for name, ratio in run.own_ratios(solved.position, state).items()}


@dataclass(frozen=True, kw_only=True)
class _State:
    """One way's result, before clipping and loading."""

    solution: Solution
    temperature: dict[str, Array]
    converged: Mask
    powers_w: dict[str, Array]
    position: Array
    points_bare: dict[str, Array] = field(default_factory=dict)


class _Run:
    """One call's fixed things."""

    def __init__(
        self,
        design: Design,
        parameters: Parameters,
        condition: Condition,
        faults: Faults,
        units: int,
        rails_v: tuple[Array, Array] | None,
    ) -> None:
        self.design = design
        self.parameters = parameters
        self.condition = condition
        self.faults = faults
        self.units = units
        self.ambient_c = design.thermal.ambient_c if condition.ambient_c is None else condition.ambient_c
        self.positive_v = np.asarray(condition.positive_v if rails_v is None else rails_v[0], dtype=np.float64)
        self.negative_v = np.asarray(condition.negative_v if rails_v is None else rails_v[1], dtype=np.float64)
        self.transistors = transistors_of(design)

    def variant(self, find: bool = False, meters: bool = False) -> Variant:
        return Variant(find_trimmer=find, meters=meters, fuses=self.condition.fuse_ohm is not None)

    def netlist(self) -> StageNetlist:
        return build(self.design, self.variant())

    def values(self, temperature: Mapping[str, Array]) -> dict[str, Array]:
        """Values of everything but the trimmer, healthy."""
        design, condition = self.design, self.condition
        values = dict(self.parameters)
        limit_a = NO_LIMIT_A if condition.limit_a is None else condition.limit_a
        for sign, volts in (("positive", self.positive_v), ("negative", -self.negative_v)):
            values[f"supply.{sign}.volts"] = volts
            values[f"supply.{sign}.limit_a"] = np.asarray(limit_a)
            values[f"fuse.{sign}"] = np.asarray(condition.fuse_ohm or 0.0)
        if design.feed.lower.kind == "servo":
            values["feed.lower.rest_v"] = self.rest_v() + values["output.offset"]
            works_from_v = design.feed.works_from_v or 0.0
            idle = np.minimum(self.positive_v, -self.negative_v) < works_from_v
            most_a = values["feed.lower.max_a"]
            values["feed.lower.stuck.amps"] = np.where(idle, values["feed.lower.idle"] * most_a, 0.0)
            values["feed.lower.max_a"] = np.where(idle, SERVO_OFF_A, most_a)
        for part in self.transistors:
            values[f"{part.name}.kelvin"] = temperature[part.name] + ZERO_CELSIUS_K
        return values

    def rest_v(self) -> Array:
        rest = self.design.output.rest
        if rest.share is None:
            return np.asarray(rest.volts or 0.0)
        return np.asarray(self.negative_v + rest.share * (self.positive_v - self.negative_v))

    def travel(self, section_ohm: Array) -> Array:
        """Travel at which the trimmer (with arm "between": its upper section) has a resistance."""
        trimmer = self.design.spreader.trimmer
        assert trimmer is not None
        end_ohm = trimmer.end_resistance_ohm
        share = (section_ohm - end_ohm) / (self.parameters["spreader.trimmer.track"] - 2.0 * end_ohm)
        return np.asarray(1.0 - share if trimmer.arm == "lower" else share)

    def solve(
        self, values: dict[str, Array], start: Start, *, find: bool = False
    ) -> Solution:
        circuit = compiled(self.design, self.variant(find))
        rest_v = self.rest_v() + self.parameters["output.offset"]
        inner = [node for node in circuit.netlist.nodes() if not node.startswith("rail")]
        first = start
        if isinstance(start, Solution) and start.units == 1 and self.units > 1:
            # One unit's solution, lifted to where each unit's output will be: a servo has no slope beside that place.
            names = start.plan.names
            shift = {name: 0.0 if name.startswith("rail") else rest_v - start.voltage("output") for name in names}
            first = {name: np.asarray(start.x[k] + shift[name]) for k, name in enumerate(names)}
        chosen = {key: value for key, value in values.items() if key in circuit.keys}
        return circuit.solve(chosen, self.units, first, dict.fromkeys(inner, rest_v))

    def fixed(self, travel: Array | None, temperature: dict[str, Array], start: Solution | None, warm: bool) -> _State:
        """Solve with the trimmer at a travel, faults included."""

        def once(run: _Run, which: Index, at: dict[str, Array], previous: Start) -> tuple[Solution, Array]:
            values = run.values(at)
            own = None if travel is None else travel[which]
            set_trimmer(run.design, values, own)
            apply(values, run.faults, run.design)
            return run.solve(values, previous), np.zeros(run.units) if own is None else own

        return self._settle(once, temperature, start, warm)

    def find_trimmer(self, temperature: dict[str, Array], start: Solution | None, warm: bool) -> _State:
        """Solve healthy units for the trimmer that meets the target."""
        drop_v = 2.0 * target_drop_v(self.design) * self.condition.target_share
        trimmer = self.design.spreader.trimmer
        assert trimmer is not None
        between = trimmer.arm == "between"
        section = "spreader.trimmer.upper" if between else "spreader.trimmer"
        # A negative conductance asks for more than infinite resistance: out of reach at that end.
        beyond = -np.inf if trimmer.arm == "lower" else np.inf

        def once(run: _Run, which: Index, at: dict[str, Array], previous: Start) -> tuple[Solution, Array]:
            values = run.values(at)
            values[f"{section}.volts"] = np.asarray(drop_v)
            travel = np.full(run.units, 0.5)
            for _ in range(_ROUNDS_BETWEEN if between else 1):
                if between:
                    set_trimmer(run.design, values, np.clip(travel, -2.0, 2.0))
                    del values["spreader.trimmer.upper"]
                solution = previous = run.solve(values, previous, find=True)
                conductance = solution.conductance(section)
                with np.errstate(divide="ignore"):
                    travel = np.where(conductance <= 0.0, beyond, run.travel(1.0 / conductance))
            return solution, travel

        return self._settle(once, temperature, start, warm)

    def subset(self, which: Index) -> _Run:
        """Return the run of some of the units."""
        faults = self.faults
        if faults is not None and not isinstance(faults, Fault):
            faults = [faults[index] for index in which]
        rails = [v if v.size == 1 else v[which] for v in (self.positive_v, self.negative_v)]
        few = take(self.parameters, which)
        return _Run(self.design, few, self.condition, faults, len(which), (rails[0], rails[1]))

    def _settle(self, once: _Once, temperature: dict[str, Array], start: Solution | None, warm: bool) -> _State:
        """Solve, and with `warm` heat and solve again until the junctions are at rest.

        Units that are at rest leave; those that stay are solved on, and at the end all are solved once more.
        """
        everyone = np.arange(self.units)
        solution, travel = once(self, everyone, temperature, start)
        if not warm:
            return self._state(solution, temperature, solution.converged, travel)
        temperature = {name: value.copy() for name, value in temperature.items()}
        at_rest = np.zeros(self.units, np.bool_)
        run, live, latest = self, everyone, solution
        now = {name: value.copy() for name, value in temperature.items()}
        best = dict(zip(solution.plan.names, solution.x.copy(), strict=True))
        before: tuple[Array, Array] | None = None
        slope = np.zeros(self.units)
        for _ in range(_MOST_ROUNDS):
            hot = run._heat(latest)
            change = {name: hot.temperatures_c[name] - now[name] for name in now}
            moved = np.max([np.abs(array) for array in change.values()], axis=0)
            resting = moved < WARM_K
            rise, rise_change = now["heatsink"].copy(), change["heatsink"]
            if before is not None:
                step = rise - before[0]
                with np.errstate(divide="ignore", invalid="ignore"):
                    found = np.clip(1.0 + (rise_change - before[1]) / step, -2.0, 0.95)
                slope = np.where((np.abs(step) > 1e-6) & np.isfinite(found), found, slope)
            before = (rise, rise_change)
            for name in now:
                gain = np.where(resting, 1.0, 1.0 / (1.0 - slope))
                now[name] = np.clip(now[name] + gain * change[name], _COLDEST_C, _HOTTEST_C)
                temperature[name][live] = now[name]
            at_rest[live] = resting
            keep = np.flatnonzero(~resting & latest.converged & (now["heatsink"] < _HOTTEST_C))
            if not len(keep):
                break
            next_start: Start = latest
            if len(keep) < 0.7 * len(live):
                live = live[keep]
                next_start = {name: column[live] for name, column in best.items()}
                run, now = self.subset(live), {name: value[keep] for name, value in now.items()}
                before, slope = (before[0][keep], before[1][keep]), slope[keep]
            latest, _ = once(run, live, now, next_start)
            for name, row in zip(latest.plan.names, latest.x, strict=True):
                best[name][live] = np.where(latest.converged, row, best[name][live])
        solution, travel = once(self, everyone, temperature, best)
        return self._state(solution, temperature, solution.converged & at_rest, travel)

    def _heat(self, solution: Solution) -> Heat:
        return heat(self.design, self._powers_w(solution), self.ambient_c)

    def _powers_w(self, solution: Solution) -> dict[str, Array]:
        # A unit without a solution may stand at voltages that no number holds; its powers are shown as too hot.
        with np.errstate(all="ignore"):
            powers_w = {part.name: solution.transistor(part.name).power_w for part in self.transistors}
        return {name: np.nan_to_num(power, nan=1e6, posinf=1e6, neginf=1e6) for name, power in powers_w.items()}

    def _state(self, solution: Solution, temperature: dict[str, Array], converged: Mask, travel: Array) -> _State:
        return _State(
            solution=solution, temperature=temperature, converged=converged, powers_w=self._powers_w(solution),
            position=travel,
        )  # fmt: skip

    def readings(self, state: _State) -> dict[str, Array]:
        """Bare readings, without the voltmeter's load."""
        stage, solution = self.netlist(), state.solution
        result: dict[str, Array] = {}
        for point in points_of(self.design):
            if not point.powered or not point.modelled:
                continue
            if point.name in stage.currents:
                result[point.name] = solution.current(stage.currents[point.name])
            elif point.name in stage.between:
                result[point.name] = solution.between(*stage.between[point.name])
            elif point.name == "heatsink":
                result[point.name] = state.temperature["heatsink"]
        return result

    def own_ratios(self, travel: Array | None, state: _State) -> dict[str, Array]:
        """Reading over bare voltage at every voltage point of every unit, from a solve with the meter there."""
        bare = self.readings(state)
        names = [name.removeprefix("meter.") for name in build(self.design, self.variant(meters=True)).netlist.elements
                 if name.startswith("meter.")]  # fmt: skip
        values = self.values(state.temperature)
        set_trimmer(self.design, values, travel)
        apply(values, self.faults, self.design)
        many = len(names)
        values = {key: value if value.size == 1 else np.tile(value, many) for key, value in values.items()}
        for index, name in enumerate(names):
            meter = np.full((many, self.units), NO_METER_OHM)
            meter[index] = VOLTMETER_OHM
            values[f"meter.{name}"] = meter.ravel()
        here = state.solution
        start = {node: np.tile(here.voltage(node), many) for node in build(self.design, self.variant()).netlist.nodes()}
        circuit = compiled(self.design, self.variant(meters=True))
        loaded = circuit.solve({k: v for k, v in values.items() if k in circuit.keys}, many * self.units, start)
        stage = self.netlist()
        ratios: dict[str, Array] = {}
        for index, name in enumerate(names):
            part = slice(index * self.units, (index + 1) * self.units)
            reading = loaded.between(*stage.between[name])[part]
            good = loaded.converged[part] & (np.abs(bare[name]) > 1e-9)
            with np.errstate(divide="ignore", invalid="ignore"):
                ratios[name] = np.where(good, reading / bare[name], 1.0)
        return ratios


def trimmer_travel(
    design: Design, parameters: Parameters, wanted: TrimmerPosition | Array, units: int
) -> Array | None:
    """Travel of each unit's trimmer from the least-bias end, shape (units,); None without a trimmer.

    "target" is not known here and is taken as "unknown": anywhere.
    """
    if design.spreader.trimmer is None:
        return None
    travel: Array | float
    if isinstance(wanted, str):
        known = {"least": 0.0, "most": 1.0}
        travel = known[wanted] if wanted in known else parameters["spreader.trimmer.position"]
    else:
        travel = wanted
    return np.broadcast_to(np.asarray(travel, dtype=np.float64), units).copy()


def set_trimmer(design: Design, values: dict[str, Array], travel: Array | None) -> None:
    """Add the trimmer's resistance at a travel from the least-bias end to the values of a netlist."""
    trimmer = design.spreader.trimmer
    if trimmer is None or travel is None:
        return
    end_ohm = trimmer.end_resistance_ohm
    usable_ohm = values["spreader.trimmer.track"] - 2.0 * end_ohm
    lower_ohm, upper_ohm = end_ohm + (1.0 - travel) * usable_ohm, end_ohm + travel * usable_ohm
    if trimmer.arm == "between":
        values["spreader.trimmer.lower"], values["spreader.trimmer.upper"] = lower_ohm, upper_ohm
    else:
        values["spreader.trimmer"] = lower_ohm if trimmer.arm == "lower" else upper_ohm


def _given_temperatures(
    design: Design, ambient_c: float, given: Mapping[str, float | Array] | None, units: int
) -> dict[str, Array]:
    names = [part.name for part in transistors_of(design)] + ["heatsink"]
    given = given or {}
    return {name: np.broadcast_to(np.asarray(given.get(name, ambient_c), np.float64), units).copy() for name in names}
