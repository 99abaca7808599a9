"""Operating points a second beside ngspice at its best, one machine, one run; and growth with the number of units.

Run with ``python -m pytest tests/benchmarks -o addopts= -s``. The circuit is a double emitter follower with the full
Gummel-Poon d.c. model, current-limited supplies, a saturating feed and a servo; every unit has parts of its own.
ngspice is best used with a deck of several copies: its start-up is shared out. How many is tried out: its sparse
matrix is soon too large. Both times are processor time and the best of several, so that other work on the machine
counts little; our processor time is that of all our threads.
"""

from __future__ import annotations

import time

import numpy as np
import pytest

from benchkit.circuit.solve import compile_netlist
from tests.circuit.circuits import follower, spread, values_of
from tests.reference import ngspice

NETLIST = follower(double=True, feeds="sources")
COPIES = (10, 25, 50, 100, 200)


def ours(units: int, rounds: int = 3) -> float:
    """Operating points a second."""
    compiled = compile_netlist(NETLIST)
    values = spread(values_of(NETLIST), units, seed=1)
    seconds = []
    for _ in range(rounds):
        begun = time.process_time()
        solution = compiled.solve(values, units)
        seconds.append(time.process_time() - begun)
        assert solution.converged.all()
    return units / min(seconds)


def theirs() -> float:
    """Operating points a second of ngspice at ordinary tolerances, best of several numbers of copies."""
    rates = []
    for copies in COPIES:
        values = spread(values_of(NETLIST), copies, seed=1)
        text, _ = ngspice.deck(NETLIST, [{k: float(v[u]) for k, v in values.items()} for u in range(copies)])
        text = text.replace(ngspice.OPTIONS, ".options itl1=2000 itl2=2000")
        # print one node a copy: the printing shall not count against it
        lines = [
            line for line in text.splitlines() if not line.startswith("print v(") or line.startswith("print v(n0_")
        ]
        for _ in range(2):
            found, seconds = ngspice.run_text("\n".join(lines) + "\n")
            assert len(found) == copies
            rates.append(copies / seconds)
    return max(rates)


@pytest.mark.skipif(not ngspice.installed(), reason="ngspice is not installed")
def test_thirty_times_ngspice() -> None:
    reference = theirs()
    for units in (4_000, 16_000):
        rate = ours(units)
        print(f"\n{units} units: {rate:,.0f}/s, ngspice {reference:,.0f}/s, ratio {rate / reference:.1f}")
        assert rate >= 30.0 * reference


def test_growth_is_no_worse_than_linear() -> None:
    rates = {units: ours(units, rounds=5 if units < 4_000 else 2) for units in (1_000, 4_000, 16_000, 64_000)}
    print("\n" + ", ".join(f"{units:,} units: {rate:,.0f}/s" for units, rate in rates.items()))
    # linear growth is a rate that stays; a tenth is left to the clock
    assert rates[64_000] >= 0.9 * rates[1_000]


def test_one_unit_follows_a_turning_trimmer() -> None:
    compiled = compile_netlist(NETLIST)
    solution = compiled.solve(values_of(NETLIST))
    seconds = []
    for trimmer in np.linspace(200.0, 300.0, 60):
        begun = time.process_time()
        solution = compiled.solve(values_of(NETLIST, trimmer=float(trimmer)), start=solution)
        seconds.append(time.process_time() - begun)
        assert solution.converged.all()
    print(f"\none unit, warm: median {np.median(seconds) * 1e3:.1f} ms, largest {max(seconds) * 1e3:.1f} ms")
    assert np.median(seconds) < 15e-3
