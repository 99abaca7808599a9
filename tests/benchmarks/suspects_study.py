"""How well suspects are named, on units that ngspice solved and our solver did not.

Run as ``python -m tests.benchmarks.suspects_study [FOLDER]``; ``--help`` has the options; ``--designs`` takes "demo",
"few", "catalogue" and names. The units (`tests.benchmarks.suspects_units`) are kept in the folder and found there, so
that an evaluation can be repeated without ngspice. Figures to report come from a seed that nothing was tuned on.

What is counted
---------------
* A planted fault is *first* when the first suspect is it or names it among its alike (four in a group at most), and *in
  three* when one of the first three does.
* A planted fault among the `unseen` is counted apart, when rightly: when no reading of the unit lies outside the limits
  of healthy units by more than its uncertainty (95 %). Otherwise it is a miss.
* A healthy unit is a false alarm when something else stands first or when a reading lies outside those limits.
* With the second condition (5 mV) and the unpowered readings, the same again.
* Probes: from the first condition's readings, up to three further ones are taken, each time the first that `probe_next`
  asks for, from among the second condition's and the unpowered readings.
"""

from __future__ import annotations

import argparse
import tempfile
import time
from collections import Counter
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Protocol

import numpy as np

from benchkit.shipped import find_design
from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design, load_design
from benchkit.stage.expected import DEFAULT_UNITS, PointLimits, expected, expected_unpowered
from benchkit.stage.faults import HEALTHY, Fault
from benchkit.stage.observations import Conditions, Observation
from benchkit.stage.suspects import Suspicion, suspect_many
from tests.benchmarks.suspects_units import Series, Units, made
from tests.stage.catalogue import catalogue, few

MOST_ALIKE = 4
PROBES = 3
LIMITS_UNITS = DEFAULT_UNITS
LIMITS_COVERAGE = 3.0
DEMONSTRATIONS = ("breadboard", "tern-40")
TARGETS = (
    ("one condition: first", 0.85), ("one condition: in three", 0.98), ("two and unpowered: first", 0.92),
    ("probes: first", 0.95),
)  # fmt: skip
MOST = (("one condition: false alarms", 0.02), ("two and unpowered: unseen", 0.03))
"""What the figures must reach, and what they must not exceed."""


class Ask(Protocol):
    """`benchkit.stage.suspects.suspect_many`, or something in its place."""

    def __call__(
        self,
        design: Design,
        sets: Sequence[Sequence[Observation]],
        *,
        candidates: Sequence[tuple[Conditions, str]] = (),
    ) -> list[Suspicion]:
        """Suspects of several units."""
        ...


@dataclass
class Tally:
    """Counts of one question; they add up over designs."""

    planted: int = 0
    first: int = 0
    in_three: int = 0
    unseen: int = 0
    healthy: int = 0
    named_healthy: int = 0
    out_of_limits: int = 0
    alarms: int = 0
    groups: list[int] = field(default_factory=list)
    log_probability: list[float] = field(default_factory=list)
    misses: list[str] = field(default_factory=list)
    alarmed: list[str] = field(default_factory=list)
    seconds: float = 0.0

    def __add__(self, other: Tally) -> Tally:
        return Tally(**{key: value + getattr(other, key) for key, value in vars(self).items()})

    @property
    def seen(self) -> int:
        """Units with a fault that could be seen."""
        return self.planted - self.unseen

    def share(self, key: str) -> float:
        """A share by the word of `TARGETS` and `MOST`."""
        counts = {
            "first": (self.first, self.seen), "in three": (self.in_three, self.seen),
            "unseen": (self.unseen, self.planted), "false alarms": (self.alarms, self.healthy),
        }  # fmt: skip
        count, of = counts[key]
        return count / of if of else float("nan")

    def lines(self) -> list[str]:
        """The figures in words."""
        if not self.planted + self.healthy:
            return ["nothing"]
        group = f"{np.median(self.groups):g}, largest {max(self.groups)}" if self.groups else "none"
        log_p = f"{np.mean(self.log_probability):.3f}" if self.log_probability else "none"
        lines = [
            f"{self.planted} faulty units: {self.unseen} unseen ({self.share('unseen'):.1%}); of the other "
            f"{self.seen}: first {self.share('first'):.1%}, in three {self.share('in three'):.1%}; "
            f"median group {group}; mean log probability of the truth {log_p}"
        ]
        if self.healthy:
            lines.append(
                f"{self.healthy} healthy units: {self.alarms} false alarms ({self.share('false alarms'):.1%}), "
                f"{self.healthy - self.named_healthy} with something else first, {self.out_of_limits} out of limits"
            )
        lines.append(f"{self.seconds / max(self.planted + self.healthy, 1):.3f} s a unit")
        return lines


Limits = dict[tuple[Conditions, str], PointLimits]


def limits_of(design: Design, series: Iterable[Series]) -> Limits:
    """Limits of healthy units for every reading of some series."""
    found: Limits = {}
    for one in series:
        first = one.conditions[0][0]
        if isinstance(first, Condition):
            limits = expected(design, first, units=LIMITS_UNITS, seed=0)
        else:
            limits = expected_unpowered(design, one.points, trimmer=first.trimmer, units=LIMITS_UNITS, seed=0)
        found |= {
            (conditions, point): limits[point] for conditions, point in zip(one.conditions, one.points, strict=True)
        }
    return found


def out_of_limits(observations: Sequence[Observation], limits: Limits) -> list[str]:
    """Points whose reading is outside the limits by more than its expanded uncertainty.

    What the condition holds (a rail at its set voltage, the drop that was trimmed) tells nothing about parts unless it
    is off by more than a hundredth.
    """
    outside = []
    for one in observations:
        limit = limits[one.conditions, one.point]
        spare = LIMITS_COVERAGE * one.standard_uncertainty
        if limit.held:
            spare += 0.01 * abs(limit.high)
        if not limit.low - spare <= one.value <= limit.high + spare:
            outside.append(one.point)
    return outside


def evaluate(
    units: Units, names: Sequence[str], ask: Ask, *, select: Sequence[int] | None = None
) -> tuple[Tally, dict[int, Suspicion]]:
    """Ask for the suspects of the units that have all readings of some series, and count."""
    series = [units.series[name] for name in names]
    solved = np.all([one.solved for one in series], axis=0)
    chosen = [unit for unit in (range(len(units.faults)) if select is None else select) if solved[unit]]
    sets = [[one for s in series for one in s.observations(unit)] for unit in chosen]
    candidates = [
        (conditions, point)
        for name, s in units.series.items()
        if name not in names
        for conditions, point in zip(s.conditions, s.points, strict=True)
    ]
    tally = Tally()
    began = time.perf_counter()
    answers = ask(units.design, sets, candidates=candidates)
    tally.seconds = time.perf_counter() - began
    limits = limits_of(units.design, series)
    for unit, observations, answer in zip(chosen, sets, answers, strict=True):
        count(tally, f"{units.design.name}", units.faults[unit], answer, out_of_limits(observations, limits))
    return tally, dict(zip(chosen, answers, strict=True))


def count(tally: Tally, design: str, truth: Fault, answer: Suspicion, outside: Sequence[str]) -> None:
    """Add one unit's answer to a tally."""
    groups = [(suspect.fault, *suspect.alike) for suspect in answer.suspects[:3]]
    said = "; ".join(f"{suspect.fault} {suspect.probability:.3f}" for suspect in answer.suspects[:3])
    if truth == HEALTHY:
        tally.healthy += 1
        named = groups[0][0] == HEALTHY
        tally.named_healthy += named
        tally.out_of_limits += bool(outside)
        if not named or outside:
            tally.alarms += 1
            tally.alarmed.append(f"{design} | {said} | outside: {', '.join(outside) or 'none'}")
        return
    tally.planted += 1
    own = sum(suspect.probability for suspect in answer.suspects if suspect.fault == truth)
    tally.log_probability.append(float(np.log(max(own, 1e-12))))
    if truth in answer.unseen and not outside:
        tally.unseen += 1
        return
    hits = [truth in group and len(group) <= MOST_ALIKE for group in groups]
    tally.groups.append(len(groups[0]))
    tally.first += hits[0]
    tally.in_three += any(hits)
    if not hits[0]:
        word = "wrongly unseen" if truth in answer.unseen else "not in three" if not any(hits) else "not first"
        tally.misses.append(f"{design} | {truth} | {word}, {own:.4f} | {said}")


def follow_probes(
    units: Units, chosen: Sequence[int], answers: dict[int, Suspicion], ask: Ask, names: Sequence[str] = ("least",)
) -> Tally:
    """Take up to three readings that `probe_next` asks for, and count what stands first then."""
    series = [units.series[name] for name in names]
    others = [s for name, s in units.series.items() if name not in names]
    where = {(conditions, point): s for s in others for conditions, point in zip(s.conditions, s.points, strict=True)}
    solved = np.all([s.solved for s in units.series.values()], axis=0)
    chosen = [unit for unit in chosen if solved[unit] and unit in answers]
    sets = {unit: [one for s in series for one in s.observations(unit)] for unit in chosen}
    latest = {unit: answers[unit] for unit in chosen}
    tally = Tally()
    limits = limits_of(units.design, units.series.values())
    taken: Counter[str] = Counter()
    for _ in range(PROBES):
        asking = [unit for unit in chosen if latest[unit].probe_next]
        for unit in asking:
            probe = latest[unit].probe_next[0]
            sets[unit].append(where[probe.conditions, probe.point].observation(unit, probe.point))
            taken[probe.point] += 1
        began = time.perf_counter()
        left = list(where)
        for unit, answer in zip(asking, ask(units.design, [sets[u] for u in asking], candidates=left), strict=True):
            latest[unit] = answer
        tally.seconds += time.perf_counter() - began
    for unit in chosen:
        count(tally, units.design.name, units.faults[unit], latest[unit], out_of_limits(sets[unit], limits))
    return tally


QUESTIONS = ("one condition", "two and unpowered", "probes")


def _say(text: str) -> None:
    print(text, flush=True)


def study(
    designs: Sequence[Design],
    folder: Path,
    ask: Ask,
    *,
    per_fault: int,
    healthy: int,
    sampled: int,
    probed: int,
    seed: int,
    jobs: int = 1,
    questions: Sequence[str] = QUESTIONS,
    say: Callable[[str], None] = _say,
) -> dict[str, Tally]:
    """Make or read the units of every design, ask, print what came out; returns the sums by question."""
    totals = {question: Tally() for question in questions}
    for design in designs:
        units = made(design, folder, per_fault=per_fault, healthy=healthy, seed=seed, jobs=jobs)
        without = {name: units.unsolved(name) for name in units.series}
        rate = units.copies / units.seconds if units.seconds else float("nan")
        say(
            f"\n{design.name}: {len(units.faults)} units; ngspice solved {rate:.0f} circuits a second of its "
            "processor time"
        )
        for name, faults in without.items():
            if faults:
                say(f"  ngspice has no solution ({name}): {', '.join(faults)}")
        tallies: dict[str, Tally] = {}
        answers: dict[int, Suspicion] = {}
        if "one condition" in questions or "probes" in questions:
            tallies["one condition"], answers = evaluate(units, ("least",), ask)
        if "two and unpowered" in questions:
            tallies["two and unpowered"], _ = evaluate(
                units, ("least", "trimmed", "unpowered"), ask, select=_sample(units, sampled, sampled // 4, seed)
            )
        if "probes" in questions:
            tallies["probes"] = follow_probes(units, _sample(units, probed, 0, seed), answers, ask)
        for question in totals:
            totals[question] += tallies[question]
            say("\n".join(f"  {question}: {line}" for line in tallies[question].lines()))
    say("\nall designs")
    for question, tally in totals.items():
        say("\n".join(f"  {question}: {line}" for line in tally.lines()))
    return totals


def _sample(units: Units, faulty: int, healthy: int, seed: int) -> list[int]:
    """Some of the units, drawn at random; none is left out where there are no more."""
    rng = np.random.default_rng(seed)
    chosen: list[int] = []
    for number, is_healthy in ((faulty, False), (healthy, True)):
        of = [unit for unit, fault in enumerate(units.faults) if (fault == HEALTHY) == is_healthy]
        chosen += [of[k] for k in rng.permutation(len(of))[:number]]
    return sorted(chosen)


def shortfalls(totals: dict[str, Tally]) -> list[str]:
    """What misses its figure."""
    result = []
    for low, key, number in [(True, *one) for one in TARGETS] + [(False, *one) for one in MOST]:
        question, _, word = key.partition(": ")
        if question in totals:
            share = totals[question].share(word)
            if not (share >= number if low else share <= number):
                result.append(f"{key}: {share:.1%}, and {number:.0%} {'or more' if low else 'or less'} is asked for")
    return result


def chosen_designs(words: str) -> list[Design]:
    """Designs by "demo", "few", "catalogue" or their names, separated by commas."""
    result: dict[str, Design] = {}
    for word in (piece.strip() for piece in words.split(",")):
        if word == "demo":
            result |= {name: load_design(find_design(name)) for name in DEMONSTRATIONS}
        elif word in ("few", "catalogue"):
            result |= few() if word == "few" else catalogue()
        elif word in (known := few() | catalogue()):
            result[word] = known[word]
        else:
            result[word] = load_design(find_design(word))
    return list(result.values())


def main() -> None:
    """Run the study and print where the misses are."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("folder", nargs="?", type=Path, default=Path(tempfile.gettempdir()) / "suspects-units")
    parser.add_argument("--designs", default="demo,few")
    parser.add_argument("--questions", default=",".join(QUESTIONS))
    parser.add_argument("--per-fault", type=int, default=1)
    parser.add_argument("--healthy", type=int, default=20)
    parser.add_argument("--sampled", type=int, default=10_000, help="faulty units a design read under everything")
    parser.add_argument("--probed", type=int, default=25, help="faulty units a design whose probes are followed")
    parser.add_argument("--seed", type=int, default=101)
    parser.add_argument("--jobs", type=int, default=1)
    given = parser.parse_args()
    totals = study(
        chosen_designs(given.designs), given.folder, suspect_many, per_fault=given.per_fault, healthy=given.healthy,
        sampled=given.sampled,
        probed=given.probed, seed=given.seed, jobs=given.jobs, questions=tuple(given.questions.split(",")),
    )  # fmt: skip
    for question, tally in totals.items():
        print(f"\n{question}: {len(tally.misses)} misses, {len(tally.alarmed)} false alarms")
        print("\n".join(f"  {line}" for line in tally.misses + tally.alarmed))
    missing = shortfalls(totals)
    print("\n" + ("\n".join(missing) if missing else "every figure is reached"))
    if missing:
        raise SystemExit(1)


if __name__ == "__main__":
    main()
