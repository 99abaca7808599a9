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
`benchkit.rehearsal.strain` says what gives way: a junction becomes a collector-emitter short, a resistor opens, the
trimmer's track opens under its wiper.  What broke stays broken, and operating points are those of what is left, until
`SimulatedUnit.repair` puts new parts in, drawn like the first ones.

What is done to it
------------------
It can be driven into a dummy load (`benchkit.rehearsal.driving`), and things can go wrong with it on the way
(`benchkit.rehearsal.mishaps`).

How the servo wakes up
----------------------
Where the design says ``settles_after``, the output comes to its rest as d.c. feedback does: off by `WAKING_SHARE` of
the rails when these reach ``works_from``, and by a thousandth of that when ``settles_after`` has passed.  The
spreader's bypass is left out: the feed charges it within milliseconds (10 uF at 8 mA to 2.2 V: 2.8 ms), less than
anything here shows.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np

from benchkit.errors import EntryError
from benchkit.rehearsal.beyond import Beyond
from benchkit.rehearsal.mishaps import Mishap, covered
from benchkit.rehearsal.rails import Pair
from benchkit.rehearsal.ratings import TRIMMER, resistor_powers_w
from benchkit.rehearsal.strain import Burnt, Strain
from benchkit.rehearsal.warmth import Warmth
from benchkit.stage.conditions import Condition, Unpowered
from benchkit.stage.design import Design
from benchkit.stage.draws import Parameters, draw, seeds
from benchkit.stage.faults import OPEN_FACTOR, OPEN_OHM, SHORT_OHM, Fault
from benchkit.stage.heat import heat_nodes
from benchkit.stage.operate import Loading, Solved, solve_units
from benchkit.stage.unpowered import DIODE_RANGE, OHMS_RANGES, MeterRange, solve_unpowered

FINE_K: Final = 0.001
COARSE_K: Final = 0.05
HEATING_K: Final = 0.05
WAKING_SHARE: Final = 0.02
WAKING_MOST_V: Final = 0.5
SETTLED_SHARE: Final = 1e-3

_ASLEEP_V = 1.0
_WAKING_STEP_V = 2e-4
_NO_LIMIT: Final = 0.0
HUM_V: Final = 0.0003
"""What a quiet stage shows on a meter's a.c. range, leads and room included (our own figure; units differ by half)."""
_NOTHING_LEFT = ("short", "open", "collector-emitter short", "missing", "wiper open")


@dataclass(frozen=True)
class _Key:
    volts: Pair
    limit_a: float
    travel: float
    changes: int
    waking_v: float


class SimulatedUnit:
    """One unit.

    Parameters
    ----------
    design : Design
    seed : int
        Its ``unit`` child draws the parts.
    plant : Fault or None
        What is wrong with it from the beginning.
    """

    def __init__(self, design: Design, seed: int, plant: Fault | None = None) -> None:
        self.design = design
        self.plant = plant
        rng = seeds("unit", seed)
        self.parameters: Parameters = draw(design, 1, rng)
        self.travel = float(rng.uniform(0.1, 0.9)) if design.spreader.trimmer is not None else 0.0
        self.warmth = Warmth(design)
        self.strain = Strain(design, _spared(plant))
        self.burnt: tuple[Burnt, ...] = ()
        self.lived_s = 0.0
        self.unsolved = 0
        self.highest_quiescent_a = 0.0
        self.beyond = Beyond(design.output.pairs)
        self.repaired: tuple[str, ...] = ()
        self.hum_v = HUM_V * float(rng.uniform(0.5, 1.5))
        self._spares = rng.spawn(1)[0]
        self._fault = plant
        self._changes = 0
        self._awake_s: float | None = None
        self._last: dict[_Key, tuple[Solved, dict[str, float]]] = {}
        self._newest: Solved | None = None
        self._unpowered: dict[tuple[object, ...], float] = {}

    @property
    def broken(self) -> tuple[str, ...]:
        """Names of the parts that have given way, in order."""
        return tuple(burnt.part for burnt in self.burnt)

    @property
    def faulty(self) -> tuple[str, ...]:
        """Parts that are not what they should be: the one that was planted, and what has given way."""
        planted = [] if self._fault is None else [self._fault.part]
        if self._fault is not None and self._fault.fault == "swapped":
            planted.append("spreader.lower")
        return tuple(dict.fromkeys((*planted, *self.broken)))

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
        limit = _NO_LIMIT if limit_a is None else limit_a
        return _Key(volts, limit, self._electrical_travel(), self._changes, self._waking_v())

    def _electrical_travel(self) -> float:
        """Where the wiper counts as being: far beyond its end when it is open, so that its arm is open too."""
        trimmer = self.design.spreader.trimmer
        if trimmer is None or trimmer.arm == "between" or TRIMMER not in self.broken:
            return self.travel
        most_ohm = 1.0 if trimmer.arm == "upper" else 0.0
        if trimmer.wiring == "tied":
            return most_ohm
        return OPEN_FACTOR if trimmer.arm == "upper" else -OPEN_FACTOR

    def _solve(
        self, key: _Key, temperatures: dict[str, float], start: Solved | None, loading: Loading = "none"
    ) -> Solved:
        positive_v, negative_v = key.volts
        condition = Condition(
            positive_v=positive_v,
            negative_v=-negative_v,
            limit_a=None if key.limit_a == _NO_LIMIT else key.limit_a,
        )
        parameters = self.parameters
        if key.waking_v:
            parameters = parameters | {"output.offset": parameters["output.offset"] + key.waking_v}
        return solve_units(
            self.design,
            parameters,
            condition,
            self._fault,
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

    def sagged(self, volts: Pair, limit_a: float) -> Pair:
        """Return where a supply set to `volts` (magnitudes) with a limit (A) holds the rails of a driven stage."""
        if not self.beyond.drives:
            return volts
        solved = self.operate(volts, limit_a, within_k=COARSE_K)
        return self.beyond.held_v(volts, max(_first(solved, f"{rail}.current") for rail in ("rail+", "rail-")), limit_a)

    def drawn(self, volts: Pair) -> Pair:
        """Return the currents (A) drawn from stiff rails at these magnitudes."""
        solved = self.operate(volts, None, within_k=COARSE_K)
        extra_a = self.beyond.extra_a(volts)
        return _first(solved, "rail+.current") + extra_a, _first(solved, "rail-.current") + extra_a

    def balance(self, volts: Pair, limit_a: float) -> Pair:
        """Return the magnitudes (V) to which a supply with a limit brings the rails."""
        solved = self.operate(self.sagged(volts, limit_a), limit_a, within_k=COARSE_K)
        return max(_first(solved, "rail+"), 0.0), max(-_first(solved, "rail-"), 0.0)

    def heat(self, solved: Solved, seconds: float) -> None:
        """Let the operating point heat the unit for some time, and break what can't stand it."""
        self.lived_s += seconds
        self._wake(solved)
        if not bool(solved.converged[0]):
            return  # nobody knows its powers
        self.highest_quiescent_a = max(self.highest_quiescent_a, self.quiescent_a(solved))
        powers, resistors_w = self._powers(solved), self._resistor_powers(solved)
        self.warmth.step(powers, seconds)
        for burnt in self.strain.step(self.warmth.temperatures_c(), powers, resistors_w, seconds, self.lived_s):
            self._break(burnt)

    def heat_off(self, seconds: float) -> None:
        """Let the unit cool for some time without any power."""
        self.lived_s += seconds
        self._awake_s = None
        self.warmth.cool(seconds)
        nothing = dict.fromkeys(self.warmth.parts, 0.0)
        self.strain.step(self.warmth.temperatures_c(), nothing, {}, seconds, self.lived_s)

    def longest_step_s(self, solved: Solved) -> float:
        """Return how long the operating point may stand for while the temperatures move and the servo wakes up."""
        longest_s = self.warmth.longest_step_s(self._powers(solved))
        if self._waking_v() and self._awake_s is not None:
            longest_s = min(longest_s, 0.1 * (self.design.feed.settles_after_s or 0.0))
        return self.stands_s(solved, longest_s)

    def stands_s(self, solved: Solved, most_s: float) -> float:
        """Return how long (s) every part stands the operating point, at most `most_s`."""
        if not bool(solved.converged[0]):
            return most_s
        temperatures = self.warmth.temperatures_c()
        return self.strain.stands_s(temperatures, self._powers(solved), self._resistor_powers(solved), most_s)

    def _powers(self, solved: Solved) -> dict[str, float]:
        """What heats each transistor (W): its operating point, and what the stage is driven to or does by itself."""
        powers = powers_w(solved)
        extra_w = self.beyond.device_w(rails_of(solved))
        return {name: watts + extra_w * name.startswith("output.") for name, watts in powers.items()}

    def _resistor_powers(self, solved: Solved) -> dict[str, float]:
        powers, volts = resistor_powers_w(self.design, solved), rails_of(solved)
        for name in self.emitters:
            powers[name] += self.beyond.resistor_w(volts, float(self.parameters[name].item()))
        return powers

    def _break(self, burnt: Burnt) -> None:
        part = burnt.part
        if burnt.fault == "collector-emitter short":
            if self._fault == Fault(part, "leaky"):
                self._fault = None  # a short leaks no more
            self.parameters[f"{part}.ce"] = np.asarray(SHORT_OHM)
        elif burnt.fault == "open":
            self.parameters[part] = self.parameters[part] * OPEN_FACTOR
        elif self.design.spreader.trimmer is not None and self.design.spreader.trimmer.arm == "between":
            self.parameters[f"{part}.wiper"] = np.asarray(OPEN_OHM)
        self.burnt += (burnt,)
        self._changes += 1

    def befall(self, mishap: Mishap) -> None:
        """Let something go wrong now.

        Raises
        ------
        EntryError
            When another planted fault is still in the unit: it has room for one.
        """
        if mishap.fault is not None:
            if self._fault not in (None, mishap.fault):
                raise EntryError(f"{mishap.fault} is to come, and {self._fault} is there", "one fault at a time")
            self._fault = mishap.fault
            self.plant = self.plant or mishap.fault
            self.strain.spare(_spared(mishap.fault))
        elif mishap.trouble and mishap.trouble not in self.beyond.troubles:
            self.beyond.troubles += (mishap.trouble,)
            if mishap.trouble == "runaway":
                self.warmth.spoil(covered(heat_nodes(self.design)))
        self._changed()

    def repair(self) -> tuple[str, ...]:
        """Put new parts in for what is faulty or burnt, drawn like the first ones; return their names."""
        broken = self.faulty
        fresh = draw(self.design, 1, self._spares)
        for part in broken:
            for key in self.parameters:
                if key == part or key.startswith(f"{part}."):
                    self.parameters[key] = fresh[key]
        self.strain.renew(frozenset(broken))
        self.repaired += broken
        self._fault, self.burnt, self.beyond.troubles = None, (), ()
        self.warmth.spoil(heat_nodes(self.design))
        self._changed()
        return broken

    def _changed(self) -> None:
        self._changes += 1
        self._last.clear()
        self._unpowered.clear()

    def _wake(self, solved: Solved) -> None:
        """Note when the rails reach the voltage from which the servo regulates."""
        lowest_v = _first(solved, "rail+")
        if "rail-" in solved.points:
            lowest_v = min(lowest_v, -_first(solved, "rail-"))
        if lowest_v < (self.design.feed.works_from_v or _ASLEEP_V):
            self._awake_s = None
        elif self._awake_s is None:
            self._awake_s = self.lived_s

    def _waking_v(self) -> float:
        """How far the servo still holds the output from its rest (V)."""
        settles_s = self.design.feed.settles_after_s
        if not settles_s or self._awake_s is None:
            return 0.0
        rails = self.design.rails
        whole_v = min(WAKING_SHARE * (rails.positive_v - rails.negative_v), WAKING_MOST_V)
        left_v = whole_v * SETTLED_SHARE ** ((self.lived_s - self._awake_s) / settles_s)
        return float(_WAKING_STEP_V * round(left_v / _WAKING_STEP_V))

    @property
    def emitters(self) -> tuple[str, ...]:
        """Names of all emitter resistors."""
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
        key = point, full_scale, self.travel, self._changes, round(self.warmth.temperatures_c()["heatsink"], 1)
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
                self.design,
                self.parameters,
                condition,
                self._fault,
                position=self._electrical_travel(),
                on_range=test,
            )
            value = float(read.values[0])
            if bool(read.converged[0]) and math.isfinite(value):
                return value
        return math.inf

    def quiescent_a(self, solved: Solved) -> float:
        """Return the current (A) through the upper half's emitter resistors."""
        upper = [name for name in self.emitters if ".upper." in name]
        return float(sum(solved.solution.current(name)[0] for name in upper))


def powers_w(solved: Solved) -> dict[str, float]:
    """What heats each transistor (W), by part name."""
    return {name: float(power[0]) for name, power in solved.powers_w.items()}


def _first(solved: Solved, point: str) -> float:
    """The unit's reading; 0 for a point of the rail that a single-supply stage hasn't."""
    return float(solved.points[point][0]) if point in solved.points else 0.0


def rails_of(solved: Solved) -> Pair:
    """Magnitudes of the rails (V)."""
    return max(_first(solved, "rail+"), 0.0), max(-_first(solved, "rail-"), 0.0)


def _spared(plant: Fault | None) -> frozenset[str]:
    """A part that a planted fault leaves nothing of that could be overloaded."""
    return frozenset({plant.part}) if plant is not None and plant.fault in _NOTHING_LEFT else frozenset()
