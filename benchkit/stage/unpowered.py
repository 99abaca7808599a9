"""Unpowered readings: a meter's ohms and diode ranges across the circuit.

The meter is a current source with a compliance voltage; its reading is V/I on an ohms range and V on the diode range,
and "overload" beyond 120 % of the range. Supplies are disconnected, current sources and the servo are open (nothing
biases them), capacitors have settled; resistor feeds, bleeders and everything else of the stage are there. Which probe
goes where is fixed in `benchkit.stage.points`.

The range is the one that an automatic range would choose for the nominal unit, and it is then held for every unit: a
reading that needs another range is an overload. In the circuit that search ends at 1 Mohm; the insulation to the heat
sink is measured on the 10 Mohm range, where an overload is what one hopes for.

Test currents per range are those of the usual 6 1/2-digit bench meter (34401A user's guide, from memory); the
compliance of 8 V is common practice for that class.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from functools import lru_cache
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit.solve import Solution
from benchkit.stage.conditions import TrimmerPosition, Unpowered
from benchkit.stage.design import ZERO_CELSIUS_K, Design
from benchkit.stage.draws import Array, Parameters, nominal
from benchkit.stage.faults import Fault, apply
from benchkit.stage.operate import units_in
from benchkit.stage.points import find_point, transistors_of
from benchkit.stage.runs import Faults, compiled, set_trimmer, trimmer_travel
from benchkit.stage.topologies import Variant, build


class MeterRange(NamedTuple):
    """One range of a meter: full scale (ohm or V), test current (A)."""

    full_scale: float
    amps: float


OHMS_RANGES = (
    MeterRange(100.0, 1e-3),
    MeterRange(1e3, 1e-3),
    MeterRange(10e3, 100e-6),
    MeterRange(100e3, 10e-6),
    MeterRange(1e6, 5e-6),
    MeterRange(10e6, 500e-9),
)
"""Ohms ranges and their test currents."""
DIODE_RANGE = MeterRange(1.0, 1e-3)
"""The diode range: reads volts at 1 mA."""
OVER_RANGE = 1.2
"""A range reads up to this multiple of its full scale."""
COMPLIANCE_V = 8.0
"""Most voltage that the meter puts on its probes on these ranges."""
LEAST_INSULATION_OHM = 1e6
"""Least resistance from a collector to the heat sink: common practice."""
_IN_CIRCUIT = OHMS_RANGES[:5]


@dataclass(frozen=True, kw_only=True)
class UnpoweredReadings:
    """Readings of units at one unpowered point.

    Attributes
    ----------
    values : array of shape (units,)
        Ohms or volts; infinity is an overload.
    converged : array of bool of shape (units,)
    range : MeterRange
        The range that was used.
    position : array or None
        The trimmer's travel from the least-bias end.
    solution : Solution
        The circuit's own.
    """

    values: Array
    converged: NDArray[np.bool_]
    range: MeterRange
    position: Array | None
    solution: Solution = field(repr=False)


def solve_unpowered(
    design: Design,
    parameters: Parameters,
    condition: Unpowered,
    faults: Faults = None,
    *,
    position: Array | float | None = None,
    room_c: Array | None = None,
    on_range: MeterRange | None = None,
    start: Solution | None = None,
) -> UnpoweredReadings:
    """Read an unpowered point of every unit.

    Parameters
    ----------
    design : Design
    parameters : mapping
        From `nominal` or `draw`.
    condition : Unpowered
    faults : Fault, sequence of Fault or None per unit, or None
    position : array or float, optional
        The trimmer's travel of each unit, instead of the condition's.
    room_c : array, optional
        Ambient temperature of each unit (degC), instead of the condition's.
    on_range : MeterRange, optional
        Instead of the range that the nominal unit asks for.
    start : Solution, optional
        Where to start: of one unit, or of as many.

    Returns
    -------
    UnpoweredReadings

    Raises
    ------
    EntryError
        When the design has no such point.
    """
    point = find_point(design, condition.point)
    settled = replace(condition, trimmer="unknown") if condition.trimmer == "target" else condition
    unit = None if on_range is not None else _nominal_unit(design, settled)
    used = on_range if unit is None else unit.range
    assert used is not None
    units = units_in(parameters)
    if faults is not None and not isinstance(faults, Fault):
        units = max(units, len(faults))
    travel = trimmer_travel(design, parameters, settled.trimmer if position is None else position, units)
    ambient_c = design.thermal.ambient_c if condition.ambient_c is None else condition.ambient_c
    values = dict(parameters)
    for part in transistors_of(design):
        values[f"{part.name}.kelvin"] = np.asarray(ambient_c if room_c is None else room_c) + ZERO_CELSIUS_K
    values["meter.amps"], values["meter.compliance_v"] = np.asarray(used.amps), np.asarray(COMPLIANCE_V)
    set_trimmer(design, values, travel)
    values |= {key: np.broadcast_to(value, units) for key, value in values.items() if faults is not None}
    apply(values, faults, design)
    variant = Variant(powered=False, probe=point.name)
    circuit = compiled(design, variant)
    chosen = {key: value for key, value in values.items() if key in circuit.keys}
    solution = circuit.solve(chosen, units, start if unit is None else unit.solution)
    volts = solution.between(*build(design, variant).between[point.name])
    reading = volts if point.function == "diode" else volts / used.amps
    reading = np.where(reading > OVER_RANGE * used.full_scale, np.inf, reading)
    return UnpoweredReadings(
        values=reading, converged=solution.converged, range=used, position=travel, solution=solution
    )  # fmt: skip


def nominal_range(design: Design, point: str, trimmer: TrimmerPosition = "unknown") -> MeterRange:
    """Range for an unpowered point: what the nominal unit asks for, its trimmer in the middle if unknown."""
    return _nominal_unit(design, Unpowered(point=point, trimmer="unknown" if trimmer == "target" else trimmer)).range


@lru_cache(maxsize=256)
def _nominal_unit(design: Design, condition: Unpowered) -> UnpoweredReadings:
    """Read the nominal unit on the lowest range that it doesn't overload, or else on the last one."""
    start: Solution | None = None
    for candidate in ranges_of(condition.point):
        readings = solve_unpowered(design, nominal(design), condition, on_range=candidate, start=start)
        start = readings.solution
        if bool(readings.converged.all()) and bool(np.isfinite(readings.values).all()):
            break
    return readings


def ranges_of(point: str) -> tuple[MeterRange, ...]:
    """Ranges that an automatic range goes through at a point, the lowest first."""
    if point.startswith("diode."):
        return (DIODE_RANGE,)
    return (OHMS_RANGES[-1],) if point.startswith("ohm.heatsink.") else _IN_CIRCUIT


def waiting_time_s(design: Design, point: str) -> float:
    """How long a reading counts up (s): the rails' capacitors charged by the test current to the nominal reading.

    Parameters
    ----------
    design : Design
    point : str
        An unpowered point; 0 for those that no capacitor lies across.
    """
    if point not in ("ohm.rails", "ohm.rail+", "ohm.rail-"):
        return 0.0
    farad = (design.rails.reservoir_f or 0.0) + (design.rails.local_capacitors_f or 0.0)
    if point == "ohm.rails" and not design.single_supply:
        farad /= 2.0
    condition = Unpowered(point=point, trimmer="least")
    readings = solve_unpowered(design, nominal(design), condition)
    volts = float(readings.values[0]) * readings.range.amps
    if not np.isfinite(volts):
        volts = OVER_RANGE * readings.range.full_scale * readings.range.amps
        return farad * volts / readings.range.amps
    # Charged through a resistance R by a current I: 5 time constants leave less than 1 %.
    return 5.0 * farad * float(readings.values[0])
