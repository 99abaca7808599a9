"""First power-on of hundreds of simulated units, by the procedure and carelessly.

Run as ``python -m tests.benchmarks.first_power_study [--units 300] [--seed 1] [--sample 0] [--harm FILE]``.

Units are drawn in turn over the demonstration designs and those of eight of the catalogue that the procedure can pass
at all (the others are named, with the reason).  One in three has a harmful fault of
its design's table (`tests.benchmarks.first_power_harm` says by simulation which these are; each as likely as the next),
one in ten gets its trimmer turned to the wrong end by the stand-in.  Each goes through the shipped procedure in memory
(`tests.benchmarks.first_power_bench` says what that shares and leaves out), and the very same unit is then switched
straight on, at full rails and 5 A, its trimmer at the least-bias end or at the wrong one.

Printed: parts that the procedure burnt, beyond the planted fault's own part; harmful faults that reached full rails
without a failed reading, a trip or a stop before; healthy units that were stopped or failed; the same units carelessly.
``--sample 10`` sends so many of them through ``benchkit rehearse --stand-in`` too, over sockets, with keeper and bench
as processes, and compares the outcome.
"""

from __future__ import annotations

import argparse
import functools
import json
import math
import random
import subprocess
import sys
import tempfile
import time
from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Final

from benchkit import quantities
from benchkit.events import Judged
from benchkit.stage.design import Design
from benchkit.stage.faults import Fault, faults_of, parse_fault
from tests.benchmarks.first_power_bench import Outcome, share_the_model, walk_once
from tests.benchmarks.first_power_harm import Careless, designs, harm_of, shipped_designs, straight_on, why_not

FAULTY_SHARE = 1.0 / 3.0
WRONG_END_SHARE = 0.1
LIMITS_UNITS: Final = None
"""Units behind the limits: the model's own choice."""


@dataclass(frozen=True, kw_only=True)
class Drawn:
    """One unit of the campaign."""

    number: int
    design: str
    seed: int
    plant: str
    wrong_end: bool


class Harm:
    """Which faults are harmful: found by simulation when one is drawn, and remembered.

    Parameters
    ----------
    path : Path or None
        Where they are kept between runs.
    """

    def __init__(self, path: Path | None) -> None:
        self._path = path
        self.known: dict[str, dict[str, bool]] = {}
        if path is not None and path.exists():
            self.known = json.loads(path.read_text(encoding="utf-8"))

    def harmful(self, name: str, design: Design, fault: Fault) -> bool:
        """Whether a fault of a design burns or overloads something."""
        found = self.known.setdefault(name, {})
        if str(fault) not in found:
            found[str(fault)] = harm_of(design, fault) is not None
            if self._path is not None:
                self._path.write_text(json.dumps(self.known, indent=1), encoding="utf-8")
        return found[str(fault)]

    def draw(self, name: str, design: Design, rng: random.Random) -> str:
        """Draw a harmful fault, each as likely as the next."""
        faults = list(faults_of(design))
        rng.shuffle(faults)
        return next((str(fault) for fault in faults if self.harmful(name, design, fault)), "")


def drawn(count: int, seed: int, harm: Harm, known: dict[str, Design], mine: list[str]) -> Iterator[Drawn]:
    """Draw the campaign's units of some of its designs."""
    names = list(known)
    for number in range(count):
        if names[number % len(names)] not in mine:
            continue
        rng = random.Random(f"{seed} {number}")
        name = names[number % len(names)]
        faulty, wrong_end, unit_seed = rng.random() < FAULTY_SHARE, rng.random() < WRONG_END_SHARE, rng.randrange(2**31)
        plant = harm.draw(name, known[name], rng) if faulty else ""
        yield Drawn(number=number, design=name, seed=unit_seed, plant=plant, wrong_end=wrong_end)


@dataclass
class Figures:
    """What is counted."""

    units: int = 0
    healthy: int = 0
    faulty: int = 0
    wrong_end: int = 0
    burnt_parts: int = 0
    burnt_own: int = 0
    overloaded: int = 0
    unnoticed: int = 0
    at_full: int = 0
    passed_faulty: int = 0
    healthy_stopped: int = 0
    healthy_undecided: int = 0
    careless_units: int = 0
    careless_faulty: int = 0
    careless_healthy: int = 0
    careless_parts: int = 0

    def count(self, one: Drawn, outcome: Outcome, careless: Careless, design: Design) -> list[str]:
        """Count one unit; returns what has to be looked at."""
        own = parse_fault(one.plant, design) if one.plant else Fault("", "")
        words = []
        self.units += 1
        self.wrong_end += one.wrong_end
        burnt = [part for part in outcome.truth["broken"] if part != own.part]
        self.burnt_parts += len(burnt)
        self.burnt_own += len(outcome.truth["broken"]) - len(burnt)
        if burnt:
            words.append(f"burnt {outcome.truth['burnt']}")
        over = [part for part in outcome.truth["overloaded"] if part not in (*burnt, own.part)]
        self.overloaded += bool(over)
        if over:
            words.append(f"overloaded {over}")
        lost = [part for part in careless.burnt if part != own.part]
        self.careless_units += bool(lost)
        self.careless_parts += len(lost)
        if one.plant:
            self.faulty += 1
            self.careless_faulty += bool(lost)
            self.at_full += outcome.full
            if outcome.full and not outcome.noticed:
                self.unnoticed += 1
                words.append("reached full rails unnoticed")
            if outcome.closed.verdict == "pass":
                self.passed_faulty += 1
                words.append("passed")
        else:
            self.healthy += 1
            self.careless_healthy += bool(lost)
            if outcome.closed.stopped or outcome.closed.verdict == "fail":
                self.healthy_stopped += 1
                failed = [
                    event.item for event in outcome.events if isinstance(event, Judged) and event.verdict == "fail"
                ]
                words.append(f"a healthy unit was stopped: {outcome.closed.stopped or failed}")
            self.healthy_undecided += outcome.closed.verdict == "undecided"
        return words

    def __str__(self) -> str:
        share = 100.0 * self.healthy_stopped / max(self.healthy, 1)
        return "\n".join(
            (
                f"{self.units} units: {self.healthy} healthy, {self.faulty} with a harmful fault, {self.wrong_end} "
                "with the trimmer turned to the wrong end at first",
                f"by the procedure: {self.burnt_parts} parts burnt beyond the planted fault's own "
                f"({self.burnt_own} of those), {self.overloaded} units with a part above its rating for a time",
                f"    harmful faults at full rails: {self.at_full}, unnoticed: {self.unnoticed}; passed in the end: "
                f"{self.passed_faulty}",
                f"    healthy units stopped or failed: {self.healthy_stopped} ({share:.1f} %), undecided: "
                f"{self.healthy_undecided}",
                f"straight on at full rails and 5 A: {self.careless_parts} parts burnt beyond the planted fault's own, "
                f"in {self.careless_units} units ({self.careless_faulty} faulty, {self.careless_healthy} healthy)",
            )
        )


def careless_of(one: Drawn, design: Design) -> Careless:
    """Switch the same unit straight on."""
    return straight_on(design, one.seed, one.plant, 1.0 if one.wrong_end else 0.0)


def over_sockets(one: Drawn, design: Design, folder: Path) -> str:
    """Send a unit through the command, over sockets; returns its verdict and where it was stopped.

    There the seed of the unit is the seed of the limits too.
    """
    file = folder / f"{one.number}.toml"
    file.write_text(design.text, encoding="utf-8")
    command = [sys.executable, "-m", "benchkit", "rehearse", "--plain", "--stand-in", "--design", str(file)]
    command += ["--seed", str(one.seed), "--records", str(folder / "records")]
    if one.plant:
        command += ["--plant", one.plant]
    if one.wrong_end:
        command.append("--wrong-end")
    run = subprocess.run(command, capture_output=True, text=True, check=False)
    closed = [line for line in run.stdout.splitlines() if line.startswith("The walk is closed")]
    return closed[0].removeprefix("The walk is closed: ") if closed else run.stderr


def in_words(outcome: Outcome) -> str:
    """The same sentence for a walk in memory."""
    closed = outcome.closed
    stopped = f" It was stopped: {closed.stopped.rstrip('.')}." if closed.stopped else ""
    return f"{closed.verdict.upper()}.{stopped}"


def main() -> None:
    """Run the campaign."""
    parser = argparse.ArgumentParser(description=__doc__.split("\n")[0])
    parser.add_argument("--units", type=int, default=300)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--designs", choices=["all", "shipped"], default="all", help="shipped: the demonstrations only")
    parser.add_argument("--sample", type=int, default=0, help="so many go over sockets too")
    parser.add_argument("--harm", type=Path, help="where the table of harmful faults is kept between runs")
    parser.add_argument("--part", default="1/1", help="such as 2/3: every third design from the second on")
    parser.add_argument("--minutes", type=float, default=math.inf, help="no new unit after so long")
    parser.add_argument("--quick", action="store_true", help="no narrowed limits and no suspects")
    arguments = parser.parse_args()
    known = {}
    chosen = shipped_designs() if arguments.designs == "shipped" else designs()
    for name, design in chosen.items():
        reason = why_not(design)
        if reason:
            print(f"left out: {name}: {reason}, which no unit of it can help")
        else:
            known[name] = design
    share_the_model(narrowing=not arguments.quick, suspects=not arguments.quick)
    # The same numbers are put into words again and again for pictures that nobody looks at.
    quantities.show = functools.lru_cache(maxsize=1 << 16)(quantities.show)
    harm = Harm(arguments.harm)
    which, parts = (int(word) for word in arguments.part.split("/"))
    mine = list(known)[which - 1 :: parts]
    figures, where = Figures(), Counter[str]()
    units: list[Drawn] = []
    words_of: dict[int, str] = {}
    started_s, cpu_s = time.monotonic(), time.process_time()
    for one in drawn(arguments.units, arguments.seed, harm, known, mine):
        if time.monotonic() - started_s > 60.0 * arguments.minutes:
            break
        units.append(one)
        design = known[one.design]
        outcome = walk_once(design, one.seed, one.plant, wrong_end=one.wrong_end, units=LIMITS_UNITS)
        careless = careless_of(one, design)
        words_of[one.number] = in_words(outcome)
        if one.plant:
            where[outcome.noticed.split(".")[0] if outcome.noticed else "nowhere"] += 1
        words = figures.count(one, outcome, careless, design)
        shown = "; ".join(words) or "-"
        print(
            f"{one.number:3d} {one.design[:28]:28s} {one.seed:10d} {'wrong end ' if one.wrong_end else ''}"
            f"{one.plant or 'healthy'}: {outcome.closed.verdict}, {outcome.noticed or 'nothing failed'}; "
            f"carelessly {', '.join(careless.burnt) or 'nothing'}; {shown}",
            flush=True,
        )
    tried, bad = sum(map(len, harm.known.values())), sum(sum(found.values()) for found in harm.known.values())
    print(f"faults that were drawn and tried: {tried}, harmful: {bad}")
    print(figures)
    print("where faults were noticed (section): " + ", ".join(f"{name} {count}" for name, count in where.most_common()))
    print(f"walks: {time.monotonic() - started_s:.0f} s, {time.process_time() - cpu_s:.0f} s of CPU")
    compare(units[: arguments.sample], known, words_of)


def compare(units: list[Drawn], known: dict[str, Design], words_of: dict[int, str]) -> None:
    """Send some units over sockets too, and compare."""
    same = 0
    with tempfile.TemporaryDirectory() as folder:
        for one in units:
            real = over_sockets(one, known[one.design], Path(folder))
            same += real == words_of[one.number]
            if real != words_of[one.number]:
                print(f"{one.number:3d} over sockets: {real} | in memory: {words_of[one.number]}", flush=True)
    if units:
        print(f"over sockets too: {same} of {len(units)} with the same verdict and the same stop")


if __name__ == "__main__":
    main()
