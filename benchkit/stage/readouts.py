"""What units would read, and how that moves with everything that is not known of them.

A readout answers for one condition and some points: the readings f of units at z (`benchkit.stage.latent`), each with
its fault, and the derivatives df/dz, from one solve and its first-order response (`benchkit.circuit.response`). Faults
are values, so units with different faults are one batch.

* Powered and cold: every junction is at the room's temperature.
* Powered and warm: junctions in balance; the derivatives close the loop from temperature to power and back: dT =
  (1 - M)^-1 G dz, with M = dT_balance/dT and G = dT_balance/dz.
* Unpowered: see `benchkit.stage.unpowered_readouts`.
* Under a condition with held rails (`benchkit.stage.forcing`) each unit comes with the voltages of its own.

The voltmeter's load is counted unit by unit: reading = bare voltage * R/(R + r), with r the source resistance that the
response gives between the probes.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit.response import Response
from benchkit.circuit.solution import Solution
from benchkit.circuit.solve import Effort
from benchkit.circuit.stacks import each_its_own
from benchkit.stage.conditions import Condition, TrimmerPosition
from benchkit.stage.design import Design
from benchkit.stage.draws import Array
from benchkit.stage.faults import Fault, apply
from benchkit.stage.forcing import Held
from benchkit.stage.heat import heat
from benchkit.stage.latent import (
    AMBIENT,
    RAIL_SHARE,
    STATED_AMBIENT_K,
    UNSTATED_AMBIENT_K,
    Coordinates,
    tiled,
)
from benchkit.stage.points import transistors_of
from benchkit.stage.runs import NO_METER_OHM, Run, State, compiled, set_trimmer
from benchkit.stage.topologies import VOLTMETER_OHM, Variant, build

Index = NDArray[np.intp]
Mask = NDArray[np.bool_]
Matrix = NDArray[np.float64]

STEP = 1e-6
"""How far a coordinate is moved for a derivative (K for a temperature)."""
SLIGHT_LOAD = 0.99
"""A voltmeter that leaves less than this share of the bare voltage is put into the circuit."""
SECTION_UNITS = 12_000
"""Units that are evaluated together for derivatives: few enough to stay in the cache."""


@dataclass
class Linear:
    """Readings of units and their derivatives.

    Attributes
    ----------
    f : array of shape (units, points)
    slope : array of shape (units, points, coordinates)
    good : array of bool of shape (units,)
        Solved, and every number finite.
    solution : Solution
        Where a next solve of these units starts; of the units, or (unpowered) of the units point after point.
    """

    f: Matrix
    slope: Matrix
    good: Mask
    solution: Solution


def finished(f: Matrix, slope: Matrix, converged: Mask, solution: Solution) -> Linear:
    """Put readings together, zeros where a unit has none."""
    good = converged & np.isfinite(f).all(axis=1) & np.isfinite(slope).all(axis=(1, 2))
    return Linear(np.where(good[:, None], f, 0.0), np.where(good[:, None, None], slope, 0.0), good, solution)


@dataclass(frozen=True)
class _Units:
    """Units under one condition: where they stand, each one's fault, and its rails where they are held."""

    z: Array
    faults: Sequence[Fault]
    rails_v: Matrix | None

    def take(self, index: Index | slice) -> _Units:
        """Return some of the units."""
        faults = self.faults[index] if isinstance(index, slice) else [self.faults[k] for k in index.tolist()]
        return _Units(self.z[:, index], faults, None if self.rails_v is None else self.rails_v[index])

    def moved(self, extra: int) -> _Units:
        """Return the units with each coordinate moved in turn, and ``extra`` + 1 times unmoved (`tiled`)."""
        many = len(self.z) + extra + 1
        rails_v = None if self.rails_v is None else np.tile(self.rails_v, (many, 1))
        return _Units(tiled(self.z, STEP, extra), list(self.faults) * many, rails_v)


class Powered:
    """Readings under one powered condition.

    Parameters
    ----------
    coordinates : Coordinates
    condition : Condition
    points : sequence of str
    travel : str
        Coordinate that says where the trimmer stands; empty where the condition states it.
    rails : two of str
        Coordinates that say how far the rails stand off their settings.
    """

    def __init__(
        self,
        design: Design,
        coordinates: Coordinates,
        condition: Condition,
        points: Sequence[str],
        travel: str,
        rails: tuple[str, str],
    ) -> None:
        self._rails = rails
        self.design, self.coordinates, self.condition = design, coordinates, condition
        self.points = tuple(points)
        self._travel_name = travel
        self._names = tuple(part.name for part in transistors_of(design))
        self._warm = condition.when == "warm"
        self._stage = build(design, Variant(fuses=condition.fuse_ohm is not None))

    def at(
        self,
        z: Array,
        faults: Sequence[Fault],
        start: Solution | None = None,
        effort: Effort = "borrow",
        rails_v: Matrix | None = None,
        kin: Index | None = None,
    ) -> Linear:
        """Solve units at z, of shape (coordinates, units), each with its fault; ``start`` is an earlier solution.

        Parameters
        ----------
        rails_v : array of shape (units, 2), optional
            Where the condition holds rails: positive and negative one of each unit (V); not a number where a rail
            stands at its setting.
        kin : array of int of shape (units,), optional
            Groups within which units may start from each other's solutions; without, all are one.
        """
        units = z.shape[1]
        all_units = _Units(z, faults, rails_v)
        run = self._run(all_units)
        run.effort, run.kin = effort, kin
        room = {name: np.broadcast_to(run.ambient_c, units).copy() for name in (*self._names, "heatsink")}
        state = run.fixed(self._travel(z), room, start, self._warm)
        response = Response(state.solution)
        shares = self._shares(response)
        f = self._read(state.solution, state.temperature["heatsink"]) * shares
        slope = np.empty((units, len(self.points), len(self.coordinates)))
        step = max(1, SECTION_UNITS // (len(z) + 1))
        for low in range(0, units, step):
            part = slice(low, min(low + step, units))
            slope[part] = self._slope(all_units.take(part), state.temperature, response, part)
        slope *= shares[:, :, None]
        loaded = np.argwhere((shares < SLIGHT_LOAD) & state.converged[:, None])
        if len(loaded):
            self._load(all_units, state, loaded, f, slope, run)
        return finished(f, slope, state.converged, state.solution)

    def _load(self, units: _Units, state: State, loaded: Index, f: Matrix, slope: Matrix, run: Run) -> None:
        """Solve again, with the voltmeter there, what it loads by more than a little; pairs of unit and point."""
        unit, row = loaded[:, 0], loaded[:, 1]
        fuses = self.condition.fuse_ohm is not None
        circuit = compiled(self.design, Variant(fuses=fuses, meters=True))
        bare = state.solution.take(unit)
        meters = [key for key in circuit.keys if key.startswith("meter.")]
        own = np.array([f"meter.{self.points[k]}" for k in row])
        added = {key: np.where(own == key, VOLTMETER_OHM, NO_METER_OHM) for key in meters}
        values = {key: value for key, value in bare.values.items() if key in circuit.keys} | added
        start = dict(zip(bare.plan.names, bare.x, strict=True))
        kin = None if run.kin is None else run.kin[unit]
        solution = circuit.solve(values, len(unit), start, effort=run.effort, kin=kin)
        with np.errstate(all="ignore"):
            response = Response(solution)
            reads = self._read(solution, state.temperature["heatsink"][unit])
            temperature = {name: value[unit] for name, value in state.temperature.items()}
            step = max(1, SECTION_UNITS // (len(units.z) + 1))
            for low in range(0, len(unit), step):
                part = slice(low, min(low + step, len(unit)))
                meter = {key: value[part] for key, value in added.items()}
                moves = self._slope(units.take(unit[part]), temperature, response, part, meter)
                slope[unit[part], row[part]] = moves[np.arange(len(row[part])), row[part]]
        f[unit, row] = np.where(solution.converged, reads[np.arange(len(row)), row], f[unit, row])

    def _run(self, units: _Units) -> Run:
        condition = self.condition
        stated = condition.ambient_c is not None
        ambient_c = condition.ambient_c if condition.ambient_c is not None else self.design.thermal.ambient_c
        off_k = self.coordinates.row(units.z, AMBIENT)
        room_c = ambient_c + (STATED_AMBIENT_K if stated else UNSTATED_AMBIENT_K) * off_k
        rails_v = []
        for number, set_v in enumerate((condition.positive_v, condition.negative_v)):
            held_v = None if units.rails_v is None else units.rails_v[:, number]
            volts = set_v if held_v is None else np.where(np.isnan(held_v), set_v, held_v)
            rails_v.append(volts * (1.0 + RAIL_SHARE * self.coordinates.row(units.z, self._rails[number])))
        parameters, many = self.coordinates.parameters(units.z), units.z.shape[1]
        run = Run(self.design, parameters, condition, list(units.faults), many, (rails_v[0], rails_v[1]), room_c)
        if isinstance(condition, Held):
            run.set_v = np.asarray(condition.positive_v), np.asarray(condition.negative_v)
        return run

    def _travel(self, z: Array) -> Array | None:
        if self.design.spreader.trimmer is None:
            return None
        if self._travel_name:
            return self.coordinates.place(z, self._travel_name)
        return np.full(z.shape[1], stated_travel(self.condition.trimmer))

    def _slope(
        self,
        few: _Units,
        temperature: dict[str, Array],
        response: Response,
        part: slice,
        meters: dict[str, Array] | None = None,
    ) -> Matrix:
        """Derivatives of the bare readings of a part of the units; with meters, at fixed temperatures."""
        count, units = few.z.shape
        close = self._warm and meters is None
        extra = len(self._names) if close else 0
        many = count + extra + 1
        moves = few.moved(extra)
        run = self._run(moves)
        own = {name: np.tile(temperature[name][part], many) for name in (*self._names, "heatsink")}
        if close:
            for number, name in enumerate(self._names):
                own[name][(count + number) * units : (count + number + 1) * units] += STEP
        elif not self._warm:
            own = dict.fromkeys(own, np.asarray(run.ambient_c))
        values = run.values(own) | {key: np.tile(value, many) for key, value in (meters or {}).items()}
        set_trimmer(self.design, values, self._travel(moves.z))
        apply(values, run.faults, self.design)
        keys = response.solution.values
        moved = response.moved({key: values.get(key, keys[key]) for key in keys}, many, part)
        reads = self._read(moved, own["heatsink"]).reshape(many, units, -1)
        slope = np.moveaxis(reads[:-1] - reads[-1:], 0, 2) / STEP
        if not close:
            return slope
        return self._closed(slope, moved, run, count)

    def _closed(self, slope: Matrix, moved: Solution, run: Run, count: int) -> Matrix:
        """Let the junctions come to balance: derivatives by z, of those by z and temperature at fixed temperatures."""
        many = slope.shape[2] + 1
        units = moved.units // many
        powers = {name: moved.transistor(name).power_w for name in self._names}
        balance = heat(self.design, powers, run.ambient_c).temperatures_c
        names = (*self._names, "heatsink")
        hot = np.array([balance[name] for name in names]).reshape(len(names), many, units)
        with np.errstate(all="ignore"):  # a unit on an edge has slopes beyond every number, and is none at the end
            change = np.moveaxis(hot[:, :-1] - hot[:, -1:], 2, 0) / STEP
        by_z, by_t = change[:, :-1, :count], change[:, :-1, count:]
        loop = np.eye(len(self._names)) - by_t
        temperature = each_its_own(np.linalg.solve, loop, by_z)
        result = slope[:, :, :count] + slope[:, :, count:] @ temperature
        if "heatsink" in self.points:
            row = self.points.index("heatsink")
            result[:, row] = change[:, -1, :count] + np.einsum("ut,utk->uk", change[:, -1, count:], temperature)
        return np.asarray(result)

    def _read(self, solution: Solution, heatsink_c: Array) -> Matrix:
        """Bare readings of every unit, shape (units, points)."""
        columns = []
        for point in self.points:
            if point == "heatsink":
                columns.append(heatsink_c)
            elif point in self._stage.currents:
                columns.append(solution.current(self._stage.currents[point]))
            else:
                columns.append(solution.between(*self._stage.between[point]))
        return np.stack(columns, axis=1)

    def _shares(self, response: Response) -> Matrix:
        """What a voltmeter across each point leaves of its voltage, shape (units, points)."""
        shares = np.ones((response.solution.units, len(self.points)))
        for row, point in enumerate(self.points):
            if point in self._stage.between:
                source_ohm = np.maximum(response.resistance(*self._stage.between[point]), 0.0)
                shares[:, row] = VOLTMETER_OHM / (VOLTMETER_OHM + source_ohm)
        return shares


def stated_travel(trimmer: TrimmerPosition) -> float:
    """Travel from the least-bias end of a trimmer whose position is stated."""
    return {"least": 0.0, "most": 1.0}[trimmer] if isinstance(trimmer, str) else float(trimmer)
