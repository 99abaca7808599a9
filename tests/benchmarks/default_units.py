"""How many units limits need: a study, not a test.

Run with ``python -m tests.benchmarks.default_units [--quick]``. For each demonstration design and condition it makes
limits from ensembles of several sizes and seeds, and counts which share of 64,000 fresh healthy units (of another
stream) lies within each reading's limits. Wanted: 99.4 % to 99.95 % for every reading at the default number of units.
Readings without any spread (a set temperature; the very drop that is trimmed) are left out.
"""

from __future__ import annotations

import sys
import time

import numpy as np

from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design, load_design
from benchkit.stage.draws import Array, draw, nominal, seeds
from benchkit.stage.expected import DEFAULT_UNITS
from benchkit.stage.operate import solve_units
from benchkit.stage.quantiles import interval
from benchkit.stage.reach import full_rails
from tests.stage.designs import DEMONSTRATIONS

WANTED = (0.994, 0.9995)


def conditions(design: Design) -> dict[str, Condition]:
    """Conditions that walks read under."""
    low_v = (0.43 * design.rails.positive_v, 0.43 * design.rails.negative_v)
    return {
        "low rails, least": Condition(positive_v=low_v[0], negative_v=low_v[1], limit_a=0.05, trimmer="least"),
        "full rails, least": full_rails(design, trimmer="least", when="cold"),
        "full rails, target, warm": full_rails(design, when="warm"),
        "full rails, unknown": full_rails(design, trimmer="unknown", when="cold"),
    }


def readings(design: Design, condition: Condition, units: int, rng: np.random.Generator) -> dict[str, Array]:
    """Readings of healthy units, in portions that fit into memory."""
    start = solve_units(design, nominal(design), condition, loading="none")
    portions: list[dict[str, Array]] = []
    for low in range(0, units, 8000):
        count = min(8000, units - low)
        solved = solve_units(design, draw(design, count, rng), condition, start=start)
        good = solved.converged & solved.in_reach
        portions.append({name: value[good] for name, value in solved.points.items()})
    return {name: np.concatenate([portion[name] for portion in portions]) for name in portions[0]}


def main(quick: bool) -> None:
    """Print the study."""
    fresh_units, seeds_each = (16_000, 2) if quick else (64_000, 6)
    sizes = (1000, 2000, 4000, DEFAULT_UNITS, 16_000) if not quick else (1000, DEFAULT_UNITS)
    print(f"fresh units {fresh_units}, seeds {seeds_each}; share inside per reading, worst over readings and seeds")
    for path in DEMONSTRATIONS:
        design = load_design(path)
        for title, condition in conditions(design).items():
            began = time.perf_counter()
            fresh = readings(design, condition, fresh_units, seeds("unit", 2026))
            pool = [readings(design, condition, max(sizes), seeds("limits", seed)) for seed in range(seeds_each)]
            for size in sizes:
                inside = []
                for drawn in pool:
                    for name, value in drawn.items():
                        if np.ptp(value) <= 1e-7 * (1e-3 + np.abs(value).max()):
                            continue
                        low, high = interval(value[:size])
                        inside.append((float(np.mean((fresh[name] >= low) & (fresh[name] <= high))), name))
                shares = np.array([share for share, _ in inside])
                off = int(np.count_nonzero((shares < WANTED[0]) | (shares > WANTED[1])))
                print(
                    f"{design.name:12} {title:26} {size:6d} units: {min(inside)[0]:.4%} ({min(inside)[1]}) to "
                    f"{max(inside)[0]:.4%}, mean {shares.mean():.4%}, sd {shares.std():.4%}, "
                    f"outside the band {off} of {len(shares)}"
                )
            print(f"  ({time.perf_counter() - began:.1f} s)", flush=True)


if __name__ == "__main__":
    main("--quick" in sys.argv)
