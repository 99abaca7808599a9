"""The units of the suspects study: made once with ngspice, kept in a folder, read again for every evaluation.

Every unit of a design has drawn parts and one fault (or none) and is read

* ``least``: at about 40 % of the full rails, a current limit of 50 mA (or twice what the nominal unit draws, where that
  is more), the trimmer at its least-bias end;
* ``trimmed``: at the same rails, the trimmer where this unit, healthy, has 5 mV over an emitter resistor (a design
  without a trimmer: at its full rails);
* ``unpowered``: at every ohms and diode point, the trimmer at its least-bias end.

A unit that ngspice can't solve at a reading of a condition has no readings under that condition, and is named.
"""

from __future__ import annotations

import json
import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from benchkit.stage.conditions import Condition, Unpowered
from benchkit.stage.design import Design, target_drop_v
from benchkit.stage.draws import draw, nominal, seeds
from benchkit.stage.faults import HEALTHY, Fault, faults_of
from benchkit.stage.observations import Conditions, Observation
from benchkit.stage.operate import solve_units
from benchkit.stage.reach import least_regulating_rails
from tests.reference import ngspice_units

Array = NDArray[np.float64]

LOW_RAILS = 0.4
LIMIT_A = 0.05
SECOND_DROP_V = 5e-3
SERIES = ("least", "trimmed", "unpowered")


@dataclass(frozen=True, kw_only=True)
class Series:
    """Readings of all units under one condition; NaN for units without.

    Attributes
    ----------
    points : tuple of str
    conditions : tuple of Conditions
        One a point.
    exact, shown, uncertain : array of shape (units, points)
        As ngspice has them, with a meter's noise, and the standard uncertainty of what is shown.
    """

    points: tuple[str, ...]
    conditions: tuple[Conditions, ...]
    exact: Array
    shown: Array
    uncertain: Array

    @property
    def solved(self) -> NDArray[np.bool_]:
        """Units that have all their readings."""
        return np.asarray(~np.isnan(self.exact).any(axis=1))

    def observations(self, unit: int) -> list[Observation]:
        """What was read of one unit."""
        return [self.observation(unit, point) for point in self.points]

    def observation(self, unit: int, point: str) -> Observation:
        """One reading of one unit."""
        column = self.points.index(point)
        value, u = float(self.shown[unit, column]), float(self.uncertain[unit, column])
        return Observation(conditions=self.conditions[column], point=point, value=value, standard_uncertainty=u)


@dataclass(frozen=True, kw_only=True)
class Units:
    """The units of one design.

    Attributes
    ----------
    faults : tuple of Fault
        One a unit; `HEALTHY` first.
    series : dict of str to Series
        By name, see `SERIES`.
    seconds, copies : float, int
        Processor time of ngspice, and copies of the stage that it solved.
    """

    design: Design
    faults: tuple[Fault, ...]
    series: dict[str, Series]
    seconds: float
    copies: int

    def unsolved(self, *names: str) -> list[str]:
        """Faults of units that have no readings under one of the conditions."""
        solved = np.all([self.series[name].solved for name in names], axis=0)
        return [str(self.faults[unit]) for unit in np.flatnonzero(~solved)]


def low_rails(design: Design) -> Condition:
    """The first condition of the study."""
    share = max(LOW_RAILS, least_regulating_rails(design)[0] / design.rails.positive_v)
    positive_v, negative_v = (round(share * volts, 1) for volts in (design.rails.positive_v, design.rails.negative_v))
    condition = Condition(positive_v=positive_v, negative_v=negative_v, limit_a=1.0, trimmer="least")
    return replace(condition, limit_a=_limit_a(design, condition))


def second(design: Design) -> Condition:
    """The second condition of the study."""
    condition = replace(low_rails(design), limit_a=1.0)
    if design.spreader.trimmer is None:
        rails = design.rails
        condition = replace(condition, positive_v=rails.positive_v, negative_v=rails.negative_v)
    else:
        condition = replace(condition, trimmer="target", target_share=SECOND_DROP_V / target_drop_v(design))
    return replace(condition, limit_a=_limit_a(design, condition))


def _limit_a(design: Design, condition: Condition) -> float:
    unit = solve_units(design, nominal(design), condition, loading="none")
    draws_a = max(float(unit.points[name][0]) for name in ("rail+.current", "rail-.current") if name in unit.points)
    return max(LIMIT_A, math.ceil(200.0 * draws_a) / 100.0)


def made(design: Design, folder: Path, *, per_fault: int, healthy: int, seed: int, jobs: int = 1) -> Units:
    """The units of a design, from the folder or made now and put there."""
    name = "".join(letter if letter.isalnum() else "-" for letter in design.name.lower())
    path = folder / f"{name}.{design.sha256[:10]}.{healthy}+{per_fault}.{seed}.json"
    if not path.exists():
        folder.mkdir(parents=True, exist_ok=True)
        written = _make(design, per_fault, healthy, seed, jobs)
        partial = path.with_suffix(".part")
        partial.write_text(json.dumps(written))
        partial.replace(path)
    return _read(design, json.loads(path.read_text()))


def _make(design: Design, per_fault: int, healthy: int, seed: int, jobs: int) -> dict[str, object]:
    faults = [HEALTHY] * healthy + [fault for fault in faults_of(design) for _ in range(per_fault)]
    units = len(faults)
    parameters = draw(design, units, seeds("unit", seed))
    noise = seeds("noise", seed)
    trimmed = design.spreader.trimmer is not None
    least, at_drop = low_rails(design), second(design)
    travel = np.zeros(units) if trimmed else None
    turned = solve_units(design, parameters, at_drop, loading="none").position if trimmed else None
    found = {
        "least": ngspice_units.read_powered(design, parameters, least, faults, travel, jobs=jobs),
        "trimmed": ngspice_units.read_powered(design, parameters, at_drop, faults, turned, jobs=jobs),
        "unpowered": ngspice_units.read_unpowered(design, parameters, faults, travel, jobs=jobs),
    }
    series = {}
    for name, readings in found.items():
        shown, uncertain = ngspice_units.add_noise(readings, noise)
        points = list(readings.values)
        series[name] = {
            "points": points,
            "exact": [readings.values[point].tolist() for point in points],
            "shown": [shown[point].tolist() for point in points],
            "uncertain": [uncertain[point].tolist() for point in points],
        }
    return {
        "faults": [[fault.part, fault.fault] for fault in faults],
        "series": series,
        "seconds": sum(readings.spent.seconds for readings in found.values()),
        "copies": sum(readings.spent.copies for readings in found.values()),
    }


def _read(design: Design, written: dict[str, object]) -> Units:
    kept: dict[str, dict[str, list[list[float]]]] = written["series"]  # type: ignore[assignment]
    powered: dict[str, Condition] = {"least": low_rails(design), "trimmed": second(design)}
    series = {}
    for name, columns in kept.items():
        points: tuple[str, ...] = tuple(columns["points"])  # type: ignore[arg-type]
        conditions: Sequence[Conditions] = [
            (powered[name],) if name in powered else (Unpowered(point=point, trimmer="least"),) for point in points
        ]
        tables = {key: np.array(columns[key], np.float64).T for key in ("exact", "shown", "uncertain")}
        series[name] = Series(points=points, conditions=tuple(conditions), **tables)
    return Units(
        design=design,
        faults=tuple(Fault(part, fault) for part, fault in written["faults"]),  # type: ignore[attr-defined]
        series=series,
        seconds=float(written["seconds"]),  # type: ignore[arg-type]
        copies=int(written["copies"]),  # type: ignore[call-overload]
    )
