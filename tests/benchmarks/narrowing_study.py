"""What narrowing does to limits, and whether they stay honest: a study, not a test.

Run with ``python -m tests.benchmarks.narrowing_study [--units N] [--every N] [DESIGN ...]``. For each design, with the
trimmer at its least-bias end, at 0.5 and anywhere, at full rails:

* 2,000 healthy units are drawn from a stream of their own and solved. Their readings are taken in the order of the
  points, with noise of 0.03 % + 20 uV (currents 0.1 % + 10 uA, ohms 0.03 % + 0.1 mohm, temperature 0.3 K).
* After each step the share of units whose next readings lie outside their narrowed limits is counted, reading by
  reading. Wanted: below 0.5 % averaged over readings and steps, and no reading above 1 % after any step.
* The width of the narrowed limits against the design's: median over the units, when the reading's turn comes.

"resistors" says whether emitter resistors and spreader arms were measured before. "off bench" draws units whose room
and rails stand off the stated ones, as real ones do; what is outside the design's limits by that is not narrowing's
doing, so there only readings inside those are counted.
"""

from __future__ import annotations

import argparse
import time
from collections.abc import Iterator
from dataclasses import dataclass, field

import numpy as np

from benchkit.stage.conditions import Condition, TrimmerPosition, Unpowered
from benchkit.stage.design import Design
from benchkit.stage.draws import Array, draw, seeds
from benchkit.stage.latent import RAIL_SHARE, UNSTATED_AMBIENT_K
from benchkit.stage.narrowing import Known, Narrowing
from benchkit.stage.operate import solve_units
from benchkit.stage.paired import Reading
from benchkit.stage.points import points_of
from benchkit.stage.reach import full_rails
from benchkit.stage.unpowered import solve_unpowered
from tests.stage.designs import breadboard, tern

UNITS = 2000
UNIT_SEED = 2027
POSITIONS: tuple[TrimmerPosition, ...] = ("least", 0.5, "unknown")
WANTED_MEAN, WANTED_WORST = 0.005, 0.01
HELD = 1e-3
"""Readings whose limits are closer than this share of them are held by the condition and not counted."""


def uncertainty(point: str, typical: float) -> float:
    """Standard uncertainty of a reading of a typical size, in its unit."""
    if point.startswith("ohm."):
        return 3e-4 * typical + 1e-4
    if point.endswith(".current"):
        return 1e-3 * typical + 1e-5
    return 0.3 if point == "heatsink" else 3e-4 * typical + 2e-5


def fresh(design: Design, readings: list[Reading], units: int, off_bench: bool) -> dict[Reading, Array]:
    """True readings of freshly drawn healthy units, under single conditions; nan where there is no solution."""
    rng = seeds("unit", UNIT_SEED)
    parameters = draw(design, units, rng)
    room, positive, negative = rng.standard_normal((3, units)) * (1.0 if off_bench else 0.0)
    room_c = design.thermal.ambient_c + UNSTATED_AMBIENT_K * room
    made: dict[Reading, Array] = {}
    solved: dict[Condition, dict[str, Array]] = {}
    for conditions, point in readings:
        (condition,) = conditions
        if isinstance(condition, Unpowered):
            unpowered = solve_unpowered(design, parameters, condition, room_c=room_c)
            made[conditions, point] = np.broadcast_to(np.where(unpowered.converged, unpowered.values, np.nan), units)
            continue
        if condition not in solved:
            rails_v = tuple(
                volts * (1.0 + RAIL_SHARE * off)
                for volts, off in ((condition.positive_v, positive), (condition.negative_v, negative))
            )
            found = solve_units(design, parameters, condition, room_c=room_c, rails_v=(rails_v[0], rails_v[1]))
            good = found.converged & found.in_reach
            solved[condition] = {name: np.where(good, value, np.nan) for name, value in found.points.items()}
        made[conditions, point] = solved[condition][point]
    return made


@dataclass
class Result:
    """Shares outside and widths of one walk through the points.

    Attributes
    ----------
    outside : list of (step, point, share)
    widths : dict of str to float
        Design's width over the narrowed one's median, when the reading's turn came.
    alone : dict of str to float
        The same after the resistors only.
    odd : list of float
        Share of units called odd, after each step.
    seconds : list of float
        Time of each step's fit and limits.
    """

    outside: list[tuple[int, str, float]] = field(default_factory=list)
    widths: dict[str, float] = field(default_factory=dict)
    alone: dict[str, float] = field(default_factory=dict)
    odd: list[float] = field(default_factory=list)
    seconds: list[float] = field(default_factory=list)

    @property
    def mean(self) -> float:
        """Share outside, averaged over readings and steps."""
        return float(np.mean([share for _, _, share in self.outside]))

    @property
    def worst(self) -> tuple[int, str, float]:
        """The reading and step with the largest share outside."""
        return max(self.outside, key=lambda one: one[2])


def study(
    narrowing: Narrowing,
    condition: Condition,
    *,
    resistors: bool,
    off_bench: bool = False,
    units: int = UNITS,
    every: int = 1,
    only: tuple[str, ...] = (),
    without: tuple[str, ...] = (),
) -> Result:
    """Take the readings of fresh units in the order of the points and look at those that remain.

    Parameters
    ----------
    narrowing : Narrowing
    condition : Condition
    resistors, off_bench : bool
    units : int
    every : int
        Look after every so many readings only.
    only : tuple of str
        Look only when the turn of one of these points comes.
    without : tuple of str
        Ends of names of points that are not read.
    """
    design = narrowing.design
    powered: list[Reading] = []
    for point in points_of(design):
        absent = point.name.endswith((".drop", *without)) and condition.fuse_ohm is None
        if point.powered and point.modelled and not absent:
            powered.append(((condition,), point.name))
    first: list[Reading] = []
    if resistors:
        for point in points_of(design):
            if point.name.startswith(("ohm.emitter.", "ohm.spreader.")):
                first.append(((Unpowered(point=point.name, trimmer=condition.trimmer),), point.name))
    true = fresh(design, [*first, *powered], units, off_bench)
    noise = np.random.default_rng(11)
    known, values = {}, {}
    for reading, value in true.items():
        u = uncertainty(reading[1], float(np.nanmedian(np.abs(value))))
        known[reading] = Known(reading, u)
        values[reading] = value + u * noise.standard_normal(units)
    whole = np.all([np.isfinite(value) for value in true.values()], axis=0)
    result = Result()
    for step in range(0, len(powered), every):
        taken, left = [*first, *powered[:step]], powered[step:]
        if not taken or (only and left[0][1] not in only):
            continue
        began = time.perf_counter()
        low, high, _, odd = narrowing.limits_many(
            [known[one] for one in taken], left, np.stack([values[one] for one in taken], axis=1)[whole]
        )
        result.seconds.append(time.perf_counter() - began)
        result.odd.append(float(odd.mean()))
        for number, reading in enumerate(left):
            design_low, design_high = narrowing.units.design_limits(reading)
            value = true[reading][whole]
            if design_high - design_low <= HELD * max(abs(design_low), abs(design_high)):
                continue
            out = (value < low[:, number]) | (value > high[:, number])
            if off_bench:
                out = out[(value >= design_low) & (value <= design_high)]
                if len(out) < units / 2:
                    continue
            result.outside.append((step, reading[1], float(out.mean())))
            factor = (design_high - design_low) / float(np.median(high[:, number] - low[:, number]))
            if number == 0:
                result.widths[reading[1]] = factor
            if step == 0:
                result.alone[reading[1]] = factor
    return result


def designs() -> dict[str, Design]:
    """Designs of the study: one of every topology and feed, as far as the catalogue goes."""
    try:
        from tests.stage.catalogue import few
    except ImportError:
        return {"tern-40": tern(), "breadboard": breadboard()}
    return {"tern-40": tern(), "breadboard": breadboard(), **few()}


def conditions(design: Design) -> Iterator[Condition]:
    """Full rails, cold, at every position of the trimmer that the design has."""
    for position in POSITIONS if design.spreader.trimmer is not None else ("least",):
        yield full_rails(design, trimmer=position, when="cold")


def drops_of(narrowing: Narrowing) -> tuple[str, ...]:
    """Names of the emitter drops."""
    names = [point.name for point in points_of(narrowing.design)]
    return tuple(name for name in names if name.startswith(("emitter.upper.", "emitter.lower.")))


def shown(narrowing: Narrowing, condition: Condition, result: Result, units: int) -> None:
    """Print how many times narrower limits became."""
    no_currents = study(
        narrowing, condition, resistors=True, units=units, without=(".current",), only=drops_of(narrowing)
    )
    for title, widths in (
        ("in turn", result.widths),
        ("in turn, rail currents not read", no_currents.widths),
        ("resistors alone", result.alone),
    ):
        print(f"    {title}: " + ", ".join(f"{point} {factor:.3g}" for point, factor in widths.items()))
        drops = [widths[point] for point in drops_of(narrowing) if point in widths]
        if drops:
            print(f"        emitter drops, median: {np.median(drops):.3g}", flush=True)


def main() -> None:
    """Print the study."""
    parser = argparse.ArgumentParser()
    parser.add_argument("--units", type=int, default=UNITS)
    parser.add_argument("--every", type=int, default=1, help="look after every so many readings only")
    parser.add_argument("designs", nargs="*")
    options = parser.parse_args()
    print("design | trimmer | resistors | bench | outside, mean | worst (reading, step) | odd | median s | verdict")
    for name, design in designs().items():
        if options.designs and name not in options.designs:
            continue
        narrowing = Narrowing(design)
        for condition in conditions(design):
            for resistors, off_bench in ((True, False), (False, False), (True, True)):
                result = study(
                    narrowing,
                    condition,
                    resistors=resistors,
                    off_bench=off_bench,
                    units=options.units,
                    every=options.every,
                )
                step, point, share = result.worst
                met = result.mean < WANTED_MEAN and share <= WANTED_WORST
                print(
                    f"{name} | {condition.trimmer} | {resistors} | {'off' if off_bench else 'as stated'} | "
                    f"{result.mean:.3%} | {share:.2%} ({point}, {step}) | {np.mean(result.odd):.3%} | "
                    f"{np.median(result.seconds):.3f} | {'met' if met else 'MISSED'}",
                    flush=True,
                )
                if resistors and not off_bench:
                    shown(narrowing, condition, result, options.units)


if __name__ == "__main__":
    main()
