"""Let ngspice solve the units of a solution of ours.

Values are ours; the voltages are ngspice's. A start (`.nodeset`) forces nothing.

* Healthy units are many copies in a deck, which begins at our solution rounded to 1 mV. A servo's knee of 10 uV is too
  narrow to be found from there, so a first run has a knee of 10 mV; the stage is moved to where the servo sends the
  same current in the narrow knee, and the second run solves the circuit as it is. A deck that fails is halved until the
  copy stands alone, and is tried with all that ngspice has.
* A faulty unit is a deck of its own, its junctions plain (see `tests.reference.ngspice.deck`): `ATTEMPTS` says from
  where and with which tolerances it is tried, in turn, until one has a solution. What none can solve is listed.
"""

from __future__ import annotations

import subprocess
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit.netlist import Netlist, Supply
from benchkit.stage.design import Design
from benchkit.stage.operate import Solved
from benchkit.stage.runs import NO_METER_OHM, compiled
from benchkit.stage.topologies import VOLTMETER_OHM, Variant, build
from tests.reference import ngspice

Array = NDArray[np.float64]

COPIES = 40
"""Copies in a deck at first."""
WITH_METERS = Variant(meters=True)
WIDE_KNEE, KNEE = "10e-3", "10e-6"
_OPTIONS, *_LOOSER_OPTIONS = (
    f".options reltol={relative} abstol={amps} vntol={volts} gmin=1e-12 itl1={{most}} itl2={{most}} numdgt=15"
    for relative, amps, volts in (
        ("1e-9", "1e-15", "1e-12"), ("1e-7", "1e-12", "1e-9"), ("1e-6", "1e-12", "1e-6"),
    )
)  # fmt: skip
_QUICK, _PATIENT = 60, 2000
TIGHT, LOOSE, LOOSER, LOOSEST = (
    f".options reltol={relative} abstol={amps} vntol={volts} gmin=1e-18 itl1=100 itl2=200 numdgt=15"
    for relative, amps, volts in (
        ("1e-9", "1e-15", "1e-12"), ("1e-7", "1e-12", "1e-9"), ("1e-6", "1e-12", "1e-6"), ("1e-5", "1e-12", "1e-6"),
    )
)  # fmt: skip
"""In a circuit with 1 mohm and 1 Gohm ngspice's own rounding is above its tightest tolerances."""
DIRECTLY = " gminsteps=0 srcsteps=0"
"""Newton's method alone; without it ngspice goes on to steps of conductance, of sources and of time."""
ATTEMPTS = (
    (3, TIGHT + DIRECTLY), (13, TIGHT + DIRECTLY), (3, LOOSE + DIRECTLY), (13, LOOSE + DIRECTLY),
    (13, LOOSER + DIRECTLY), (3, LOOSER + DIRECTLY), (13, LOOSEST + DIRECTLY), (13, LOOSE), (None, LOOSER),
)  # fmt: skip
"""Digits (after the point) of our solution that a faulty unit's deck begins at, None for no start, and options."""


@dataclass(frozen=True)
class Answer:
    """ngspice's answer: voltages by node and supplies' currents, shape (copies,), NaN where it has none."""

    volts: dict[str, Array]
    amps: dict[str, Array] = field(default_factory=dict)

    @property
    def solved(self) -> NDArray[np.bool_]:
        """Who has a solution."""
        return np.isfinite(next(iter(self.volts.values())))


def ask(design: Design, ours: Solved) -> Answer:
    """Let ngspice solve the units of a solution of ours."""
    netlist = build(design).netlist
    values = {key: np.broadcast_to(value, ours.units) for key, value in ours.solution.values.items()}
    start = {node: np.round(ours.solution.voltage(node), 3) for node in netlist.nodes()}
    everyone = np.arange(ours.units)
    if design.feed.lower.kind != "servo":
        return Answer(_solve(netlist, values, start, KNEE, everyone))
    wide = _solve(netlist, values, start, WIDE_KNEE, everyone)
    off_v = wide["output"] - values["feed.lower.rest_v"]
    near = np.abs(off_v) < 5.0 * float(WIDE_KNEE)
    move_v = np.where(near, (float(KNEE) / float(WIDE_KNEE) - 1.0) * off_v, 0.0)
    start = {
        node: np.where(np.isfinite(volts), volts + (0.0 if node.startswith(("rail", "heatsink")) else move_v), at)
        for (node, volts), at in zip(wide.items(), start.values(), strict=True)
    }
    return Answer(_solve(netlist, values, start, KNEE, everyone))


def ask_one_by_one(design: Design, ours: Solved, which: Sequence[int] | None = None) -> Answer:
    """Let ngspice solve units of a solution of ours, each in a deck of its own with plain junctions."""
    nodes = build(design).netlist.nodes()
    elements = build(design).netlist.elements
    supplies = [name for name in elements if isinstance(elements[name], Supply)]
    table = np.full((len(nodes) + len(supplies), ours.units), np.nan)
    for unit in range(ours.units) if which is None else which:
        values = {key: float(value[unit if value.size > 1 else 0]) for key, value in ours.solution.values.items()}
        start = {node: float(ours.solution.voltage(node)[unit]) for node in nodes}
        found = _alone(build(design).netlist, values, start)
        if found is not None:
            table[:, unit] = [found[name] for name in (*nodes, *supplies)]
    return Answer(dict(zip(nodes, table, strict=False)), dict(zip(supplies, table[len(nodes) :], strict=True)))


def _alone(
    netlist: Netlist,
    values: Mapping[str, float],
    start: Mapping[str, float],
    attempts: Sequence[tuple[int | None, str]] = ATTEMPTS,
) -> dict[str, float] | None:
    """Voltages by node and currents by supply in a deck of its own, by the first attempt that has a solution."""
    text, names = ngspice.deck(netlist, [values], plain_junctions=True)
    supplies = {f"i_{k}_0": name for k, (name, e) in enumerate(netlist.elements.items()) if isinstance(e, Supply)}
    shown = {f"{short}_0": node for node, short in names.items()} | supplies
    for digits, options in attempts:
        lines = [options if line.startswith(".options") else line for line in text.splitlines()]
        if digits is not None:
            lines = [line for line in lines if not line.startswith(".nodeset")]
            at = lines.index(".control")
            lines[at:at] = [f".nodeset v({names[node]}_0)={volts:.{digits}f}" for node, volts in start.items()]
        if DIRECTLY in options:
            lines.insert(lines.index(".control") + 1, "optran 1 0 0 0 0 0")
        found = _results(lines, shown)
        if found is None:
            continue
        if TIGHT in options:
            return found
        # Once more from its own solution: what a loose tolerance left of the way, Newton's method goes now.
        again = [line for line in lines if not line.startswith(".nodeset")]
        at = again.index(".control")
        again[at:at] = [f".nodeset v({names[node]}_0)={volts:.15g}" for node, volts in found.items() if node in names]
        return _results(again, shown) or found
    return None


def _results(lines: Sequence[str], shown: Mapping[str, str]) -> dict[str, float] | None:
    try:
        found, _ = ngspice.run_text("\n".join(lines) + "\n", timeout_s=20.0)
    except (RuntimeError, subprocess.TimeoutExpired):
        return None
    return {name: found[key] for key, name in shown.items()}


def _metered(
    design: Design, broken: Solved, unit: int, point: str
) -> tuple[Netlist, dict[str, float], dict[str, float]]:
    """The circuit with a voltmeter across one point: netlist, values, and our bare voltages to begin at."""
    netlist = build(design, WITH_METERS).netlist
    values = {key: float(value[unit if value.size > 1 else 0]) for key, value in broken.solution.values.items()}
    values |= {name: NO_METER_OHM for name in netlist.elements if name.startswith("meter.")}
    values[f"meter.{point}"] = VOLTMETER_OHM
    return netlist, values, {node: float(broken.solution.voltage(node)[unit]) for node in netlist.nodes()}


def their_reading(design: Design, broken: Solved, unit: int, point: str, allowed_v: float) -> float:
    """What a voltmeter shows across a point of a unit, by ngspice: the median of its answers from several starts.

    Where picoamperes decide, each start has an answer of its own, in steps of what the last bit of 24 V is across a
    milliohm. When those differ among each other by more than is allowed between two programs, there is none: NaN.
    """
    netlist, values, start = _metered(design, broken, unit, point)
    red, black = build(design).between[point]
    answers: list[float] = []
    for attempt in ATTEMPTS:
        if answers and DIRECTLY not in attempt[1]:
            break
        found = _alone(netlist, values, start, (attempt,))
        if found is not None:
            answers.append(found.get(red, 0.0) - found.get(black, 0.0))
    scatters = not answers or max(answers) - min(answers) > allowed_v
    return float("nan") if scatters else float(np.median(answers))


def our_reading(design: Design, broken: Solved, unit: int, point: str) -> float:
    """What a voltmeter shows across a point of a unit, by us; NaN where we have no solution."""
    _, values, start = _metered(design, broken, unit, point)
    solution = compiled(design, WITH_METERS).solve(values, 1, start)
    return float(solution.between(*build(design).between[point])[0]) if solution.converged[0] else float("nan")


def _solve(
    netlist: Netlist, values: Mapping[str, Array], start: Mapping[str, Array], knee: str, which: NDArray[np.intp]
) -> dict[str, Array]:
    nodes = netlist.nodes()
    table = np.full((len(nodes), len(which)), np.nan)

    def halved(some: NDArray[np.intp]) -> None:
        found = _run(netlist, values, start, knee, some, _QUICK)
        for options in _LOOSER_OPTIONS:
            if found is None:
                found = _run(netlist, values, start, knee, some, _QUICK, options)
                if found is not None:  # once more from its own solution: see `_alone`
                    own = {node: np.full(len(which), np.nan) for node in nodes}
                    for node, row in zip(nodes, found, strict=True):
                        own[node][some] = row
                    found = _run(netlist, values, own, knee, some, _QUICK, options)
        if found is None and len(some) > 1:
            halved(some[: len(some) // 2])
            halved(some[len(some) // 2 :])
            return
        if found is None:
            found = _run(netlist, values, start, knee, some, _PATIENT)
        if found is None:
            found = _run(netlist, values, {}, knee, some, _PATIENT)
        if found is not None:
            table[:, some] = found

    for low in range(0, len(which), COPIES):
        halved(which[low : low + COPIES])
    return dict(zip(nodes, table, strict=True))


def _run(
    netlist: Netlist, values: Mapping[str, Array], start: Mapping[str, Array], knee: str, some: NDArray[np.intp],
    most: int, options: str = _OPTIONS,
) -> Array | None:  # fmt: skip
    copies = [{key: float(value[copy]) for key, value in values.items()} for copy in some]
    text, names = ngspice.deck(netlist, copies)
    lines = text.splitlines()
    if start:
        lines = [line for line in lines if not line.startswith(".nodeset")]
    begin = [
        f".nodeset v({names[node]}_{k})={volts[copy]:.13g}"
        for k, copy in enumerate(some)
        for node, volts in start.items()
    ]
    at = lines.index(".control")
    # What takes long (time steps instead of conductance and source steps) only for a copy that stands alone.
    quick = ["optran 1 0 0 0 0 0"] if most == _QUICK else []
    text = "\n".join([*lines[:at], *begin, lines[at], *quick, *lines[at + 1 :]]) + "\n"
    text = text.replace(ngspice.OPTIONS, options.format(most=most), 1).replace("/10e-6))", f"/{knee}))")
    try:
        found, _ = ngspice.run_text(text, timeout_s=60.0)
    except (RuntimeError, subprocess.TimeoutExpired):
        return None
    return np.array([[found[f"{names[node]}_{k}"] for k in range(len(some))] for node in netlist.nodes()])
