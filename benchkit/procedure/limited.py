"""A unit that came into its limit as it was found: what is said of it, and for how long.

Such a walk goes on from least bias (`at_limit` in `benchkit.procedure.file`). Until the question which parts were
replaced, the reason stays in sight.
"""

from __future__ import annotations

from typing import Final

from benchkit.procedure.items import Item, Plan
from benchkit.procedure.state import State

LEFT_TOO_HIGH: Final = "bias left too high, or a part gone. On from least bias."


def limited_words(state: State) -> str:
    """Say that the unit came into its limit, and what comes of it."""
    return f"As found, {state.limited}: {LEFT_TOO_HIGH}"


def off_reason(plan: Plan, state: State, item: Item) -> str:
    """Return the reason with which an item of the kind ``off`` switches off: a stop, a limit, or the procedure."""
    at_limit = any(one.limited_to == item.id for one in plan.items)
    return state.stopped or (tripped_reason(state) if at_limit else "") or "a step of the procedure"


def tripped_reason(state: State) -> str:
    """Return the reason with which the supply was switched off at a limit that did not end the walk; "" without one."""
    return f"tripped: {state.limited}" if state.limited else ""


def just_limited(plan: Plan, state: State, index: int) -> bool:
    """Whether an item lies between a limit that was reached and the question which parts were replaced."""
    if not state.limited or state.stopped:
        return False
    first = max(number for number, item in enumerate(plan.items) if item.limited_to) + 1
    return first <= index and not any(item.kind == "parts" for item in plan.items[first:index])
