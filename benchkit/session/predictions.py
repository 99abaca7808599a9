"""Limits and rules, worked out off the event loop.

Everything here blocks for up to some seconds and touches nothing but its arguments; the session runs it in a thread.
"""

from __future__ import annotations

import math

from benchkit.errors import BenchkitError, ModelError
from benchkit.events import Event, Judged, PointLimits, Predicted, PredictionRefused
from benchkit.judge.rules import RuleFacts, evaluate
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
    limits = {}
    rails: tuple[float, float] | None = None
    for other in walk.plan.items:
        reading = state.readings.get(other.id)
        if reading is None or other.point is None or other.id in state.before:
            continue
        if not other.point.powered:
            if other.point.name.startswith("ohm."):
                cold[other.point.name.removeprefix("ohm.")] = reading
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
        limits=limits,
        positive_v=None if rails is None else rails[0],
        negative_v=None if rails is None else rails[1],
    )
