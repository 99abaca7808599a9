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
* An extra reading is an item like any other, beside the plan's: while it is taken, it is *the* item.
* What the model says of this unit comes aside (`benchkit.procedure.modelling`): it moves nothing and stops nothing.
* A section that may be left out (`benchkit.procedure.file`) is passed by as a whole, and nothing in it is missed.
* Once parts have been replaced, what was read before tells of another unit: the model doesn't count it, and what the
  unit was *found* with no longer makes the verdict.
* Nobody is told to touch the unit on the way out before both of its rails have been seen low; a unit that never had
  power is looked at too, once a look at its rails has not found them low.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass, replace
from typing import Final

from benchkit.errors import IllegalEvent
from benchkit.events import (
    Answered,
    Closed,
    Decided,
    Event,
    Judged,
    Narrowed,
    Noted,
    OutputOff,
    PartsReplaced,
    SupplyRefused,
    SupplySet,
    Suspected,
    Waited,
)
from benchkit.procedure import questions
from benchkit.procedure.actions import Action, Ask, Write
from benchkit.procedure.hearing import (
    heard,
    lacks_protection,
    limit_judged,
    limit_seen,
    off_by_word,
    off_heard,
    rails_judged,
    switched_by_hand,
)
from benchkit.procedure.items import JUDGED_KINDS, RAIL_POINTS, Plan
from benchkit.procedure.modelling import Modelling
from benchkit.procedure.moves import Step
from benchkit.procedure.securing import NOT_CONFIRMED, Securing, demand
from benchkit.procedure.sizing import time_text
from benchkit.procedure.state import State
from benchkit.procedure.table import TABLE

__all__ = ["JUDGED_KINDS", "Plan", "Step", "Walk"]

STILL_LIVE: Final = "Treat the unit as live: nobody has seen its rails low."

NOT_OF_THE_ITEM: Final = (Noted, Narrowed, Suspected)
"""Events that belong to no item, or to an earlier one."""


@dataclass(frozen=True)
class Walk(Securing, Modelling):
    """One plan, and what each event does to a walk through it."""

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
        if item is not None and not isinstance(event, NOT_OF_THE_ITEM) and item != self.item(state).id:
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
            if isinstance(event, Closed) and state.stopped and not state.ever_on and self.way_out(state):
                # Earlier versions closed here, without a look at rails that had been read as charged.
                state = replace(state, phase="closing")
            state, actions = self.handle(state, event, now_s)
        return state, actions

    # -- answers -----------------------------------------------------------------------------------------------

    def _answered(self, state: State, event: Answered) -> Step:
        item = self.item(state)
        demand(event, *(("yes", "no") if item.kind in ("confirm", "hold", "lamp", "choose") else ("done",)))
        if item.kind == "parts":
            raise IllegalEvent(f"{item.id} was answered {event.choice!r}", "which parts were replaced")
        if item.kind == "choose":
            others = state.chosen - {item.section}
            return self._next(replace(state, chosen=others | {item.section} if event.choice == "yes" else others))
        if item.kind in ("confirm", "lamp"):
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

    def _parts_replaced(self, state: State, event: PartsReplaced) -> Step:
        """Go on with another unit than the one that was read before, where parts were replaced."""
        item = self.item(state)
        if item.kind != "parts":
            raise IllegalEvent(f"{item.id} was told which parts were replaced", "its own answer")
        if bool(event.parts.strip()) < event.semiconductors:
            raise IllegalEvent("Semiconductors were replaced that nobody named", "the parts that were replaced")
        if not event.parts.strip():
            return self._next(state)
        read = frozenset(state.readings) | {result.item for result in state.results}
        state = replace(
            state,
            parts="; ".join(part for part in (state.parts, event.parts.strip()) if part),
            semiconductors=state.semiconductors or event.semiconductors,
            before=state.before | read,
            outdated=state.outdated | read,
            narrowed={},
            suspicion=None,
            suspecting=0,
            resumed_at=state.count,
            probes="",
        )
        return self._next(state)

    def _placed(self, state: State, event: Answered) -> Step:
        demand(event, "done")
        item = self.item(state)
        assert item.point is not None
        return self._read(replace(state, probes=item.point.name), item)

    def _decided(self, state: State, event: Decided) -> Step:
        item, result = self.item(state), state.result(self.item(state).id)
        if event.choice == "probe":
            return self._probe(state)
        if event.choice == "again":
            return self._enter(replace(state, probes=""), state.index)
        if event.choice == "trim again":
            return self._trim_again(state)
        if event.choice == "read again":
            return self._read_again(state)
        if (
            event.choice == "go on"
            and not state.missing
            and result is not None
            and (result.verdict == "pass" or result.rare)
        ):
            return self._next(state)  # odd, or rare: there is no failure to pass over
        if event.choice == "go on":
            if not (item.may_go_on or self.way_out(state)):
                raise IllegalEvent(f"{item.id} can't be passed over", "again, or make safe")
            if not event.reason.strip():
                raise IllegalEvent(f"{item.id} was passed over without a reason", "a reason in words")
            state = replace(state, overrides={**state.overrides, item.id: event.reason})
            if self.way_out(state) and item.point is not None and item.point.name in RAIL_POINTS:
                return self._close(replace(state, index=len(self.plan), note=STILL_LIVE))
            return self._next(state)
        if self.way_out(state):
            raise IllegalEvent("The walk is on its way out already", "again, or a reason to go on")
        if item.kind == "connect":
            return self._make_safe(state, "the instruments did not answer", 3)
        said = "there was no result" if result is None else f"the result was {result.verdict}"
        return self._make_safe(state, f"the operator stopped at {item.title}: {said}", 4 if result is None else 1)

    def _trim_again(self, state: State) -> Step:
        """Go back to the trim; what was read since is no longer how the unit stands."""
        item = self.item(state)
        if state.missing or not self.may_trim_again(state, item, state.result(item.id)):
            raise IllegalEvent(f"{item.id} doesn't lead back to a trim now", "one of the answers that are offered")
        back = self._number_of(item.back)
        trims = {**state.trims, item.id: state.trims.get(item.id, 0) + 1}
        passed = frozenset(one.id for one in self.plan.items[back : state.index + 1])
        return self._enter(replace(_without(state, passed), trims=trims, keeping=frozenset()), back)

    def _read_again(self, state: State) -> Step:
        """Go back to the readings that a rule judged; others that were taken meanwhile are kept."""
        item = self.item(state)
        if not item.retake:
            raise IllegalEvent(f"{item.id} has no readings just before it", "one of the answers that are offered")
        first = self._number_of(item.retake[0])
        passed = self.plan.items[first : state.index]
        others = frozenset(one.id for one in passed if one.kind == "measure" and one.id not in item.retake)
        state = replace(_without(state, frozenset(item.retake)), keeping=others)
        return self._enter(state, first)

    # -- supply and time ---------------------------------------------------------------------------------------

    def _supply_set(self, state: State, event: SupplySet) -> Step:
        item = self.item(state)
        state = heard(state, event.state)
        state = limit_seen(state, item, event.state)
        judge = limit_judged if item.kind == "limit check" else rails_judged
        by_hand = switched_by_hand(state)
        judged = judge(item, event.state, by_hand=by_hand)
        if item.kind == "supply" and not by_hand:
            state = replace(state, unprotected=lacks_protection(event.state))
        return replace(state, phase="judging"), (Write(item=item.id, event=judged),)

    def _supply_refused(self, state: State, event: SupplyRefused) -> Step:
        return self._make_safe(state, event.problem, 3)

    def _waited(self, state: State, event: Waited) -> Step:
        after, actions = self._next(state)
        if event.settled is False and after.phase != "closing":
            after = replace(after, note=f"{event.point} had not come to rest after {time_text(event.seconds)}.")
        return after, actions

    def _off(self, state: State, event: OutputOff) -> Step:
        state = off_heard(state, event)
        if event.confirmed:
            return self._next(state)
        item = self.item(state)
        by_hand = switched_by_hand(state)
        question = questions.supply_off(item) if by_hand else questions.by_hand_off(item, event.how)
        return replace(state, phase="by hand off"), (Ask(item=item.id, question=question),)

    def _off_by_hand(self, state: State, event: Answered) -> Step:
        demand(event, "done")
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


def _without(state: State, passed: frozenset[str]) -> State:
    """Drop the readings of some items."""
    return replace(state, readings={item: reading for item, reading in state.readings.items() if item not in passed})
