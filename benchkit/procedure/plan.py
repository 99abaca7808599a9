"""A procedure and a design make a plan: a flat tuple of items, one reading or one act each.

Rules
-----
* Test points with a capital word in them stand for all that the design has: ``emitter.upper.N`` for every pair,
  ``PART.vbe`` for every transistor, ``ohm.spreader.ARM`` for the arm that holds the trimmer.  A point or a rule that
  this design doesn't have is left out.
* A hold point stands before every item that raises a voltage or the limit.  Where the file has none, it is put in.
* ``clip`` becomes: off, every rail watched down at the unit, clip, hold point, power as before.
* Steps that turn or check a trimmer fall away for a design without one; its target is only checked.
* Before the first power stand the checks that keep a unit alive, on every path (`benchkit.procedure.paths`).
* Rails, limit and trimmer are followed from item to item, so that each reading knows its condition.
"""

from __future__ import annotations

from dataclasses import replace
from typing import Any

from benchkit import quantities
from benchkit.errors import FileError
from benchkit.procedure.file import MADE_SAFE, Procedure
from benchkit.procedure.items import (
    RAIL_LOW_V,
    Item,
    Joined,
    Plan,
)
from benchkit.procedure.paths import Paths
from benchkit.procedure.planner import Planner
from benchkit.procedure.sizing import rails_text
from benchkit.stage.conditions import Condition, Unpowered
from benchkit.stage.design import Design
from benchkit.stage.points import points_of


def make_plan(procedure: Procedure, design: Design) -> Plan:
    """Turn a procedure into the items for one design.

    Raises
    ------
    FileError
        When the procedure asks for something that the design can't give, such as a trim without a trimmer.
    ModelError
        When the model finds no rails at which the stage regulates.
    """
    planner = Planner(procedure, design)
    items = _with_warm_state(design, _with_facts(tuple(planner.items())))
    _require_checks(procedure, design, items, planner)
    made_safe = next(number for number, item in enumerate(items) if item.section == MADE_SAFE)
    resume = next(number for number, item in enumerate(items) if item.resume)
    return Plan(items=items, made_safe=made_safe, resume=resume, points=points_of(design))


def _with_warm_state(design: Design, items: tuple[Item, ...]) -> tuple[Item, ...]:
    """Put a check behind the bench's: whether the design comes to rest under the warm conditions of this plan.

    Of the conditions with the trimmer at one place the one with the highest rails is enough, and of the shares of the
    target the largest: more of either is more heat and less margin.  A trimmer that was found anywhere may stand where
    nothing comes to rest: that is no fault of the design, and the supply's limit holds it.
    """
    found = design.spreader.trimmer is not None
    most: dict[Any, Condition] = {}
    for item in items:
        if item.condition is None or isinstance(item.condition, Unpowered):
            continue
        for condition in item.condition.conditions if isinstance(item.condition, Joined) else (item.condition,):
            if found and condition.trimmer == "unknown":
                continue
            known = most.get(condition.trimmer)
            if condition.when == "warm" and (known is None or _heat(condition) > _heat(known)):
                most[condition.trimmer] = condition
    if not most:
        return items
    first = items[0]
    check = Item(
        id=f"{first.section}.warm-state",
        section=first.section,
        section_title=first.section_title,
        kind="warm state",
        title="The design comes to rest warm",
        do="The model works out whether the design comes to rest when it warms up.",
        why="A design without a warm state heats itself until something breaks, however well the unit is built.",
        warm=tuple(most.values()),
    )
    return (first, check, *items[1:])


def _heat(condition: Condition) -> tuple[float, float]:
    return condition.positive_v - condition.negative_v, condition.target_share


def _with_facts(items: tuple[Item, ...]) -> tuple[Item, ...]:
    """Make every hold point say what rises behind it, whatever words the file gave it."""
    told = list(items)
    for number, item in enumerate(items[1:], start=1):
        hold = told[number - 1]
        if not item.raises or hold.kind != "hold" or item.kind == "lamp":
            continue
        rails, limit = rails_text(item.positive_v, item.negative_v), quantities.show(item.limit_a, "A")
        if rails not in hold.do or limit not in hold.do:
            told[number - 1] = replace(hold, do=f"{hold.do} Behind this yes: rails {rails}, limit {limit}.")
    return tuple(told)


def _require_checks(procedure: Procedure, design: Design, items: tuple[Item, ...], planner: Planner) -> None:
    """Refuse a procedure that gives power before what has to hold for it, on any path through the plan."""
    first = next((number for number, item in enumerate(items) if item.kind in ("supply", "lamp")), None)
    if first is None:
        return
    resume = next(number for number, item in enumerate(items) if item.resume)
    checks = [number for number, item in enumerate(items[:first]) if item.kind == "limit check" or item.trimmer_end]
    if checks and resume > min(checks):
        raise FileError(
            procedure.file,
            f"section {items[resume].section}, resume",
            "a walk that was cut off would go on behind the checks of limit and trimmer",
            "resume = true in the section of the first of them, or before it",
        )
    paths = Paths(
        procedure, design, items, resume=resume, lowest_v=planner.lowest, least_a=planner.least_bias_limit_a()
    )
    paths.check()
    _require_way_out(procedure, design, items)


def _require_way_out(procedure: Procedure, design: Design, items: tuple[Item, ...]) -> None:
    """Refuse a last section that gives power, or that lets rails pass which are not low: every stop leads there."""
    last = [item for item in items if item.section == MADE_SAFE]
    for item in last:
        if item.raises or item.kind in ("supply", "limit check", "lamp", "trim"):
            raise FileError(
                procedure.file,
                f"step {item.id}",
                "gives power in the section that every stop leads to, whatever failed before",
                f"section {MADE_SAFE} only switches off, waits and reads",
                "Put it into a section before",
            )
    seen = {item.point.name for item in last if item.point is not None and _sees_low(item)}
    rails = {"rail+"} if design.single_supply else {"rail+", "rail-"}
    if not rails <= seen:
        raise FileError(
            procedure.file,
            f"section {MADE_SAFE}",
            "nobody sees the rails low at the end",
            f"readings of {' and '.join(sorted(rails))}, by a step of the kind 'discharge' or with limits of at most "
            f"{quantities.show(RAIL_LOW_V, 'V')} either way",
        )


def _sees_low(item: Item) -> bool:
    """Whether a reading passes only where a rail is low."""
    limits = item.limits
    if item.kind not in ("discharge", "measure") or limits is None or limits.low is None or limits.high is None:
        return False
    return -RAIL_LOW_V <= limits.low <= 0.0 <= limits.high <= RAIL_LOW_V
