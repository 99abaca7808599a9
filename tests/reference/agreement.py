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
take it, with the 10 Mohm of a voltmeter across that point, by both programs. These are listed too, and marked where
ngspice's own answers from different starts lie more than 20 uV apart: those are not compared.

The values (parts, trimmer, fault) are ours; the voltages are ngspice's (`tests.reference.asking`).

``python -m tests.reference.agreement`` runs all of it (a quarter of an hour on two cores) and writes the results anew:
``data/agreement.bin``, ``data/unsolved_by_ngspice.txt`` and ``data/read_with_a_meter.txt``. With ``check`` it compares
the whole catalogue with what is committed, and prints the worst differences.
"""

from __future__ import annotations

import argparse
import io
import lzma
import time
from collections.abc import Mapping, Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit.netlist import GROUND
from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design
from benchkit.stage.draws import draw, nominal, seeds
from benchkit.stage.faults import Fault, faults_of
from benchkit.stage.operate import Solved, solve_units
from benchkit.stage.points import points_of
from benchkit.stage.reach import full_rails
from benchkit.stage.topologies import build
from tests.reference.asking import Answer, ask, ask_one_by_one, our_reading, their_reading
from tests.stage.catalogue import catalogue

Array = NDArray[np.float64]

COMMITTED = Path(__file__).parent / "data" / "agreement.bin"
UNSOLVED = Path(__file__).parent / "data" / "unsolved_by_ngspice.txt"
METERED = Path(__file__).parent / "data" / "read_with_a_meter.txt"
UNITS = 50
SEED = 3
HEALTHY_V, FAULTY_V, FAULTY_A = 0.2e-6, 2e-6, 20e-9
"""What committed results are rounded to."""
RELATIVE, ABSOLUTE_V = 1e-6, 1e-6
FAULTY_RELATIVE, FAULTY_ABSOLUTE_V, FAULTY_ABSOLUTE_A = 1e-4, 20e-6, 2e-6
LIMIT_A = 0.05
RAILS_SHARE = 0.4
UNDECIDED = (("single resistor servo none 1 one supply", "output.upper.1: wrong polarity"),)
"""Units whose readings with a meter are not compared, because neither program can be right: nothing but leakage holds
this one's output, and for each 5 uV there the servo sends e times the current through the spreader. 0.2 mV of spread
are 5 nV at 8 V."""
SCATTERS = " (ngspice's own answers scatter)"
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


def points(design: Design, ours: Solved, answer: Answer) -> dict[str, Array]:
    """Readings at the powered test points, from ngspice's voltages."""
    stage = build(design)
    volts = answer.volts | {GROUND: np.zeros(ours.units)}
    found = {
        name: volts[red] - volts[black]
        for name, (red, black) in stage.between.items()
        if name in ours.points and name not in stage.currents
    }
    return found | rail_currents(design, answer)


def rail_currents(design: Design, answer: Answer) -> dict[str, Array]:
    """Rail currents (A), by ngspice's ammeters; none when there are none."""
    currents = build(design).currents
    return {point: answer.amps[element] for point, element in currents.items() if element in answer.amps}


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
        (int(unit), point): their_reading(design, broken, int(unit), point, FAULTY_ABSOLUTE_V)
        for point, share in shares.items()
        if not point.endswith(".current")
        for unit in np.flatnonzero((share > 0.5) & broken.converged)
    }
    return Reference(
        fingerprints=(fingerprint(ours), fingerprint(broken)),
        healthy_v=np.array(list(well.volts.values())),
        faulty_v=np.array(list(ill.volts.values())),
        faulty_a=np.array(list(rail_currents(design, ill).values())),
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
    """What is read with a meter: "design: part: fault: point", and `SCATTERS` behind what ngspice has no answer to."""
    return [
        f"{name}: {faults_of(catalogue()[name])[unit]}: {point}{SCATTERS if np.isnan(volts) else ''}"
        for name, one in references.items()
        for (unit, point), volts in one.metered.items()
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
        if np.isnan(volts) or (design.name, str(faults[unit])) in UNDECIDED:
            shares[point][unit] = 0.0
            continue
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
    parser.add_argument("--only", action="append", help="a design's name (again and again); the others are kept")
    given = parser.parse_args()
    names = [name for name in catalogue() if not given.only or name in given.only]
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
        scatter = sum(line.endswith(SCATTERS) for line in read)
        head = f"# Read with a voltmeter's 10 Mohm across the point: {len(read)} of {count} readings; {scatter} scatter"
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
