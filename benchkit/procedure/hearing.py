"""What a walk makes of what the supply said: new state, or a verdict.  Nothing is believed that was not read back."""

from __future__ import annotations

from dataclasses import replace
from typing import Final

from benchkit import quantities
from benchkit.events import Judged, OutputOff, SupplyState, Tripped
from benchkit.procedure.items import Item
from benchkit.procedure.state import State


def heard(state: State, supply: SupplyState | None) -> State:
    """Take in what the supply says of itself."""
    if supply is None:
        return state
    energised = {True: "on", False: "off", None: "unknown"}[supply.output_on]
    if state.on_lamp:
        energised = "unknown"  # whatever the supply says of itself, it isn't what feeds the unit
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
    off = event.confirmed and not state.on_lamp
    state = replace(state, unconfirmed=not off, energised="off" if off else "unknown")
    return state if event.state is None else replace(state, supply=event.state)


def cut(state: State) -> State:
    """Remember where a walk stood when whoever ran it went away."""
    return state if state.stopped else replace(state, cut_at=state.index)


def off_by_word(state: State) -> State:
    """Believe a person about a supply that only a person switches; of any other, nothing is known by that."""
    energised = "off" if switched_by_hand(state) else "unknown"
    return replace(state, unconfirmed=False, on_lamp=False, energised=energised, supply=None)  # type: ignore[arg-type]


def switched_by_hand(state: State) -> bool:
    """Whether only a person switches what feeds the unit: a supply set by hand, or a series lamp."""
    return state.on_lamp or (state.opened is not None and state.opened.supply == "manual")


def never_on_by_hand(state: State) -> bool:
    """Whether only a person switches the supply, and this walk has not asked anybody yet to switch it on."""
    return switched_by_hand(state) and not state.ever_on


AT_LIMIT: Final = 0.9
"""A rail that carries so much of its limit stands at it, though its supply may not say so; our own figure."""

BELOW: Final = 0.97
"""A rail below so much of its over-voltage protection has not tripped it; our own figure."""


def at_a_limit(event: Tripped) -> bool:
    """Whether a trip means that the unit drew more than the supply was to give it.

    A protection that has switched an output off doesn't say why.  It is taken for one of the current only where the
    rails are below its voltage, and another rail stands at the limit.
    """
    seen = event.state
    if seen is None or seen.limit_a is None:
        return False
    if event.what in ("rail+", "rail-"):
        held = seen.positive_in_limit if event.what == "rail+" else seen.negative_in_limit
        return held and event.limit == seen.limit_a
    if event.what not in ("positive protection", "negative protection"):
        return False
    pairs = (
        (seen.positive_v, seen.protection_positive_v), (seen.negative_v, seen.protection_negative_v)
    )  # fmt: skip
    below = all(volts is not None and (level is None or abs(volts) < BELOW * level) for volts, level in pairs)
    amps = max((abs(one) for one in (seen.positive_a, seen.negative_a) if one is not None), default=0.0)
    return below and amps >= AT_LIMIT * seen.limit_a


def drew_its_limit(seen: SupplyState | None) -> bool:
    """Whether a supply that has been set holds a rail by its limit."""
    return seen is not None and not seen.tripped and (seen.positive_in_limit or seen.negative_in_limit)


def limit_seen(state: State, item: Item, supply: SupplyState) -> State:
    """Remember a limit that a supply came into as it was set, like one that has tripped."""
    if item.kind != "supply" or not drew_its_limit(supply):
        return state
    seen = replace(
        supply, limit_a=item.limit_a, set_positive_v=item.positive_v, set_negative_v=item.negative_v
    )  # fmt: skip
    rail = "rail+" if supply.positive_in_limit else "rail-"
    event = Tripped(
        reason=f"{rail} stands in its limit", what=rail, value=supply.positive_a, limit=item.limit_a, state=seen
    )
    return replace(state, tripped=event, tripped_at=item.id)


def lacks_protection(found: SupplyState) -> bool:
    """Whether a supply that is on says nothing of an over-voltage protection of its own."""
    return found.output_on is True and found.protection_positive_v is None


UNPROTECTED = (
    "CAUTION: this supply tells of no over-voltage protection of its own, so nothing holds the rails when the computer "
    "does not."
)
"""Said of such a supply, on the screen and in the record."""


def protection_text(found: SupplyState) -> str:
    """Say where the supply's own over-voltage protection stands, "" where it tells of none."""
    rails = [volts for volts in (found.protection_positive_v, found.protection_negative_v) if volts is not None]
    if not rails:
        return ""
    return " and ".join(dict.fromkeys(quantities.show(volts, "V", 3) for volts in rails))


def rails_problem(item: Item, found: SupplyState) -> str:
    """Say what is wrong with the rails after they were set, "" when nothing is (5 % and 0.2 V, common practice)."""
    if found.output_on is not True:
        if found.tripped:
            return f"{_tripped_rails(found)} was switched off by the supply's own protection."
        said = "that its output is off" if found.output_on is False else "nothing about its output"
        return f"The supply says {said}."
    if found.tripped:
        return f"{_tripped_rails(found)} was switched off by the supply's own protection."
    limiting = [
        rail for rail, in_limit in (("rail+", found.positive_in_limit), ("rail-", found.negative_in_limit)) if in_limit
    ]
    if limiting:
        stand = "stands" if len(limiting) == 1 else "stand"
        return f"{' and '.join(limiting)} {stand} in the current limit of {item.limit_a:.3g} A."
    for rail, wanted_v, found_v in (
        ("rail+", item.positive_v, found.positive_v),
        ("rail-", item.negative_v, found.negative_v),
    ):
        if found_v is None:
            return f"The supply gave no voltage for {rail}."
        if abs(found_v - wanted_v) > 0.05 * abs(wanted_v) + 0.2:
            return f"{rail} was set to {wanted_v:.4g} V and stands at {found_v:.4g} V."
    return ""


def _tripped_rails(found: SupplyState) -> str:
    return " and ".join(
        rail for rail, tripped in (("rail+", found.positive_tripped), ("rail-", found.negative_tripped)) if tripped
    )


def rails_judged(item: Item, found: SupplyState, *, by_hand: bool = False) -> Judged:
    """Judge whether the rails stand where they were set."""
    problem = rails_problem(item, found)
    both = "Both rails stand where they were set, none in its limit"
    fine = both if item.negative_v else "The rail stands where it was set, not in its limit"
    fine += ", says the operator." if by_hand else "."
    if not by_hand and not problem:
        held = protection_text(found)
        fine += f" Over-voltage protection at {held}." if held else f" {UNPROTECTED}"
    return Judged(
        item=item.id, subject="rails", verdict="fail" if problem else "pass", value=found.positive_v,
        unit="V", low=None, high=None, why=problem or fine,
    )  # fmt: skip


def limit_judged(item: Item, found: SupplyState, *, by_hand: bool = False) -> Judged:
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
    why = f"{why.removesuffix('.')}, says the operator." if by_hand else why
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
