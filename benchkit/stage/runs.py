"""One call's work on a batch of units: values, the trimmer, the solve, the warm state, the readings.

`benchkit.stage.operate` says how a condition is solved and is what others call; this is how it is done.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit.solve import Compiled, Effort, Solution, compile_netlist
from benchkit.stage.balance import settle
from benchkit.stage.conditions import NO_LIMIT_A, Condition, TrimmerPosition
from benchkit.stage.design import ZERO_CELSIUS_K, Design, target_drop_v
from benchkit.stage.draws import Array, Parameters, take
from benchkit.stage.faults import SERVO_OFF_A, Fault, apply
from benchkit.stage.heat import Heat, heat
from benchkit.stage.points import points_of, transistors_of
from benchkit.stage.topologies import VOLTMETER_OHM, StageNetlist, Variant, build, free_section, tied_divider

Faults = Fault | Sequence[Fault | None] | None
Mask = NDArray[np.bool_]
Index = NDArray[np.intp]
Start = Solution | dict[str, Array] | None

NO_METER_OHM = 1e15
_ROUNDS_BETWEEN = 4
_SAME_TRAVEL = 1e-9


@lru_cache(maxsize=256)
def compiled(design: Design, variant: Variant) -> Compiled:
    """Compile a design's netlist; cached."""
    return compile_netlist(build(design, variant).netlist)


@dataclass(frozen=True, kw_only=True)
class State:
    """One way's result, before clipping and loading."""

    solution: Solution
    temperature: dict[str, Array]
    converged: Mask
    powers_w: dict[str, Array]
    position: Array
    points_bare: dict[str, Array] = field(default_factory=dict)


class Run:
    """One call's fixed things."""

    def __init__(
        self,
        design: Design,
        parameters: Parameters,
        condition: Condition,
        faults: Faults,
        units: int,
        rails_v: tuple[Array, Array] | None,
        ambient_c: Array | None = None,
    ) -> None:
        self.design = design
        self.parameters = parameters
        self.condition = condition
        self.faults = faults
        self.units = units
        self.ambient_c: Array | float
        if ambient_c is not None:
            self.ambient_c = ambient_c
        else:
            self.ambient_c = design.thermal.ambient_c if condition.ambient_c is None else condition.ambient_c
        self.positive_v = np.asarray(condition.positive_v if rails_v is None else rails_v[0], dtype=np.float64)
        self.negative_v = np.asarray(condition.negative_v if rails_v is None else rails_v[1], dtype=np.float64)
        self.transistors = transistors_of(design)
        self.set_v = self.positive_v, self.negative_v
        """What the rails are set to: that decides whether and where a servo regulates."""
        self.effort: Effort = "full"
        """What the solver does for units that are hard."""
        self.kin: Index | None = None
        """Groups within which the solver may start one unit from another's solution; None for one group."""

    def variant(self, find: bool = False, meters: bool = False) -> Variant:
        """Form of the netlist for this condition."""
        return Variant(find_trimmer=find, meters=meters, fuses=self.condition.fuse_ohm is not None)

    def netlist(self) -> StageNetlist:
        """Netlist of the condition, trimmer fixed."""
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
            positive_v, negative_v = self.set_v
            lowest_v = positive_v if design.single_supply else np.minimum(positive_v, -negative_v)
            idle = lowest_v < works_from_v
            most_a = values["feed.lower.max_a"]
            values["feed.lower.stuck.amps"] = np.where(idle, values["feed.lower.idle"] * most_a, 0.0)
            values["feed.lower.max_a"] = np.where(idle, SERVO_OFF_A, most_a)
        for part in self.transistors:
            values[f"{part.name}.kelvin"] = temperature[part.name] + ZERO_CELSIUS_K
        return values

    def rest_v(self) -> Array:
        """Where the output rests (V), offset left out; shape (units,) or ()."""
        rest = self.design.output.rest
        if rest.share is None:
            return np.asarray(rest.volts or 0.0)
        positive_v, negative_v = self.set_v
        return np.asarray(negative_v + rest.share * (positive_v - negative_v))

    def travel(self, found_ohm: Array) -> Array:
        """Travel at which a trimmer in one arm has a resistance, outside 0..1 when it never has.

        A tied divider is one: it works in the lower arm.

        A negative resistance that leaves the arm positive asks for less than none. One that takes the whole arm below
        zero has passed through infinity: it asks for more than any.
        """
        trimmer = self.design.spreader.trimmer
        assert trimmer is not None
        end_ohm = trimmer.end_resistance_ohm
        share = (found_ohm - end_ohm) / (self.parameters["spreader.trimmer.track"] - 2.0 * end_ohm)
        arm = "upper" if trimmer.arm == "upper" else "lower"
        share = np.where(found_ohm <= -self.parameters[f"spreader.{arm}"], np.inf, share)
        return np.asarray(share if trimmer.arm == "upper" else 1.0 - share)

    def divided(self, solution: Solution, found_ohm: Array, values: dict[str, Array]) -> Array:
        """Travel of a trimmer that divides, from a solution whose upper section was free.

        Voltages across the arms and the base current hardly depend on how the arms' sum T is divided, so V_U/R_U -
        V_L/R_L = I_B with R_U + R_L = T is a quadratic equation for R_U.
        """
        trimmer = self.design.spreader.trimmer
        assert trimmer is not None
        between = self.netlist().between
        upper_v, lower_v = (np.abs(solution.between(*between[f"spread.{arm}"])) for arm in ("upper", "lower"))
        end_ohm, track_ohm = trimmer.end_resistance_ohm, values["spreader.trimmer.track"]
        lower_ohm = values["spreader.lower"] + values["spreader.trimmer.lower"]
        base_a = upper_v / (values["spreader.upper"] + found_ohm) - lower_v / lower_ohm
        total_ohm = values["spreader.upper"] + values["spreader.lower"] + track_ohm
        middle = upper_v + lower_v + base_a * total_ohm
        upper_ohm = 2.0 * upper_v * total_ohm / (middle + np.sqrt(middle**2 - 4.0 * base_a * upper_v * total_ohm))
        return np.asarray((upper_ohm - values["spreader.upper"] - end_ohm) / (track_ohm - 2.0 * end_ohm))

    def solve(self, values: dict[str, Array], start: Start, *, find: bool = False) -> Solution:
        """Solve the circuit from a start of one unit, of all units, or from rest."""
        circuit = compiled(self.design, self.variant(find))
        rest_v = self.rest_v() + self.parameters["output.offset"]
        inner = [node for node in circuit.netlist.nodes() if not node.startswith("rail")]
        first = start
        if isinstance(start, Solution) and start.units == 1 and self.units > 1:
            first = self.lifted(start, np.zeros(self.units, dtype=np.intp))
        chosen = {key: value for key, value in values.items() if key in circuit.keys}
        initial = dict.fromkeys(inner, rest_v)
        return circuit.solve(chosen, self.units, first, initial, effort=self.effort, kin=self.kin)

    def lifted(self, pilots: Solution, whose: Index) -> dict[str, Array]:
        """Start of every unit from one of some solved ones, moved to where its own output will be.

        A servo holds each unit's output at a rest and an offset of its own, and has no slope to find the way from
        another one's.
        """
        offset_v = np.zeros(())
        if self.design.feed.lower.kind == "servo":
            held_v = pilots.values["feed.lower.rest_v"]
            offset_v = self.rest_v() + self.parameters["output.offset"] - (held_v[whose] if held_v.size > 1 else held_v)
        start: dict[str, Array] = {}
        for name, row in zip(pilots.plan.names, pilots.x, strict=True):
            held = name.startswith(("rail", "heatsink"))
            start[name] = row[whose] + (0.0 if held else offset_v)
        if self.positive_v.size > 1:
            start |= {"rail+": self.positive_v, "rail-": self.negative_v}
        return start

    def fixed(self, travel: Array | None, temperature: dict[str, Array], start: Start, warm: bool) -> State:
        """Solve with the trimmer at a travel, faults included."""

        def once(run: Run, which: Index, at: dict[str, Array], previous: Start) -> tuple[Solution, Array]:
            values = run.values(at)
            own = None if travel is None else travel[which]
            set_trimmer(run.design, values, own)
            apply(values, run.faults, run.design)
            return run.solve(values, previous), np.zeros(run.units) if own is None else own

        return self._settle(once, temperature, start, warm)

    def find_trimmer(self, temperature: dict[str, Array], start: Start, warm: bool) -> State:
        """Solve healthy units for the trimmer that meets the target."""
        drop_v = 2.0 * target_drop_v(self.design) * self.condition.target_share
        trimmer = self.design.spreader.trimmer
        assert trimmer is not None
        divides = trimmer.arm == "between" and not tied_divider(self.design)
        section = free_section(self.design)
        latest = np.full(self.units, 0.5)

        def once(run: Run, which: Index, at: dict[str, Array], previous: Start) -> tuple[Solution, Array]:
            values = run.values(at)
            values[f"{section}.volts"] = np.asarray(drop_v)
            travel = latest[which]
            for _ in range(_ROUNDS_BETWEEN if divides else 1):
                before = travel
                if trimmer.arm == "between":
                    set_trimmer(run.design, values, np.clip(travel, 0.0, 1.0))
                    del values[section]
                solution = previous = run.solve(values, previous, find=True)
                with np.errstate(divide="ignore", invalid="ignore"):
                    found_ohm = 1.0 / solution.conductance(section)
                    travel = run.divided(solution, found_ohm, values) if divides else run.travel(found_ohm)
                    if not (np.abs(travel - before) > _SAME_TRAVEL).any():
                        break
            latest[which] = np.where(np.isfinite(travel), travel, 0.5)
            return solution, travel

        return self._settle(once, temperature, start, warm)

    def subset(self, which: Index) -> Run:
        """Return the run of some of the units."""
        faults = self.faults
        if faults is not None and not isinstance(faults, Fault):
            faults = [faults[index] for index in which]
        rails = [v if v.size == 1 else v[which] for v in (self.positive_v, self.negative_v)]
        few = take(self.parameters, which)
        ambient_c = np.asarray(self.ambient_c)
        own_c = ambient_c[which] if ambient_c.size > 1 else ambient_c
        part = Run(self.design, few, self.condition, faults, len(which), (rails[0], rails[1]), own_c)
        part.effort = self.effort
        part.kin = None if self.kin is None else self.kin[which]
        if self.set_v[0] is not self.positive_v:
            part.set_v = self.set_v
        return part

    def _settle(self, once: _Once, temperature: dict[str, Array], start: Start, warm: bool) -> State:
        """Solve, and with `warm` heat and solve again until the junctions are at rest (see `benchkit.stage.balance`).

        Units that are at rest leave; those that stay are solved on, and at the end all are solved once more.
        """
        everyone = np.arange(self.units)
        solution, travel = once(self, everyone, temperature, start)
        if not warm:
            return self._state(solution, temperature, solution.converged, travel)
        names = list(temperature)
        best = dict(zip(solution.plan.names, solution.x.copy(), strict=True))
        run, live, latest = self, everyone, solution

        def following(which: Index, at: Array) -> tuple[Array, Mask]:
            nonlocal run, live, latest
            next_start: Start = latest
            if len(which) < len(live):
                live, run = which, self.subset(which)
                next_start = {name: column[which] for name, column in best.items()}
            latest, _ = once(run, which, dict(zip(names, at, strict=True)), next_start)
            for name, row in zip(latest.plan.names, latest.x, strict=True):
                best[name][which] = np.where(latest.converged, row, best[name][which])
            return _stacked(run._heat(latest), names), latest.converged

        began = np.array([temperature[name] for name in names])
        at, at_rest = settle(began, _stacked(self._heat(solution), names), solution.converged, following)
        temperature = dict(zip(names, at, strict=True))
        solution, travel = once(self, everyone, temperature, best)
        return self._state(solution, temperature, solution.converged & at_rest, travel)

    def _heat(self, solution: Solution) -> Heat:
        return heat(self.design, self._powers_w(solution), self.ambient_c)

    def _powers_w(self, solution: Solution) -> dict[str, Array]:
        # A unit without a solution may stand at voltages that no number holds; its powers are shown as too hot.
        with np.errstate(all="ignore"):
            found = solution.powers_w()
        rows = np.nan_to_num(np.array([found[part.name] for part in self.transistors]), nan=1e6, posinf=1e6, neginf=1e6)
        return dict(zip((part.name for part in self.transistors), rows, strict=True))

    def _state(self, solution: Solution, temperature: dict[str, Array], converged: Mask, travel: Array) -> State:
        return State(
            solution=solution, temperature=temperature, converged=converged, powers_w=self._powers_w(solution),
            position=travel,
        )  # fmt: skip

    def readings(self, state: State) -> dict[str, Array]:
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

    def own_ratios(self, travel: Array | None, state: State) -> dict[str, Array]:
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


def _stacked(hot: Heat, names: Sequence[str]) -> Array:
    """Temperatures as one array of shape (names, units)."""
    return np.array([hot.temperatures_c[name] for name in names])


_Once = Callable[[Run, Index, dict[str, Array], Start], tuple[Solution, Array]]


def trimmer_travel(design: Design, parameters: Parameters, wanted: TrimmerPosition | Array, units: int) -> Array | None:
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
