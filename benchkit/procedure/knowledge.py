"""What a walk knows of its unit, put as the model takes it: readings kept, to come, and those that could be had.

Rules
-----
* Readings from before a resume don't count: trimmer and warmth may have changed since.
* A reading with the trimmer wherever it was found counts until the screw is turned; a resistor or a junction that was
  measured by itself goes on counting.
* Of a point that was read more than once under the same conditions the latest reading counts, and it is not narrowed
  again: what has been read is known.
* A rail that tripped because its supply held it by the current limit is a reading too, of the limit: at rest the
  capacitors behind it make the unit's own share of the current larger, never smaller; on its way up they take a share
  for themselves.  What voltage the rail had fallen to on its way is
  no reading: it was still moving.
* Nobody is sent to a live board for an extra reading where more than `HAZARDOUS_V` lies from rail to rail; there only
  what the supply itself reads is offered, and the rest once the rails have been seen low.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import replace
from typing import Final

from benchkit.events import SupplyState
from benchkit.measure.readings import Reading
from benchkit.procedure.actions import Target
from benchkit.procedure.file import MADE_SAFE
from benchkit.procedure.items import RAIL_POINTS, AnyCondition, Item, Joined, Plan, condition_key, conditions_of
from benchkit.procedure.sizing import CHARGING_SHARE
from benchkit.procedure.state import State
from benchkit.stage.conditions import Condition, TrimmerPosition, Unpowered
from benchkit.stage.forcing import LIMIT_SHARE
from benchkit.stage.observations import Conditions, Observation
from benchkit.stage.points import Point
from benchkit.stage.stored import HAZARDOUS_V

READABLE: Final = frozenset({"dc volts", "dc current", "ohms", "ohms 4-wire", "diode"})
"""Functions of a meter that an extra reading may need."""

HELD: Final = frozenset({*RAIL_POINTS, "rail+.drop", "rail-.drop"})
"""Points that the supply holds: they tell nothing of the unit."""

OVERLOAD_UNCERTAINTY: Final = 1e-3
"""How sharp the end of a meter's range is taken to be where it reads overload, in the point's unit."""

Named = tuple[AnyCondition, Point]


def model_condition(item: Item) -> AnyCondition | None:
    """What the model takes an item's reading to be made under; None where it has nothing to do with it."""
    return item.told_under or item.condition or item.held_under


def readings_kept(plan: Plan, state: State) -> Iterator[tuple[Item, AnyCondition, Reading]]:
    """Yield every kept reading that the model can use."""
    turned = _turned(plan, state)
    places = {item.id: number for number, item in enumerate(plan.items)}
    for item in (*plan.items, *state.extras):
        reading, condition = state.readings.get(item.id), model_condition(item)
        if item.kind != "measure" or reading is None or condition is None or item.id in state.before:
            continue
        place = places.get(item.id, places.get(item.host, turned))
        if place < turned and _tells_of_a_position(condition, reading.point):
            continue
        yield item, condition, reading


def _turned(plan: Plan, state: State) -> int:
    """Return the number of the item at which the trimmer was turned last; 0 while it stands as it was found."""
    done = (
        number
        for number, item in enumerate(plan.items[: _came_to(plan, state) + 1])
        if (item.kind == "trim" or item.act == "trimmer to least") and not state.leaves_out(item)
    )
    return max(done, default=0)


def _tells_of_a_position(condition: AnyCondition, point: str) -> bool:
    """Whether a reading is one of a trimmer that nobody knew the position of."""
    by_itself = point.startswith(("ohm.emitter.", "ohm.heatsink.", "diode."))
    return not by_itself and any(one.trimmer == "unknown" for one in conditions_of(condition))


def observations(plan: Plan, state: State) -> tuple[Observation, ...]:
    """Return this unit's readings so far; one without a known uncertainty is left out."""
    found: dict[tuple[Conditions, str], Observation] = {}
    for _, condition, reading in readings_kept(plan, state):
        value, uncertainty = reading.value, reading.standard_uncertainty
        if reading.overload:
            value, uncertainty = (-math.inf if reading.negative else math.inf), OVERLOAD_UNCERTAINTY
        if value is None or uncertainty is None:
            continue
        key = conditions_of(condition), reading.point
        found.pop(key, None)
        found[key] = Observation(conditions=key[0], point=reading.point, value=value, standard_uncertainty=uncertainty)
    for _, one in at_the_trip(plan, state):
        found.setdefault((one.conditions, one.point), one)
    return tuple(found.values())


def at_the_trip(plan: Plan, state: State) -> tuple[tuple[AnyCondition, Observation], ...]:
    """Return what a limit that was reached told of the unit: each rail that it held, and the limit itself."""
    seen = None if state.tripped is None else state.tripped.state
    if seen is None or seen.limit_a is None or seen.set_positive_v is None or state.on_lamp:
        return ()
    place = _place_of(plan, state.tripped_at)
    item = plan.items[place]
    if place < _turned(plan, state):
        return ()
    if item.driven or item.drive_limit or item.optional:
        return ()  # a driven stage: the model knows nothing of it
    # On the way up a part of the current charges the unit's capacitors.
    share = math.hypot(LIMIT_SHARE, CHARGING_SHARE / math.sqrt(3.0)) if item.kind == "supply" else LIMIT_SHARE
    under = _as_tripped(plan, place, state, seen, seen.set_positive_v, seen.limit_a)
    return tuple(
        (
            under,
            Observation(
                conditions=conditions_of(under), point=f"{rail}.current", value=seen.limit_a,
                standard_uncertainty=share * seen.limit_a, event=True,
            ),
        )
        for rail, held in (("rail+", seen.positive_in_limit), ("rail-", seen.negative_in_limit))
        if held
    )  # fmt: skip


def _as_tripped(
    plan: Plan, place: int, state: State, seen: SupplyState, positive_v: float, limit_a: float
) -> AnyCondition:
    """Return the rails as far up as they were set, cold on their way up and anything up to warm after it."""
    cold = Condition(
        positive_v=abs(positive_v),
        negative_v=-abs(seen.set_negative_v or 0.0),
        limit_a=limit_a,
        trimmer=trimmer_now(plan, place, state),
    )
    if plan.items[place].kind == "supply":
        return cold
    return Joined(conditions=(cold, replace(cold, when="warm")), words="cold to warm")


def names_of_conditions(plan: Plan, state: State) -> tuple[tuple[Conditions, str], ...]:
    """Return how the record calls the conditions of the kept readings, an unpowered one by its own name."""
    conditions = [condition for _, condition, _ in readings_kept(plan, state)]
    conditions += [condition for condition, _ in at_the_trip(plan, state)]
    return tuple({conditions_of(condition): condition_key(condition) for condition in conditions}.items())


def still_to_come(plan: Plan, state: State) -> tuple[tuple[Target, ...], tuple[Target, ...]]:
    """Return the modelled readings that the plan has yet to take: of this section, and of those after it."""
    read = {(condition_key(condition), reading.point) for _, condition, reading in readings_kept(plan, state)}
    section = plan.items[min(state.index, len(plan) - 1)].section
    near: dict[tuple[str, str], Target] = {}
    later: dict[tuple[str, str], Target] = {}
    for item in plan.items[state.index :]:
        if item.kind != "measure" or item.point is None or item.condition is None or state.leaves_out(item):
            continue
        under = item.told_under or item.condition
        key = condition_key(under), item.point.name
        if key in read or key in near:
            continue
        target = target_of(under, item.point)
        (near if item.section == section else later).setdefault(key, target)
    return tuple(near.values()), tuple(later.values())


def target_of(condition: AnyCondition, point: Point) -> Target:
    """Return a reading as the model is asked about it."""
    return Target(key=condition_key(condition), conditions=conditions_of(condition), point=point.name, unit=point.unit)


def rails_seen_low(plan: Plan, state: State) -> bool:
    """Tell whether the way out has come past all its readings of the rails, each of them low."""
    looks = [
        (number, item)
        for number, item in enumerate(plan.items)
        if item.section == MADE_SAFE and item.point is not None and item.point.name in RAIL_POINTS
    ]
    for number, item in looks:
        result = state.result(item.id)
        if number >= state.index or result is None or result.verdict != "pass" or item.id in state.before:
            return False
    return True


def possible_now(plan: Plan, state: State) -> tuple[Named, ...]:
    """Return the extra readings that can be taken as things stand: the present power condition, or none at all."""
    item = plan.items[min(state.index, len(plan) - 1)]
    if item.section == MADE_SAFE:
        return unpowered(plan, state) if rails_seen_low(plan, state) else ()
    return powered(plan, state) if item.powered else unpowered(plan, state)


def candidates(plan: Plan, state: State) -> tuple[Named, ...]:
    """Return every extra reading worth asking the model about: those possible now, and those possible after off."""
    now = possible_now(plan, state)
    read_now = {point.name for _, point in now}
    return (*now, *(one for one in unpowered(plan, state) if one[1].name not in read_now))


def powered(plan: Plan, state: State) -> tuple[Named, ...]:
    """Return the powered points that have not been read under the present condition."""
    condition = present_condition(plan, state.index)
    if condition is None:
        return ()
    first = condition.conditions[0] if isinstance(condition, Joined) else condition
    assert isinstance(first, Condition)
    live = first.positive_v - first.negative_v > HAZARDOUS_V
    return tuple(
        (condition, point)
        for point in _unread(plan, state, condition)
        if point.powered and (not live or point.function == "dc current" or point.name == state.probes)
    )


def unpowered(plan: Plan, state: State) -> tuple[Named, ...]:
    """Return the unpowered points that have not been read with the trimmer where it is."""
    trimmer = trimmer_now(plan, _came_to(plan, state), state)
    points = _unread(plan, state, Unpowered(point="ohm.rails", trimmer=trimmer))
    return tuple((Unpowered(point=point.name, trimmer=trimmer), point) for point in points if not point.powered)


def _came_to(plan: Plan, state: State) -> int:
    """Return how far the walk came: on the way out, the item that led there."""
    return _place_of(plan, state.stopped_at, state.index)


def _place_of(plan: Plan, name: str, default: int = 0) -> int:
    return next((number for number, item in enumerate(plan.items) if item.id == name), default)


def _unread(plan: Plan, state: State, condition: AnyCondition) -> tuple[Point, ...]:
    key = condition_key(condition)
    read = {reading.point for _, known, reading in readings_kept(plan, state) if condition_key(known) == key}
    return tuple(
        point
        for point in plan.points
        if point.modelled and point.function in READABLE and point.name not in HELD and point.name not in read
    )


def present_condition(plan: Plan, index: int) -> Condition | Joined | None:
    """Return what a powered reading at this place in the plan is taken under, as the readings around it are."""
    for number in _around(plan, index):
        condition = model_condition(plan.items[number])
        if isinstance(condition, (Condition, Joined)):
            return condition
    return None


def _around(plan: Plan, index: int) -> Iterator[int]:
    """Yield the items about `index` between which supply and trimmer stay as they are: itself, before, after."""
    moves = ("supply", "off", "trim", "limit check")
    yield index
    for number in range(index - 1, -1, -1):
        if plan.items[number].kind in moves:
            break
        yield number
    for number in range(index + 1, len(plan)):
        if plan.items[number].kind in moves:
            break
        yield number


def trimmer_now(plan: Plan, index: int, state: State | None = None) -> TrimmerPosition:
    """Return where the trimmer is, as far as the plan knows; a trimmed one is anywhere."""
    for item in reversed(plan.items[: index + 1]):
        if state is not None and state.leaves_out(item):
            continue
        if item.kind == "trim":
            return "unknown"
        if item.act == "trimmer to least":
            return "least"
        if isinstance(item.condition, Unpowered):
            return item.condition.trimmer
    return "unknown"


def extra_item(plan: Plan, state: State, named: Named, why: str, asked_at: str) -> Item:
    """Make the item of an extra reading: as the plan reads such a point, if it does, at the place where the walk is."""
    condition, point = named
    host = plan.items[min(state.index, len(plan) - 1)]
    like = next(
        (item for item in plan.items if item.kind == "measure" and item.point == point and item.condition is not None),
        None,
    )
    on = point.powered
    do = f"{_METER[point.function]} Red and black as below." if point.black else "Read from the supply."
    caution = "The unit is powered: one hand, rest it before you touch, needle tips." if on else "No power on the unit."
    return Item(
        id=f"{host.section}.extra-{len(state.extras) + 1}.{point.name}",
        section=host.section,
        section_title=host.section_title,
        kind="measure",
        title=f"Extra reading: {point.name}",
        do=like.do if like is not None and like.do else do,
        why=f"Asked for by the model: {why}" if why else "Asked for by the model.",
        caution=like.caution if like is not None and like.caution else caution,
        point=point,
        condition=condition,
        samples=1 if like is None else like.samples,
        settle_s=0.0 if like is None else like.settle_s,
        acceptance="guarded" if like is None else like.acceptance,
        allow=0.0 if like is None else like.allow,
        powered=on,
        host=asked_at,
    )


_METER: Final = {
    "dc volts": "Meter on d.c. volts.",
    "dc current": "Read from the supply.",
    "ohms": "Meter on ohms.",
    "ohms 4-wire": "Four-wire ohms.",
    "diode": "Meter on its diode range.",
}
