"""What careless power does: units switched straight on, and which faults of the table that makes harmful.

`straight_on` puts a simulated unit on full rails and a limit of 5 A at once, and lets it stand for a while.  A fault is
*harmful* when that burns a part or takes one above its rating, in a unit of the design whose trimmer stands at its
least-bias end or where a healthy unit meets its target; so says the simulation, and no list.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import cache
from pathlib import Path

from benchkit.rehearsal.bench import RehearsalBench
from benchkit.stage.design import Design, load_design, target_drop_v
from benchkit.stage.draws import nominal
from benchkit.stage.faults import Fault, faults_of
from benchkit.stage.operate import solve_units
from benchkit.stage.reach import open_wiper_lowers_bias
from benchkit.stage.trimmer import full_rails
from tests.stage.catalogue import few

FIRST_POWER = "first-power-on"
LIMIT_A = 5.0
STANDS_S = 20.0
HARM_S = 5.0
"""Long enough for junctions and film resistors; what takes longer is heat that a person can feel coming."""
SLICE_S = 0.5
UNIT_SEED = 4242
FIRST_STOP = 0.25 * 1.6
"""Most of the target that the first stop of the trim accepts: a quarter and 60 %."""
MARGIN = 0.3
"""Of that, what the spread of units and a warm heat sink may take."""
DEMONSTRATION = Path(__file__).parents[2] / "procedures" / "designs"


def shipped_designs() -> dict[str, Design]:
    """The demonstration designs."""
    return {path.stem: load_design(path) for path in sorted(DEMONSTRATION.glob("*.toml"))}


def designs() -> dict[str, Design]:
    """The demonstration designs, and eight that hold every topology, feed, trimmer arm and wiring."""
    return {**shipped_designs(), **few()}


def why_not(design: Design, name: str = FIRST_POWER) -> str:
    """Why even a flawless unit of a design can't pass a procedure; "" when it can.

    Three things are the design's and not the unit's: no trimmer to set and, for a first power-on, an open wiper that
    raises the bias, and a least-bias end above the first stop of the trim (a quarter of the target, and 60 %).
    """
    if design.spreader.trimmer is None:
        return "it has no trimmer"
    if name != FIRST_POWER:
        return ""
    if not open_wiper_lowers_bias(design):
        return "an open wiper raises its bias"
    least = solve_units(design, nominal(design), full_rails(design, trimmer=0.0, when="cold"), loading="none")
    share = float(least.points["emitter.upper.1"][0]) / target_drop_v(design)
    return f"its least bias is {share:.0%} of the target" if share > FIRST_STOP * (1.0 - MARGIN) else ""


@dataclass(frozen=True, kw_only=True)
class Careless:
    """What became of a unit that was switched straight on.

    Parameters
    ----------
    burnt : tuple of str
        Parts that gave way, in order.
    overloaded : tuple of str
        Parts that were above their ratings and held.
    """

    burnt: tuple[str, ...]
    overloaded: tuple[str, ...]


def straight_on(
    design: Design, unit_seed: int, plant: str, travel: float, *, stop_at_first: bool = False, seconds: float = STANDS_S
) -> Careless:
    """Switch a unit on at full rails and 5 A, and let it stand."""
    bench = RehearsalBench(design, unit_seed, plant)
    bench.table.connect(True)
    bench.table.set_travel(travel)
    rails = design.rails
    bench.supply.handle(
        f"CURR {LIMIT_A:g},(@1,2);:VOLT {rails.positive_v:g},(@1);:VOLT {-rails.negative_v:g},(@2);:OUTP ON,(@1,2)"
    )
    error = bench.supply.handle("SYST:ERR?")
    assert error == '0,"No error"', error
    left_s = seconds
    while left_s > 0.0:
        bench.table.advance(min(SLICE_S, left_s))
        left_s -= SLICE_S
        if stop_at_first and (bench.unit.burnt or bench.unit.strain.overloaded):
            break
    burnt = bench.unit.broken
    return Careless(burnt=burnt, overloaded=tuple(part for part in bench.unit.strain.overloaded if part not in burnt))


@cache
def target_travel(design: Design) -> float:
    """Travel at which the nominal unit meets its target."""
    solved = solve_units(design, nominal(design), full_rails(design), loading="none")
    return 0.0 if solved.position is None or not bool(solved.converged[0]) else float(solved.position[0])


def travels(design: Design) -> tuple[float, ...]:
    """Where the trimmer may stand: at its least-bias end, and at the target."""
    return (0.0,) if design.spreader.trimmer is None else (0.0, target_travel(design))


def harm_of(design: Design, fault: Fault) -> Careless | None:
    """What a fault burns or overloads in a unit that is switched straight on; None when it does neither."""
    for travel in travels(design):
        careless = straight_on(design, UNIT_SEED, str(fault), travel, stop_at_first=True, seconds=HARM_S)
        if careless.burnt or careless.overloaded:
            return careless
    return None


def harmful_faults(design: Design) -> Iterator[tuple[Fault, Careless]]:
    """Every fault of a design's table that is harmful, with what it did first."""
    for fault in faults_of(design):
        careless = harm_of(design, fault)
        if careless is not None:
            yield fault, careless


def main() -> None:
    """Print the harmful faults of every design."""
    for name, design in designs().items():
        found = list(harmful_faults(design))
        print(f"{name}: {len(found)} of {len(faults_of(design))} faults are harmful", flush=True)
        for fault, careless in found:
            first = f"burnt {', '.join(careless.burnt)}" if careless.burnt else "overloaded"
            print(f"    {fault}: {first} {', '.join(careless.overloaded)}".rstrip())


if __name__ == "__main__":
    main()
