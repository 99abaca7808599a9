"""The simulated unit: one amplifier with parts of its own, a trimmer, temperatures, and perhaps a fault.

Its parts are drawn from the design's tolerances with the ``unit`` child of the seed, never from the draws that limits
are made from.  Its operating points come from the model that predictions use too (`benchkit.stage.operate`), with one
unit and the temperatures that it has just now.

What it keeps back
------------------
Operating points are kept and reused while rails, trimmer and parts are the same and no junction has moved by more than
the asker can tolerate; a new one starts from the last.

What breaks
-----------
A junction hotter than its rating by `JUNCTION_MARGIN_K` fuses collector to emitter; an emitter resistor that has
averaged `RESISTOR_MARGIN` times its rated power over `RESISTOR_LAG_S` opens.  What broke stays broken.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np

from benchkit.rehearsal.rails import Pair
from benchkit.rehearsal.warmth import Warmth
from benchkit.stage.conditions import Condition, Unpowered
from benchkit.stage.design import Design, Rating
from benchkit.stage.draws import Parameters, draw, seeds
from benchkit.stage.faults import OPEN_FACTOR, SHORT_OHM, Fault
from benchkit.stage.operate import Loading, Solved, solve_units
from benchkit.stage.points import transistors_of
from benchkit.stage.unpowered import DIODE_RANGE, OHMS_RANGES, MeterRange, solve_unpowered

JUNCTION_MARGIN_K: Final = 25.0
JUNCTION_C: Final = 150.0
RESISTOR_MARGIN: Final = 4.0
RESISTOR_LAG_S: Final = 4.0
FINE_K: Final = 0.001
COARSE_K: Final = 0.02
HEATING_K: Final = 0.05

_NO_LIMIT: Final = 0.0


@dataclass(frozen=True)
class _Key:
    volts: Pair
    limit_a: float
    travel: float
    breakages: int


class SimulatedUnit:
    """One unit.

    Parameters
    ----------
    design : Design
    seed : int
        Its ``unit`` child draws the parts.
    plant : Fault or None
        What is wrong with it.
    """

    def __init__(self, design: Design, seed: int, plant: Fault | None = None) -> None:
        self.design = design
        self.plant = plant
        rng = seeds("unit", seed)
        self.parameters: Parameters = draw(design, 1, rng)
        self.travel = float(rng.uniform(0.1, 0.9)) if design.spreader.trimmer is not None else 0.0
        self.warmth = Warmth(design)
        self.broken: tuple[str, ...] = ()
        self.unsolved = 0
        self.highest_quiescent_a = 0.0
        self._parts = transistors_of(design)
        self._last: dict[_Key, tuple[Solved, dict[str, float]]] = {}
        self._newest: Solved | None = None
        self._unpowered: dict[tuple[object, ...], float] = {}
        self._resistor_w = dict.fromkeys(self._emitters(), 0.0)

    def turn(self, turns: float) -> float:
        """Turn the screw, positive for more bias, up to its ends; return the travel from the least-bias end."""
        trimmer = self.design.spreader.trimmer
        if trimmer is not None:
            self.set_travel(self.travel + turns / trimmer.turns)
        return self.travel

    def set_travel(self, travel: float) -> None:
        """Put the trimmer at a travel from its least-bias end, 0...1; beyond, it stops at its end."""
        if self.design.spreader.trimmer is not None:
            self.travel = min(max(travel, 0.0), 1.0)

    def operate(self, volts: Pair, limit_a: float | None, *, within_k: float = FINE_K) -> Solved:
        """Return the operating point now.

        Parameters
        ----------
        volts : pair of float
            Magnitudes of the rails (V): those of a supply with a limit, or stiff ones without.
        limit_a : float or None
            The supply's limit per rail (A).
        within_k : float
            How far junctions may have moved since a kept operating point for it to be good enough.
        """
        key = self._key(volts, limit_a)
        temperatures = self.warmth.temperatures_c()
        kept = self._last.get(key)
        if kept is not None and max(abs(temperatures[name] - kept[1][name]) for name in temperatures) <= within_k:
            return kept[0]
        solved = self._solve(key, temperatures, self._newest)
        if not bool(solved.converged[0]) and self._newest is not None:
            solved = self._solve(key, temperatures, None)
        if bool(solved.converged[0]):
            self._newest = solved
        else:
            self.unsolved += 1
        if len(self._last) > 16:
            self._last.clear()
        self._last[key] = solved, temperatures
        return solved

    @property
    def latest(self) -> Solved | None:
        """The operating point that was found last, wherever the rails were then; None before the first."""
        return self._newest

    def _key(self, volts: Pair, limit_a: float | None) -> _Key:
        return _Key(volts, _NO_LIMIT if limit_a is None else limit_a, self.travel, len(self.broken))

    def _solve(
        self, key: _Key, temperatures: dict[str, float], start: Solved | None, loading: Loading = "none"
    ) -> Solved:
        positive_v, negative_v = key.volts
        condition = Condition(
            positive_v=positive_v,
            negative_v=-negative_v,
            limit_a=None if key.limit_a == _NO_LIMIT else key.limit_a,
            trimmer=key.travel,
        )
        return solve_units(
            self.design,
            self.parameters,
            condition,
            self.plant,
            temperatures_c=temperatures,
            position=key.travel,
            start=start,
            loading=loading,
        )

    def loading(self, volts: Pair, limit_a: float | None, point: str) -> float:
        """Return what a voltmeter at a point makes of the bare voltage there: the ratio of the two."""
        bare = self.operate(volts, limit_a)
        key = self._key(volts, limit_a)
        loaded = self._solve(key, self.warmth.temperatures_c(), bare, "each")
        bare_v = _first(bare, point)
        if abs(bare_v) < 1e-9 or not bool(loaded.converged[0]):
            return 1.0
        return _first(loaded, point) / bare_v

    def drawn(self, volts: Pair) -> Pair:
        """Return the currents (A) drawn from stiff rails at these magnitudes."""
        solved = self.operate(volts, None, within_k=COARSE_K)
        return _first(solved, "rail+.current"), _first(solved, "rail-.current")

    def balance(self, volts: Pair, limit_a: float) -> Pair:
        """Return the magnitudes (V) to which a supply with a limit brings the rails."""
        solved = self.operate(volts, limit_a, within_k=COARSE_K)
        return max(_first(solved, "rail+"), 0.0), max(-_first(solved, "rail-"), 0.0)

    def heat(self, solved: Solved, seconds: float) -> None:
        """Let the operating point heat the unit for some time, and break what can't stand it."""
        self.highest_quiescent_a = max(self.highest_quiescent_a, self.quiescent_a(solved))
        self.warmth.step(powers_w(solved), seconds)
        self._strain_junctions()
        self._strain_resistors(solved, seconds)

    def heat_off(self, seconds: float) -> None:
        """Let the unit cool for some time without any power."""
        self.warmth.cool(seconds)

    def longest_step_s(self, solved: Solved) -> float:
        """Return how long the operating point may stand for while the temperatures move."""
        return self.warmth.longest_step_s(powers_w(solved))

    def _strain_junctions(self) -> None:
        temperatures = self.warmth.temperatures_c()
        for part in self._parts:
            rating = self._rating(part.name, part.role)
            most_c = JUNCTION_C if rating is None or rating.junction_c is None else rating.junction_c
            if temperatures[part.name] > most_c + JUNCTION_MARGIN_K and part.name not in self.broken:
                self.parameters[f"{part.name}.ce"] = np.asarray(SHORT_OHM)
                self.broken += (part.name,)

    def _strain_resistors(self, solved: Solved, seconds: float) -> None:
        for name, before_w in self._resistor_w.items():
            rating = self._rating(name, "emitter")
            if rating is None or rating.power_w is None or name in self.broken:
                continue
            power_w = abs(_first(solved, name) * float(solved.solution.current(name)[0]))
            average_w = before_w + (power_w - before_w) * -math.expm1(-seconds / RESISTOR_LAG_S)
            self._resistor_w[name] = average_w
            if average_w > RESISTOR_MARGIN * rating.power_w:
                self.parameters[name] = self.parameters[name] * OPEN_FACTOR
                self.broken += (name,)

    def _rating(self, name: str, role: str) -> Rating | None:
        ratings = self.design.ratings
        side = ".".join(name.split(".")[:2])
        return ratings.get(name) or ratings.get(side) or ratings.get(role)

    def _emitters(self) -> tuple[str, ...]:
        pairs = range(1, self.design.output.pairs + 1)
        return tuple(f"emitter.{side}.{number}" for number in pairs for side in ("upper", "lower"))

    def unpowered(self, point: str, full_scale: float | None) -> float:
        """Return what an ideal meter reads at an unpowered point: ohms, or volts on the diode range.

        Parameters
        ----------
        point : str
        full_scale : float or None
            The ohms range; None takes the lowest that is not overloaded, as an automatic range does.

        Returns
        -------
        float
            Infinite for an overload.
        """
        key = point, full_scale, self.travel, len(self.broken), round(self.warmth.temperatures_c()["heatsink"], 1)
        if key not in self._unpowered:
            self._unpowered[key] = self._read_unpowered(point, full_scale)
        return self._unpowered[key]

    def _read_unpowered(self, point: str, full_scale: float | None) -> float:
        temperatures = self.warmth.temperatures_c()
        condition = Unpowered(
            point=point, ambient_c=temperatures.get(point.removeprefix("diode."), temperatures["heatsink"])
        )
        ranges: Sequence[MeterRange] = OHMS_RANGES
        if point.startswith("diode."):
            ranges = (DIODE_RANGE,)
        elif full_scale is not None:
            ranges = ([row for row in OHMS_RANGES if row.full_scale >= full_scale] or list(OHMS_RANGES[-1:]))[:1]
        for test in ranges:
            read = solve_unpowered(
                self.design, self.parameters, condition, self.plant, position=self.travel, on_range=test
            )
            value = float(read.values[0])
            if bool(read.converged[0]) and math.isfinite(value):
                return value
        return math.inf

    def quiescent_a(self, solved: Solved) -> float:
        """Return the current (A) through the upper half's emitter resistors."""
        upper = [name for name in self._emitters() if ".upper." in name]
        return float(sum(solved.solution.current(name)[0] for name in upper))


def powers_w(solved: Solved) -> dict[str, float]:
    """What heats each transistor (W), by part name."""
    return {name: float(power[0]) for name, power in solved.powers_w.items()}


def _first(solved: Solved, point: str) -> float:
    """The unit's reading; 0 for a point of the rail that a single-supply stage hasn't."""
    return float(solved.points[point][0]) if point in solved.points else 0.0
