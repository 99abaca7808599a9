"""Makes the picture that a screen shows from where a walk stands.  Pure: state in, `View` out."""

from __future__ import annotations

from dataclasses import dataclass

from benchkit import quantities
from benchkit.events import Judged, SupplyState
from benchkit.judge.verdicts import worst
from benchkit.procedure.plan import Plan
from benchkit.procedure.state import State
from benchkit.procedure.walk import Walk
from benchkit.session.front import Energised, LiveView, ResultView, SectionView, SupplyView, View


@dataclass(kw_only=True)
class Moment:
    """What the session adds to the state: things that move while the walk stands still.

    Parameters
    ----------
    busy : str
        What is being waited for, "" when it is the person.
    busy_share, remaining_s : float or None
        How far it is.
    live : LiveView or None
    supply : SupplyState or None
        The newest sample of a watch, newer than the state's.
    message : str
        The last sentence for the person.
    """

    busy: str = ""
    busy_share: float | None = None
    remaining_s: float | None = None
    live: LiveView | None = None
    supply: SupplyState | None = None
    message: str = ""


def make_view(
    walk: Walk, state: State, moment: Moment, *, record: str, design: str, procedure: str, purpose: str
) -> View:
    """Draw the whole picture."""
    opened = state.opened
    item = walk.item(state)
    return View(
        kind="walk" if opened is None else opened.kind,
        procedure=procedure,
        purpose=purpose,
        unit="" if opened is None else opened.unit,
        operator="" if opened is None else opened.operator,
        design=design,
        meter=state.meter,
        record=record,
        sections=_sections(walk.plan, state),
        section_title=item.section_title,
        item=item.id,
        item_title=item.title,
        item_number=min(state.index + 1, len(walk.plan)),
        item_count=len(walk.plan),
        results=tuple(_result(walk.plan, state, judged) for judged in state.results),
        supply=_supply(state, moment.supply or state.supply),
        live=moment.live,
        busy=moment.busy,
        busy_share=moment.busy_share,
        remaining_s=moment.remaining_s,
        message=moment.message or state.note,
        kept=state.count,
        verdict=None if state.closed is None else state.closed.verdict,
        stopped=state.stopped,
        exit_status=None if state.closed is None else state.closed.exit_status,
    )


def supply_words(energised: Energised, supply: SupplyState | None, *, by_hand: bool) -> str:
    """Say what is known of the supply, never more than that."""
    if energised == "unknown" and not by_hand:
        return "SUPPLY: OUTPUT STATE UNKNOWN - treat the unit as live"
    if energised == "off":
        rest = "nothing here can switch it" if by_hand else "read back as off"
        return f"SUPPLY OFF ({rest})"
    parts = ["SUPPLY ON" if energised == "on" else "SUPPLY AS SET BY HAND"]
    if supply is not None:
        for volts, amps in ((supply.positive_v, supply.positive_a), (supply.negative_v, supply.negative_a)):
            if volts is not None:
                parts.append(
                    quantities.show(volts, "V") + ("" if amps is None else f" {quantities.show(amps, 'A', 3)}")
                )
        if supply.limit_a is not None:
            parts.append(f"limit {quantities.show(supply.limit_a, 'A', 3)}")
        if supply.in_limit:
            parts.append("IN LIMIT")
    return "  ".join(parts)


def _sections(plan: Plan, state: State) -> tuple[SectionView, ...]:
    names = list(dict.fromkeys(item.section for item in plan.items))
    views = []
    for name in names:
        numbers = [number for number, item in enumerate(plan.items) if item.section == name]
        verdicts = [judged.verdict for number in numbers if (judged := state.result(plan.items[number].id)) is not None]
        views.append(
            SectionView(
                name=name,
                title=plan.items[numbers[0]].section_title,
                done=sum(number < state.index for number in numbers),
                total=len(numbers),
                current=state.index in numbers,
                verdict=worst(verdicts) if verdicts else None,
            )
        )
    return tuple(views)


def _result(plan: Plan, state: State, judged: Judged) -> ResultView:
    title = next((item.title for item in plan.items if item.id == judged.item), judged.item)
    return ResultView(
        item=judged.item,
        title=title,
        value_text=_number(judged.value, judged.unit),
        low_text=_number(judged.low, judged.unit),
        high_text=_number(judged.high, judged.unit),
        verdict=judged.verdict,
        why=judged.why,
        value=judged.value,
        low=judged.low,
        high=judged.high,
        uncertainty=judged.uncertainty,
        from_before=judged.item in state.before,
        overridden=state.overrides.get(judged.item, ""),
    )


def _number(value: float | None, unit: str) -> str:
    if value is None:
        return ""
    return quantities.show(value, unit, 5) if unit else f"{value:.5g}"


def _supply(state: State, supply: SupplyState | None) -> SupplyView:
    by_hand = state.opened is not None and state.opened.supply == "manual"
    return SupplyView(
        energised=state.energised,
        words=supply_words(state.energised, supply, by_hand=by_hand),
        by_hand=by_hand,
        state=supply,
    )
