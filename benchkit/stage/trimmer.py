"""What a design's trimmer can do: reach, an open wiper, and how far the target moves from cold to warm.

How it is found out
-------------------
* Reach: the trimmer is replaced by an unknown conductance that meets the target, in every unit of an ensemble at once
  (`benchkit.stage.operate`), and its travel is read off. A unit without a solution, or a warm state, reaches nothing.
* Open wiper: the nominal unit is trimmed and then its wiper opens, on full rails with a current limit. It is safe when
  the bias does not rise and the supply stays out of its limit. Junctions keep their temperature: the first moment.
* Cold pre-set: each unit is trimmed in the state that the target is for; the other state of the same unit, its trimmer
  left alone, tells what to set cold so that the warm drop is the target.

A drop is that of pair 1: half of what lies across both its emitter resistors, as the target is.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from benchkit.errors import ModelError
from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design, target_drop_v
from benchkit.stage.draws import Array, Parameters, draw, nominal, seeds, take
from benchkit.stage.faults import Fault
from benchkit.stage.operate import Solved, solve_units
from benchkit.stage.runs import Mask, Run

COOLED_K_PER_W = 1e-3
"""Thermal resistance of a heat sink that stays at the ambient temperature (K/W)."""
REPORT_UNITS = 400
AUTHORITY_TRAVEL = (0.05, 0.95)
"""Part of the travel within which a target counts as reached with something to spare (common practice)."""
LEAST_AUTHORITY = 0.99
"""Share of units that should reach the target there."""
LIMIT_FACTOR = 2.0
"""Current limit for the open wiper, as a multiple of what the larger rail current is at the target."""
SAME_DROP = 1e-3
"""Relative difference of two drops below which they count as the same."""
_OUTSIDE = (0.05, 0.95)
_IN_LIMIT = 0.98


@dataclass(frozen=True, kw_only=True)
class Span:
    """A figure of the nominal unit, and between which values 90 % of units lie (5 % below, 5 % above)."""

    nominal: float
    low: float
    high: float


@dataclass(frozen=True, kw_only=True)
class Authority:
    """Whether the trimmer reaches the target.

    Attributes
    ----------
    travel : Span
        Travel from the least-bias end at which the target lies; outside 0..1 when out of reach.
    share : float
        Share of units that reach the target inside 5 % to 95 % of the travel.
    share_in_reach : float
        Share of units that reach it at all.
    units : int
    """

    travel: Span
    share: float
    share_in_reach: float
    units: int

    @property
    def standard_uncertainty(self) -> float:
        """Standard uncertainty of `share`, from the number of units (with one more of each kind, so never zero)."""
        share = (self.share * self.units + 1.0) / (self.units + 2.0)
        return float(np.sqrt(share * (1.0 - share) / (self.units + 2.0)))


@dataclass(frozen=True, kw_only=True)
class Idle:
    """A unit at rest: spread, emitter drop and rails (V), quiescent current of all pairs, larger rail current (A)."""

    spread_v: float
    drop_v: float
    quiescent_a: float
    positive_v: float
    negative_v: float
    supply_a: float


@dataclass(frozen=True, kw_only=True)
class OpenWiper:
    """What an open wiper does to a unit at its target on full rails.

    Attributes
    ----------
    limit_a : float
        The supply's current limit per rail.
    before, after : Idle
    in_limit : bool
        Whether the supply came into its limit, so that only the limit holds the current.
    safe : bool
        Whether the bias does not rise and the limit is not needed.
    """

    limit_a: float
    before: Idle
    after: Idle
    in_limit: bool
    safe: bool


@dataclass(frozen=True, kw_only=True)
class ColdToWarm:
    """One trimmer position, cold and warm.

    Attributes
    ----------
    cold_v, warm_v : Span
        Emitter drop; that of the target's own state is the target in every unit.
    held : "cold" or "warm"
        The state that the target is for.
    share_without : float
        Share of units in reach that have no warm state (or no solution) at that position.
    """

    cold_v: Span
    warm_v: Span
    held: str
    share_without: float


def full_rails(design: Design, **changes: object) -> Condition:
    """Condition at the design's full rails, the trimmer at the target, cold or warm as the target asks."""
    given: dict[str, object] = {
        "positive_v": design.rails.positive_v,
        "negative_v": design.rails.negative_v,
        "trimmer": "target",
        "when": design.target.when,
    }
    return Condition(**(given | changes))  # type: ignore[arg-type]


def drop_v(solved: Solved) -> Array:
    """Emitter drop (V) of pair 1, shape (units,)."""
    return solved.points["emitter.pair.1"] / 2.0


def quiescent_a(design: Design, solved: Solved) -> Array:
    """Quiescent current (A) of all pairs together, shape (units,): what flows through the upper emitter resistors."""
    currents = [solved.solution.current(f"emitter.upper.{n}") for n in range(1, design.output.pairs + 1)]
    return np.asarray(np.sum(currents, axis=0))


LEAST_UNITS = 200
"""Units that are drawn to see what a stage may draw at least bias."""


def least_share(design: Design) -> float:
    """Share of the target drop that the nominal unit has at its least bias: full rails, cold; 1 without a trimmer.

    Raises
    ------
    ModelError
        When there is no solution.
    """
    if design.spreader.trimmer is None:
        return 1.0
    solved = solve_units(design, nominal(design), full_rails(design, trimmer="least", when="cold"), loading="none")
    if not solved.converged[0]:
        raise ModelError(
            f"{design.name}: no operating point with the trimmer at least bias",
            "a solution of the nominal unit",
            "Check the spreader's resistors in the design file",
        )
    return max(0.0, float(drop_v(solved)[0])) / target_drop_v(design)


def least_draw_a(design: Design) -> float:
    """Largest rail current (A) of some drawn units at least bias: full rails, cold or warm; 0 without a trimmer.

    Units without a solution are left out; what a rail draws is no more exact here than the draws are many.
    """
    if design.spreader.trimmer is None:
        return 0.0
    drawn = draw(design, LEAST_UNITS, seeds("limits", 0))
    most_a = 0.0
    for when in ("cold", "warm"):
        solved = solve_units(design, drawn, full_rails(design, trimmer="least", when=when), loading="none")
        for rail in ("rail+.current", "rail-.current"):
            if rail in solved.points and solved.converged.any():
                most_a = max(most_a, float(np.abs(solved.points[rail][solved.converged]).max()))
    return most_a


@lru_cache(maxsize=32)
def at_target(design: Design) -> tuple[Solved, float]:
    """Nominal unit at the target on full rails, and the travel that it takes, outside 0..1 when out of reach.

    Raises
    ------
    ModelError
        Without a trimmer, or without an operating point.
    """
    if design.spreader.trimmer is None:
        raise ModelError(f"{design.name} has no trimmer", "a trimmer, where its reach is asked for")
    unit = solve_units(design, nominal(design), full_rails(design), loading="none")
    if unit.unclipped is None or (not unit.converged[0] and bool(unit.in_reach[0])):
        raise ModelError(f"{design.name} has no operating point at its target", "one", "Check the design file")
    return unit, float(unit.unclipped[0])


@dataclass(frozen=True, kw_only=True)
class _Group:
    """Drawn units, each with the travel that meets the target (outside 0..1 when out of reach)."""

    parameters: Parameters
    travel: Array
    reached: Mask


@lru_cache(maxsize=8)
def _drawn(design: Design, units: int, seed: int) -> _Group:
    unit, travel = at_target(design)
    if not np.isfinite(travel):
        raise ModelError(f"{design.name}: no trimmer would meet the target", "a target that the spreader can make")
    condition = full_rails(design)
    parameters = draw(design, units, seeds("limits", seed))
    run = Run(design, parameters, condition, None, units, None)
    settled = bool(unit.converged[0])
    temperature = {
        name: np.broadcast_to(celsius if settled else run.ambient_c, units).astype(np.float64)
        for name, celsius in unit.temperatures_c.items()
    }
    # Units out of reach are not solved again at the ends of their tracks: nothing here is asked of them.
    state = run.find_trimmer(temperature, unit.solution if settled else None, condition.when == "warm")
    reached = state.converged & (state.position >= 0.0) & (state.position <= 1.0)
    return _Group(parameters=parameters, travel=np.where(state.converged, state.position, np.nan), reached=reached)


def authority(design: Design, units: int = REPORT_UNITS, seed: int = 0) -> Authority:
    """Find out in how many units the trimmer reaches the target.

    Raises
    ------
    ModelError
        As `at_target`; when no trimmer whatever would meet the target.
    """
    _, travel = at_target(design)
    group = _drawn(design, units, seed)
    low, high = AUTHORITY_TRAVEL
    return Authority(
        travel=span_of(travel, group.travel[~np.isnan(group.travel)]),
        share=float(np.mean((group.travel >= low) & (group.travel <= high))),
        share_in_reach=float(np.mean(group.reached)),
        units=units,
    )


def open_wiper(design: Design, limit_a: float | None = None) -> OpenWiper:
    """Find out what an open wiper does to the nominal unit at its target (or at the end nearest to it).

    Parameters
    ----------
    design : Design
    limit_a : float, optional
        The supply's current limit per rail (A); without, twice the larger rail current at the target.

    Raises
    ------
    ModelError
        As `at_target`, or when there is no solution with the wiper open.
    """
    unit, travel = at_target(design)
    if not unit.converged[0]:
        raise ModelError(f"{design.name} has no operating point where its trimmer is nearest to the target", "one")
    before = _idle(design, unit)
    limit = LIMIT_FACTOR * before.supply_a if limit_a is None else limit_a
    condition = full_rails(design, trimmer=min(max(travel, 0.0), 1.0), limit_a=limit)
    opened = solve_units(
        design, nominal(design), condition, Fault("spreader.trimmer", "wiper open"),
        temperatures_c=unit.temperatures_c, loading="none",
    )  # fmt: skip
    if not opened.converged[0]:
        raise ModelError(f"{design.name}: no operating point with the trimmer's wiper open", "one", "Check the design")
    after = _idle(design, opened)
    in_limit = after.supply_a >= _IN_LIMIT * limit
    falls = after.drop_v <= before.drop_v * (1.0 + SAME_DROP)
    return OpenWiper(limit_a=limit, before=before, after=after, in_limit=in_limit, safe=falls and not in_limit)


def _idle(design: Design, solved: Solved) -> Idle:
    points = {name: float(value[0]) for name, value in solved.points.items()}
    return Idle(
        spread_v=points["spread"],
        drop_v=float(drop_v(solved)[0]),
        quiescent_a=float(quiescent_a(design, solved)[0]),
        positive_v=points["rail+"],
        negative_v=points.get("rail-", 0.0),
        supply_a=max(points["rail+.current"], points.get("rail-.current", 0.0)),
    )


def cold_to_warm(design: Design, units: int = REPORT_UNITS, seed: int = 0) -> ColdToWarm:
    """Find out what the target's trimmer position reads cold, and what warm.

    Raises
    ------
    ModelError
        As `at_target`; when the nominal unit does not reach its target, or has no warm state there.
    """
    unit, travel = at_target(design)
    if not 0.0 <= travel <= 1.0:
        raise ModelError(f"{design.name}: the target is out of the trimmer's reach", "a target within its travel")
    held = design.target.when
    other = "cold" if held == "warm" else "warm"
    condition = full_rails(design, trimmer=travel, when=other)
    away = solve_units(design, nominal(design), condition, loading="none")
    if not away.converged[0]:
        raise ModelError(
            f"{design.name} has no {other} state with the trimmer where its {held} target is", "a state of rest",
            "Look at heat sink and tracking in the design file",
        )  # fmt: skip
    group = _drawn(design, units, seed)
    which = np.flatnonzero(group.reached)
    drops = np.zeros(0)
    if which.size:
        found = solve_units(
            design, take(group.parameters, which), condition, position=group.travel[which], start=away, loading="none"
        )
        drops = drop_v(found)[found.converged]
    target_v = float(drop_v(unit)[0])
    at = Span(nominal=target_v, low=target_v, high=target_v)
    moved = span_of(float(drop_v(away)[0]), drops)
    return ColdToWarm(
        cold_v=at if held == "cold" else moved,
        warm_v=at if held == "warm" else moved,
        held=held,
        share_without=1.0 - drops.size / max(1, which.size),
    )


def sink_cold_v(design: Design) -> float:
    """Emitter drop (V) of the nominal unit while only its heat sink is cold, its trimmer where the target is met.

    Drivers, spreader and junctions heat themselves within a minute of power, the heat sink takes many: this is what a
    target for the warm stage reads in the first minutes.

    Raises
    ------
    ModelError
        As `at_target`; when the nominal unit has no such state.
    """
    _, travel = at_target(design)
    cooled = design.with_thermal("its heat sink cold", heatsink_k_per_w=COOLED_K_PER_W)
    unit = solve_units(cooled, nominal(cooled), full_rails(design, trimmer=travel, when="warm"), loading="none")
    if not unit.converged[0]:
        raise ModelError(
            f"{design.name} has no state of rest beside a cold heat sink",
            "one",
            "Look at the thermal data of the design",
        )
    return float(drop_v(unit)[0])


def span_of(value: float, values: Array) -> Span:
    """Make the span of the nominal unit's value and those of drawn units, shape (units,)."""
    if not values.size:
        return Span(nominal=value, low=float("nan"), high=float("nan"))
    low, high = np.quantile(values, _OUTSIDE, method="nearest")
    return Span(nominal=value, low=float(low), high=float(high))
