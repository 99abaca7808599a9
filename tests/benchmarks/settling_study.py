"""Does the interval of a predicted final value hold what it promises, and who is called a runaway: a study, not a test.

Run with ``python -m tests.benchmarks.settling_study``; ``--seed`` draws other units, builds and noise, ``--once`` looks
at each curve once only, ``--design tern --builds 150`` says more of one design. A prior that was chosen by one seed is
judged by another.

For the demonstrations and eight designs of the catalogue that hold every topology, feed, arm and wiring, units are
drawn and followed from cold, and from a trim in mid-soak: trimmers off by `OFF_TRAVEL` (one standard deviation), left
for a tenth to three time constants, then put where the target is met warm. Of each design there are many builds, whose
heat sink's capacity and spreader's lag are off by up to `HEAT_OFF` either way, each by itself: the prediction knows the
design only. Readings come every second or two with noise of one of `NOISES_V`.

Printed are

* the share of curves whose final value lies inside the stated 95 % interval, one time constant of the design into the
  soak, by kind of curve and by design, and at other moments; the same for builds that are exactly as designed;
* how often something is called settled that is further than stated from its final value, and how much sooner it is
  called so than after five time constants;
* how many healthy curves are called runaways, looking some thirty times at each, and when in its life a planted one is:
  spreaders that see nothing of a heat sink that is too small, preset cold to the target.
"""

from __future__ import annotations

import argparse
import re
import time
from collections import Counter, defaultdict
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from benchkit.measure.settling import Settling, predict
from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design, parse_design
from benchkit.stage.draws import Array, draw, seeds
from benchkit.stage.operate import solve_units
from benchkit.stage.settling_times import lags_of
from benchkit.stage.warm_up import WarmUp, warm_up
from tests.stage import catalogue
from tests.stage.designs import BREADBOARD, TERN

UNITS, BUILDS = 2, 40
"""Units of each build, and builds of each design: units of a build share its heat, so that many builds tell more."""
MANY = 50
"""Curves that tell something of one design alone."""
STEP_ERROR_K = 1e-3
"""Finer than usual: the usual 20 mK are some 40 uV of a drop, as much as the intervals that are looked at."""
HEAT_OFF = 0.3
OFF_TRAVEL = 0.08
NOISES_V = (1e-6, 3e-6, 1e-5, 3e-5)
NEAR, DRIFT_PER_S = 0.02, 0.02 / 60.0
"""What counts as settled: within 2 % of the final value, moving by less than 2 % of it a minute."""
BAD_HEAT = ((0.0, 3.0), (0.0, 6.0), (0.1, 4.0))
"""Planted: share of the sink's rise that the spreader sees, and how much too small the sink is."""


@dataclass(frozen=True, kw_only=True)
class Curve:
    """A unit's emitter drop from a disturbance on, as a meter sees it."""

    name: str
    kind: str
    lags_s: tuple[float, ...]
    times_s: Array
    read_v: Array
    true_v: Array
    final_v: float
    noise_v: float
    runs_away_s: float

    def look(self, until_s: float) -> Settling:
        """Predict from what has been read until some moment."""
        seen = self.times_s <= until_s
        size_v = self.final_v if np.isfinite(self.final_v) else float(self.true_v[0])
        return predict(
            self.times_s[seen], self.read_v[seen], lags_s=self.lags_s, noise=self.noise_v, near=NEAR * size_v,
            drift_limit=DRIFT_PER_S * size_v, since_s=0.0,
        )  # fmt: skip


def texts() -> dict[str, str]:
    """Design files by name."""
    made = {"tern": TERN.read_text(encoding="utf-8"), "breadboard": BREADBOARD.read_text(encoding="utf-8")}
    known = {one.name: one for one in (*catalogue.wanted(), *catalogue._extra())}
    return made | {name: catalogue.text(known[name]) for name in catalogue.FEW}


def with_heat(text: str, *, capacity: float = 1.0, lag: float = 1.0, sink: float = 1.0, tracking: float = -1.0) -> str:
    """A design file with its sink's capacity and resistance and its spreader's lag multiplied, its tracking set."""
    for key, factor in (("heatsink_capacity", capacity / sink), ("spreader_lag", lag), ("heatsink", sink)):
        found = re.findall(rf'^{key} = "([0-9.]+) ', text, flags=re.M)
        assert len(found) == 1, key
        text = text.replace(f'\n{key} = "{found[0]} ', f'\n{key} = "{float(found[0]) * factor:.6g} ')
    if tracking >= 0.0:
        text, many = re.subn(r"^spreader_tracking = .*$", f"spreader_tracking = {tracking}", text, flags=re.M)
        assert many == 1
    return text


def full_condition(design: Design) -> Condition:
    """Full rails, each trimmer where its unit meets the target."""
    rails = design.rails
    if design.spreader.trimmer is None:
        return Condition(positive_v=rails.positive_v, negative_v=rails.negative_v)
    return Condition(positive_v=rails.positive_v, negative_v=rails.negative_v, trimmer="target")


def healthy(
    names: list[str],
    builds: int,
    units: int,
    rng: np.random.Generator,
    heat_off: float = HEAT_OFF,
    first_seed: int = 700,
) -> Iterator[Curve]:
    """Curves of healthy units, from cold and after a trim."""
    for name in names:
        nominal_text = texts()[name]
        lags_s = lags_of(parse_design(nominal_text))
        # One build in each part of the range: units of a build share its heat, so that chance would weigh heavily.
        parts = np.stack([rng.permutation(builds) for _ in range(2)], axis=1) + rng.random((builds, 2))
        for build, (capacity, lag) in enumerate(1.0 - heat_off + 2.0 * heat_off * parts / builds):
            design = parse_design(with_heat(nominal_text, capacity=capacity, lag=lag))
            condition, parameters = full_condition(design), draw(design, units, seeds("unit", first_seed + build))
            cold = warm_up(design, condition, parameters, step_error_k=STEP_ERROR_K)
            peaks_v = 1.01 * np.maximum(cold.final_v, cold.cold_v)
            kinds = np.where(cold.drop_v.max(axis=1) > peaks_v, "rise and fall", "rise")
            yield from _read(name, kinds, lags_s, cold, rng)
            if design.spreader.trimmer is None or cold.travel is None:
                continue
            off = np.clip(cold.travel + rng.normal(0.0, OFF_TRAVEL, units), 0.02, 0.98)
            before = warm_up(
                design, condition, parameters, travel=off, until_s=float(rng.uniform(0.1, 3.0)) * lags_s[0]
            )
            after = warm_up(
                design, condition, parameters, travel=cold.travel, from_c=before.celsius[:, :, -1],
                step_error_k=STEP_ERROR_K,
            )  # fmt: skip
            yield from _read(name, np.full(units, "after a trim"), lags_s, after, rng)


def planted(
    names: list[str],
    units: int,
    rng: np.random.Generator,
    heat: tuple[tuple[float, float], ...] = BAD_HEAT,
    first_seed: int = 3,
) -> Iterator[Curve]:
    """Curves of units that run away, preset cold to the target; what is predicted knows the good design."""
    for name in names:
        design = parse_design(texts()[name])
        condition, parameters = full_condition(design), draw(design, units, seeds("unit", first_seed))
        if design.spreader.trimmer is None:
            continue
        preset = solve_units(design, parameters, condition, loading="none").position
        for tracking, sink in heat:
            bad = parse_design(with_heat(texts()[name], sink=sink, tracking=tracking))
            curve = warm_up(bad, condition, parameters, travel=preset)
            for one in _read(name, np.full(units, f"{tracking}, {sink}"), lags_of(design), curve, rng):
                if np.isfinite(one.runs_away_s):
                    yield one


def _read(
    name: str, kinds: Array, lags_s: tuple[float, ...], curve: WarmUp, rng: np.random.Generator
) -> Iterator[Curve]:
    for unit, kind in enumerate(kinds):
        noise_v, end_s = float(rng.choice(NOISES_V)), float(curve.runs_away_s[unit])
        end_s = 5.0 * lags_s[0] if np.isnan(end_s) else min(end_s, float(curve.times_s[-1]))
        times_s = np.arange(0.5, end_s, min(float(rng.choice([1.0, 2.0])), end_s / 200.0))
        true_v = curve.drop_at(times_s)[unit]
        there = np.isfinite(true_v)
        yield Curve(
            name=name, kind=str(kind), lags_s=lags_s, times_s=times_s[there], true_v=true_v[there],
            read_v=true_v[there] + noise_v * rng.standard_normal(int(there.sum())), noise_v=noise_v,
            final_v=float(curve.final_v[unit]), runs_away_s=float(curve.runs_away_s[unit]),
        )  # fmt: skip


class Tally:
    """What becomes of healthy curves."""

    def __init__(self) -> None:
        self.held: dict[tuple[str, str], list[bool]] = defaultdict(list)
        self.at: dict[float, list[bool]] = defaultdict(list)
        self.wide_v: dict[str, list[float]] = defaultdict(list)
        self.none, self.curves, self.runaways, self.never = 0, 0, 0, 0
        self.honest: list[bool] = []
        self.sooner_s: list[float] = []

    def one_lag(self, curve: Curve) -> None:
        """Look once, one time constant of the design into the soak."""
        self.curves += 1
        found = curve.look(curve.lags_s[0])
        self.runaways += found.verdict == "running away"
        if found.final is None or found.low is None or found.high is None:
            self.none += 1
            return
        self.held[curve.name, curve.kind].append(found.low <= curve.final_v <= found.high)
        self.wide_v[curve.kind].append(0.5 * (found.high - found.low))

    def all_along(self, curve: Curve) -> None:
        """Look some thirty times, until five time constants."""
        lag_s, settled_s, called = curve.lags_s[0], float("nan"), False
        for share in (
            0.02,
            0.04,
            0.06,
            0.09,
            0.12,
            0.16,
            *np.arange(0.2, 2.0, 0.1),
            2.25,
            2.5,
            3.0,
            3.5,
            4.0,
            4.5,
            5.0,
        ):
            found = curve.look(share * lag_s)
            called = called or found.verdict == "running away"
            if found.low is not None and found.high is not None:
                self.at[float(round(share, 2))].append(found.low <= curve.final_v <= found.high)
            if found.verdict == "settled" and np.isnan(settled_s):
                settled_s = share * lag_s
                true_v = float(np.interp(settled_s, curve.times_s, curve.true_v))
                self.honest.append(abs(true_v - curve.final_v) <= NEAR * curve.final_v)
        self.runaways += called
        self.never += bool(np.isnan(settled_s))
        if not np.isnan(settled_s):
            self.sooner_s.append(5.0 * lag_s - settled_s)

    def told(self) -> None:
        """Print it."""
        kinds: dict[str, list[bool]] = defaultdict(list)
        for (name, kind), held in self.held.items():
            kinds[kind] += held
            print(f"  {name[:60]:60} {kind:14} {len(held):5} curves, held {np.mean(held):6.1%}")
        many = [key for key, held in self.held.items() if len(held) >= MANY]
        if many:
            name, kind = min(many, key=lambda key: float(np.mean(self.held[key])))
            print(f"  worst of those with {MANY} or more: {name}, {kind}: {np.mean(self.held[name, kind]):.1%}")
        for kind, held in kinds.items():
            wide_uv = 1e6 * float(np.median(self.wide_v[kind]))
            print(f"  {kind:14} {len(held):5} curves, held {np.mean(held):6.1%}, median half-width {wide_uv:.0f} uV")
        every = [one for held in kinds.values() for one in held]
        print(f"  all            {len(every):5} curves, held {np.mean(every):6.1%}; {self.none} without a final value")


def main() -> None:
    """Run the study."""
    parser = argparse.ArgumentParser()
    parser.add_argument("--units", type=int, default=UNITS)
    parser.add_argument("--builds", type=int, default=BUILDS)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--design", default="", help="designs whose names begin with this")
    parser.add_argument("--once", action="store_true", help="look once, one time constant into the soak, and no more")
    given = parser.parse_args()
    names, began = [name for name in texts() if name.startswith(given.design)], time.process_time()
    off, exact = Tally(), Tally()
    first = 1000 * given.seed
    for curve in healthy(names, given.builds, given.units, np.random.default_rng([51, given.seed]), first_seed=first):
        off.one_lag(curve)
        if not given.once:
            off.all_along(curve)
    print(f"Builds whose heat is off by up to {HEAT_OFF:.0%}, one time constant into the soak:")
    off.told()
    if not given.once:
        _told_all_along(off)
        print("Builds exactly as designed, one time constant into the soak:")
        for curve in healthy(names, 1, 60, np.random.default_rng([12, given.seed]), heat_off=0.0, first_seed=first):
            exact.one_lag(curve)
        exact.told()
        _planted(names, given.seed)
    print(f"{time.process_time() - began:.0f} s of processor time")


def _told_all_along(off: Tally) -> None:
    print("  at other moments:", ", ".join(f"{at:g}: {np.mean(held):.1%}" for at, held in sorted(off.at.items())))
    saved = np.array(off.sooner_s) / 60.0
    print(
        f"  called settled: {len(off.honest)} of {off.curves}, {np.mean(off.honest):.2%} of them within {NEAR:.0%} of"
        f" the final value; {saved.mean():.1f} min sooner than five time constants on average"
        f" (from {saved.min():.1f} min to {saved.max():.1f} min)"
    )
    print(f"  healthy curves called runaways: {off.runaways} of {off.curves}")


def _planted(names: list[str], seed: int) -> None:
    called, missed, shares, times = 0, 0, [], []
    where: Counter[str] = Counter()
    for curve in planted(names, 5, np.random.default_rng([13, seed]), first_seed=1000 * seed):
        for share in np.linspace(0.03, 1.0, 60):
            if curve.look(share * curve.runs_away_s).verdict == "running away":
                called += 1
                shares.append(share)
                seen_v = float(np.interp(share * curve.runs_away_s, curve.times_s, curve.true_v))
                times.append(seen_v / float(curve.true_v[0]))
                break
        else:
            missed += 1
            where[curve.name] += 1
    if not shares:
        print(f"Planted runaways: none called, {missed} missed")
        return
    print(
        f"Planted runaways: {called} called, {missed} missed {dict(where) or ''}; called after {np.median(shares):.0%}"
        f" of their time to the rating of a junction (at the latest {max(shares):.0%}), the drop then at"
        f" {np.median(times):.1f} times (at most {max(times):.1f} times) what it was"
    )


if __name__ == "__main__":
    main()
