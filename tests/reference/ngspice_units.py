"""Units that ngspice solved: drawn parts, a fault, a condition, and what a meter shows at every point.

Values (parts, rails, trimmer, fault) are ours; every voltage is ngspice's (an independent program), so that what the
model concludes from readings is tried on units that our solver did not make.

How
---
* Many copies of a stage are one deck. A copy that ngspice can't solve takes the others with it, so a deck that fails is
  halved until the copy stands alone, is tried with all that ngspice has, and is then given up and named.
* Starts (`.nodeset`) force nothing. A servo's knee of 10 uV is too narrow to be found from far away: a first round with
  a knee of 1 mV finds the stage, is moved to where the servo stands in the narrow knee, and the second round solves the
  circuit as it is.
* A meter of 10 Mohm lies across the point that is read. Three times the stage is solved with meters of various
  resistances at all points (equal ones could cancel each other). A point that moves by less than a twentieth of the
  noise each time is read as it is; every other one is solved once more with its own meter alone.
* The range of an ohms reading is the instrument's setting and is asked of the stage; that a reading beyond it is an
  overload is applied to ngspice's voltage here.
* Noise: 0.03 % of the reading and 20 uV, standard deviations that add up; on an ohms range the 20 uV are those of the
  test current; a supply's display has 0.03 % and 20 uA.
"""

from __future__ import annotations

import math
import os
from collections.abc import Mapping, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit.equations import SUPPLY_KNEE_OHM, SUPPLY_LEAK_S
from benchkit.circuit.netlist import GROUND, Netlist, Supply
from benchkit.stage.conditions import Condition, TrimmerPosition, Unpowered
from benchkit.stage.design import ZERO_CELSIUS_K, Design
from benchkit.stage.draws import Parameters, nominal
from benchkit.stage.faults import HEALTHY, Fault, apply
from benchkit.stage.observations import Observation
from benchkit.stage.operate import solve_units
from benchkit.stage.points import points_of, transistors_of
from benchkit.stage.runs import NO_METER_OHM, Run, compiled, set_trimmer
from benchkit.stage.topologies import VOLTMETER_OHM, Variant, build
from benchkit.stage.unpowered import COMPLIANCE_V, OVER_RANGE, nominal_range, solve_unpowered
from tests.reference import ngspice

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]
Starts = Mapping[str, Array]

COPIES = 12
"""Copies in a deck at first."""
SHARE, FLOOR_V, FLOOR_A = 3e-4, 20e-6, 20e-6
WIDE_KNEE, KNEE = "1e-3", "10e-6"
TOLERANCES = "reltol=1e-4 abstol=1e-10 vntol=1e-6 gmin=1e-12"
"""Of ngspice's last step: Newton's next step would be far smaller, so the voltages are good to far less."""
_QUICK, _PATIENT = 60, 400
_SCREENS, _MATTERS = 3, 0.05


@dataclass
class Spent:
    """What ngspice did: processor seconds, decks that were run, copies of a stage that were solved in them."""

    seconds: float = 0.0
    decks: int = 0
    copies: int = 0

    def __add__(self, other: Spent) -> Spent:
        return Spent(self.seconds + other.seconds, self.decks + other.decks, self.copies + other.copies)


@dataclass(frozen=True, kw_only=True)
class Found:
    """Readings of units, exact.

    Attributes
    ----------
    values : dict
        By point name, in the point's unit, shape (units,): NaN where ngspice has no solution, infinite for an overload.
    solved : array of bool of shape (units,)
        Whether ngspice solved the unit without a meter; for unpowered points, all of them.
    floors : dict
        What the noise has beside its share of the reading, by point, in the point's unit.
    spent : Spent
    """

    values: dict[str, Array]
    solved: Mask
    floors: dict[str, float]
    spent: Spent = field(repr=False)


class Deck:
    """Copies of one netlist, solved by ngspice.

    Parameters
    ----------
    netlist : Netlist
    values : mapping of str to arrays of shape (copies,) or ()
    copies : int
    tie : str
        A node of an island without reference that is tied to 0 V; empty for none.
    """

    def __init__(
        self, netlist: Netlist, values: Mapping[str, Array], copies: int, spent: Spent, *, tie: str = "", jobs: int = 1
    ) -> None:
        self.netlist, self.copies, self.spent, self.tie, self.jobs = netlist, copies, spent, tie, jobs
        self._values = {key: np.broadcast_to(np.asarray(v, np.float64), copies) for key, v in values.items()}
        self.nodes = netlist.nodes()

    def solve(self, starts: Starts, knee: str = KNEE, which: NDArray[np.intp] | None = None) -> dict[str, Array]:
        """Node voltages [V] of every copy (NaN for one without a solution), from starts by node."""
        which = np.arange(self.copies) if which is None else which
        table = np.full((len(self.nodes), self.copies), np.nan)
        chunks = [which[low : low + COPIES] for low in range(0, len(which), COPIES)]
        with ThreadPoolExecutor(self.jobs) as pool:
            for found in pool.map(lambda chunk: self._halved(chunk, starts, knee), chunks):
                for copy, column in found.items():
                    table[:, copy] = column
        return dict(zip(self.nodes, table, strict=True)) | {GROUND: np.zeros(self.copies)}

    def _halved(self, which: NDArray[np.intp], starts: Starts, knee: str) -> dict[int, Array]:
        found = self._run(which, starts, knee, _QUICK)
        if found is None and len(which) > 1:
            middle = len(which) // 2
            found = self._halved(which[:middle], starts, knee) | self._halved(which[middle:], starts, knee)
        elif found is None:
            found = self._run(which, starts, knee, _PATIENT)
        return found or {}

    def _run(self, which: NDArray[np.intp], starts: Starts, knee: str, most: int) -> dict[int, Array] | None:
        copies = [{key: float(value[copy]) for key, value in self._values.items()} for copy in which]
        text, names = ngspice.deck(self.netlist, copies)
        lines = [line for line in text.splitlines() if not line.startswith(".nodeset")]
        extra = [
            f".nodeset v({names[node]}_{k})={starts[node][copy]:.13g}"
            for k, copy in enumerate(which)
            for node in self.nodes
            if node in starts and np.isfinite(starts[node][copy])
        ]
        if self.tie:
            extra += [f"Rtie_{k} {names[self.tie]}_{k} 0 1" for k in range(len(which))]
        at = lines.index(".control")
        # all that ngspice has (conductance, source and time steps) only for a copy that stands alone
        quick = ["optran 1 0 0 0 0 0"] if most == _QUICK else []
        text = "\n".join([*lines[:at], *extra, lines[at], *quick, *lines[at + 1 :]]) + "\n"
        text = text.replace(ngspice.OPTIONS, f".options {TOLERANCES} itl1={most} itl2={most} numdgt=15", 1).replace(
            "/10e-6))", f"/{knee}))"
        )
        try:
            found, _ = ngspice.run_text(text)
        except RuntimeError:
            found = {}
        self.spent.decks += 1
        self.spent.copies += len(which) if found else 0
        if not found:
            return None
        return {int(copy): np.array([found[f"{names[n]}_{k}"] for n in self.nodes]) for k, copy in enumerate(which)}


def read_powered(
    design: Design,
    parameters: Parameters,
    condition: Condition,
    faults: Sequence[Fault],
    travel: Array | None,
    *,
    meters: bool = True,
    jobs: int = 1,
) -> Found:
    """Read every modelled powered point of units under a cold condition.

    Parameters
    ----------
    parameters : mapping
        From `draw`, of as many units as there are faults.
    condition : Condition
        Its trimmer position is not looked at.
    faults : sequence of Fault
        One a unit; `HEALTHY` for none.
    travel : array of shape (units,) or None
        Where each unit's trimmer stands, from the least-bias end; None without a trimmer.
    meters : bool
        Whether the voltmeter's load is there.
    jobs : int
        ngspice runs at a time.
    """
    if condition.when != "cold":
        raise ValueError("only cold conditions: every junction at the ambient temperature")
    began = _child_seconds()
    units = len(faults)
    run = Run(design, parameters, condition, list(faults), units, None)
    variant = run.variant()
    stage = build(design, variant)
    values = _values(design, parameters, faults, run, travel)
    shift_v = np.broadcast_to(parameters["output.offset"], units)
    servo = design.feed.lower.kind == "servo"
    spent = Spent()
    deck = Deck(stage.netlist, _known(values, design, variant), units, spent, jobs=jobs)
    bare = _bare(design, run, deck, faults, travel, shift_v if servo else np.zeros(units))
    solved = np.isfinite(bare[deck.nodes[0]])
    readings = {name: bare[red] - bare[black] for name, (red, black) in stage.between.items()}
    wanted = {p.name: p for p in points_of(design) if p.powered and p.modelled}
    volts = [name for name, p in wanted.items() if p.function == "dc volts" and name in readings]
    found = {name: readings[name] for name in volts}
    if meters:
        _load(design, run, values, stage.between, bare, found, solved, deck)
    for name, element in stage.currents.items():
        found[name] = _supply_current(stage.netlist, element, values, bare)
    spent.seconds = _child_seconds() - began
    floors = {name: FLOOR_A if wanted[name].unit == "A" else FLOOR_V for name in found}
    return Found(values=found, solved=solved, floors=floors, spent=spent)


def read_unpowered(
    design: Design,
    parameters: Parameters,
    faults: Sequence[Fault],
    travel: Array | None,
    points: Sequence[str] | None = None,
    *,
    trimmer: TrimmerPosition = "least",
    jobs: int = 1,
) -> Found:
    """Read unpowered points of units at the design's ambient temperature.

    Parameters as for `read_powered`; ``trimmer`` is the position that the ranges are chosen at.
    """
    began = _child_seconds()
    units = len(faults)
    names = points or [point.name for point in points_of(design) if not point.powered]
    found: dict[str, Array] = {}
    floors: dict[str, float] = {}
    spent = Spent()
    solved = np.ones(units, np.bool_)
    distinct = list(dict.fromkeys(faults))
    whose = np.array([distinct.index(fault) for fault in faults])
    values = _values(design, parameters, faults, None, travel)
    for name in names:
        variant = Variant(powered=False, probe=name)
        stage = build(design, variant)
        used = nominal_range(design, name, trimmer)
        values["meter.amps"], values["meter.compliance_v"] = np.asarray(used.amps), np.asarray(COMPLIANCE_V)
        red, black = stage.between[name]
        grounded = any(GROUND in _ends(element) for element in stage.netlist.elements.values())
        tie = "" if grounded or black == GROUND else black
        deck = Deck(stage.netlist, _known(values, design, variant), units, spent, tie=tie, jobs=jobs)
        condition = Unpowered(point=name, trimmer="unknown")
        pilot = solve_unpowered(
            design, _tiled(nominal(design), len(distinct)), condition, distinct,
            position=None if travel is None else float(np.median(travel)), on_range=used,
        )  # fmt: skip
        solution = pilot.solution
        start_v = {node: solution.voltage(node)[whose] - _at(solution, tie)[whose] for node in deck.nodes}
        voltages = deck.solve(start_v)
        volts = voltages[red] - voltages[black]
        reading = volts if name.startswith("diode.") else volts / used.amps
        found[name] = np.where(reading > OVER_RANGE * used.full_scale, np.inf, reading)
        floors[name] = FLOOR_V if name.startswith("diode.") else FLOOR_V / used.amps
        solved &= np.isfinite(volts)
    spent.seconds = _child_seconds() - began
    return Found(values=found, solved=solved, floors=floors, spent=spent)


def add_noise(found: Found, rng: np.random.Generator) -> tuple[dict[str, Array], dict[str, Array]]:
    """Readings as a meter shows them, and the standard uncertainty that goes with each (of what is shown)."""
    shown: dict[str, Array] = {}
    uncertain: dict[str, Array] = {}
    for name, exact in found.values.items():
        noise = rng.standard_normal(exact.size)
        finite = np.where(np.isfinite(exact), exact, 0.0)
        floor = found.floors[name]
        read = finite + noise * (SHARE * np.abs(finite) + floor)
        shown[name] = np.where(np.isfinite(exact), read, exact)
        uncertain[name] = SHARE * np.abs(read) + floor
    return shown, uncertain


def observations(
    shown: Mapping[str, Array],
    uncertain: Mapping[str, Array],
    conditions: Mapping[str, tuple[Condition | Unpowered, ...]],
    unit: int,
) -> list[Observation]:
    """One unit's readings as observations; ``conditions`` by point name. Readings that ngspice hasn't are left out."""
    return [
        Observation(
            conditions=conditions[name],
            point=name,
            value=float(values[unit]),
            standard_uncertainty=float(uncertain[name][unit]),
        )
        for name, values in shown.items()
        if name in conditions and not math.isnan(values[unit])
    ]


def _values(
    design: Design, parameters: Parameters, faults: Sequence[Fault], run: Run | None, travel: Array | None
) -> dict[str, Array]:
    ambient_c = design.thermal.ambient_c if run is None else run.ambient_c
    temperature = {part.name: np.asarray(ambient_c, np.float64) for part in transistors_of(design)}
    if run is not None:
        values = run.values(temperature)
    else:
        values = dict(parameters) | {f"{name}.kelvin": at + ZERO_CELSIUS_K for name, at in temperature.items()}
    set_trimmer(design, values, travel)
    values = {key: np.broadcast_to(np.asarray(value, np.float64), len(faults)) for key, value in values.items()}
    apply(values, [None if fault == HEALTHY else fault for fault in faults], design)
    return values


def _known(values: Mapping[str, Array], design: Design, variant: Variant) -> dict[str, Array]:
    keys = compiled(design, variant).keys
    return {key: value for key, value in values.items() if key in keys}


def _bare(
    design: Design, run: Run, deck: Deck, faults: Sequence[Fault], travel: Array | None, shift_v: Array
) -> dict[str, Array]:
    """Voltages without a meter: from the nominal unit with each unit's fault, or else from our own solution of it."""
    units = len(faults)
    distinct = list(dict.fromkeys(faults))
    whose = np.array([distinct.index(fault) for fault in faults])
    pilot = solve_units(
        design, _tiled(nominal(design), len(distinct)), run.condition, distinct,
        position=None if travel is None else float(np.median(travel)), loading="none",
    )  # fmt: skip
    start = {
        node: pilot.solution.voltage(node)[whose] + (0.0 if _held(node) else shift_v) for node in deck.nodes
    }  # fmt: skip
    if design.feed.lower.kind != "servo":
        found = deck.solve(start)
    else:
        found = _narrowed(run, deck, deck.solve(start, WIDE_KNEE), np.arange(units))
    left = np.flatnonzero(np.isnan(found[deck.nodes[0]]))
    if len(left):
        ours = solve_units(design, run.parameters, run.condition, list(faults), position=travel, loading="none")
        again = deck.solve({node: ours.solution.voltage(node) for node in deck.nodes}, KNEE, left)
        found = _either(found, again)
    # once more from there: a supply's current hangs on its last microvolts
    return _either(deck.solve({node: volts for node, volts in found.items() if node != GROUND}), found)


def _either(first: Mapping[str, Array], second: Mapping[str, Array]) -> dict[str, Array]:
    return {node: np.where(np.isnan(volts), second[node], volts) for node, volts in first.items()}


def _narrowed(run: Run, deck: Deck, wide: dict[str, Array], which: NDArray[np.intp]) -> dict[str, Array]:
    """Solve in the narrow knee, the whole stage moved to where the servo sends the same current in it."""
    off_v = wide["output"] - (run.rest_v() + run.parameters["output.offset"])
    move_v = np.where(np.abs(off_v) < 5.0 * float(WIDE_KNEE), (float(KNEE) / float(WIDE_KNEE) - 1.0) * off_v, 0.0)
    start = {node: volts + (0.0 if _held(node) else move_v) for node, volts in wide.items() if node != GROUND}
    return deck.solve(start, KNEE, which)


def _load(
    design: Design,
    run: Run,
    values: Mapping[str, Array],
    between: Mapping[str, tuple[str, str]],
    bare: Mapping[str, Array],
    found: dict[str, Array],
    solved: Mask,
    deck: Deck,
) -> None:
    """Put the meter across each point, where it makes a difference."""
    variant = run.variant(meters=True)
    netlist = build(design, variant).netlist
    known = _known(values, design, variant)
    names = [name for name in found if f"meter.{name}" in netlist.elements]
    starts = {node: volts for node, volts in bare.items() if node != GROUND}
    rng = np.random.default_rng(0)
    matters = np.zeros((len(names), deck.copies), np.bool_)
    for _ in range(_SCREENS):
        many = known | {f"meter.{name}": VOLTMETER_OHM * np.exp(rng.uniform(-1.0, 1.0, deck.copies)) for name in names}
        screen = Deck(netlist, many, deck.copies, deck.spent, jobs=deck.jobs)
        loaded = screen.solve(starts, KNEE, np.flatnonzero(solved))
        for row, name in enumerate(names):
            red, black = between[name]
            moved = np.abs(loaded[red] - loaded[black] - found[name])
            matters[row] |= ~(moved < _MATTERS * (SHARE * np.abs(found[name]) + FLOOR_V))
    pairs = [(int(unit), names[row]) for unit, row in np.argwhere(matters.T) if solved[unit]]
    if not pairs:
        return
    index = np.array([unit for unit, _ in pairs])
    alone = {key: value[index] if value.ndim else value for key, value in known.items()}
    for name in names:
        alone[f"meter.{name}"] = np.array([VOLTMETER_OHM if name == one else NO_METER_OHM for _, one in pairs])
    loaded = Deck(netlist, alone, len(pairs), deck.spent, jobs=deck.jobs).solve(
        {node: volts[index] for node, volts in starts.items()}
    )
    for row, (unit, name) in enumerate(pairs):
        red, black = between[name]
        found[name] = found[name].copy()
        found[name][unit] = loaded[red][row] - loaded[black][row]


def _supply_current(netlist: Netlist, name: str, values: Mapping[str, Array], voltages: Mapping[str, Array]) -> Array:
    supply = netlist.elements[name]
    assert isinstance(supply, Supply)
    lack_v = values[f"{name}.volts"] - (voltages[supply.plus] - voltages[supply.minus])
    limit_a = values[f"{name}.limit_a"]
    return np.asarray(limit_a * np.tanh(lack_v / (limit_a * SUPPLY_KNEE_OHM)) + SUPPLY_LEAK_S * lack_v)


def _held(node: str) -> bool:
    return node.startswith(("rail", "heatsink"))


def _ends(element: object) -> tuple[str, ...]:
    return tuple(value for key, value in vars(element).items() if key != "name" and isinstance(value, str))


def _at(solution: object, node: str) -> Array:
    return np.asarray(solution.voltage(node)) if node else np.zeros(solution.units)  # type: ignore[attr-defined]


def _tiled(parameters: Parameters, units: int) -> Parameters:
    return {key: np.broadcast_to(value, units) for key, value in parameters.items()}


def _child_seconds() -> float:
    spent = os.times()
    return spent.children_user + spent.children_system
