"""The last line of a walk: its verdict, and what kept that from being better than the readings are.

Rules
-----
* The worst standing result makes the verdict.  Rare readings count as passed when all readings together fit a good unit
  and there are few of them (`benchkit.judge.rare`).
* What a unit was found with before parts were replaced counts no more, nor what it was found with under power before
  it came into its limit; what was left out was never asked for.
* A reading that was asked for and is missing, a stop, or a fault that fits better than a good unit leaves a walk
  undecided that would have passed.
"""

from __future__ import annotations

from typing import Final

from benchkit.events import Closed, Judged
from benchkit.judge.rare import MOST_RARE
from benchkit.judge.verdicts import worst
from benchkit.procedure.items import JUDGED_KINDS, Item, Plan
from benchkit.procedure.state import State

HEALTHY: Final = "healthy"
"""The hypothesis that nothing is wrong, as the record calls it."""


def closed_event(plan: Plan, state: State) -> Closed:
    """Return the last line of a walk that has come to its end."""
    found = _found_and_gone(plan, state)
    counted = [result for result in state.results if result.item not in found]
    rare = _rare_in_a_good_unit(state, counted)
    verdict = worst(["pass" if result in rare else result.verdict for result in counted])
    why = ""
    if verdict == "pass" and rare:
        names = " and ".join(result.subject for result in rare)
        why = f"{names} read just outside the limits of 99.73 % of good units; all readings together fit a good one."
    if verdict == "pass" and any(_is_open(state, item) for item in plan.items if item.id not in found):
        verdict, why = "undecided", "A reading that was asked for is missing."
    if state.stopped and verdict == "pass":
        verdict = "undecided"
    if verdict == "pass" and state.suspecting:
        verdict, why = "undecided", "The model had not said yet what would explain a reading that was odd."
    if verdict == "pass" and suspects_a_fault(state):
        assert state.suspicion is not None
        first = state.suspicion.suspects[0].fault
        verdict, why = "undecided", f"Every reading passed, but together they fit {first} better than a good unit."
    status = state.stop_status or (0 if verdict == "pass" else 1)
    return Closed(count=state.count, verdict=verdict, stopped=state.stopped, exit_status=status, why=why)


def _found_and_gone(plan: Plan, state: State) -> set[str]:
    """Items that tell how the unit was found, and no longer how it is; the extra readings at them too."""
    hosts = {item.id: item for item in plan.items}
    own = [(item, item) for item in plan.items]
    extra = [(item, hosts[item.host]) for item in state.extras if item.host in hosts]
    return {
        item.id
        for item, host in (*own, *extra)
        if (host.marked == "found" and item.id in state.outdated) or (host.limited_to and state.limited)
    }


def suspects_a_fault(state: State) -> bool:
    """Whether the last answer about suspects puts something before healthy."""
    suspicion = state.suspicion
    return suspicion is not None and bool(suspicion.suspects) and suspicion.suspects[0].fault != HEALTHY


def _rare_in_a_good_unit(state: State, counted: list[Judged]) -> tuple[Judged, ...]:
    """The rare readings, when all readings together fit a good unit and there are few enough; else none."""
    rare = tuple(result for result in counted if result.rare)
    suspicion = state.suspicion
    if suspicion is None or state.suspecting or not suspicion.explained or suspects_a_fault(state):
        return ()
    return rare if len(rare) <= MOST_RARE else ()


def _is_open(state: State, item: Item) -> bool:
    """An item that wants a result and has none, or only one from before that was passed over since."""
    if item.kind not in JUDGED_KINDS or state.leaves_out(item):
        return False
    return state.result(item.id) is None or (item.id in state.before and item.id in state.overrides)
