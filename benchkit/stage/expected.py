"""Expected values: what a healthy unit reads under a condition, and the limits that hold 99.73 % of healthy units.

An ensemble of units is drawn from the design's tolerances (`benchkit.stage.draws`) and solved under the condition
(`benchkit.stage.operate`, `benchkit.stage.unpowered`). The limits are its quantiles (`benchkit.stage.quantiles`). Where
the output rests at a share of its rails, its limits allow for what a supply's setting may be off.

Units that did not converge have no reading. More than 0.1 % of them, and there are no limits either: `ModelError`. With
the trimmer at "target", units whose trimmer can't reach it are not at the target; they are left out and counted.
"""

from __future__ import annotations

import math
import time
from collections.abc import Sequence
from dataclasses import asdict, dataclass
from functools import lru_cache

import numpy as np

from benchkit.errors import EntryError, ModelError
from benchkit.quantities import show
from benchkit.stage.conditions import Condition, TrimmerPosition, Unpowered
from benchkit.stage.design import Design
from benchkit.stage.draws import Array, Parameters, draw, nominal, seeds
from benchkit.stage.electrothermal import is_stable
from benchkit.stage.latent import rest_moves_v
from benchkit.stage.operate import Solved, solve_units
from benchkit.stage.points import find_point, points_of
from benchkit.stage.quantiles import LEAST_UNITS, interval
from benchkit.stage.reach import least_regulating_rails
from benchkit.stage.runs import Mask
from benchkit.stage.unpowered import LEAST_INSULATION_OHM, OVER_RANGE, solve_unpowered
from benchkit.stage.warming import STEADIER

__all__ = [
    "DEFAULT_UNITS",
    "Ensemble",
    "Expected",
    "PointLimits",
    "ensemble",
    "expected",
    "expected_json",
    "expected_unpowered",
    "least_regulating_rails",
    "share_inside",
    "solve_units",
]

DEFAULT_UNITS = 6000
"""Units in an ensemble when nothing else is asked for.

So many that, of fresh healthy units, 99.4 % to 99.95 % lie within each reading's limits whatever the seed: the share
outside scatters by 0.05 % to 0.08 % (one sigma) around 0.27 %. In a study over both demonstration designs (the script
``tests/benchmarks/default_units.py``; 64,000 fresh units, six seeds, four conditions) single readings left the band at
1,000 and 2,000 units and none from 4,000 on; the worst one held 99.47 % at 4,000 units and 99.52 % at 6,000.
"""
MOST_UNSOLVED = 1e-3
"""Share of units without a solution above which a prediction is refused."""
LEAST_IN_REACH = 0.5
"""Share of units that must reach the target for limits at the target to mean anything."""
_HELD_WIDTH = 1e-3


@dataclass(frozen=True, kw_only=True)
class PointLimits:
    """Limits of one reading.

    Attributes
    ----------
    point, unit : str
    nominal : float or None
        Reading of the nominal unit; None for an overload.
    low, high : float
        Hold 99.73 % of healthy units; infinite where a healthy unit may read overload.
    held : bool
        The condition holds this reading, so that its limits are no prediction and have next to no width: a rail that a
        supply holds at its set voltage, the heat sink of a cold unit, the drop that the trimmer was set by. A real
        reading of it tells about supply, room or trim, not about the unit's parts.
    """

    point: str
    unit: str
    nominal: float | None
    low: float
    high: float
    held: bool = False


@dataclass(frozen=True, kw_only=True)
class Expected:
    """Expected values under one condition (or at some unpowered points).

    Attributes
    ----------
    points : tuple of PointLimits
        In the order of `points_of`.
    units, solved : int
        Units asked for; units that the limits are made from.
    out_of_reach : int
        With the trimmer at "target": units whose trimmer can't reach it, left out.
    seed : int
    solve_seconds : float
    condition : Condition or Unpowered
    """

    points: tuple[PointLimits, ...]
    units: int
    solved: int
    out_of_reach: int
    seed: int
    solve_seconds: float
    condition: Condition | Unpowered

    def __getitem__(self, point: str) -> PointLimits:
        for limits in self.points:
            if limits.point == point:
                return limits
        raise KeyError(point)

    def __contains__(self, point: object) -> bool:
        return any(limits.point == point for limits in self.points)


@dataclass(frozen=True, kw_only=True)
class Ensemble:
    """The units that limits are made from.

    Attributes
    ----------
    nominal, drawn : Solved
        The nominal unit and the drawn ones.
    parameters : dict
        Of the drawn ones.
    good : array of bool of shape (units,)
        Units with a solution, and at the target where one was asked for.
    """

    nominal: Solved
    drawn: Solved
    parameters: Parameters
    good: Mask


@lru_cache(maxsize=4)
def ensemble(design: Design, condition: Condition, units: int = DEFAULT_UNITS, seed: int = 0) -> Ensemble:
    """Draw and solve healthy units under a powered condition; the last few are kept, and nobody changes them.

    Raises
    ------
    ModelError
        When the nominal unit or more than 0.1 % of the units have no solution, or too few can reach the target.
    """
    unit = solve_units(design, nominal(design), condition, loading="none")
    if not unit.converged[0]:
        raise _unsolved(design, condition, 1, 1)
    trimmed_warm = condition.when == "warm" and condition.trimmer == "target"
    if trimmed_warm and not bool(is_stable(design, nominal(design), condition, unit)[0]):
        raise ModelError(
            f"{design.name}: trimmed to its target warm, the nominal unit has no stable warm state; it leaves that "
            "balance by itself, running up or falling back",
            "a state of rest that a unit stays in",
            STEADIER,
        )
    parameters = draw(design, units, seeds("limits", seed))
    parameters = {key: value.reshape(-1) if units == 1 else value for key, value in parameters.items()}
    if design.output.rest.share is not None:
        parameters["output.offset"] = parameters["output.offset"] + rest_moves_v(design, condition, units, seed)
    drawn = solve_units(design, parameters, condition, start=unit)
    failed = int(np.count_nonzero(~drawn.converged))
    if failed > MOST_UNSOLVED * units:
        raise _unsolved(design, condition, failed, units)
    good = drawn.converged & drawn.in_reach
    if np.count_nonzero(good) < LEAST_IN_REACH * units:
        raise ModelError(
            f"The trimmer of {design.name} reaches the target in {np.count_nonzero(good)} of {units} units",
            "a target within the trimmer's travel in most units",
            "Check the rails, limit and temperature that were asked for, or the spreader's resistors and the target in"
            " the design file",
        )
    return Ensemble(nominal=unit, drawn=drawn, parameters=parameters, good=good)


def expected(
    design: Design,
    condition: Condition,
    units: int = DEFAULT_UNITS,
    seed: int = 0,
    points: Sequence[str] | None = None,
) -> Expected:
    """Limits of every powered reading under a condition.

    Parameters
    ----------
    design : Design
    condition : Condition
    units : int
        Units to draw, at least 50.
    seed : int
    points : sequence of str, optional
        Only these; without, every modelled point.

    Returns
    -------
    Expected

    Raises
    ------
    ModelError
        As `ensemble`.
    EntryError
        When a point is none of the design's.
    """
    began = time.perf_counter()
    _check_units(units)
    wanted = None if points is None else {find_point(design, name).name for name in points}
    group = ensemble(design, condition, units, seed)
    bare = solve_units(design, nominal(design), condition, start=group.nominal)
    limits = []
    for point in points_of(design):
        if point.name not in group.drawn.points or (wanted is not None and point.name not in wanted):
            continue
        low, high = interval(group.drawn.points[point.name][group.good])
        value = float(bare.points[point.name][0])
        held = _held(point.name, condition, design, high - low)
        limits.append(PointLimits(point=point.name, unit=point.unit, nominal=value, low=low, high=high, held=held))
    return Expected(
        points=tuple(limits),
        units=units,
        solved=int(np.count_nonzero(group.drawn.converged)),
        out_of_reach=int(np.count_nonzero(group.drawn.converged & ~group.drawn.in_reach)),
        seed=seed,
        solve_seconds=time.perf_counter() - began,
        condition=condition,
    )


def expected_unpowered(
    design: Design,
    points: str | Sequence[str] | None = None,
    trimmer: TrimmerPosition = "unknown",
    units: int = DEFAULT_UNITS,
    seed: int = 0,
    ambient_c: float | None = None,
) -> Expected:
    """Limits of unpowered readings.

    Parameters
    ----------
    design : Design
    points : str or sequence of str, optional
        Unpowered points; without, all of them.
    trimmer : as for `Condition`
    units, seed : int
    ambient_c : float, optional

    Returns
    -------
    Expected
        ``nominal`` is None and ``high`` infinite where an overload is right. Insulation to the heat sink has the low
        limit of 1 Mohm (common practice), not one of the model.

    Raises
    ------
    ModelError, EntryError
        As `expected`.
    """
    began = time.perf_counter()
    _check_units(units)
    names = [points] if isinstance(points, str) else points
    if names is None:
        names = [point.name for point in points_of(design) if not point.powered]
    limits = []
    solved = units
    for name in names:
        one, failed = _unpowered_limits(design, find_point(design, name).name, trimmer, units, seed, ambient_c)
        limits.append(one)
        solved = min(solved, units - failed)
    condition = Unpowered(point=limits[-1].point, trimmer=trimmer, ambient_c=ambient_c)
    return Expected(
        points=tuple(limits),
        units=units,
        solved=solved,
        out_of_reach=0,
        seed=seed,
        solve_seconds=time.perf_counter() - began,
        condition=condition,
    )


@lru_cache(maxsize=128)
def _unpowered_limits(
    design: Design, name: str, trimmer: TrimmerPosition, units: int, seed: int, ambient_c: float | None
) -> tuple[PointLimits, int]:
    """Limits of one unpowered reading, and how many units have no solution; kept for whoever asks next."""
    condition = Unpowered(point=name, trimmer=trimmer, ambient_c=ambient_c)
    unit = solve_unpowered(design, nominal(design), condition)
    drawn = solve_unpowered(design, _limits_draw(design, units, seed), condition)
    good = np.broadcast_to(drawn.converged, units)
    failed = int(np.count_nonzero(~good))
    if failed > MOST_UNSOLVED * units or not unit.converged[0]:
        raise _unsolved(design, condition, failed, units)
    value: float | None = float(unit.values[0])
    low, high = interval(np.broadcast_to(drawn.values, units)[good])
    if name.startswith("ohm.heatsink."):
        low = LEAST_INSULATION_OHM
    elif math.isinf(low):
        low = OVER_RANGE * drawn.range.full_scale
    if value is not None and math.isinf(value):
        value = None
    return PointLimits(point=name, unit=find_point(design, name).unit, nominal=value, low=low, high=high), failed


@lru_cache(maxsize=2)
def _limits_draw(design: Design, units: int, seed: int) -> Parameters:
    return draw(design, units, seeds("limits", seed))


def expected_json(
    design: Design,
    condition: Condition,
    units: int = DEFAULT_UNITS,
    seed: int = 0,
    points: Sequence[str] | None = None,
) -> dict[str, object]:
    """Make the object that ``benchkit expect --json`` prints.

    Returns
    -------
    dict
        ``format``, ``design``, ``conditions``, ``units``, ``solved``, ``seed``, ``solve_seconds``, ``points``; a number
        that is not finite is None.
    """
    found = expected(design, condition, units, seed, points)
    return {
        "format": 1,
        "design": {"name": design.name, "revision": design.revision, "sha256": design.sha256},
        "conditions": {key: finite(value) for key, value in asdict(condition).items()},
        "units": found.units,
        "solved": found.solved,
        "out_of_reach": found.out_of_reach,
        "seed": found.seed,
        "solve_seconds": finite(found.solve_seconds),
        "points": [{key: finite(getattr(limits, key)) for key in _POINT_KEYS} for limits in found.points],
    }


_POINT_KEYS = ("point", "unit", "nominal", "low", "high")


def _held(point: str, condition: Condition, design: Design, width: float) -> bool:
    if point in ("rail+", "rail-"):
        set_v = condition.positive_v if point == "rail+" else -condition.negative_v
        return width < _HELD_WIDTH * set_v
    if point == "heatsink":
        return condition.when == "cold"
    return point == "emitter.pair.1" and condition.trimmer == "target" and design.spreader.trimmer is not None


def finite(value: object) -> object:
    """Return None for a number that is not finite, and anything else as it is."""
    return None if isinstance(value, float) and not math.isfinite(value) else value


def _check_units(units: int) -> None:
    if not LEAST_UNITS <= units <= 1_000_000:
        raise EntryError(f"units: {units} came", f"{LEAST_UNITS} to 1000000 units")


def _unsolved(design: Design, condition: Condition | Unpowered, failed: int, units: int) -> ModelError:
    who = "the nominal unit" if units == 1 else f"{failed} of {units} units"
    if isinstance(condition, Unpowered):
        where = condition.point
    else:
        where = f"{show(condition.positive_v, 'V')}, {show(condition.negative_v, 'V')}, trimmer {condition.trimmer}"
    if isinstance(condition, Condition) and condition.when == "warm":
        return ModelError(
            f"{design.name} ({where}): {who} found no warm state; the stage may run away there",
            f"a state of rest in all but {MOST_UNSOLVED:.1%} of units",
            "Ask for less bias or lower rails, or look at heat sink and tracking in the design file",
        )
    return ModelError(
        f"{design.name} ({where}): {who} found no operating point",
        f"a solution in all but {MOST_UNSOLVED:.1%} of units",
        "There are no limits for this condition; look at the design file for a value that can't be meant",
    )


def share_inside(limits: PointLimits, values: Array) -> float:
    """Share of readings within limits, both ends included."""
    return float(np.mean((values >= limits.low) & (values <= limits.high)))
