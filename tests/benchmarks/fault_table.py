"""Solve units with each fault of the table, on a current-limited supply; print who has no solution.

Run as ``python -m tests.benchmarks.fault_table [UNITS]``: the demonstration designs and eight of the catalogue that
hold every topology, 200 random units of every fault row, one batch a design. None may be left unsolved.
"""

from __future__ import annotations

import sys
import time

import numpy as np

from benchkit.shipped import find_design
from benchkit.stage.conditions import Condition
from benchkit.stage.design import load_design
from benchkit.stage.draws import draw, seeds
from benchkit.stage.faults import faults_of
from benchkit.stage.operate import solve_units
from tests.stage.catalogue import few


def main() -> None:
    """Solve the table for every design."""
    units = int(sys.argv[1]) if len(sys.argv) > 1 else 200
    left = 0
    for design in (*(load_design(find_design(name)) for name in ("tern-40", "breadboard")), *few().values()):
        drawn = draw(design, units, seeds("unit", 1))
        rails, faults = design.rails, faults_of(design)
        condition = Condition(
            positive_v=0.4 * rails.positive_v, negative_v=0.4 * rails.negative_v, limit_a=0.05, trimmer="least"
        )
        many = {key: value if value.ndim == 0 else np.tile(value, len(faults)) for key, value in drawn.items()}
        whose = [fault for fault in faults for _ in range(units)]
        began = time.perf_counter()
        solved = solve_units(design, many, condition, whose, loading="none")
        took_s = time.perf_counter() - began
        unsolved = [str(whose[k]) for k in np.flatnonzero(~solved.converged)]
        left += len(unsolved)
        rate = len(whose) / took_s
        print(f"{design.name}: {len(faults)} rows of {units} units in {took_s:.1f} s, {rate:.0f} units/s; ", end="")
        print(f"unsolved: {unsolved or 'none'}", flush=True)
    if left:
        raise SystemExit(f"{left} units have no solution")


if __name__ == "__main__":
    main()
