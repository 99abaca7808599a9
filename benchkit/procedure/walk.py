"""The walk: a pure state machine over the plan.

Rules
-----
* `Walk.handle` takes a frozen event and the time, and returns a new state and the actions that it asks for.  It
  touches nothing else.  The record is the list of events; handling them again gives the same state.
* `TABLE` says which events each phase takes and which method handles them.  Any other event raises `IllegalEvent`,
  and nothing has changed.
* Every phase but ``unopened`` and ``closed`` takes the events that end in *made safe*: the operator asks, a watch
  trips, contact is lost, the output went off.  They all lead to the first item of the last section, where the supply
  is switched off and read back, and from there to the end.
* A verdict is an event too (`Judged`): the walk writes it and goes on when it stands in the record.
* What was passed over stays what it was: an overridden failure makes the verdict of the walk a failure, and a reading
  that was never taken leaves it undecided.
* Nobody is told to touch the unit on the way out before both of its rails have been seen low.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass, replace
from typing import Final

from benchkit.errors import IllegalEvent
from benchkit.events import (
    Answered,
    BenchFound,
    BenchMissing,
    Closed,
    ContactLost,
    Decided,
    Event,
    Judged,
    Noted,
    OutputOff,
    Predicted,
    PredictionRefused,
    ReadingMissed,
    ReadingTaken,
    Resumed,
    StopAsked,
    SupplyRefused,
    SupplySet,
    TrimEnded,
    Tripped,
    Waited,
    WalkOpened,
)
from benchkit.judge.limits import Limits
from benchkit.judge.verdicts import judge_reading, worst
from benchkit.measure.readings import Reading
from benchkit.procedure import questions
from benchkit.procedure.actions import (
    Action,
    Ask,
    Connect,
    Evaluate,
    Predict,
    Read,
    SetSupply,
    SwitchOff,
    Trim,
    Wait,
    Write,
)
from benchkit.procedure.file import MADE_SAFE
from benchkit.procedure.hearing import cut, heard, limit_judged, off_by_word, off_heard, rails_judged
from benchkit.procedure.items import Item, Joined, Plan, condition_key
from benchkit.procedure.state import State
from benchkit.procedure.table import TABLE

RUNNERS: Final = frozenset({"the screen", "the keeper"})
"""Who runs a walk, as `ContactLost` calls them: when one of them goes, nothing is wrong with unit or bench."""

RUNNER_GONE: Final = ("contact with the screen was lost", "the screen closed the bench", "an error of the session")
"""How the reasons begin with which the supply is switched off when whoever ran the walk has gone."""

NOT_CONFIRMED: Final = "the supply did not confirm that its output is off"
"""Why a walk goes no further with a supply that doesn't obey."""

Step = tuple[State, tuple[Action, ...]]

JUDGED_KINDS: Final = frozenset({"confirm", "measure", "rule", "supply", "limit check", "trim"})
"""Kinds of item that end in a result; a walk passes only when each of them has one."""

AFTER_TRIP: Final = "Discharge, and find the cause: no second try at a higher limit."
STILL_LIVE: Final = "Treat the unit as live: nobody has seen its rails low."


@dataclass(frozen=True)
class Walk:
    """One plan, and what each event does to a walk through it."""

    plan: Plan

    def handle(self, state: State, event: Event, now_s: float) -> Step:
        """Take one event.

        Parameters
        ----------
        state : State
        event : Event
        now_s : float
            The session's time (s).

        Returns
        -------
        state : State
            The new state; `state` itself is untouched.
        actions : tuple of Action
            What is to be done next; an action that was asked for earlier and has not answered has lapsed if
            the phase has changed.

        Raises
        ------
        IllegalEvent
            When the phase doesn't take such an event, or the event belongs to another item.
        """
        method = TABLE.get((state.phase, type(event)))
        if method is None:
            raise IllegalEvent(
                f"The walk is {state.phase} and was told {event.name!r}", "an event that this phase takes"
            )
        item = getattr(event, "item", None)
        if item is not None and not isinstance(event, Noted) and item != self.item(state).id:
            raise IllegalEvent(f"{event.name!r} came for {item}", f"one for {self.item(state).id}")
        handler: Callable[[State, Event], Step] = getattr(self, method)
        after, actions = handler(replace(state, count=state.count + 1), event)
        if (after.phase, after.index) != (state.phase, state.index):
            after = replace(after, since_s=now_s)
        return after, actions

    def replay(self, events: Iterable[tuple[Event, float]]) -> Step:
        """Handle events from the beginning; returns the last state and the actions that still stand open."""
        state = State()
        actions: tuple[Action, ...] = ()
        for event, now_s in events:
            state, actions = self.handle(state, event, now_s)
        return state, actions

    def item(self, state: State) -> Item:
        """The item that is being done (the last one when all are)."""
        return self.plan.items[min(state.index, len(self.plan) - 1)]

    def limits_for(self, state: State, item: Item) -> Limits | None:
        """The limits of an item's reading, as far as they are known."""
        if item.limits is not None or item.condition is None or item.point is None:
            return item.limits
        key = condition_key(item.condition)
        found = state.limits.get(key, {}).get(item.point.name)
        return None if found is None else questions.model_limits(found, key, item.allow)

    def way_out(self, state: State) -> bool:
        """True in the last section, the way out."""
        return state.index >= self.plan.made_safe

    # -- entering items ----------------------------------------------------------------------------------------

    def _enter(self, state: State, index: int) -> Step:
        state = replace(state, index=index, note="")
        if index >= len(self.plan):
            return self._close(state)
        item = self.plan.items[index]
        match item.kind:
            case "connect":
                return replace(state, phase="connecting"), (Connect(item=item.id),)
            case "tell" | "confirm" | "text" | "hold":
                return replace(state, phase="asking"), (Ask(item=item.id, question=questions.question_for(item)),)
            case "measure":
                return self._enter_measure(state, item)
            case "rule":
                return replace(state, phase="judging"), (Evaluate(item=item.id, rule=item.rule, number=item.number),)
            case "supply" | "limit check":
                # From the moment that it is told to switch on, the output may be on.
                state = replace(state, phase="setting", energised="unknown", ever_on=True)
                action = SetSupply(
                    item=item.id,
                    positive_v=item.positive_v,
                    negative_v=item.negative_v,
                    limit_a=item.limit_a,
                    ramp_s=item.ramp_s,
                    settle_s=item.settle_s,
                    trip_on_limit=item.kind == "supply",
                )
                return state, (action,)
            case "trim":
                assert item.point is not None
                assert item.limits is not None
                assert item.limits.low is not None
                assert item.limits.high is not None
                assert item.limits.nominal is not None
                trim = Trim(
                    item=item.id,
                    question=questions.trimming(item),
                    point=item.point.name,
                    function=item.point.function,
                    unit=item.point.unit,
                    target=item.limits.nominal,
                    low=item.limits.low,
                    high=item.limits.high,
                )
                return replace(state, phase="trimming"), (trim,)
            case "wait":
                words = f"{item.title}. {item.do} {item.caution}".strip()
                wait = Wait(item=item.id, seconds=item.seconds, reason=words)
                return replace(state, phase="waiting"), (wait,)
            case "off":
                reason = state.stopped or "a step of the procedure"
                return replace(state, phase="switching off"), (SwitchOff(item=item.id, reason=reason),)

    def _enter_measure(self, state: State, item: Item) -> Step:
        assert item.point is not None
        limits = self.limits_for(state, item)
        if limits is None:
            assert item.condition is not None
            key = condition_key(item.condition)
            points = tuple(
                dict.fromkeys(
                    other.point.name
                    for other in self.plan.items
                    if other.kind == "measure"
                    and other.point is not None
                    and other.condition is not None
                    and condition_key(other.condition) == key
                )
            )
            conditions = item.condition.conditions if isinstance(item.condition, Joined) else (item.condition,)
            predict = Predict(item=item.id, key=key, conditions=conditions, points=points)
            return replace(state, phase="predicting"), (predict,)
        if item.point.name == state.probes or item.point.function == "dc current":
            return self._read(state, item)
        ask = Ask(item=item.id, question=questions.placing(item, limits))
        return replace(state, phase="placing"), (ask,)

    def _read(self, state: State, item: Item) -> Step:
        assert item.point is not None
        read = Read(
            item=item.id,
            point=item.point.name,
            function=item.point.function,
            unit=item.point.unit,
            samples=item.samples,
            settle_s=item.settle_s,
        )
        return replace(state, phase="reading"), (read,)

    def _next(self, state: State) -> Step:
        if state.stopped and not state.ever_on and self.item(state).kind == "off":
            return self._close(replace(state, index=len(self.plan)))
        return self._enter(state, state.index + 1)

    def _close(self, state: State) -> Step:
        state = replace(state, phase="closing")
        verdict = worst([result.verdict for result in state.results])
        if verdict == "pass" and any(self._is_open(state, item) for item in self.plan.items):
            verdict = "undecided"
        if state.stopped and verdict == "pass":
            verdict = "undecided"
        status = state.stop_status or (0 if verdict == "pass" else 1)
        closed = Closed(count=state.count, verdict=verdict, stopped=state.stopped, exit_status=status)
        return state, (Write(item="", event=closed),)

    def _is_open(self, state: State, item: Item) -> bool:
        """An item that wants a result and has none, or only one from before that was passed over since."""
        if item.kind not in JUDGED_KINDS:
            return False
        return state.result(item.id) is None or (item.id in state.before and item.id in state.overrides)

    def _make_safe(self, state: State, reason: str, status: int) -> Step:
        if not state.stopped:
            state = replace(
                state, stopped=reason, stopped_at=self.item(state).id if state.phase != "closing" else "",
                stop_status=status,
            )  # fmt: skip
        state = replace(state, probes="")
        if state.phase in ("closing",):
            return self._close(state)
        if self.way_out(state) and state.phase in ("switching off", "by hand off"):
            return replace(state, note=reason), ()
        after, actions = self._enter(state, self.plan.made_safe)
        return replace(after, note=reason), actions

    def _decide(self, state: State, result: Judged | None, problem: str = "") -> Step:
        item = self.item(state)
        question = questions.deciding(item, result, problem, way_out=self.way_out(state))
        return replace(state, phase="deciding", note=problem), (Ask(item=item.id, question=question),)

    # -- what may come at any time -----------------------------------------------------------------------------

    def _stop_asked(self, state: State, event: StopAsked) -> Step:
        return self._make_safe(state, event.reason, 4)

    def _tripped(self, state: State, event: Tripped) -> Step:
        after, actions = self._make_safe(heard(state, event.state), f"tripped: {event.reason}", 4)
        return replace(after, note=f"Tripped: {event.reason}. {AFTER_TRIP}"), actions

    def _contact_lost(self, state: State, event: ContactLost) -> Step:
        if event.who in RUNNERS:
            state = cut(state)
        return self._make_safe(state, f"contact with {event.who} was lost: {event.problem}", 3)

    def _output_went_off(self, state: State, event: OutputOff) -> Step:
        state = off_heard(state, event)
        if self.way_out(state) or state.phase == "closing":
            return replace(state, note=event.how), self._open_actions(state)
        if event.reason.startswith(RUNNER_GONE):
            state = cut(state)
        return self._make_safe(state, f"the supply was switched off: {event.reason}", 4)

    def _open_actions(self, state: State) -> tuple[Action, ...]:
        """Only a closing walk has to be asked anew: its last line counts the lines before it."""
        return self._close(state)[1] if state.phase == "closing" else ()

    def _noted(self, state: State, event: Noted) -> Step:
        return state, self._open_actions(state)

    def _resumed(self, state: State, event: Resumed) -> Step:
        before = frozenset(result.item for result in state.results)
        if state.cut_at is not None:
            # Whoever ran the walk went away: the walk itself had not been stopped.
            state = replace(state, index=state.cut_at, cut_at=None, stopped="", stopped_at="", stop_status=0)
        index = min(state.index, len(self.plan) - 1)
        state = replace(
            state, phase="securing", index=index, before=before, probes="", energised="unknown", supply=None,
            note="Earlier readings are marked as from before.",
        )  # fmt: skip
        return state, (Connect(item=self.item(state).id),)

    # -- opening, connecting, securing -------------------------------------------------------------------------

    def _opened(self, state: State, event: WalkOpened) -> Step:
        return self._enter(replace(state, opened=event), 0)

    def _bench_found(self, state: State, event: BenchFound) -> Step:
        state = heard(replace(state, meter=event.meter, supply_name=event.supply), event.supply_state)
        if event.supply_state is not None and state.energised != "off":
            note = "The supply's output was on when it was found."
            if state.energised == "unknown":
                note = "The supply did not say whether its output is on."
            return replace(state, phase="securing", ever_on=True, note=note), (
                SwitchOff(item=self.item(state).id, reason=note),
            )
        return self._next(state)

    def _bench_missing(self, state: State, event: BenchMissing) -> Step:
        return self._decide(state, None, event.problem)

    def _secure_found(self, state: State, event: BenchFound) -> Step:
        state = heard(replace(state, meter=event.meter, supply_name=event.supply), event.supply_state)
        return state, (SwitchOff(item=self.item(state).id, reason="the walk goes on after it was cut off"),)

    def _secure_missing(self, state: State, event: BenchMissing) -> Step:
        question = questions.deciding(self.item(state), None, event.problem, way_out=False)
        question = replace(question, choices=(questions.AGAIN, questions.STOP))
        return replace(state, note=event.problem), (Ask(item=self.item(state).id, question=question),)

    def _secure_decided(self, state: State, event: Decided) -> Step:
        if event.choice == "go on":
            raise IllegalEvent("Nobody knows whether the supply is off", "again, or make safe")
        if event.choice == "again":
            return state, (Connect(item=self.item(state).id),)
        stopped = replace(state, stopped=state.stopped or "the instruments did not answer", stop_status=3, ever_on=True)
        return self._enter(stopped, self.plan.made_safe)

    def _secured(self, state: State, event: OutputOff) -> Step:
        state = off_heard(state, event)
        if not event.confirmed:
            return state, (Ask(item=self.item(state).id, question=questions.by_hand_off(self.item(state), event.how)),)
        return self._go_back(state)

    def _secured_by_hand(self, state: State, event: Answered) -> Step:
        _demand(event, "done")
        if not state.unconfirmed:
            raise IllegalEvent("The supply has not been asked to switch off yet", "its answer first")
        if self._switched_here(state):
            stopped = state if state.stopped else replace(state, stopped=NOT_CONFIRMED, stopped_at=self.item(state).id)
            return self._enter(replace(off_by_word(stopped), stop_status=3, ever_on=True), self.plan.made_safe)
        return self._go_back(off_by_word(state))

    def _switched_here(self, state: State) -> bool:
        """Whether benchkit itself switches the supply, so that an off that it can't confirm means trouble."""
        return state.opened is not None and state.opened.supply == "scpi"

    def _go_back(self, state: State) -> Step:
        if self.item(state).kind == "connect":
            return self._next(state)
        if state.stopped or self.way_out(state):
            return self._enter(state, self.plan.made_safe)
        return self._enter(state, min(state.index, self.plan.resume))

    # -- answers -----------------------------------------------------------------------------------------------

    def _answered(self, state: State, event: Answered) -> Step:
        item = self.item(state)
        _demand(event, *(("yes", "no") if item.kind in ("confirm", "hold") else ("done",)))
        if item.kind == "confirm":
            verdict = "pass" if event.choice == "yes" else "fail"
            judged = Judged(
                item=item.id, subject=item.title, verdict="pass" if verdict == "pass" else "fail", value=None, unit="",
                low=None, high=None, why=event.text or f"The operator answered {event.choice}.",
            )  # fmt: skip
            return replace(state, phase="judging"), (Write(item=item.id, event=judged),)
        if event.choice == "no":
            return self._make_safe(state, f"the operator said no at: {item.title}", 4)
        if item.kind == "tell":
            state = replace(state, probes="" if item.point is None else item.point.name)
        return self._next(state)

    def _placed(self, state: State, event: Answered) -> Step:
        _demand(event, "done")
        item = self.item(state)
        assert item.point is not None
        return self._read(replace(state, probes=item.point.name), item)

    def _decided(self, state: State, event: Decided) -> Step:
        item = self.item(state)
        if event.choice == "again":
            return self._enter(replace(state, probes=""), state.index)
        if event.choice == "go on":
            if not (item.may_go_on or self.way_out(state)):
                raise IllegalEvent(f"{item.id} can't be passed over", "again, or make safe")
            if not event.reason.strip():
                raise IllegalEvent(f"{item.id} was passed over without a reason", "a reason in words")
            state = replace(state, overrides={**state.overrides, item.id: event.reason})
            if self.way_out(state) and item.point is not None and item.point.name in ("rail+", "rail-"):
                return self._close(replace(state, index=len(self.plan), note=STILL_LIVE))
            return self._next(state)
        if self.way_out(state):
            raise IllegalEvent("The walk is on its way out already", "again, or a reason to go on")
        if item.kind == "connect":
            return self._make_safe(state, "the instruments did not answer", 3)
        result = state.result(item.id)
        said = "there was no result" if result is None else f"the result was {result.verdict}"
        return self._make_safe(state, f"the operator stopped at {item.title}: {said}", 4 if result is None else 1)

    # -- predictions, readings, verdicts -----------------------------------------------------------------------

    def _predicted(self, state: State, event: Predicted) -> Step:
        known = dict(state.limits.get(event.condition, {}))
        known.update({limits.point: limits for limits in event.limits})
        state = replace(state, limits={**state.limits, event.condition: known})
        item = self.item(state)
        if self.limits_for(state, item) is None:
            return self._undecided(state, "The model gave no limits for this point.")
        return self._enter_measure(state, item)

    def _prediction_refused(self, state: State, event: PredictionRefused) -> Step:
        return self._undecided(state, event.problem)

    def _undecided(self, state: State, why: str) -> Step:
        item = self.item(state)
        judged = Judged(
            item=item.id, subject=_subject(item), verdict="undecided", value=None,
            unit="" if item.point is None else item.point.unit, low=None, high=None, why=why,
        )  # fmt: skip
        return replace(state, phase="judging"), (Write(item=item.id, event=judged),)

    def _reading_taken(self, state: State, event: ReadingTaken) -> Step:
        item = self.item(state)
        assert item.point is not None
        if event.reading.point != item.point.name or event.reading.unit != item.point.unit:
            raise IllegalEvent(f"A reading of {event.reading.point} came", f"one of {item.point.name}")
        limits = self.limits_for(state, item)
        assert limits is not None
        judged = self._verdict(item, event.reading, limits)
        if judged.verdict == "pass" and item.section == MADE_SAFE and state.energised == "on":
            why = "The supply itself says that its output is on: the reading can't be of a unit that is off."
            judged = replace(judged, verdict="fail", why=why)
        state = replace(state, phase="judging", readings={**state.readings, item.id: event.reading})
        return state, (Write(item=item.id, event=judged),)

    def _verdict(self, item: Item, reading: Reading, limits: Limits) -> Judged:
        judgement = judge_reading(reading, limits, acceptance=item.acceptance)
        return Judged(
            item=item.id, subject=reading.point, verdict=judgement.verdict, value=reading.value, unit=reading.unit,
            low=limits.low, high=limits.high, uncertainty=reading.standard_uncertainty,
            probability=judgement.conformance_probability, why=judgement.why,
        )  # fmt: skip

    def _reading_missed(self, state: State, event: ReadingMissed) -> Step:
        return self._decide(state, None, event.problem)

    def _trim_ended(self, state: State, event: TrimEnded) -> Step:
        item = self.item(state)
        assert item.limits is not None
        judged = Judged(
            item=item.id, subject=_subject(item), verdict="fail", value=None, unit=item.limits.unit,
            low=item.limits.low, high=item.limits.high, why=event.problem,
        )  # fmt: skip
        return replace(state, phase="judging"), (Write(item=item.id, event=judged),)

    def _judged(self, state: State, event: Judged) -> Step:
        item = self.item(state)
        results = (*(result for result in state.results if result.item != item.id), event)
        state = replace(
            state,
            results=results,
            before=state.before - {item.id},
            attempts={**state.attempts, item.id: state.attempts.get(item.id, 0) + 1},
            overrides={name: reason for name, reason in state.overrides.items() if name != item.id},
        )
        if event.verdict == "pass":
            return self._next(state)
        if item.kind in ("supply", "limit check"):
            return self._make_safe(state, event.why, 4)
        return self._decide(state, event)

    # -- supply and time ---------------------------------------------------------------------------------------

    def _supply_set(self, state: State, event: SupplySet) -> Step:
        item = self.item(state)
        state = heard(state, event.state)
        judge = limit_judged if item.kind == "limit check" else rails_judged
        judged = judge(item, event.state)
        return replace(state, phase="judging"), (Write(item=item.id, event=judged),)

    def _supply_refused(self, state: State, event: SupplyRefused) -> Step:
        return self._make_safe(state, event.problem, 3)

    def _waited(self, state: State, event: Waited) -> Step:
        return self._next(state)

    def _off(self, state: State, event: OutputOff) -> Step:
        state = off_heard(state, event)
        if event.confirmed:
            return self._next(state)
        item = self.item(state)
        ask = Ask(item=item.id, question=questions.by_hand_off(item, event.how))
        return replace(state, phase="by hand off"), (ask,)

    def _off_by_hand(self, state: State, event: Answered) -> Step:
        _demand(event, "done")
        if self._switched_here(state):
            stopped = state if state.stopped else replace(state, stopped=NOT_CONFIRMED, stopped_at=self.item(state).id)
            state = replace(stopped, stop_status=3, ever_on=True)
            if not self.way_out(state):
                return self._enter(off_by_word(state), self.plan.made_safe)
        return self._next(off_by_word(state))

    def _closed(self, state: State, event: Closed) -> Step:
        lines_before = state.count - 1
        if event.count != lines_before:
            raise IllegalEvent(f"The last line counts {event.count} lines before it", f"{lines_before}")
        return replace(state, phase="closed", closed=event), ()


def _demand(event: Answered, *choices: str) -> None:
    """Take no answer for another: only a plain yes passes a hold point."""
    if event.choice not in choices:
        raise IllegalEvent(f"{event.item} was answered {event.choice!r}", " or ".join(choices))


def _subject(item: Item) -> str:
    return item.title if item.point is None else item.point.name
