"""What a walk makes of what the supply said: new state, or a verdict.  Nothing is believed that was not read back."""

from __future__ import annotations

from dataclasses import replace

from benchkit.events import Judged, OutputOff, SupplyState
from benchkit.procedure.items import Item
from benchkit.procedure.state import State


def heard(state: State, supply: SupplyState | None) -> State:
    """Take in what the supply says of itself."""
    if supply is None:
        return state
    energised = {True: "on", False: "off", None: "unknown"}[supply.output_on]
    rails = [abs(volts) for volts in (supply.positive_v, supply.negative_v) if volts is not None]
    return replace(
        state,
        supply=supply,
        energised=energised,  # type: ignore[arg-type]
        highest_v=max(state.highest_v, *rails) if rails else state.highest_v,
        ever_on=state.ever_on or supply.output_on is not False,
    )


def off_heard(state: State, event: OutputOff) -> State:
    """Take in what came of switching off."""
    state = replace(state, unconfirmed=not event.confirmed, energised="off" if event.confirmed else "unknown")
    return state if event.state is None else replace(state, supply=event.state)


def cut(state: State) -> State:
    """Remember where a walk stood when whoever ran it went away."""
    return state if state.stopped else replace(state, cut_at=state.index)


def off_by_word(state: State) -> State:
    """Believe a person about a supply that only a person switches; of any other, nothing is known by that."""
    by_hand = state.opened is not None and state.opened.supply == "manual"
    return replace(state, unconfirmed=False, energised="off" if by_hand else "unknown", supply=None)


def rails_problem(item: Item, found: SupplyState) -> str:
    """Say what is wrong with the rails after they were set, "" when nothing is (5 % and 0.2 V, common practice)."""
    if found.output_on is not True:
        said = "that its output is off" if found.output_on is False else "nothing about its output"
        return f"The supply says {said}."
    limiting = [
        rail for rail, in_limit in (("rail+", found.positive_in_limit), ("rail-", found.negative_in_limit)) if in_limit
    ]
    if limiting:
        return f"{' and '.join(limiting)} stands in the current limit of {item.limit_a:.3g} A."
    for rail, wanted_v, found_v in (
        ("rail+", item.positive_v, found.positive_v),
        ("rail-", item.negative_v, found.negative_v),
    ):
        if found_v is None:
            return f"The supply gave no voltage for {rail}."
        if abs(found_v - wanted_v) > 0.05 * abs(wanted_v) + 0.2:
            return f"{rail} was set to {wanted_v:.4g} V and stands at {found_v:.4g} V."
    return ""


def rails_judged(item: Item, found: SupplyState) -> Judged:
    """Judge whether the rails stand where they were set."""
    problem = rails_problem(item, found)
    fine = "Both rails stand where they were set, none in its limit."
    return Judged(
        item=item.id, subject="rails", verdict="fail" if problem else "pass", value=found.positive_v,
        unit="V", low=None, high=None, why=problem or fine,
    )  # fmt: skip


def limit_judged(item: Item, found: SupplyState) -> Judged:
    """Judge whether both rails stand in their limit while the leads are shorted."""
    assert item.limits is not None
    assert item.limits.low is not None
    assert item.limits.high is not None
    currents = {
        "rail+": (found.positive_a, found.positive_in_limit),
        "rail-": (found.negative_a, found.negative_in_limit),
    }
    if item.negative_v == 0.0:
        del currents["rail-"]
    why, verdict = f"Every rail stands in its limit, {item.limits}.", "pass"
    value = max((amps for amps, _ in currents.values() if amps is not None), default=None)
    for rail, (amps, limiting) in currents.items():
        if amps is None:
            why, verdict = f"{rail} gave no current.", "undecided"
        elif not limiting or not item.limits.low <= amps <= item.limits.high:
            words = "is in its limit" if limiting else "is not in its limit"
            why, verdict, value = f"{rail} {words} and carries {amps:.4g} A; {item.limits} is right.", "fail", amps
            break
    return Judged(
        item=item.id, subject="current limit", verdict=verdict, value=value, unit="A",  # type: ignore[arg-type]
        low=item.limits.low, high=item.limits.high, why=why,
    )  # fmt: skip
