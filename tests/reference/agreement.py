"""Every stage of the catalogue through ngspice: healthy units, and each fault of the table.

What is compared
----------------
* Healthy: the nominal unit and 50 drawn ones, cold, at full rails without a limit, each trimmer where the draw put it;
  every node's voltage within 1e-6 + 1 uV.
* Faulty: the nominal unit with each fault that its parts can have, cold, trimmer at its least-bias end, 40 % of full
  rails, a limit of 50 mA a rail; every test point within 1e-4 + 20 uV, the rail currents within 1e-4 + 2 uA.

Both without a meter, but for a few readings of faulty units. Where a junction is off and next to nothing flows, a
reading rests on picoamperes, and both programs' sixteen digits show: 12 V across a contact of 1 mohm are exact to 2 pA.
A reading on which bare voltages differ by more than half of what is allowed is therefore taken as a technician would
take it, with the 10 Mohm of a voltmeter across that point, by both programs. These are listed too.

The values (parts, trimmer, fault) are ours; the voltages are ngspice's. A start (`.nodeset`) forces
nothing.

* Healthy units are many copies in a deck, which begins at our solution rounded to 1 mV. A servo's knee of 10 uV is too
  narrow to be found from there, so a first run has a knee of 10 mV; the stage is moved to where the servo sends the
  same current in the narrow knee, and the second run solves the circuit as it is. A deck that fails is halved until the
  copy stands alone, and is tried with all that ngspice has.
* A faulty unit is a deck of its own, its junctions plain (see `tests.reference.ngspice.deck`): `ATTEMPTS` says from
  where and with which tolerances it is tried, in turn, until one has a solution. What none can solve is listed.

``python -m tests.reference.agreement`` runs all of it (a quarter of an hour on two cores) and writes the results anew:
``data/agreement.bin``, ``data/unsolved_by_ngspice.txt`` and ``data/read_with_a_meter.txt``. With ``check`` it compares
the whole catalogue with what is committed, and prints the worst differences.
"""

from __future__ import annotations

import argparse
import io
import lzma
import subprocess
import time
from collections.abc import Mapping, Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit.equations import SUPPLY_KNEE_OHM, SUPPLY_LEAK_S
from benchkit.circuit.netlist import GROUND, Netlist, Supply
from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design
from benchkit.stage.draws import draw, nominal, seeds
from benchkit.stage.faults import Fault, faults_of
from benchkit.stage.operate import Solved, solve_units
from benchkit.stage.points import points_of
from benchkit.stage.reach import full_rails
from benchkit.stage.runs import NO_METER_OHM, compiled
from benchkit.stage.topologies import VOLTMETER_OHM, Variant, build
from tests.reference import ngspice
from tests.stage.catalogue import catalogue

Array = NDArray[np.float64]

COMMITTED = Path(__file__).parent / "data" / "agreement.bin"
UNSOLVED = Path(__file__).parent / "data" / "unsolved_by_ngspice.txt"
METERED = Path(__file__).parent / "data" / "read_with_a_meter.txt"
UNITS = 50
SEED = 3
COPIES = 40
"""Copies in a deck at first."""
HEALTHY_V, FAULTY_V, FAULTY_A = 0.2e-6, 2e-6, 20e-9
"""What committed results are rounded to."""
RELATIVE, ABSOLUTE_V = 1e-6, 1e-6
FAULTY_RELATIVE, FAULTY_ABSOLUTE_V, FAULTY_ABSOLUTE_A = 1e-4, 20e-6, 2e-6
LIMIT_A = 0.05
RAILS_SHARE = 0.4
WITH_METERS = Variant(meters=True)
WIDE_KNEE, KNEE = "10e-3", "10e-6"
_OPTIONS = ".options reltol=1e-9 abstol=1e-15 vntol=1e-12 gmin=1e-12 itl1={most} itl2={most} numdgt=15"
_QUICK, _PATIENT = 60, 2000
TIGHT, LOOSE, LOOSEST = (
    f".options reltol={relative} abstol={amps} vntol={volts} gmin=1e-18 itl1=100 itl2=200 numdgt=15"
    for relative, amps, volts in (("1e-9", "1e-15", "1e-12"), ("1e-7", "1e-12", "1e-9"), ("1e-6", "1e-12", "1e-6"))
)
DIRECTLY = " gminsteps=0 srcsteps=0"
"""Newton's method alone; without it ngspice goes on to steps of conductance, of sources and of time."""
ATTEMPTS = (
    (3, TIGHT + DIRECTLY), (13, TIGHT + DIRECTLY), (3, LOOSE + DIRECTLY), (13, LOOSE + DIRECTLY),
    (13, LOOSEST + DIRECTLY), (13, LOOSE), (None, LOOSEST),
)  # fmt: skip
"""Digits (after the point) of our solution that a faulty unit's deck begins at, None for no start, and options."""
_NOTHING = np.iinfo(np.int32).min
"""In place of a rounded voltage that ngspice has not."""


def healthy(design: Design, units: int = UNITS) -> Solved:
    """Our solution of the nominal unit and drawn ones."""
    unit, drawn = nominal(design), draw(design, units, seeds("unit", SEED))
    both = {key: value if value.ndim == 0 else np.append(unit[key], value) for key, value in drawn.items()}
    return solve_units(design, both, full_rails(design, trimmer="unknown", when="cold"), loading="none")


def limited(design: Design) -> Condition:
    """The condition of the faulty units."""
    rails = design.rails
    return Condition(
        positive_v=RAILS_SHARE * rails.positive_v, negative_v=RAILS_SHARE * rails.negative_v, limit_a=LIMIT_A,
        trimmer="least",
    )  # fmt: skip


def faulty(design: Design, faults: Sequence[Fault]) -> Solved:
    """Our solution of the nominal unit with each of some faults."""
    return solve_units(design, nominal(design), limited(design), list(faults), loading="none")


@dataclass(frozen=True)
class Answer:
    """ngspice's answer: voltages by node, shape (copies,), NaN where it has none."""

    volts: dict[str, Array]

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
    table = np.full((len(nodes), ours.units), np.nan)
    for unit in range(ours.units) if which is None else which:
        values = {key: float(value[unit if value.size > 1 else 0]) for key, value in ours.solution.values.items()}
        start = {node: float(ours.solution.voltage(node)[unit]) for node in nodes}
        found = _alone(build(design).netlist, values, start)
        if found is not None:
            table[:, unit] = [found[node] for node in nodes]
    return Answer(dict(zip(nodes, table, strict=True)))


def _alone(netlist: Netlist, values: Mapping[str, float], start: Mapping[str, float]) -> dict[str, float] | None:
    """Voltages of one circuit in a deck of its own, by the first attempt that has a solution."""
    text, names = ngspice.deck(netlist, [values], plain_junctions=True)
    for digits, options in ATTEMPTS:
        lines = [options if line.startswith(".options") else line for line in text.splitlines()]
        if digits is not None:
            lines = [line for line in lines if not line.startswith(".nodeset")]
            at = lines.index(".control")
            lines[at:at] = [f".nodeset v({names[node]}_0)={volts:.{digits}f}" for node, volts in start.items()]
        if DIRECTLY in options:
            lines.insert(lines.index(".control") + 1, "optran 1 0 0 0 0 0")
        try:
            found, _ = ngspice.run_text("\n".join(lines) + "\n", timeout_s=10.0)
        except (RuntimeError, subprocess.TimeoutExpired):
            continue
        return {node: found[f"{name}_0"] for node, name in names.items()}
    return None


def _metered(
    design: Design, broken: Solved, unit: int, point: str
) -> tuple[Netlist, dict[str, float], dict[str, float]]:
    """The circuit with a voltmeter across one point: netlist, values, and our bare voltages to begin at."""
    netlist = build(design, WITH_METERS).netlist
    values = {key: float(value[unit if value.size > 1 else 0]) for key, value in broken.solution.values.items()}
    values |= {name: NO_METER_OHM for name in netlist.elements if name.startswith("meter.")}
    values[f"meter.{point}"] = VOLTMETER_OHM
    return netlist, values, {node: float(broken.solution.voltage(node)[unit]) for node in netlist.nodes()}


def their_reading(design: Design, broken: Solved, unit: int, point: str) -> float:
    """What a voltmeter shows across a point of a unit, by ngspice; NaN where it has no solution."""
    found = _alone(*_metered(design, broken, unit, point))
    if found is None:
        return float("nan")
    red, black = build(design).between[point]
    return found.get(red, 0.0) - found.get(black, 0.0)


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
    most: int,
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
    text = text.replace(ngspice.OPTIONS, _OPTIONS.format(most=most), 1).replace("/10e-6))", f"/{knee}))")
    try:
        found, _ = ngspice.run_text(text, timeout_s=60.0)
    except (RuntimeError, subprocess.TimeoutExpired):
        return None
    return np.array([[found[f"{names[node]}_{k}"] for k in range(len(some))] for node in netlist.nodes()])


def points(design: Design, ours: Solved, answer: Answer) -> dict[str, Array]:
    """Readings at the powered test points, from ngspice's voltages."""
    stage = build(design)
    volts = answer.volts | {GROUND: np.zeros(ours.units)}
    found = {
        name: volts[red] - volts[black]
        for name, (red, black) in stage.between.items()
        if name in ours.points and name not in stage.currents
    }
    return found | rail_currents(design, ours, answer)


def rail_currents(design: Design, ours: Solved, answer: Answer) -> dict[str, Array]:
    """Rail currents (A): what the supplies deliver by their law at ngspice's voltages."""
    stage, found = build(design), {}
    volts = answer.volts | {GROUND: np.zeros(ours.units)}
    for name, element in stage.currents.items():
        supply = stage.netlist.elements[element]
        assert isinstance(supply, Supply)
        lack_v = ours.solution.values[f"{element}.volts"] - (volts[supply.plus] - volts[supply.minus])
        limit_a = ours.solution.values[f"{element}.limit_a"]
        found[name] = limit_a * np.tanh(lack_v / (limit_a * SUPPLY_KNEE_OHM)) + SUPPLY_LEAK_S * lack_v
    return found


def fingerprint(ours: Solved) -> float:
    """One number for all values of the units: committed results belong to those and no others."""
    total = 0.0
    for number, key in enumerate(sorted(ours.solution.values)):
        value = np.broadcast_to(ours.solution.values[key], ours.units)
        finite = np.where(np.isfinite(value), value, 0.0)
        total += float(np.sum(np.arcsinh(finite * 1e6) * np.cos(number + np.arange(ours.units))))
    return total


@dataclass(frozen=True, kw_only=True)
class Reference:
    """Committed answers for one design, rounded: healthy and faulty voltages (nodes, units), rail currents.

    ``metered`` holds readings with a meter (V) by number of the fault and point; they stand in for the bare ones.
    """

    fingerprints: tuple[float, float]
    healthy_v: Array
    faulty_v: Array
    faulty_a: Array
    metered: dict[tuple[int, str], float]


def make(design: Design) -> Reference:
    """Ask ngspice for all of a design's units."""
    ours, broken = healthy(design), faulty(design, faults_of(design))
    well, ill = ask(design, ours), ask_one_by_one(design, broken)
    shares = faulty_shares(design, broken, points(design, broken, ill))
    metered = {
        (int(unit), point): their_reading(design, broken, int(unit), point)
        for point, share in shares.items()
        if not point.endswith(".current")
        for unit in np.flatnonzero((share > 0.5) & broken.converged)
    }
    return Reference(
        fingerprints=(fingerprint(ours), fingerprint(broken)),
        healthy_v=np.array(list(well.volts.values())),
        faulty_v=np.array(list(ill.volts.values())),
        faulty_a=np.array(list(rail_currents(design, broken, ill).values())),
        metered=metered,
    )


def _rounded(values: Array, step: float) -> NDArray[np.int32]:
    return np.where(np.isfinite(values), np.round(np.nan_to_num(values) / step), _NOTHING).astype(np.int32)


def _exact(values: NDArray[np.int32], step: float) -> Array:
    return np.where(values == _NOTHING, np.nan, values * step)


def write(references: Mapping[str, Reference]) -> None:
    """Write the committed file: an .npz of whole numbers, bytes of like weight together, compressed."""
    arrays: dict[str, NDArray[np.generic]] = {}
    for name, one in references.items():
        arrays[f"{name}/fingerprints"] = np.array(one.fingerprints)
        arrays[f"{name}/metered"] = np.array(
            [f"{unit} {point} {volts:.9g}" for (unit, point), volts in one.metered.items()]
        )
        for key, step in _STEPS.items():
            whole = _rounded(getattr(one, key), step)
            arrays[f"{name}/{key}"] = np.stack(
                [whole.view(np.uint8).reshape(*whole.shape, 4)[..., k] for k in range(4)]
            )
    buffer = io.BytesIO()
    np.savez(buffer, **arrays)  # type: ignore[arg-type]
    COMMITTED.write_bytes(lzma.compress(buffer.getvalue(), preset=9))


_STEPS = {"healthy_v": HEALTHY_V, "faulty_v": FAULTY_V, "faulty_a": FAULTY_A}


@cache
def committed() -> dict[str, Reference]:
    """Committed results by design."""
    found: dict[str, dict[str, Any]] = {}
    with np.load(io.BytesIO(lzma.decompress(COMMITTED.read_bytes()))) as file:
        for path in file.files:
            name, key = path.rsplit("/", 1)
            if key in ("fingerprints", "metered"):
                found.setdefault(name, {})[key] = file[path].tolist()
            else:
                whole = np.ascontiguousarray(np.moveaxis(file[path], 0, -1)).view(np.int32)[..., 0]
                found.setdefault(name, {})[key] = _exact(whole, _STEPS[key])
    return {
        name: Reference(fingerprints=(float(one["fingerprints"][0]), float(one["fingerprints"][1])),
                        healthy_v=one["healthy_v"], faulty_v=one["faulty_v"], faulty_a=one["faulty_a"],
                        metered={(int(unit), point): float(volts)
                                 for unit, point, volts in (line.split() for line in one["metered"])})
        for name, one in found.items()
    }  # fmt: skip


def listed(path: Path) -> list[str]:
    """Lines of a list."""
    return [line for line in path.read_text(encoding="utf-8").splitlines() if line and not line.startswith("#")]


def metered_in(references: Mapping[str, Reference]) -> list[str]:
    """What is read with a meter: "design: part: fault: point"."""
    return [
        f"{name}: {faults_of(catalogue()[name])[unit]}: {point}"
        for name, one in references.items()
        for unit, point in one.metered
    ]


def _points_of(design: Design) -> list[str]:
    stage = build(design)
    return [p.name for p in points_of(design) if p.powered and (p.name in stage.between or p.name in stage.currents)]


def unsolved_in(references: Mapping[str, Reference]) -> list[str]:
    """What ngspice has no solution of: "design: unit number" and "design: part: fault"."""
    lines = []
    for name, one in references.items():
        faults = faults_of(catalogue()[name])
        lines += [f"{name}: healthy unit {k}" for k in np.flatnonzero(np.isnan(one.healthy_v[0]))]
        lines += [f"{name}: {faults[k]}" for k in np.flatnonzero(np.isnan(one.faulty_v[0]))]
    return lines


@dataclass(frozen=True, kw_only=True)
class Worst:
    """Largest difference as a share of what is allowed, and where."""

    share: float
    where: str


def compare_healthy(design: Design, ours: Solved, reference: Array) -> Worst:
    """Compare node voltages of healthy units with ngspice's (nodes, units)."""
    worst = Worst(share=0.0, where="")
    for node, theirs in zip(build(design).netlist.nodes(), reference, strict=True):
        share = np.abs(ours.solution.voltage(node) - theirs) / (RELATIVE * np.abs(theirs) + ABSOLUTE_V)
        worst = _worse(worst, share, [f"{node} of unit {k}" for k in range(ours.units)])
    return worst


def faulty_shares(design: Design, ours: Solved, theirs: Mapping[str, Array]) -> dict[str, Array]:
    """Differences at the test points of faulty units, as shares of what is allowed."""
    currents = build(design).currents
    return {
        name: np.abs(ours.points[name] - values)
        / (FAULTY_RELATIVE * np.abs(values) + (FAULTY_ABSOLUTE_A if name in currents else FAULTY_ABSOLUTE_V))
        for name, values in theirs.items()
    }


def compare_faulty(design: Design, faults: Sequence[Fault], ours: Solved, reference: Reference) -> Worst:
    """Compare test points of faulty units with ngspice's."""
    stage = build(design)
    theirs = points(design, ours, Answer(dict(zip(stage.netlist.nodes(), reference.faulty_v, strict=True))))
    theirs |= dict(zip(stage.currents, reference.faulty_a, strict=True))
    shares = faulty_shares(design, ours, theirs)
    worst = Worst(share=0.0, where="")
    for (unit, point), volts in reference.metered.items():
        off_v = abs(our_reading(design, ours, unit, point) - volts)
        shares[point][unit] = off_v / (FAULTY_RELATIVE * abs(volts) + FAULTY_ABSOLUTE_V)
    for name, share in shares.items():
        worst = _worse(worst, share, [f"{name} with {fault}" for fault in faults])
    return worst


def _worse(worst: Worst, share: Array, names: Sequence[str]) -> Worst:
    if not np.isfinite(share).any():
        return worst
    k = int(np.nanargmax(share))
    return Worst(share=float(share[k]), where=names[k]) if share[k] > worst.share else worst


def _made(name: str) -> tuple[str, Reference, float]:
    began = time.perf_counter()
    return name, make(catalogue()[name]), time.perf_counter() - began


def main() -> None:
    """Make the committed results, or compare with them."""
    parser = argparse.ArgumentParser(description=main.__doc__)
    parser.add_argument("what", choices=["make", "check"], nargs="?", default="make")
    parser.add_argument("--jobs", type=int, default=2)
    parser.add_argument("--only", help="make designs whose name has this in it, and keep the others")
    given = parser.parse_args()
    names = [name for name in catalogue() if given.only is None or given.only in name]
    references = dict(committed()) if given.what == "check" or given.only else {}
    if given.what == "make":
        with ProcessPoolExecutor(given.jobs) as pool:
            for name, reference, seconds in pool.map(_made, names):
                references[name] = reference
                failed = len(unsolved_in({name: reference}))
                print(f"{name}: {reference.faulty_v.shape[1]} faults, {failed} unsolved, {seconds:.0f} s", flush=True)
        references = {name: references[name] for name in catalogue() if name in references}
        write(references)
        lines = unsolved_in(references)
        total = sum(one.healthy_v.shape[1] + one.faulty_v.shape[1] for one in references.values())
        head = f"# What ngspice has no solution of: {len(lines)} of {total} circuits"
        UNSOLVED.write_text("\n".join([head, *lines]) + "\n", encoding="utf-8")
        read = metered_in(references)
        count = sum(one.faulty_v.shape[1] * len(_points_of(catalogue()[name])) for name, one in references.items())
        head = f"# Read with a voltmeter's 10 Mohm across the point: {len(read)} of {count} readings of faulty units"
        METERED.write_text("\n".join([head, *read]) + "\n", encoding="utf-8")
        print(f"{len(lines)} of {total} unsolved; {COMMITTED.stat().st_size / 1e6:.2f} MB")
    for name in names:
        design, faults = catalogue()[name], faults_of(catalogue()[name])
        ours, broken = healthy(design), faulty(design, faults)
        one = references[name]
        good = compare_healthy(design, ours, one.healthy_v)
        bad = compare_faulty(design, faults, broken, one)
        left = np.count_nonzero(~ours.converged), np.count_nonzero(~broken.converged)
        print(f"{name}: healthy {good.share:.3f} ({good.where}); faulty {bad.share:.3f} ({bad.where}); unsolved {left}")


if __name__ == "__main__":
    main()
