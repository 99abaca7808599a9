"""What a bias error costs: output resistance and gain of the output stage against the current into a load.

Both halves of a class-AB stage conduct at rest and hand over to each other as the output current grows. Too little bias
and the output resistance rises in the middle; too much and it falls there, because both halves work side by side over a
wide range. Either way the gain into a load ripples.

How it is solved
----------------
1. The output stage alone, from the design's own topology: what drives it are the two nodes at the ends of the spreader.
2. Rest: an unknown conductance stands for the spreader and meets the wanted emitter drop; a servo holds the output at
   rest. So any bias can be asked for, trimmer or not. The voltages of both drive nodes are read off.
3. Signal: both drive nodes are held by sources and move together, as a spreader with its bypass makes them do; the
   servo is frozen, because it is far too slow to follow. A resistor from the output to its rest voltage is the load.
4. At each point the gain is the first-order response of the output to both drive nodes, and the output resistance what
   is left of the resistance at `output` without the load.

Junctions stay as warm as the given temperatures: a signal is faster than heat. All is the nominal unit.

The crossover region
--------------------
Ripple is the greatest gain less the smallest within +-`REGION` times VT/R_E of all pairs, and no farther than `SWING`
of the rails. The published optimum is that of an ideal pair in an unlimited region: there the resistance R + VT/I falls
to R at last. At the end of a region of k currents it is still R*(1 + 1/k), so that the least ripple lies where the
resistance at rest, (R + VT/I_Q)/2, is that: at 1/(1 + 2/k) of the published current, 6 % lower for k = 30.

Source of the optimum of emitter followers: B. M. Oliver, *Distortion in Complementary Pair Class B Amplifiers*,
Hewlett-Packard Journal, February 1971.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import lru_cache
from typing import Final

import numpy as np

from benchkit.circuit.devices import thermal_voltage
from benchkit.circuit.response import Response
from benchkit.circuit.solve import Compiled, Solution, compile_netlist
from benchkit.errors import ModelError
from benchkit.quantities import show
from benchkit.stage.conditions import NO_LIMIT_A
from benchkit.stage.design import ZERO_CELSIUS_K, Design
from benchkit.stage.draws import Array, nominal
from benchkit.stage.points import transistors_of
from benchkit.stage.topologies import POWERED, TOPOLOGIES, Builder, pair_nodes

LOADS_OHM: Final = (8.0, 4.0)
"""Loads that are looked at when none is asked for."""
REGION: Final = 30.0
SWING: Final = 0.7
EACH_SIDE: Final = 32
_INNERMOST: Final = 1e-3
_STEP_V: Final = 1e-6
_LEAST_FEED_A: Final = 0.01
_SEARCH_FROM: Final = 0.01
_SEARCH_TO: Final = 3.0
_COARSE: Final = 13
_FINE: Final = 7
_PLACES: Final = 801
_NO_LOAD_OHM: Final = 1e-3
_SEARCH_EACH_SIDE: Final = 18


@dataclass(frozen=True, kw_only=True, eq=False)
class Sweep:
    """The output stage at one bias, over the output current.

    Attributes
    ----------
    drop_v : float
        Emitter drop at rest.
    current_a : float
        Quiescent current of all pairs together.
    spread_v : float
        Voltage between the drive nodes that makes it.
    load_ohm : float
    amps : array of shape (points,)
        Output current, positive out of the stage.
    gain : array of shape (points,)
        Incremental, from both drive nodes to the output, into the load.
    output_ohm : array of shape (points,)
        Incremental output resistance, without the load.
    """

    drop_v: float
    current_a: float
    spread_v: float
    load_ohm: float
    amps: Array
    gain: Array
    output_ohm: Array

    @property
    def ripple(self) -> float:
        """Greatest gain less the smallest."""
        return float(self.gain.max() - self.gain.min())

    @property
    def at_rest(self) -> tuple[float, float]:
        """Gain, and output resistance (ohm), with no output current."""
        middle = int(np.argmin(np.abs(self.amps)))
        return float(self.gain[middle]), float(self.output_ohm[middle])


def oliver_current_a(
    kelvin: float, emitter_ohm: float, re_ohm: float = 0.0, rb_ohm: float = 0.0, hfe: float = 100.0
) -> float:
    """Quiescent current (A) of a pair at which I_Q*(R_E + re + rb/hFE) = VT.

    Parameters
    ----------
    kelvin : float
        Junction temperature.
    emitter_ohm : float
        Emitter resistor R_E.
    re_ohm, rb_ohm : float
        The device's own ohmic emitter resistance, and all resistance in its base lead.
    hfe : float
        Current gain.

    Notes
    -----
    Source: B. M. Oliver, *Distortion in Complementary Pair Class B Amplifiers*, Hewlett-Packard Journal, February 1971.
    """
    return float(thermal_voltage(kelvin)) / (emitter_ohm + re_ohm + rb_ohm / hfe)


def ohmic_ohm(design: Design) -> float:
    """The output devices' own re + rb/hFE (ohm), the mean of both halves.

    The published condition is about the pair alone. Base stoppers and what drives the bases count through hFE too, and
    move the bias of least ripple of a whole stage below it; the model's own figure has them.
    """
    total = 0.0
    for name in (design.output.upper, design.output.lower):
        parameters = design.device[name].parameters
        total += 0.5 * (parameters.get("RE", 0.0) + parameters.get("RB", 0.0) / parameters.get("BF", 100.0))
    return total


def oliver_drop_v(design: Design, celsius: float) -> float:
    """Emitter drop (V) of Oliver's optimum with the output junctions at `celsius`, every part at its nominal value."""
    emitter_ohm = design.output.emitter_resistor.value
    return emitter_ohm * oliver_current_a(celsius + ZERO_CELSIUS_K, emitter_ohm, ohmic_ohm(design))


@dataclass(frozen=True)
class _Circuit:
    """A form of the output stage's circuit, and between which nodes the drops of pair 1 lie."""

    compiled: Compiled
    pair: tuple[str, str]


@lru_cache(maxsize=64)
def _circuit(design: Design, rest: bool) -> Compiled:
    builder = Builder(design, POWERED)
    netlist = builder.netlist
    netlist.supply("supply.positive", "rail+", "0")
    if not design.single_supply:
        netlist.supply("supply.negative", "0", "rail-")
    netlist.resistor("heatsink.bond", "heatsink", "0")
    TOPOLOGIES[design.output.topology](builder)
    if rest:
        netlist.source("drive.feed", "rail+", "drive+")
        netlist.unknown("drive.spreader", "drive+", "drive-", *pair_nodes(design, 1))
        netlist.servo("drive.servo", "drive-", builder.rail("lower"), "output", senses="from")
    else:
        netlist.supply("drive.upper", "drive+", "0")
        netlist.supply("drive.lower", "drive-", "0")
        # The load ends at the rest voltage: Norton's equivalent of that.
        netlist.resistor("load", "output", "0")
        netlist.source("load.rest", "rail+", "output")
    return compile_netlist(netlist)


@dataclass(frozen=True, kw_only=True)
class Setting:
    """Under what the output stage is looked at.

    Attributes
    ----------
    positive_v, negative_v : float
        Rails.
    temperatures_c : tuple of float
        Of the transistors, in the order of `transistors_of`.
    """

    positive_v: float
    negative_v: float
    temperatures_c: tuple[float, ...]


def setting_at(design: Design, celsius: float) -> Setting:
    """Full rails, and all junctions at one temperature (degC)."""
    every = tuple(celsius for _ in transistors_of(design))
    return Setting(positive_v=design.rails.positive_v, negative_v=design.rails.negative_v, temperatures_c=every)


def _values(design: Design, setting: Setting) -> dict[str, Array]:
    values = {key: np.atleast_1d(value) for key, value in nominal(design).items()}
    for part, celsius in zip(transistors_of(design), setting.temperatures_c, strict=True):
        values[f"{part.name}.kelvin"] = np.array([celsius + ZERO_CELSIUS_K])
    values["supply.positive.volts"] = np.array([setting.positive_v])
    values["supply.negative.volts"] = np.array([-setting.negative_v])
    for key in ("supply.positive", "supply.negative", "drive.upper", "drive.lower"):
        values[f"{key}.limit_a"] = np.array([NO_LIMIT_A])
    return values


def _solve(
    circuit: Compiled, values: Mapping[str, Array], units: int, start: dict[str, Array], rest_v: float
) -> Solution:
    chosen = {key: value for key, value in values.items() if key in circuit.keys}
    initial = {node: rest_v for node in circuit.netlist.nodes() if not node.startswith(("rail", "heatsink"))}
    return circuit.solve(chosen, units, start or None, initial)


def sweeps(
    design: Design,
    drops_v: Sequence[float],
    load_ohm: float,
    setting: Setting,
    region_a: float | None = None,
    each_side: int = EACH_SIDE,
) -> tuple[Sweep, ...]:
    """Sweep the output current at several biases.

    Parameters
    ----------
    design : Design
    drops_v : sequence of float
        Emitter drops at rest (V).
    load_ohm : float
    setting : Setting
    region_a : float, optional
        Largest output current either way (A); `region` of the design when left out.
    each_side : int
        Points on each side of rest; they lie closer near rest.

    Returns
    -------
    tuple of Sweep
        In the order of `drops_v`.

    Raises
    ------
    ModelError
        When a point has no solution.
    """
    most_a = region(design, load_ohm, setting) if region_a is None else region_a
    rest_v = design.rest_v(setting.positive_v, setting.negative_v)
    side = np.geomspace(_INNERMOST, 1.0, each_side)
    # What the emitter resistors take is added to the drive, so that about `most_a` is reached.
    most_v = most_a * (load_ohm + design.output.emitter_resistor.value / design.output.pairs)
    away_v = most_v * np.concatenate([-side[::-1], [0.0], side])
    points = away_v.size
    still, solved = driven(design, drops_v, load_ohm, setting, away_v)
    units = solved.units
    response = Response(solved)
    twice = {key: value if value.size == 1 else np.tile(value, 2) for key, value in solved.values.items()}
    for key in ("drive.upper.volts", "drive.lower.volts"):
        twice[key][:units] += _STEP_V
    moved = response.moved(twice, 2).voltage("output")
    gain = (moved[:units] - moved[units:]) / _STEP_V
    output_ohm = 1.0 / (1.0 / response.resistance("output", "0") - 1.0 / load_ohm)
    amps = (solved.voltage("output") - rest_v) / load_ohm
    currents = np.sum([still.current(f"emitter.upper.{n}") for n in range(1, design.output.pairs + 1)], axis=0)
    spread_v = still.between("drive+", "drive-")
    result = []
    for index, drop_v in enumerate(drops_v):
        part = slice(index * points, (index + 1) * points)
        result.append(
            Sweep(
                drop_v=float(drop_v), current_a=float(currents[index]), spread_v=float(spread_v[index]),
                load_ohm=load_ohm, amps=amps[part], gain=gain[part], output_ohm=output_ohm[part],
            )
        )  # fmt: skip
    return tuple(result)


def driven(
    design: Design, drops_v: Sequence[float], load_ohm: float, setting: Setting, away_v: Array
) -> tuple[Solution, Solution]:
    """Solve the output stage at rest, and with both drive nodes moved away from there.

    Parameters
    ----------
    design, drops_v, load_ohm, setting
        As for `sweeps`.
    away_v : array of shape (points,)
        How far the drive nodes move (V).

    Returns
    -------
    at_rest : Solution
        One unit for each bias, without the load.
    driven : Solution
        Bias after bias, `points` units each.

    Raises
    ------
    ModelError
        When a point has no solution.
    """
    rest_v = design.rest_v(setting.positive_v, setting.negative_v)
    values = _values(design, setting)
    still = _at_rest(design, np.asarray(drops_v, dtype=np.float64), values, rest_v)
    points, many = away_v.size, len(drops_v)
    moved_v = np.tile(away_v, many)
    circuit = _circuit(design, False)
    start = {
        node: np.repeat(still.voltage(node), points) + (0.0 if node.startswith(("rail", "heatsink")) else moved_v)
        for node in circuit.netlist.nodes()
    }
    values |= {
        "drive.upper.volts": start["drive+"], "drive.lower.volts": start["drive-"],
        "load": np.array([load_ohm]), "load.rest.amps": np.array([rest_v / load_ohm]),
    }  # fmt: skip
    solved = _solve(circuit, values, many * points, start, rest_v)
    if not solved.converged.all():
        failed = int(np.count_nonzero(~solved.converged))
        raise ModelError(
            f"{design.name}: {failed} of {many * points} output currents found no operating point",
            "one at every output current",
        )
    return still, solved


def _at_rest(design: Design, drops_v: Array, values: Mapping[str, Array], rest_v: float) -> Solution:
    total_a = design.output.pairs * drops_v / design.output.emitter_resistor.value
    feed_a = np.maximum(total_a, _LEAST_FEED_A)
    more = {
        "drive.feed.amps": feed_a, "drive.spreader.volts": 2.0 * drops_v,
        "drive.servo.rest_v": np.array([rest_v]), "drive.servo.max_a": 2.0 * feed_a,
    }  # fmt: skip
    solved = _solve(_circuit(design, True), {**values, **more}, drops_v.size, {}, rest_v)
    if not solved.converged.all():
        bad = show(float(drops_v[~solved.converged][0]), "V")
        raise ModelError(f"{design.name} has no operating point at an emitter drop of {bad}", "one at any bias")
    return solved


def region(design: Design, load_ohm: float, setting: Setting) -> float:
    """Largest output current (A) of the crossover region; see the top of this module."""
    emitter_ohm = design.output.emitter_resistor.value
    kelvin = junction_c(design, setting) + ZERO_CELSIUS_K
    wanted_a = REGION * design.output.pairs * oliver_current_a(kelvin, emitter_ohm)
    return min(wanted_a, SWING * _room_v(design, setting) / load_ohm)


def junction_c(design: Design, setting: Setting) -> float:
    """Mean temperature (degC) of the output junctions."""
    pairs = zip(transistors_of(design), setting.temperatures_c, strict=True)
    return float(np.mean([celsius for part, celsius in pairs if part.role == "output"]))


@lru_cache(maxsize=32)
def least_ripple_drop_v(
    design: Design, setting: Setting, load_ohm: float | None = None, region_a: float | None = None
) -> float:
    """Emitter drop (V) at which the gain ripples least; any topology. Cached.

    Without a load it is chosen so small that the rails leave room for the whole region: the ripple of the output
    resistance does not depend on it. Biases are swept on a coarse grid, then on a fine one around the best; between
    those the gain at each output current is a polynomial in the logarithm of the bias.

    Raises
    ------
    ModelError
        When a point has no solution.
    """
    middle_v = float(thermal_voltage(junction_c(design, setting) + ZERO_CELSIUS_K))
    if region_a is None:
        region_a = region(design, _NO_LOAD_OHM if load_ohm is None else load_ohm, setting)
    most_a = region_a
    if load_ohm is None:
        load_ohm = min(LOADS_OHM[0], 0.5 * SWING * _room_v(design, setting) / most_a)
    into_ohm = load_ohm

    def gains(drops_v: Array) -> Array:
        found = sweeps(design, tuple(drops_v), into_ohm, setting, most_a, _SEARCH_EACH_SIDE)
        return np.array([one.gain for one in found])

    coarse = np.geomspace(_SEARCH_FROM * middle_v, _SEARCH_TO * middle_v, _COARSE)
    best = int(np.argmin(np.ptp(gains(coarse), axis=1)))
    fine = np.geomspace(coarse[max(best - 1, 0)], coarse[min(best + 1, _COARSE - 1)], _FINE)
    # Lagrange's interpolation: rows of `weights` are places, columns the swept biases.
    nodes, places = np.linspace(-1.0, 1.0, _FINE), np.linspace(-1.0, 1.0, _PLACES)
    others = [np.delete(nodes, k) for k in range(_FINE)]
    weights = np.array([np.prod((places[:, None] - o) / (nodes[k] - o), axis=1) for k, o in enumerate(others)]).T
    place = places[int(np.argmin(np.ptp(weights @ gains(fine), axis=1)))]
    return float(fine[0] * (fine[-1] / fine[0]) ** ((place + 1.0) / 2.0))


def _room_v(design: Design, setting: Setting) -> float:
    """Swing (V) that the nearer rail allows."""
    rest_v = design.rest_v(setting.positive_v, setting.negative_v)
    return min(setting.positive_v - rest_v, rest_v - setting.negative_v)
