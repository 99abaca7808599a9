"""A thousand simulated units through the three procedures: what is burnt, what passes wrongly, what fails wrongly.

Run as ``python -m tests.benchmarks.thousand [--units 1000] [--seed 1] [--part 1/1] [--sockets 0] [--json FILE]``.

Units are drawn in turn over the procedures and over all designs.  Some designs no flawless unit can pass with, in one
procedure or in all: an open wiper that raises the bias, say, which the first power-on refuses.  Their units are walked
too, and counted apart (`tests.benchmarks.first_power_harm.why_not`).  One in `FAULTY_ONE_IN` has a fault of its
design's table, each row as likely as the next.  All go through the walk in memory and in lock step
(`tests.benchmarks.first_power_bench` says what that shares and leaves out).

One unit in `OPTIONAL_ONE_IN` is driven into a dummy load and gets the power soak, where its procedure offers that.

How a unit gets to the bench
    First power and production trim: the trimmer anywhere, one in ten turned to the wrong end at first.  Re-bias: the
    trimmer as a shop finds it (`benchkit.rehearsal.as_found`); a faulty unit whose walk was stopped gets new parts, and
    a second walk that is told so.  What the second walk says counts as the verdict of the repaired unit.

What is true at the end
    After the last walk the unit that it passed is put back on full rails, with a limit of 5 A, and left alone for one
    simulated hour; its true drop at the first emitter resistor (true current, where the target is one) is then compared
    with the target and its tolerance.  That is the simulated unit itself, trimmer and all, and no prediction.

What is counted
    *Burnt*: parts that gave way in a walk, beyond the planted fault's own.  *Wrong pass*: a walk that passed although
    the true value an hour later lies outside the tolerance, or although the unit still has a fault that does harm
    (`first_power_harm`) or took it outside.  *Wrong fail*: a healthy unit that was stopped or failed; undecided ones
    are counted apart, and so are healthy ones whose true offset is above what the procedures allow before a load.
    *Suspects*: where the planted fault stands in the last answer before the walk closed; those that the readings can't
    tell apart from the first (``alike``) are counted apart.
    *Minutes*: simulated, hands included, of the bench's own clock; and how long soaks took until they had settled,
    against waiting five of the design's slowest thermal time constants each time.

``--sockets 20`` sends that many units through ``benchkit rehearse --stand-in`` too, over sockets, and compares the
outcome with the same walk in memory, made with the same seed for the limits.
"""

from __future__ import annotations

import argparse
import functools
import json
import random
import subprocess
import sys
import tempfile
import time
from collections import Counter
from collections.abc import Callable, Iterator
from dataclasses import asdict, dataclass, field
from pathlib import Path
from typing import Any, Final

from benchkit import quantities
from benchkit.events import PartsReplaced, ReadingTaken, Suspected, TrimEnded, Waited
from benchkit.rehearsal.bench import RehearsalBench
from benchkit.stage.design import Design, target_drop_v
from benchkit.stage.faults import faults_of, parse_fault
from benchkit.stage.operate import Solved
from benchkit.stage.settling_times import lags_of
from tests.benchmarks.first_power_bench import FIRST_POWER, Outcome, share_the_model, walk_once
from tests.benchmarks.first_power_harm import designs, why_not
from tests.benchmarks.first_power_study import Harm, in_words

PROCEDURES: Final = (FIRST_POWER, "production-trim", "re-bias")
FAULTY_ONE_IN: Final = 3
WRONG_END_ONE_IN: Final = 10
OPTIONAL_ONE_IN: Final = 10
HOUR_S: Final = 3600.0
SOME_S: Final = 10.0
MOST_OFFSET_V: Final = 0.05
"""What the three procedures allow at the output before a load (common practice)."""
LIMIT_A: Final = 5.0
TIME_CONSTANTS: Final = 5.0
"""What textbooks wait."""


@dataclass(frozen=True, kw_only=True)
class Drawn:
    """One unit of the thousand."""

    number: int
    procedure: str
    design: str
    seed: int
    plant: str
    wrong_end: bool
    optional: bool


@dataclass(kw_only=True)
class Told:
    """What became of one unit.

    Parameters
    ----------
    drawn : Drawn
    refused : str
        Why no unit of its design can pass this procedure ("": one can).
    offset_too_high : bool
        A healthy unit that was not passed, and whose true offset is above what the procedure allows before a load.
    verdict, stopped, noticed : str
        Of the last walk; where the first one noticed something.
    burnt : list of str
        Parts that gave way, beyond the planted fault's own.
    off_share : float or None
        True value an hour later against the target, less 1; None where nothing was passed.
    inside : bool or None
        Whether that is within the tolerance.
    place : int or None
        Of the planted fault among the suspects, from 1; 0 when it is not named there; None when nobody asked.
    alike : bool
        It is alike to the first.
    minutes : float
        Simulated, of all its walks.
    soak_minutes, textbook_minutes : float
    soaks, settled : int
        How many there were, and how many ended settled.
    wall_s : float
    repaired : bool
        The unit that was passed or not had got new parts.
    harmful : bool
        The planted fault does harm, by `first_power_harm`.
    by_itself : int
        Readings that were taken without a key.
    ended : str
        Why the last trim that was given up was.
    """

    drawn: Drawn
    refused: str = ""
    offset_too_high: bool = False
    verdict: str = ""
    stopped: str = ""
    noticed: str = ""
    burnt: list[str] = field(default_factory=list)
    off_share: float | None = None
    inside: bool | None = None
    place: int | None = None
    alike: bool = False
    minutes: float = 0.0
    soak_minutes: float = 0.0
    textbook_minutes: float = 0.0
    soaks: int = 0
    settled: int = 0
    wall_s: float = 0.0
    repaired: bool = False
    harmful: bool = False
    by_itself: int = 0
    ended: str = ""

    @property
    def passed(self) -> bool:
        """Whether the last walk let the unit go."""
        return self.verdict == "pass" and not self.stopped

    @property
    def faulty(self) -> bool:
        """Whether the unit that the last walk judged had its fault still."""
        return bool(self.drawn.plant) and not self.repaired

    @property
    def wrong_pass(self) -> bool:
        """Passed, and should not have been."""
        return self.passed and (self.inside is False or (self.faulty and self.harmful))

    @property
    def wrong_fail(self) -> bool:
        """A healthy unit that was stopped or failed, and whose design can pass."""
        excused = self.refused or self.offset_too_high
        return not self.drawn.plant and not excused and (bool(self.stopped) or self.verdict == "fail")


def drawn(count: int, seed: int, known: dict[str, Design], which: int = 1, parts: int = 1) -> Iterator[Drawn]:
    """Draw the units, or those of one part: a part holds whole designs, which share their limits."""
    names = list(known)
    for number in range(count):
        name = names[(number // len(PROCEDURES)) % len(names)]
        if names.index(name) % parts != which - 1:
            continue
        rng = random.Random(f"thousand {seed} {number}")
        faulty, wrong_end = rng.randrange(FAULTY_ONE_IN) == 0, rng.randrange(WRONG_END_ONE_IN) == 0
        procedure = PROCEDURES[number % len(PROCEDURES)]
        plant = str(rng.choice(faults_of(known[name]))) if faulty else ""
        yield Drawn(
            number=number, procedure=procedure, design=name, seed=rng.randrange(2**31), plant=plant,
            wrong_end=wrong_end and procedure != "re-bias", optional=rng.randrange(OPTIONAL_ONE_IN) == 0,
        )  # fmt: skip


def walk_through(one: Drawn, design: Design, harm: Harm | None = None, **more: Any) -> Told:
    """Send a unit through its procedure, repair it where that is what a shop does, and look again an hour later."""
    began_s = time.monotonic()
    told = Told(drawn=one, refused=why_not(design, one.procedure))
    outcome = walk_once(
        design,
        one.seed,
        one.plant,
        wrong_end=one.wrong_end,
        name=one.procedure,
        hand={"optional": one.optional},
        **more,
    )
    bench = outcome.bench
    assert bench is not None
    _count(told, outcome, design)
    told.noticed = outcome.noticed
    if one.procedure == "re-bias" and outcome.closed.stopped and bench.unit.faulty:
        faulty = ", ".join(bench.unit.faulty)
        parts = bench.side({"do": "repair"})
        kind = "semiconductors" if parts["semiconductors"] else "other parts"
        outcome = walk_once(
            design, one.seed, name=one.procedure, bench=bench, hand={"replaced_before": (kind, faulty)}, **more
        )
        _count(told, outcome, design)
    told.repaired = bool(bench.unit.repaired) and not bench.unit.faulty
    told.verdict, told.stopped = outcome.closed.verdict, outcome.closed.stopped
    if told.passed:
        told.off_share = hour_later(bench, design)
        told.inside = abs(told.off_share) <= design.target.tolerance
    elif not one.plant and told.verdict == "fail":
        told.offset_too_high = abs(offset_later_v(bench, design)) > MOST_OFFSET_V
    if one.plant and harm is not None:
        told.harmful = harm.harmful(one.design, design, parse_fault(one.plant, design))
    told.wall_s = time.monotonic() - began_s
    return told


def _count(told: Told, outcome: Outcome, design: Design) -> None:
    """Add one walk to what is known of a unit."""
    one, bench = told.drawn, outcome.bench
    assert bench is not None
    own = parse_fault(one.plant, design).part if one.plant else ""
    told.burnt += [part for part in outcome.truth["broken"] if part != own and part not in told.burnt]
    told.minutes += (outcome.truth["sim_s"] - outcome.began_s) / 60.0
    slowest_s = lags_of(design)[0]
    has_its_fault = bool(one.plant)
    for event in outcome.events:
        if isinstance(event, Waited) and event.point:
            told.soaks += 1
            told.settled += event.settled is True
            told.soak_minutes += event.seconds / 60.0
            told.textbook_minutes += TIME_CONSTANTS * slowest_s / 60.0
        elif isinstance(event, ReadingTaken):
            told.by_itself += event.how.startswith("by itself")
        elif isinstance(event, TrimEnded):
            told.ended = event.problem
        elif isinstance(event, PartsReplaced) and event.parts:
            has_its_fault = False
        elif isinstance(event, Suspected) and has_its_fault and not event.problem:
            names = [suspect.fault for suspect in event.suspects]
            told.place = names.index(one.plant) + 1 if one.plant in names else 0
            told.alike = bool(event.suspects) and one.plant in (names[0], *event.suspects[0].alike)


def hour_later(bench: RehearsalBench, design: Design) -> float:
    """Return the unit's true value after an hour on full rails, against its target, less 1."""
    solved, ohm = _after(bench, design, HOUR_S), design.output.emitter_resistor.value
    drop_v = float(solved.points["emitter.upper.1"][0])
    if design.target.quiescent_current_a is not None:
        drop_v *= ohm / float(bench.unit.parameters["emitter.upper.1"].item())
    return drop_v / target_drop_v(design) - 1.0


def offset_later_v(bench: RehearsalBench, design: Design) -> float:
    """Return the unit's true offset after some seconds on full rails (V): its output against its rest."""
    rest, rails = design.output.rest, design.rails
    rest_v = rest.volts or 0.0
    if rest.share is not None:
        rest_v = rails.negative_v + rest.share * (rails.positive_v - rails.negative_v)
    return float(_after(bench, design, SOME_S).points["output"][0]) - rest_v


def _after(bench: RehearsalBench, design: Design, seconds: float) -> Solved:
    """Put the unit back on full rails, as it was left, and look at it after a time."""
    rails = design.rails
    bench.table.fold(None)
    bench.table.drive(0.0)
    bench.table.short(False)
    bench.table.connect(True)
    outputs = "(@1)" if design.single_supply else "(@1,2)"
    volts = f":VOLT {rails.positive_v:g},(@1)" + ("" if design.single_supply else f";:VOLT {-rails.negative_v:g},(@2)")
    bench.supply.handle("*RST")
    bench.supply.handle(f"CURR {LIMIT_A:g},{outputs};{volts};:OUTP ON,{outputs}")
    assert bench.supply.handle("SYST:ERR?") == '0,"No error"'
    bench.table.advance(seconds)
    return bench.table.now()


def table(found: list[Told]) -> str:
    """The headline."""
    lines = [
        f"{'':24s}{'all':>9s}" + "".join(f"{name:>17s}" for name in PROCEDURES),
    ]
    columns = [found, *([told for told in found if told.drawn.procedure == name] for name in PROCEDURES)]

    def row(name: str, cell: Any) -> None:
        cells = [str(cell(column)) for column in columns]
        lines.append(f"{name:24s}{cells[0]:>9s}" + "".join(f"{one:>17s}" for one in cells[1:]))

    def healthy(column: list[Told]) -> list[Told]:
        return [told for told in column if not told.drawn.plant and not told.refused]

    def asked(column: list[Told]) -> list[Told]:
        return [told for told in column if told.place is not None]

    def mean(values: list[float], digits: int = 1) -> str:
        return f"{sum(values) / len(values):.{digits}f}" if values else "-"

    def count(name: str, chosen: Callable[[Told], object]) -> None:
        row(name, lambda column: sum(bool(chosen(told)) for told in column))

    row("units", len)
    count("  with a fault", lambda told: told.drawn.plant)
    count("  repaired", lambda told: told.repaired)
    row("parts burnt", lambda column: sum(len(told.burnt) for told in column))
    count("passed", lambda told: told.passed)
    count("wrong passes", lambda told: told.wrong_pass)
    count("  outside an hour later", lambda told: told.passed and told.inside is False)
    count("  harmful fault passed", lambda told: told.passed and told.faulty and told.harmful)
    count("harmless fault passed", lambda told: told.passed and told.faulty and not told.wrong_pass)
    row("wrong fails", lambda column: f"{sum(told.wrong_fail for told in column)} of {len(healthy(column))}")
    count(
        "  healthy, undecided",
        lambda told: not told.drawn.plant and not told.refused and told.verdict == "undecided" and not told.stopped,
    )
    row(
        "of refused designs",
        lambda column: (
            f"{sum(not told.passed for told in column if told.refused)} of {sum(bool(told.refused) for told in column)}"
        ),
    )
    count("healthy, offset too high", lambda told: told.offset_too_high)
    row("suspects asked, faulty", lambda column: len(asked(column)))
    count("  planted fault first", lambda told: told.place == 1)
    count("  ... or alike to first", lambda told: told.alike)
    count("  in the first three", lambda told: told.place in (1, 2, 3))
    row("minutes, passed units", lambda column: mean([told.minutes for told in column if told.passed]))
    row("  soaks", lambda column: mean([told.soak_minutes for told in column if told.passed]))
    row("  five time constants", lambda column: mean([told.textbook_minutes for told in column if told.passed]))
    row("wall seconds a unit", lambda column: mean([told.wall_s for told in column]))
    return "\n".join(lines)


def over_sockets(one: Drawn, design: Design, folder: Path) -> str:
    """Send a unit through the command, over sockets; returns its verdict and where it was stopped."""
    file = folder / f"{one.number}.toml"
    file.write_text(design.text, encoding="utf-8")
    command = [sys.executable, "-m", "benchkit", "rehearse", "--plain", "--stand-in", "--design", str(file)]
    command += ["--procedure", one.procedure, "--seed", str(one.seed), "--records", str(folder / "records")]
    command += ["--plant", one.plant] * bool(one.plant) + ["--wrong-end"] * one.wrong_end
    run = subprocess.run(command, capture_output=True, text=True, check=False)
    closed = [line for line in run.stdout.splitlines() if line.startswith("The walk is closed")]
    return closed[0].removeprefix("The walk is closed: ") if closed else run.stdout[-300:] + run.stderr[-300:]


def compare(units: list[Drawn], known: dict[str, Design]) -> None:
    """Send some units over sockets too, and compare with the same walk in memory."""
    same = 0
    with tempfile.TemporaryDirectory() as folder:
        for one in units:
            design = known[one.design]
            outcome = walk_once(
                design, one.seed, one.plant, wrong_end=one.wrong_end, name=one.procedure, limits_seed=one.seed
            )
            memory, real = in_words(outcome), over_sockets(one, design, Path(folder))
            same += real == memory
            if real != memory:
                print(f"{one.number:4d} over sockets: {real} | in memory: {memory}", flush=True)
    print(f"over sockets too: {same} of {len(units)} with the same verdict and the same stop")


def line(told: Told) -> str:
    """One unit in one line."""
    one = told.drawn
    marks = [name for name, so in (("WRONG PASS", told.wrong_pass), ("WRONG FAIL", told.wrong_fail)) if so]
    marks += [f"burnt {', '.join(told.burnt)}"] if told.burnt else []
    marks += ["repaired"] if told.repaired else []
    marks += [f"refused design: {told.refused}"] if told.refused else []
    later = "" if told.off_share is None else f", {told.off_share:+.1%} an hour later"
    place = "" if told.place is None else f", suspect {told.place or 'not named'}"
    stopped = f" (stopped: {told.stopped[:60]})" if told.stopped else ""
    return "; ".join(
        (
            f"{one.number:4d} {one.procedure:15s} {one.design[:30]:30s} {one.plant or 'healthy'}"
            f"{', wrong end' * one.wrong_end}: {told.verdict}{stopped}",
            f"{told.noticed or 'nothing failed'}{later}{place}",
            f"{told.minutes:.1f} min, {told.soaks} soaks {told.soak_minutes:.1f} min",
            f"{told.wall_s:.1f} s",
            *marks,
        )
    )


def main() -> None:
    """Run the campaign, or a part of it."""
    parser = argparse.ArgumentParser(description=__doc__.split("\n")[0])
    parser.add_argument("--units", type=int, default=1000)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--part", default="1/1", help="such as 2/3: every third design from the second on")
    parser.add_argument("--sockets", type=int, default=0, help="so many go over sockets too")
    parser.add_argument("--harm", type=Path, help="where the table of harmful faults is kept between runs")
    parser.add_argument(
        "--json", type=Path, help="what became of each unit, one a line: units that stand there aren't walked again"
    )
    parser.add_argument("--join", type=Path, nargs="+", help="print the table of such files, and do nothing else")
    parser.add_argument("--only", choices=PROCEDURES, help="units of one procedure only")
    parser.add_argument("--healthy", action="store_true", help="no faults")
    parser.add_argument("--minutes", type=float, default=float("inf"), help="no new unit after so long")
    parser.add_argument("--quick", action="store_true", help="no narrowed limits and no suspects")
    arguments = parser.parse_args()
    if arguments.join:
        print(table([read_row(row) for path in arguments.join for row in path.read_text("utf-8").splitlines()]))
        return
    known = designs()
    for name, design in known.items():
        for procedure in PROCEDURES:
            reason = why_not(design, procedure)
            if reason:
                print(f"refused by {procedure}: {name}: {reason}")
    share_the_model(narrowing=not arguments.quick, suspects=not arguments.quick)
    # The same numbers are put into words again and again for pictures that nobody looks at.
    quantities.show = functools.lru_cache(maxsize=1 << 16)(quantities.show)
    harm = Harm(arguments.harm)
    which, parts = (int(word) for word in arguments.part.split("/"))
    found: list[Told] = []
    if arguments.json and arguments.json.exists():
        found = [read_row(row) for row in arguments.json.read_text("utf-8").splitlines()]
    there = {told.drawn.number for told in found}
    began_s, cpu_s = time.monotonic(), time.process_time()
    for one in drawn(arguments.units, arguments.seed, known, which, parts):
        if time.monotonic() - began_s > 60.0 * arguments.minutes:
            break
        if (
            one.number in there
            or (arguments.only and one.procedure != arguments.only)
            or (arguments.healthy and one.plant)
        ):
            continue
        told = walk_through(one, known[one.design], harm)
        found.append(told)
        print(line(told), flush=True)
        if arguments.json:
            with arguments.json.open("a", encoding="utf-8") as file:
                file.write(json.dumps(asdict(told)) + "\n")
    print(table(found))
    where = Counter(told.noticed.split(".")[0] or "nowhere" for told in found if told.drawn.plant)
    print("where faults were noticed (section): " + ", ".join(f"{name} {count}" for name, count in where.most_common()))
    print(f"walks: {time.monotonic() - began_s:.0f} s, {time.process_time() - cpu_s:.0f} s of CPU")
    if arguments.sockets:
        compare([told.drawn for told in found[: arguments.sockets]], known)


def read_row(row: str) -> Told:
    """Read one line of a file of --json."""
    kept = json.loads(row)
    return Told(**{**kept, "drawn": Drawn(**kept["drawn"])})


if __name__ == "__main__":
    main()
