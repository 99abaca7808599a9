"""Fault hypotheses solved a second, by our solver and by ngspice doing the same work, in one run.

Run as ``python -m tests.benchmarks.hypotheses_speed [UNITS]``. A hypothesis is a unit with drawn parts and one fault of
the table, on a current-limited supply at low rails, the trimmer at its least-bias end; the work is its operating point.
The units are the same for both. ngspice is used at its best: many copies in one deck, started at the nominal unit with
the same fault, and the best of several deck sizes; it needs smaller decks to get over copies that it finds hard. Times
are processor time, ours of all threads, ngspice's of its processes; what starts it is not counted. Also printed: rates
for healthy units, and what share each of them left unsolved.
"""

from __future__ import annotations

import sys
import time
from dataclasses import dataclass

import numpy as np

from benchkit.shipped import find_design
from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design, load_design
from benchkit.stage.draws import draw, seeds
from benchkit.stage.faults import HEALTHY, Fault, faults_of
from benchkit.stage.operate import solve_units
from tests.benchmarks.suspects_units import low_rails
from tests.reference import ngspice_units
from tests.stage.catalogue import few

DECKS = (6, 12, 24)
UNITS = 20
OURS_TIMES = 20
"""So many times as many units are solved by us: a batch is what it is made for."""


@dataclass(frozen=True)
class Rate:
    """Hypotheses, processor seconds, and how many have no solution."""

    hypotheses: int
    seconds: float
    unsolved: int

    def __str__(self) -> str:
        rate = self.hypotheses / self.seconds
        return f"{rate:,.0f}/s ({self.hypotheses} in {self.seconds:.1f} s, {self.unsolved} without a solution)"

    @property
    def per_second(self) -> float:
        """Solved a second."""
        return (self.hypotheses - self.unsolved) / self.seconds


def ours(design: Design, condition: Condition, faults: list[Fault], seed: int) -> Rate:
    """Our solver's rate."""
    parameters = draw(design, len(faults), seeds("unit", seed))
    position = None if design.spreader.trimmer is None else 0.0
    began = time.process_time()
    solved = solve_units(design, parameters, condition, faults, position=position, loading="none")
    seconds = time.process_time() - began
    return Rate(len(faults), seconds, int(np.count_nonzero(~solved.converged)))


def theirs(design: Design, condition: Condition, faults: list[Fault], seed: int) -> Rate:
    """Rate of ngspice, the best of several deck sizes."""
    parameters = draw(design, len(faults), seeds("unit", seed))
    travel = None if design.spreader.trimmer is None else np.zeros(len(faults))
    rates = []
    before = ngspice_units.COPIES
    try:
        for copies in DECKS:
            ngspice_units.COPIES = copies
            found = ngspice_units.read_powered(design, parameters, condition, faults, travel, meters=False)
            rates.append(Rate(len(faults), found.spent.seconds, int(np.count_nonzero(~found.solved))))
    finally:
        ngspice_units.COPIES = before
    return max(rates, key=lambda rate: rate.per_second)


def main() -> None:
    """Print the rates of a double follower, a triple one and a single one."""
    units = int(sys.argv[1]) if len(sys.argv) > 1 else UNITS
    designs = [load_design(find_design("breadboard")), load_design(find_design("tern-40"))]
    designs.append(next(design for name, design in few().items() if name.startswith("triple")))
    for design in designs:
        condition = low_rails(design)
        table = faults_of(design)
        for words, faults in (("every fault", list(table) * max(units // 10, 1)), ("healthy", [HEALTHY] * 10 * units)):
            a = ours(design, condition, faults * OURS_TIMES, seed=1)
            b = theirs(design, condition, faults, seed=1)
            ratio = a.per_second / b.per_second
            print(f"{design.name}, {words}: ours {a}; ngspice {b}; {ratio:.0f} times", flush=True)


if __name__ == "__main__":
    main()
