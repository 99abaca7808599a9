"""Makes the picture that a screen shows from where a walk stands.  Pure: state in, `View` out."""

from __future__ import annotations

import math
from dataclasses import dataclass

from benchkit import quantities
from benchkit.events import Judged, SupplyState
from benchkit.judge.verdicts import worst
from benchkit.procedure import knowledge, suspect_words
from benchkit.procedure.items import Item, Plan, condition_key
from benchkit.procedure.state import State
from benchkit.procedure.walk import Walk
from benchkit.session.front import (
    AimView,
    LiveView,
    ResultView,
    SectionView,
    SuspectsView,
    SuspectView,
    View,
)
from benchkit.session.supply_view import supply_view

OVERLOAD = "The meter reads overload"
"""How a verdict on an overload begins; such a result has no number."""


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
    narrowing : bool
        Limits of this unit are being worked out.
    """

    busy: str = ""
    busy_share: float | None = None
    remaining_s: float | None = None
    live: LiveView | None = None
    supply: SupplyState | None = None
    message: str = ""
    narrowing: bool = False


@dataclass(frozen=True, kw_only=True)
class Headings:
    """What a picture shows of the walk as a whole; the same from the first picture to the last."""

    record: str
    design: str
    procedure: str
    purpose: str
    target_time_s: float | None = None


class Painter:
    """Draws pictures of one walk; what only a new event can change is drawn once for each state."""

    def __init__(self, walk: Walk, headings: Headings) -> None:
        self._walk = walk
        self._headings = headings
        self._titles = {item.id: item.title for item in walk.plan.items}
        self._state: State | None = None
        self._sections: tuple[SectionView, ...] = ()
        self._results: tuple[ResultView, ...] = ()
        self._aim: AimView | None = None
        self._suspects: SuspectsView | None = None
        self._next_probe = ""
        self._numbers = (1, len(walk.plan))
        self._drawn: dict[tuple[Judged, bool, str], ResultView] = {}

    def paint(self, state: State, moment: Moment, elapsed_s: float | None = None) -> View:
        """Draw the whole picture of one moment; `elapsed_s` is the time since this run of the walk began (s)."""
        if state is not self._state:
            self._state = state
            self._sections = _sections(self._walk.plan, state)
            self._results = tuple(self._result(state, judged) for judged in state.results)
            self._aim = _aim(self._walk, state)
            self._suspects = _suspects(self._walk, state)
            self._next_probe = _next_probe(self._walk.plan, state)
            self._numbers = _numbers(self._walk.plan, state)
        opened, item, headings = state.opened, self._walk.item(state), self._headings
        return View(
            kind="walk" if opened is None else opened.kind,
            procedure=headings.procedure,
            purpose=headings.purpose,
            unit="" if opened is None else opened.unit,
            operator="" if opened is None else opened.operator,
            design=headings.design,
            meter=state.meter,
            record=headings.record,
            sections=self._sections,
            section_title=item.section_title,
            item=item.id,
            item_title=item.title,
            item_number=self._numbers[0],
            item_count=self._numbers[1],
            results=self._results,
            supply=supply_view(state, item, moment.supply or state.supply, way_out=self._walk.way_out(state)),
            live=moment.live,
            busy=moment.busy,
            busy_share=moment.busy_share,
            remaining_s=moment.remaining_s,
            message=_message(
                state, moment.message, _remark(self._suspects, self._walk.host(state), limited=bool(state.limited))
            ),
            kept=state.count,
            verdict=None if state.closed is None else state.closed.verdict,
            stopped=state.stopped,
            exit_status=None if state.closed is None else state.closed.exit_status,
            narrowing=moment.narrowing,
            aim=self._aim,
            suspects=self._suspects,
            why="" if state.closed is None else state.closed.why,
            broken=state.broken,
            elapsed_s=elapsed_s,
            target_time_s=headings.target_time_s,
            channel="" if opened is None else opened.channel,
            next_probe=self._next_probe,
        )

    def _result(self, state: State, judged: Judged) -> ResultView:
        key = judged, judged.item in state.before, state.overrides.get(judged.item, "")
        if key not in self._drawn:
            extras = {item.id: item.title for item in state.extras}
            self._drawn[key] = _result(self._titles.get(judged.item) or extras.get(judged.item, judged.item), *key)
        return self._drawn[key]


def _numbers(plan: Plan, state: State) -> tuple[int, int]:
    """Count the items up to the present one, and all of them, without those that are left out."""
    done = [number for number, item in enumerate(plan.items) if not state.leaves_out(item)]
    return min(sum(number <= state.index for number in done) + (state.index >= len(plan)), len(done)), len(done)


def _next_probe(plan: Plan, state: State) -> str:
    """Say where the probes go after the reading that is being taken; "" where the next thing is another."""
    item = plan.items[state.index] if state.index < len(plan) and not state.extra else None
    if item is None or item.kind != "measure" or item.point is None or item.point.function == "dc current":
        return ""
    for other in plan.items[state.index + 1 :]:
        if state.leaves_out(other):
            continue
        if other.kind != "measure" or other.point is None or other.powered != item.powered:
            return ""
        if other.point.function != "dc current" and other.point.name != item.point.name:
            return f"{other.point.name}: {_placed(other.point.red, other.point.black)}"
    return ""


def _placed(red: str, black: str) -> str:
    """Say where both probes go, the part that they share only once.

    Examples
    --------
    >>> _placed("base of output.upper.1", "emitter of output.upper.1"), _placed("the output", "0 V")
    ('red base, black emitter of output.upper.1', 'red on the output, black on 0 V')
    """
    if not black:
        return f"red on {red}"
    (one, of, part), (other, _, same) = red.rpartition(" of "), black.rpartition(" of ")
    return f"red {one}, black {other} of {part}" if of and part == same else f"red on {red}, black on {black}"


def _result(title: str, judged: Judged, from_before: bool, overridden: str) -> ResultView:
    return ResultView(
        item=judged.item,
        title=title,
        value_text="overload" if OVERLOAD in judged.why else _value_text(judged),
        low_text=_number(judged.low, judged.unit),
        high_text=_number(judged.high, judged.unit),
        verdict=judged.verdict,
        why=judged.why,
        value=judged.value,
        low=judged.low,
        high=judged.high,
        uncertainty=judged.uncertainty,
        from_before=from_before,
        overridden=overridden,
        unit_low=judged.unit_low,
        unit_high=judged.unit_high,
        unit_low_text=_number(judged.unit_low, judged.unit),
        unit_high_text=_number(judged.unit_high, judged.unit),
        odd=judged.odd,
    )


def _aim(walk: Walk, state: State) -> AimView | None:
    """Say what the reading that is to be taken should be, as soon as that is known."""
    item = walk.item(state)
    if item.kind != "measure" or item.point is None or state.phase not in ("placing", "reading"):
        return None
    design, unit = walk.limits_for(state, item), walk.unit_limits_for(state, item)
    if design is None:
        return None
    return AimView(point=item.point.name, design_text=str(design), unit_text="" if unit is None else str(unit))


def _suspects(walk: Walk, state: State) -> SuspectsView | None:
    """Put the last answer about suspects into words; while a newer one is being worked out, only that."""
    if state.suspecting:
        heading = "The model works out what would explain the readings. Nothing waits for it."
        return SuspectsView(item=walk.asked_at(state), working=True, heading=heading)
    suspicion = state.suspicion
    if suspicion is None:
        return None
    return SuspectsView(
        item=suspicion.item,
        working=False,
        heading=suspect_words.heading_words(suspicion),
        suspects=tuple(
            SuspectView(
                title=suspect_words.fault_words(one.fault),
                share=one.probability,
                share_text=suspect_words.chance_words(one.probability) if suspicion.explained else "",
                alike=suspect_words.alike_words(one, suspicion.suspects),
                evidence=suspect_words.evidence_for(one),
            )
            for one in suspect_words.shown_suspects(suspicion)
        ),
        unseen=suspect_words.unseen_words(suspicion, names=2),
        next_step=_next_step(walk, state),
        accuses=walk.suspects_a_fault(state),
    )


def _next_step(walk: Walk, state: State) -> str:
    """Say which reading would tell most: the one that is offered, else one that can be had after off."""
    suspicion, offered = state.suspicion, walk.offer(state)
    if suspicion is None or state.closed is not None:
        return ""
    if offered is not None:
        (condition, point), _ = offered
        key = condition_key(condition)
        found = (probe for probe in suspicion.probe_next if (probe.point, probe.condition) == (point.name, key))
        return suspect_words.probe_words(next(found), now=True)
    later = {(condition_key(condition), point.name) for condition, point in knowledge.unpowered(walk.plan, state)}
    if not walk.suspects_a_fault(state) or walk.way_out(state) or not walk.host(state).powered:
        return ""
    for probe in suspicion.probe_next:
        if (probe.condition, probe.point) in later:
            return suspect_words.probe_words(probe, now=False)
    return ""


def _message(state: State, message: str, remark: str) -> str:
    """Join what there is to say in a sentence or two; why a walk is on its way out is said as long as it is."""
    stop = ""
    if state.stopped and state.closed is None:
        stop = f"STOPPED: {state.stopped.rstrip('.')}. On the way out now."
    told = state.stopped[:1].upper() + state.stopped[1:]
    note = "" if state.note.rstrip(".") == state.stopped.rstrip(".") else state.note
    note = note.removeprefix(f"{told}. ") if stop else note
    said = " ".join(dict.fromkeys(words for words in (stop, note, message) if words))
    return f"{said} {remark}".strip() if state.limited and not state.stopped else said or remark


def _remark(suspects: SuspectsView | None, host: Item, *, limited: bool) -> str:
    """Say in one line what was asked about an earlier item: its answer may come when the walk has gone on.

    After a limit that was reached it is said too, at the question about parts, that nothing is suspected.
    """
    if suspects is None or suspects.item == host.id:
        return ""
    asks = limited and host.kind == "parts"
    if asks and not (suspects.working or suspects.accuses) and suspects.suspects:
        return "No fault is likelier than a trimmer far up."
    return suspects.heading if suspects.working or suspects.accuses else ""


def _sections(plan: Plan, state: State) -> tuple[SectionView, ...]:
    found = {judged.item: judged.verdict for judged in state.results}
    numbers: dict[str, list[int]] = {}
    for number, item in enumerate(plan.items):
        if not state.leaves_out(item):
            numbers.setdefault(item.section, []).append(number)
    views = []
    for name, own in numbers.items():
        verdicts = [found[plan.items[number].id] for number in own if plan.items[number].id in found]
        views.append(
            SectionView(
                name=name,
                title=plan.items[own[0]].section_title,
                done=sum(number < state.index for number in own),
                total=len(own),
                current=own[0] <= state.index <= own[-1],
                verdict=worst(verdicts) if verdicts else None,
            )
        )
    return tuple(views)


def _value_text(judged: Judged) -> str:
    """Write a value with no more places than its uncertainty, and a thousandth of its limits' distance, have."""
    if judged.value is None or not judged.unit:
        return _number(judged.value, judged.unit)
    span = 0.0 if judged.low is None or judged.high is None else judged.high - judged.low
    coarse = max(judged.uncertainty or 0.0, span / 100.0 if math.isfinite(span) else 0.0)
    return quantities.show_within(judged.value, judged.unit, coarse, 5)


def _number(value: float | None, unit: str) -> str:
    if value is None:
        return ""
    return quantities.show(value, unit, 5) if unit else f"{value:.3g}"
