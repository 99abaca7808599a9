"""The loop from temperature to power and back: its gain, its state of rest, and how far that is from running away.

Everything is for units with the trimmer at a fixed place: a stage is trimmed once and then left to itself, so a target
that is met at rest says nothing yet about whether that rest is stable.

The gains themselves are in `benchkit.stage.loop_gain`; K = dP/dT, from the circuit's first-order response
(`benchkit.circuit.response`), is found here.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit.netlist import Supply
from benchkit.circuit.response import Response
from benchkit.circuit.solution import Solution
from benchkit.stage.balance import settle
from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design
from benchkit.stage.draws import Array, Parameters
from benchkit.stage.heat import HeatNodes, heat_nodes
from benchkit.stage.loop_gain import growth_per_s, loop_gain, sum_gain
from benchkit.stage.operate import Solved, solve_units, units_in
from benchkit.stage.runs import Faults, Index, Mask, Run, Start

Matrix = NDArray[np.float64]

STEP_K = 1e-5
"""How far a junction is warmed for a derivative."""


@dataclass(frozen=True, kw_only=True)
class Point:
    """Operating points at given temperatures.

    Attributes
    ----------
    solution : Solution
    converged : array of bool of shape (units,)
    powers_w : array of shape (parts, units)
    """

    solution: Solution
    converged: Mask
    powers_w: Array


@dataclass(frozen=True, kw_only=True)
class Slopes:
    """Derivatives by the junctions' temperatures.

    Attributes
    ----------
    powers : array of shape (units, parts, parts)
        dP_i/dT_j (W/K).
    drop : array of shape (units, parts)
        V/K.
    """

    powers: Matrix
    drop: Matrix


class Electrothermal:
    """Units of a design under one condition, each with its trimmer at a fixed travel.

    Parameters
    ----------
    design : Design
    parameters : mapping
        As for `solve_units`.
    condition : Condition
        Its rails, limit and ambient temperature count.
    travel : array of shape (units,) or None
        From the least-bias end; None without a trimmer.
    faults : as for `solve_units`
    units : int, optional
        When the parameters have no unit axis.
    """

    def __init__(
        self,
        design: Design,
        parameters: Parameters,
        condition: Condition,
        travel: Array | None,
        faults: Faults = None,
        units: int | None = None,
    ) -> None:
        self.design = design
        self.nodes: HeatNodes = heat_nodes(design)
        self.units = units_in(parameters) if units is None else units
        self._run = Run(design, parameters, replace(condition, when="cold"), faults, self.units, None)
        self._travel = None if travel is None else np.broadcast_to(travel, self.units)
        self._pair = self._run.netlist().between["emitter.pair.1"]

    def drop_v(self, solution: Solution) -> Array:
        """Half of what lies across both emitter resistors of pair 1 (V), shape (units,)."""
        return np.asarray(0.5 * solution.between(*self._pair))

    @property
    def ambient_c(self) -> Array | float:
        """Ambient temperature (degC)."""
        return self._run.ambient_c

    def subset(self, which: Index) -> Electrothermal:
        """Return some of the units."""
        part = object.__new__(Electrothermal)
        part.design, part.nodes, part.units = self.design, self.nodes, len(which)
        part._run, part._pair = self._run.subset(which), self._pair
        part._travel = None if self._travel is None else self._travel[which]
        return part

    def at(self, celsius: Array, start: Start = None) -> Point:
        """Solve at temperatures of shape (names, units) or (parts, units), from some start."""
        temperature = dict(zip(self.nodes.names, celsius, strict=False))
        temperature.setdefault(self.nodes.names[-1], np.full(self.units, self.ambient_c))
        state = self._run.fixed(self._travel, temperature, start, False)
        powers_w = np.array([state.powers_w[part] for part in self.nodes.parts])
        return Point(solution=state.solution, converged=state.converged, powers_w=powers_w)

    def slopes(self, point: Point) -> Slopes:
        """How powers and drop move with each junction's temperature; not a number where nothing was solved."""
        parts, units = self.nodes.parts, self.units
        many = len(parts) + 1
        values = {
            key: np.tile(value, many) if value.size > 1 else value for key, value in point.solution.values.items()
        }
        for row, part in enumerate(parts):
            kelvin = np.tile(np.broadcast_to(point.solution.values[f"{part}.kelvin"], units), many)
            kelvin[row * units : (row + 1) * units] += STEP_K
            values[f"{part}.kelvin"] = kelvin
        with np.errstate(all="ignore"):
            moved = Response(point.solution).moved(values, many)
            powers = np.array([moved.transistor(part).power_w for part in parts]).reshape(len(parts), many, units)
            drop = self.drop_v(moved).reshape(many, units)
            by_power = np.moveaxis(powers[:, :-1] - powers[:, -1:], 2, 0) / STEP_K
            by_drop = (drop[:-1] - drop[-1]).T / STEP_K
        by_power[~point.converged], by_drop[~point.converged] = np.nan, np.nan
        return Slopes(powers=by_power, drop=by_drop)

    def held(self, rise_k: Array, near: WarmState | None = None) -> tuple[Array, Point]:
        """Let the junctions come to balance with the heat sink held at a rise of each unit (K).

        Parameters
        ----------
        rise_k : array of shape (units,)
        near : WarmState, optional
            Of one like unit, solved: where to start from, first-order change included.

        Returns
        -------
        temperatures : array of shape (parts, units)
        point : Point
            Units that didn't come to rest count as not converged.
        """
        base_c = self.ambient_c + self.nodes.seen()[:, None] * rise_k
        celsius, start = (base_c, None) if near is None else self._towards(rise_k, near)
        own = self.nodes.own()[:, None]
        first = self.at(celsius, start)
        matrix = np.eye(len(own)) - own * self.slopes(first).powers
        everyone, latest = self, first
        best = dict(zip(first.solution.plan.names, first.solution.x.copy(), strict=True))

        def following(which: Index, at: Array) -> tuple[Array, Mask]:
            nonlocal latest
            part = everyone if len(which) == self.units else everyone.subset(which)
            latest = part.at(at, {name: column[which] for name, column in best.items()})
            for name, row in zip(latest.solution.plan.names, latest.solution.x, strict=True):
                best[name][which] = np.where(latest.converged, row, best[name][which])
            return base_c[:, which] + own * latest.powers_w, latest.converged

        celsius, at_rest = settle(celsius, base_c + own * first.powers_w, first.converged, following, matrix)
        point = self.at(celsius, best)
        return celsius, replace(point, converged=point.converged & at_rest)

    def _towards(self, rise_k: Array, near: WarmState) -> tuple[Array, Start]:
        """Temperatures and voltages that a unit at rest would have at other rises of the sink, to first order."""
        parts, solution = self.nodes.parts, near.solution
        inner = np.eye(len(parts)) - self.nodes.own()[:, None] * near.slopes[0]
        follow = np.linalg.solve(inner, self.nodes.seen())
        values = dict(solution.values)
        for share, part in zip(follow, parts, strict=True):
            kelvin = solution.values[f"{part}.kelvin"]
            values[f"{part}.kelvin"] = np.concatenate([kelvin + STEP_K * share, kelvin])
        moved = Response(solution).moved(values, 2).x
        per_kelvin = (moved[:, :1] - moved[:, 1:]) / STEP_K
        away_k = rise_k - near.heatsink_rise_k[0]
        here = np.array([near.temperatures_c[part] for part in parts])
        x = solution.x + per_kelvin * away_k
        return here + follow[:, None] * away_k, dict(zip(solution.plan.names, x, strict=True))


@dataclass(frozen=True, kw_only=True)
class WarmState:
    """Units at rest, every array of shape (units,).

    Attributes
    ----------
    parts : tuple of str
        The transistors.
    temperatures_c : dict of str to array
        Junctions by part, and ``heatsink``.
    powers_w : dict of str to array
        What each transistor turns into heat.
    output_w, transistors_w, rails_w : array
        What the output devices and all transistors turn into heat, and what the supplies deliver.
    heatsink_rise_k : array
        Above the ambient temperature.
    balance : array
        How far the temperatures are from those that the powers lead to, relative to the largest rise in the unit.
    drop_v, quiescent_a : array
        Emitter drop of pair 1 (mean of both halves), current through the upper half's emitter resistors.
    travel : array or None
        The trimmer's travel from the least-bias end.
    gain, gain_untracked, gain_sum : array
        The loop gain; the same with the spreader kept from warming; the sum form: see `benchkit.stage.loop_gain`.
    growth_per_s : array
        Below zero where the rest is stable.
    rests : array of bool
        Whether there is a balance, and a stable one.
    solution : Solution
        The circuit's own.
    slopes : array of shape (units, parts, parts)
        dP/dT (W/K).
    solved : Solved
        Where a next solve of like units may start.
    """

    parts: tuple[str, ...]
    temperatures_c: Mapping[str, Array]
    powers_w: Mapping[str, Array]
    output_w: Array
    transistors_w: Array
    rails_w: Array
    heatsink_rise_k: Array
    balance: Array
    drop_v: Array
    quiescent_a: Array
    travel: Array | None
    gain: Array
    gain_untracked: Array
    gain_sum: Array
    growth_per_s: Array
    rests: Mask
    solution: Solution = field(repr=False)
    slopes: Matrix = field(repr=False)
    solved: Solved = field(repr=False)

    @property
    def units(self) -> int:
        """Number of units."""
        return len(self.rests)

    def hottest(self, unit: int = 0) -> tuple[str, float]:
        """Return the hottest junction of a unit, its part and its temperature (degC)."""
        part = max(self.parts, key=lambda name: float(self.temperatures_c[name][unit]))
        return part, float(self.temperatures_c[part][unit])


def warm_state(
    design: Design,
    parameters: Parameters,
    condition: Condition,
    faults: Faults = None,
    *,
    position: Array | float | None = None,
    start: Solved | None = None,
) -> WarmState:
    """Find the warm state of units, and how stable it is.

    Parameters
    ----------
    design, parameters, condition, faults, position, start
        As for `solve_units`; the condition is taken as warm. With the trimmer at "target", each unit has been trimmed
        cold or warm as the design's target says, and is now warm.

    Returns
    -------
    WarmState
        Of units without a state of rest: ``rests`` is false, and no number means anything.
    """
    if condition.trimmer == "target" and design.target.when == "cold" and position is None:
        position = solve_units(design, parameters, replace(condition, when="cold"), loading="none").position
    condition = replace(condition, when="warm")
    solved = solve_units(design, parameters, condition, faults, position=position, start=start, loading="none")
    stage = Electrothermal(design, parameters, condition, solved.position, faults, solved.units)
    nodes = stage.nodes
    celsius = np.array([solved.temperatures_c[name] for name in nodes.names])
    point = stage.at(celsius, solved.solution)
    slopes = stage.slopes(point).powers
    rises_k = nodes.rest @ point.powers_w
    with np.errstate(invalid="ignore", divide="ignore"):
        away = np.abs(celsius - stage.ambient_c - rises_k).max(axis=0) / np.maximum(rises_k.max(axis=0), 1e-9)
    solution = point.solution
    pairs = range(1, design.output.pairs + 1)
    return WarmState(
        parts=nodes.parts,
        temperatures_c=dict(zip(nodes.names, celsius, strict=True)),
        powers_w=dict(zip(nodes.parts, point.powers_w, strict=True)),
        output_w=point.powers_w[nodes.on_sink].sum(axis=0),
        transistors_w=point.powers_w.sum(axis=0),
        rails_w=delivered_w(solution),
        heatsink_rise_k=celsius[-1] - stage.ambient_c,
        balance=away,
        drop_v=stage.drop_v(solution),
        quiescent_a=np.sum([solution.current(f"emitter.upper.{number}") for number in pairs], axis=0),
        travel=solved.position,
        gain=loop_gain(nodes, slopes),
        gain_untracked=loop_gain(nodes, slopes, tracking=False),
        gain_sum=sum_gain(nodes, slopes),
        growth_per_s=growth_per_s(nodes, slopes),
        rests=solved.converged & point.converged & _stable(nodes, slopes),
        solution=solution,
        slopes=slopes,
        solved=solved,
    )


def is_stable(design: Design, parameters: Parameters, condition: Condition, solved: Solved) -> Mask:
    """Whether warm units that were solved stay where they are when their trimmers are left alone, shape (units,)."""
    stage = Electrothermal(design, parameters, condition, solved.position, units=solved.units)
    point = stage.at(np.array([solved.temperatures_c[name] for name in stage.nodes.names]), solved.solution)
    return _stable(stage.nodes, stage.slopes(point).powers)


def _stable(nodes: HeatNodes, slopes: Matrix) -> Mask:
    with np.errstate(invalid="ignore"):
        return np.asarray((loop_gain(nodes, slopes) < 1.0) & (growth_per_s(nodes, slopes) < 0.0))


def delivered_w(solution: Solution) -> Array:
    """What the supplies deliver to the stage (W), shape (units,)."""
    supplies = [element for element in solution.netlist.elements.values() if isinstance(element, Supply)]
    delivered = [solution.current(one.name) * solution.between(one.plus, one.minus) for one in supplies]
    return np.asarray(np.sum(delivered, axis=0))
