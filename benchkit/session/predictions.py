"""Limits and rules, worked out off the event loop.

Everything here blocks for up to some seconds and touches nothing but its arguments; the session runs it in a thread.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from functools import lru_cache

from benchkit import quantities
from benchkit.errors import BenchkitError, ModelError
from benchkit.events import Event, Judged, PointLimits, Predicted, PredictionRefused, Tripped
from benchkit.judge.answers import Answers, OfUnits
from benchkit.judge.rules import RuleFacts, evaluate
from benchkit.judge.screw import KNEE_V
from benchkit.judge.trust import RailLine
from benchkit.measure.readings import Reading
from benchkit.procedure.actions import CheckWarm, Evaluate, Predict
from benchkit.procedure.items import Item, Joined
from benchkit.procedure.state import State
from benchkit.procedure.walk import Walk
from benchkit.stage.conditions import Condition, Unpowered
from benchkit.stage.design import Design


def predict(design: Design, action: Predict, units: int | None, seed: int) -> Event:
    """Work out the limits of one condition.

    Parameters
    ----------
    design : Design
    action : Predict
    units : int or None
        How many units are drawn; None for the model's own choice.
    seed : int

    Returns
    -------
    Predicted or PredictionRefused
    """
    from benchkit.stage.expected import DEFAULT_UNITS, expected, expected_unpowered

    count = units or DEFAULT_UNITS
    found = []
    try:
        for condition in action.conditions:
            if isinstance(condition, Unpowered):
                found.append(
                    expected_unpowered(design, action.points, trimmer=condition.trimmer, units=count, seed=seed)
                )
            else:
                found.append(expected(design, condition, units=count, seed=seed, points=action.points))
    except ModelError as error:
        return PredictionRefused(item=action.item, condition=action.key, problem=str(error))
    limits = tuple(
        PointLimits(
            point=one.point,
            unit=one.unit,
            nominal=_open(one.nominal),
            low=_open(min(other[one.point].low for other in found)),
            high=_open(max(other[one.point].high for other in found)),
        )
        for one in found[0].points
    )
    return Predicted(
        item=action.item,
        condition=action.key,
        limits=limits,
        units=count,
        solved=min(one.solved for one in found),
        seed=seed,
        seconds=sum(one.solve_seconds for one in found),
    )


def _open(value: float | None) -> float | None:
    """Turn a limit that is not finite into an open side."""
    return None if value is None or not math.isfinite(value) else value


@dataclass(frozen=True, kw_only=True)
class Screw:
    """What the model says of a trimmer's screw, for the reading of one point.

    Parameters
    ----------
    per_turn : float or None
        Change of the reading for a turn towards more bias, at `full`; None where there is no model of it.
    full : float
        The reading at the design's target.
    knee : float
        Where the answer to the screw goes from exponential to linear; see `benchkit.judge.screw`.
    settled_share : float
        How much more a move does once all has come to rest than at once.
    more_way : str
    turns : float
        From end to end.
    standing : float
        What is read there without any bias: of a rail, what the feeds and the spreader draw.
    """

    per_turn: float | None
    full: float
    knee: float
    settled_share: float
    more_way: str
    turns: float
    standing: float = 0.0


@lru_cache(maxsize=64)
def screw_of(
    design: Design,
    point: str,
    target: float,
    share: float,
    fuse_ohm: float | None = None,
    condition: Condition | None = None,
) -> Screw:
    """Say what a turn does to the reading of a point.

    Parameters
    ----------
    design : Design
    point : str
        An emitter drop, a pair's drop, a rail's current or its drop over a resistor in the fuse's place.
    target : float
        What is aimed at there, which is `share` of the reading at the design's target.
    share : float
    fuse_ohm : float, optional
    condition : Condition, optional
        Under which it is read; without, a rail's standing current is left out of the account.
    """
    from benchkit.stage.trimmer_slope import slope

    trimmer = design.spreader.trimmer
    standing = 0.0 if condition is None else _standing(design, point, share, condition)
    full = standing + (target - standing) / share
    emitter_ohm = design.output.emitter_resistor.value
    # A rail's reading for each volt of emitter drop: the current of all pairs, and over a resistor its drop.
    rail = design.output.pairs / emitter_ohm * (fuse_ohm or 0.0 if point.endswith(".drop") else 1.0)
    volts = 2.0 if ".pair." in point else rail if point.startswith("rail") else 1.0
    if trimmer is None:
        return Screw(
            per_turn=None, full=full, knee=KNEE_V * volts, settled_share=1.0, more_way="clockwise", turns=0.0
        )  # fmt: skip
    per_turn, settled = None, 1.0
    try:
        found = slope(design)
    except BenchkitError:
        found = None
    if found is not None:
        per_turn = found.drop_v_per_turn * volts or None
        if found.settled_drop_v_per_turn is not None and found.drop_v_per_turn > 0.0:
            settled = found.settled_drop_v_per_turn / found.drop_v_per_turn
    return Screw(
        per_turn=per_turn,
        full=full,
        knee=KNEE_V * volts,
        settled_share=settled,
        more_way=trimmer.raises_bias,
        turns=trimmer.turns,
        standing=standing,
    )


def _standing(design: Design, point: str, share: float, condition: Condition) -> float:
    """Return what the nominal unit's rail carries beside the quiescent current; 0 where that can't be told."""
    from benchkit.stage.draws import nominal
    from benchkit.stage.operate import solve_units
    from benchkit.stage.trimmer import quiescent_a

    if not point.startswith("rail") or design.spreader.trimmer is None:
        return 0.0
    ohm = 1.0 if point.endswith(".current") else condition.fuse_ohm or 0.0
    try:
        there = replace(condition, trimmer="target", target_share=share, limit_a=None)
        solved = solve_units(design, nominal(design), there, loading="none")
    except BenchkitError:
        return 0.0
    if point not in solved.points or not solved.converged[0]:
        return 0.0
    return max(float(solved.points[point][0]) - ohm * float(quiescent_a(design, solved)[0]), 0.0)


def rail_line(design: Design, point: str, condition: Condition | None) -> RailLine | None:
    """Say what the positive rail's current is at a reading of a drop; None where there is no model of it."""
    if condition is None or point.startswith("rail"):
        return None
    standing_a = _standing(design, "rail+.current", condition.target_share, condition)
    per_volt = design.output.pairs / design.output.emitter_resistor.value / (2.0 if ".pair." in point else 1.0)
    return RailLine(standing_a=standing_a, per_unit=per_volt) if standing_a > 0.0 else None


def answers_of(design: Design, point: str, condition: Condition | None) -> Answers | None:
    """Say what may be expected of healthy units when their screw is turned; None where there is no model of it."""
    from benchkit.stage.trimmer_curves import curves

    if condition is None:
        return None
    try:
        found = curves(design, point, condition)
        return OfUnits(found.turns, found.values)
    except (BenchkitError, ValueError):
        return None


def time_constants(design: Design) -> tuple[float, ...]:
    """Thermal time constants (s) of a design, the longest first; () where the model has none."""
    from benchkit.stage.settling_times import lags_of

    try:
        return lags_of(design)
    except BenchkitError:
        return ()


def runaway(point: str, unit: str, value: float | None, limit: float | None) -> Tripped:
    """Make the trip of a reading that rises by itself, faster and faster."""
    shown = "" if value is None else f": {quantities.show(value, unit, 3)}"
    return Tripped(
        reason=f"{point} rises by itself, faster and faster{shown}", what=point, value=value, limit=limit
    )  # fmt: skip


def check_warm(design: Design, action: CheckWarm, seed: int) -> Judged:
    """Judge whether a design comes to rest warm under the conditions of its plan.

    Returns
    -------
    Judged
        ``fail`` when it has no warm state under one of them, ``undecided`` when the model can't tell; the value is the
        largest loop gain from temperature to power and back, which has to stay below 1.
    """
    from benchkit.stage.warming import warm_report

    worst, why, verdict = 0.0, "", "pass"
    try:
        for condition in action.conditions:
            report = warm_report(design, condition, seed=seed)
            if not report.has_warm_state:
                why, verdict, worst = f"{report.sentence} {report.next_step}.", "fail", report.gain
                break
            if not why or report.worst_gain >= worst:
                worst, why = report.worst_gain, report.sentence
    except ModelError as error:
        why, verdict, worst = str(error), "undecided", math.nan
    return Judged(
        item=action.item, subject="warm state", verdict=verdict, value=_open(float(worst)), unit="",  # type: ignore[arg-type]
        low=None, high=1.0, why=why,
    )  # fmt: skip


def evaluate_rule(design: Design, walk: Walk, state: State, action: Evaluate) -> Judged:
    """Judge a named rule on the readings of the item's section and on the resistors that were measured cold."""
    item = walk.item(state)
    facts = rule_facts(design, walk, state, item)
    try:
        result = evaluate(action.rule, action.number, facts)
    except BenchkitError as error:
        return Judged(
            item=item.id, subject=action.rule, verdict="undecided", value=None, unit="", low=None, high=None,
            why=str(error),
        )  # fmt: skip
    low: float | None = None
    high: float | None = None
    if isinstance(result.limit, tuple):
        low, high = result.limit
    elif result.rule == "divider stiffness":
        low = result.limit
    else:
        high = result.limit
    why = result.why
    if result.would_decide:
        would = result.would_decide[0].lower() + result.would_decide[1:]
        why = f"{why} What would decide it: {would}."
    return Judged(
        item=item.id, subject=f"{result.rule}: {result.subject}" if result.subject else result.rule,
        verdict=result.verdict, value=result.value, unit=result.unit, low=low, high=high, why=why,
        probability=result.conformance_probability,
    )  # fmt: skip


def rule_facts(design: Design, walk: Walk, state: State, item: Item) -> RuleFacts:
    """Collect what a rule may know: readings of its own section, cold resistors, the model's limits there."""
    readings: dict[str, Reading] = {}
    cold: dict[str, Reading] = {}
    driven: dict[str, Reading] = {}
    limits = {}
    rails: tuple[float, float] | None = None
    for other in walk.plan.items:
        reading = state.readings.get(other.id)
        if reading is None or other.point is None or other.id in state.before:
            continue
        if not other.point.powered:
            if other.point.name.startswith("ohm."):
                cold[other.point.name.removeprefix("ohm.")] = reading
        elif other.section == item.section and other.driven:
            driven[other.point.name] = reading
        elif other.section == item.section:
            readings[other.point.name] = reading
            known = walk.limits_for(state, other)
            if known is not None and other.condition is not None:
                limits[other.point.name] = known
            condition = other.condition.conditions[0] if isinstance(other.condition, Joined) else other.condition
            if isinstance(condition, Condition):
                rails = (condition.positive_v, condition.negative_v)
    return RuleFacts(
        design=design,
        readings=readings,
        cold=cold,
        driven=driven,
        limits=limits,
        positive_v=None if rails is None else rails[0],
        negative_v=None if rails is None else rails[1],
    )
