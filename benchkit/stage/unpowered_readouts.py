"""What unpowered units would read on a meter's ohms and diode ranges, and how that moves with what is not known.

One circuit with a meter at every point, one of them awake in each unit: units are solved point after point. Otherwise
as in `benchkit.stage.readouts`.
"""

from __future__ import annotations

from collections.abc import Sequence
from functools import lru_cache

import numpy as np

from benchkit.circuit.netlist import Netlist
from benchkit.circuit.response import Response
from benchkit.circuit.solution import Solution
from benchkit.circuit.solve import Compiled, Effort, compile_netlist
from benchkit.stage.conditions import TrimmerPosition
from benchkit.stage.design import ZERO_CELSIUS_K, Design
from benchkit.stage.draws import Array, Parameters, nominal
from benchkit.stage.faults import Fault, apply
from benchkit.stage.latent import AMBIENT, STATED_AMBIENT_K, UNSTATED_AMBIENT_K, Coordinates, tiled
from benchkit.stage.points import find_point, transistors_of
from benchkit.stage.readouts import SECTION_UNITS, STEP, Index, Linear, Mask, Matrix, finished, stated_travel
from benchkit.stage.runs import set_trimmer, trimmer_travel
from benchkit.stage.topologies import Variant, build
from benchkit.stage.unpowered import COMPLIANCE_V, OVER_RANGE, MeterRange, ranges_of

STRAIGHT = 0.7
"""How far a coordinate may move before the slopes of unpowered readings are worked out again."""


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

    def at(
        self,
        z: Array,
        faults: Sequence[Fault],
        start: Solution | None = None,
        effort: Effort = "borrow",
        kin: Index | None = None,
    ) -> Linear:
        """Solve units at z, of shape (coordinates, units), each with its fault; ``start`` is an earlier solution."""
        return self.near(z, faults, start, effort, None, None, kin)

    def near(
        self,
        z: Array,
        faults: Sequence[Fault],
        start: Solution | None,
        effort: Effort,
        known: Matrix | None,
        at: Array | None,
        kin: Index | None = None,
    ) -> Linear:
        """Solve units at z; slopes that are known are kept for units that have hardly moved since.

        Parameters
        ----------
        known, at : arrays of shape (units, points, coordinates) and (coordinates, units), optional
            Slopes, and where they were worked out: unpowered readings are nearly straight.
        kin : array of int of shape (units,), optional
            Groups within which units may start from each other's solutions; without, all are one.
        """
        units, many = z.shape[1], len(self.points)
        whose = np.tile(np.arange(units), many)
        meter = np.repeat(np.arange(many), units)
        values = self._values(z[:, whose], list(faults) * many, meter)
        chosen = {key: value for key, value in values.items() if key in self._circuit.keys}
        group = None if kin is None else kin[whose]
        solution = self._circuit.solve(chosen, units * many, start, effort=effort, kin=group)
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
        return finished(f, np.moveaxis(slope.reshape(many, units, -1), 0, 1), converged, solution)

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
                travel = np.full(z.shape[1], stated_travel(self._trimmer))
            set_trimmer(self.design, values, travel)
        apply(values, faults, self.design)
        return values

    def _read(self, solution: Solution, meter: Index) -> Array:
        result = np.empty(solution.units)
        for number, point in enumerate(self.points):
            mine = meter == number
            result[mine] = solution.between(*self._between[point])[mine] / self._divisor[number]
        return result
