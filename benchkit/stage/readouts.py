"""What units would read, and how that moves with everything that is not known of them.

A readout answers for one condition and some points: the readings f of units at z (`benchkit.stage.latent`), each with
its fault, and the derivatives df/dz, from one solve and its first-order response (`benchkit.circuit.response`). Faults
are values, so units with different faults are one batch.

* Powered and cold: every junction is at the room's temperature.
* Powered and warm: junctions in balance; the derivatives close the loop from temperature to power and back: dT =
  (1 - M)^-1 G dz, with M = dT_balance/dT and G = dT_balance/dz.
* Unpowered: one circuit with a meter at every point, one of them awake in each unit.

The voltmeter's load is counted unit by unit: reading = bare voltage * R/(R + r), with r the source resistance that the
response gives between the probes.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit.netlist import Netlist
from benchkit.circuit.response import Response
from benchkit.circuit.solution import Solution
from benchkit.circuit.solve import Compiled, Effort, compile_netlist
from benchkit.stage.conditions import Condition, TrimmerPosition
from benchkit.stage.design import ZERO_CELSIUS_K, Design
from benchkit.stage.draws import Array, Parameters, nominal
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
from benchkit.stage.points import find_point, transistors_of
from benchkit.stage.runs import NO_METER_OHM, Run, State, compiled, set_trimmer, trimmer_travel
from benchkit.stage.topologies import VOLTMETER_OHM, Variant, build
from benchkit.stage.unpowered import COMPLIANCE_V, OVER_RANGE, MeterRange, ranges_of

Index = NDArray[np.intp]
Mask = NDArray[np.bool_]
Matrix = NDArray[np.float64]

STEP = 1e-6
"""How far a coordinate is moved for a derivative (K for a temperature)."""
SLIGHT_LOAD = 0.99
"""A voltmeter that leaves less than this share of the bare voltage is put into the circuit."""
STRAIGHT = 0.7
"""How far a coordinate may move before the slopes of unpowered readings are worked out again."""
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


def _finished(f: Matrix, slope: Matrix, converged: Mask, solution: Solution) -> Linear:
    good = converged & np.isfinite(f).all(axis=1) & np.isfinite(slope).all(axis=(1, 2))
    return Linear(np.where(good[:, None], f, 0.0), np.where(good[:, None, None], slope, 0.0), good, solution)


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

    def at(self, z: Array, faults: Sequence[Fault], start: Solution | None = None, effort: Effort = "borrow") -> Linear:
        """Solve units at z, of shape (coordinates, units), each with its fault; ``start`` is an earlier solution."""
        units = z.shape[1]
        run = self._run(z, faults)
        run.effort = effort
        room = {name: np.broadcast_to(run.ambient_c, units).copy() for name in (*self._names, "heatsink")}
        state = run.fixed(self._travel(z), room, start, self._warm)
        response = Response(state.solution)
        shares = self._shares(response)
        f = self._read(state.solution, state.temperature["heatsink"]) * shares
        slope = np.empty((units, len(self.points), len(self.coordinates)))
        step = max(1, SECTION_UNITS // (len(z) + 1))
        for low in range(0, units, step):
            part = slice(low, min(low + step, units))
            slope[part] = self._slope(z[:, part], faults[part], state.temperature, response, part)
        slope *= shares[:, :, None]
        loaded = np.argwhere((shares < SLIGHT_LOAD) & state.converged[:, None])
        if len(loaded):
            self._load(z, faults, state, loaded, f, slope, effort)
        return _finished(f, slope, state.converged, state.solution)

    def _load(
        self,
        z: Array,
        faults: Sequence[Fault],
        state: State,
        loaded: Index,
        f: Matrix,
        slope: Matrix,
        effort: Effort,
    ) -> None:
        """Solve again, with the voltmeter there, what it loads by more than a little; pairs of unit and point."""
        unit, row = loaded[:, 0], loaded[:, 1]
        fuses = self.condition.fuse_ohm is not None
        circuit = compiled(self.design, Variant(fuses=fuses, meters=True))
        bare = state.solution.take(unit)
        meters = [key for key in circuit.keys if key.startswith("meter.")]
        own = np.array([f"meter.{self.points[k]}" for k in row])
        added = {key: np.where(own == key, VOLTMETER_OHM, NO_METER_OHM) for key in meters}
        values = {key: value for key, value in bare.values.items() if key in circuit.keys} | added
        solution = circuit.solve(values, len(unit), dict(zip(bare.plan.names, bare.x, strict=True)), effort=effort)
        with np.errstate(all="ignore"):
            response = Response(solution)
            reads = self._read(solution, state.temperature["heatsink"][unit])
            temperature = {name: value[unit] for name, value in state.temperature.items()}
            step = max(1, SECTION_UNITS // (len(z) + 1))
            for low in range(0, len(unit), step):
                part = slice(low, min(low + step, len(unit)))
                moves = self._slope(
                    z[:, unit[part]], [faults[k] for k in unit[part]], temperature, response, part,
                    {key: value[part] for key, value in added.items()},
                )  # fmt: skip
                slope[unit[part], row[part]] = moves[np.arange(len(row[part])), row[part]]
        f[unit, row] = np.where(solution.converged, reads[np.arange(len(row)), row], f[unit, row])

    def _run(self, z: Array, faults: Sequence[Fault]) -> Run:
        condition, row = self.condition, self.coordinates.row
        stated = condition.ambient_c is not None
        ambient_c = condition.ambient_c if condition.ambient_c is not None else self.design.thermal.ambient_c
        room_c = ambient_c + (STATED_AMBIENT_K if stated else UNSTATED_AMBIENT_K) * row(z, AMBIENT)
        rails_v = condition.held_v if isinstance(condition, Held) else (condition.positive_v, condition.negative_v)
        positive_v, negative_v = (
            volts * (1.0 + RAIL_SHARE * row(z, name)) for volts, name in zip(rails_v, self._rails, strict=True)
        )
        parameters = self.coordinates.parameters(z)
        run = Run(self.design, parameters, condition, list(faults), z.shape[1], (positive_v, negative_v), room_c)
        if isinstance(condition, Held):
            run.set_v = np.asarray(condition.positive_v), np.asarray(condition.negative_v)
        return run

    def _travel(self, z: Array) -> Array | None:
        if self.design.spreader.trimmer is None:
            return None
        if self._travel_name:
            return self.coordinates.place(z, self._travel_name)
        return np.full(z.shape[1], _stated_travel(self.condition.trimmer))

    def _slope(
        self,
        z: Array,
        faults: Sequence[Fault],
        temperature: dict[str, Array],
        response: Response,
        part: slice,
        meters: dict[str, Array] | None = None,
    ) -> Matrix:
        """Derivatives of the bare readings of a part of the units; with meters, at fixed temperatures."""
        count, units = z.shape
        close = self._warm and meters is None
        extra = len(self._names) if close else 0
        many = count + extra + 1
        moved_z = tiled(z, STEP, extra)
        run = self._run(moved_z, list(faults) * many)
        own = {name: np.tile(temperature[name][part], many) for name in (*self._names, "heatsink")}
        if close:
            for number, name in enumerate(self._names):
                own[name][(count + number) * units : (count + number + 1) * units] += STEP
        elif not self._warm:
            own = dict.fromkeys(own, np.asarray(run.ambient_c))
        values = run.values(own) | {key: np.tile(value, many) for key, value in (meters or {}).items()}
        set_trimmer(self.design, values, self._travel(moved_z))
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
        change = np.moveaxis(hot[:, :-1] - hot[:, -1:], 2, 0) / STEP
        by_z, by_t = change[:, :-1, :count], change[:, :-1, count:]
        loop = np.eye(len(self._names)) - by_t
        try:
            temperature = np.linalg.solve(loop, by_z)
        except np.linalg.LinAlgError:
            temperature = np.full(by_z.shape, np.nan)
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


def _stated_travel(trimmer: TrimmerPosition) -> float:
    """Travel from the least-bias end of a trimmer whose position is stated."""
    return {"least": 0.0, "most": 1.0}[trimmer] if isinstance(trimmer, str) else float(trimmer)


@lru_cache(maxsize=32)
def _bench_circuit(design: Design, points: tuple[str, ...]) -> Compiled:
    """The unpowered stage with a meter at every one of some points."""
    stage = build(design, Variant(powered=False))
    netlist = Netlist()
    netlist.elements = dict(stage.netlist.elements)
    for point in points:
        netlist.ohmmeter(f"meter.{point}", *stage.between[point])
    return compile_netlist(netlist)


@lru_cache(maxsize=32)
def _nominal_ranges(design: Design, points: tuple[str, ...], trimmer: TrimmerPosition) -> tuple[MeterRange, ...]:
    """What `benchkit.stage.unpowered.nominal_range` says of each point, from one solve of all ranges at all points."""
    circuit = _bench_circuit(design, points)
    tries = [(number, one) for number, point in enumerate(points) for one in ranges_of(point)]
    units = len(tries)
    values: Parameters = dict(nominal(design))
    for part in transistors_of(design):
        values[f"{part.name}.kelvin"] = np.asarray(design.thermal.ambient_c + ZERO_CELSIUS_K)
    for number, point in enumerate(points):
        amps = [one.amps if mine == number else 0.0 for mine, one in tries]
        values[f"meter.{point}.amps"] = np.array(amps)
        values[f"meter.{point}.compliance_v"] = np.asarray(COMPLIANCE_V)
    set_trimmer(design, values, trimmer_travel(design, values, "unknown" if trimmer == "target" else trimmer, units))
    solution = circuit.solve({key: value for key, value in values.items() if key in circuit.keys}, units)
    between = build(design, Variant(powered=False)).between
    chosen: dict[int, MeterRange] = {}
    for unit, (number, one) in enumerate(tries):
        volts = float(solution.between(*between[points[number]])[unit])
        reading = volts if find_point(design, points[number]).function == "diode" else volts / one.amps
        if reading <= OVER_RANGE * one.full_scale and number not in chosen and bool(solution.converged[unit]):
            chosen[number] = one
    return tuple(chosen.get(number, ranges_of(point)[-1]) for number, point in enumerate(points))


class UnpoweredPoints:
    """Unpowered readings under one trimmer position and room temperature; a reading beyond the range is infinite.

    Parameters as for `Powered`.
    """

    def __init__(
        self,
        design: Design,
        coordinates: Coordinates,
        trimmer: TrimmerPosition,
        ambient_c: float | None,
        points: Sequence[str],
        travel: str = "",
    ) -> None:
        self.design, self.coordinates = design, coordinates
        self.points = tuple(points)
        self._trimmer, self._ambient_c, self._travel_name = trimmer, ambient_c, travel
        self._circuit = _bench_circuit(design, self.points)
        self._between = build(design, Variant(powered=False)).between
        self._names = tuple(part.name for part in transistors_of(design))
        ranges = _nominal_ranges(design, self.points, trimmer)
        self._amps = np.array([one.amps for one in ranges])
        self._divisor = np.array([
            1.0 if find_point(design, point).function == "diode" else one.amps
            for point, one in zip(points, ranges, strict=True)
        ])  # fmt: skip
        self.most = np.array([OVER_RANGE * one.full_scale for one in ranges])
        """Readings above these show as an overload."""

    def at(self, z: Array, faults: Sequence[Fault], start: Solution | None = None, effort: Effort = "borrow") -> Linear:
        """Solve units at z, of shape (coordinates, units), each with its fault; ``start`` is an earlier solution."""
        return self.near(z, faults, start, effort, None, None)

    def near(
        self,
        z: Array,
        faults: Sequence[Fault],
        start: Solution | None,
        effort: Effort,
        known: Matrix | None,
        at: Array | None,
    ) -> Linear:
        """Solve units at z; slopes that are known are kept for units that have hardly moved since.

        Parameters
        ----------
        known, at : arrays of shape (units, points, coordinates) and (coordinates, units), optional
            Slopes, and where they were worked out: unpowered readings are nearly straight.
        """
        units, many = z.shape[1], len(self.points)
        whose = np.tile(np.arange(units), many)
        meter = np.repeat(np.arange(many), units)
        values = self._values(z[:, whose], list(faults) * many, meter)
        chosen = {key: value for key, value in values.items() if key in self._circuit.keys}
        solution = self._circuit.solve(chosen, units * many, start, effort=effort)
        f = self._read(solution, meter).reshape(many, units).T
        again: Mask = np.ones(units, np.bool_)
        slope = np.empty((units * many, len(self.coordinates)))
        if known is not None and at is not None:
            again = np.asarray((np.abs(z - at) > STRAIGHT).any(axis=0))
            slope = np.moveaxis(known, 1, 0).reshape(units * many, -1).copy()
        rows = np.flatnonzero(again[whose])
        response = Response(solution.take(rows)) if len(rows) else None
        step = max(1, SECTION_UNITS // (len(z) + 1))
        directions = len(z) + 1
        for low in range(0, len(rows), step):
            assert response is not None
            part = slice(low, min(low + step, len(rows)))
            own = whose[rows[part]]
            moved_z = tiled(z[:, own], STEP)
            awake = np.tile(meter[rows[part]], directions)
            values = self._values(moved_z, [faults[k] for k in own] * directions, awake)
            keys = response.solution.values
            moved = response.moved({key: values.get(key, keys[key]) for key in keys}, directions, part)
            reads = self._read(moved, awake).reshape(directions, len(own))
            slope[rows[part]] = ((reads[:-1] - reads[-1:]) / STEP).T
        converged = np.asarray(solution.converged.reshape(many, units).all(axis=0))
        return _finished(f, np.moveaxis(slope.reshape(many, units, -1), 0, 1), converged, solution)

    def _values(self, z: Array, faults: list[Fault], meter: Index) -> Parameters:
        values = dict(self.coordinates.parameters(z))
        stated = self._ambient_c is not None
        ambient_c = self._ambient_c if self._ambient_c is not None else self.design.thermal.ambient_c
        room_c = ambient_c + (STATED_AMBIENT_K if stated else UNSTATED_AMBIENT_K) * self.coordinates.row(z, AMBIENT)
        for name in self._names:
            values[f"{name}.kelvin"] = room_c + ZERO_CELSIUS_K
        for number, point in enumerate(self.points):
            values[f"meter.{point}.amps"] = np.where(meter == number, self._amps[number], 0.0)
            values[f"meter.{point}.compliance_v"] = np.asarray(COMPLIANCE_V)
        if self.design.spreader.trimmer is not None:
            if self._travel_name:
                travel = self.coordinates.place(z, self._travel_name)
            else:
                travel = np.full(z.shape[1], _stated_travel(self._trimmer))
            set_trimmer(self.design, values, travel)
        apply(values, faults, self.design)
        return values

    def _read(self, solution: Solution, meter: Index) -> Array:
        result = np.empty(solution.units)
        for number, point in enumerate(self.points):
            mine = meter == number
            result[mine] = solution.between(*self._between[point])[mine] / self._divisor[number]
        return result
