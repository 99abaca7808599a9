"""Solve 1,000 units healthy and with each fault of the table, on a current-limited supply; print who has no solution.

Run as ``python -m tests.benchmarks.fault_table [UNITS]``.  At most one unit in a thousand may be left unsolved.
"""

from __future__ import annotations

import sys
import time

import numpy as np

from benchkit.shipped import find_design
from benchkit.stage.conditions import Condition
from benchkit.stage.design import load_design
from benchkit.stage.draws import draw, nominal, seeds
from benchkit.stage.faults import Fault, faults_of
from benchkit.stage.operate import solve_units

MOST_UNSOLVED = 1e-3


def main() -> None:
    """Solve the table for both demonstration designs."""
    units = int(sys.argv[1]) if len(sys.argv) > 1 else 1000
    worst = 0.0
    for name in ("tern-40", "breadboard"):
        design = load_design(find_design(name))
        parameters = draw(design, units, seeds("unit", 1))
        rails = design.rails
        condition = Condition(
            positive_v=0.4 * rails.positive_v, negative_v=0.4 * rails.negative_v, limit_a=0.05, trimmer="least"
        )
        began = time.perf_counter()
        faults: list[Fault | None] = [None, *faults_of(design)]
        left = []
        for fault in faults:
            first = solve_units(design, nominal(design), condition, fault, loading="none")
            start = first if bool(first.converged.all()) else None
            solved = solve_units(design, parameters, condition, fault, start=start, loading="none")
            share = float(np.count_nonzero(~solved.converged)) / units
            worst = max(worst, share)
            if share:
                left.append(f"{fault or 'healthy'}: {share:.2%}")
        took_s = time.perf_counter() - began
        rate = len(faults) * units / took_s
        print(f"{name}: {len(faults)} rows of {units} units in {took_s:.1f} s, {rate:.0f} units/s", end="; ")
        print(f"unsolved: {left or 'none'}")
    if worst > MOST_UNSOLVED:
        raise SystemExit(f"{worst:.2%} of a row have no solution; at most {MOST_UNSOLVED:.1%} may")


if __name__ == "__main__":
    main()
