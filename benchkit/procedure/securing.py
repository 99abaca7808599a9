"""What may come at any time, and how a walk finds its bench and makes sure of the supply.

Whatever stops a walk leads to the first item of the last section, where the supply is switched off and read back.
"""

from __future__ import annotations

from dataclasses import replace
from typing import Final

from benchkit.errors import IllegalEvent
from benchkit.events import (
    Answered,
    BenchFound,
    BenchMissing,
    ContactLost,
    Decided,
    Noted,
    OutputOff,
    Resumed,
    StopAsked,
    Tripped,
    WalkOpened,
)
from benchkit.procedure import questions
from benchkit.procedure.actions import Action, Ask, Connect, SwitchOff
from benchkit.procedure.hearing import (
    at_a_limit,
    cut,
    heard,
    never_on_by_hand,
    off_by_word,
    off_heard,
    switched_by_hand,
)
from benchkit.procedure.limited import tripped_reason
from benchkit.procedure.moves import Moves, Step
from benchkit.procedure.state import State

NOTHING_BROKEN: Final = "none"
"""What stands in place of the names when a rehearsal's unit ends with every part whole."""

RUNNERS: Final = frozenset({"the screen", "the keeper"})
"""Who runs a walk, as `ContactLost` calls them: when one of them goes, nothing is wrong with unit or bench."""

RUNNER_GONE: Final = ("contact with the screen was lost", "the screen closed the bench", "an error of the session")
"""How the reasons begin with which the supply is switched off when whoever ran the walk has gone."""

MAKING_SURE: Final = "to make sure that it is off"
"""How the reason begins with which a supply that is known to be off is switched off once more: the place is kept."""

NOT_CONFIRMED: Final = "the supply did not confirm that its output is off"
"""Why a walk goes no further with a supply that doesn't obey."""

STILL_OFF: Final = "The supply is off, and was read back as off once more. The walk stays where it is."

WAS_ON: Final = "The supply's output was on when it was found."

NOT_SAID: Final = "The supply did not say whether its output is on."

FOUND_ON: Final = (
    "It was switched off, and read back as off. Rails may hold charge: see them low before a hand goes in."
)
"""Said of a supply that was on, or said nothing, when it was found."""

OFF_ASKED: Final = "The supply is off already, and is told so once more. The walk stays where it is."

OFF_AS_SAID: Final = "You said that it is off; nothing here can switch it. The walk stays where it is."

NOT_ON_YET: Final = (
    "Nothing here can switch your supply, and nobody was asked to switch it on yet: if it is on, switch it off by "
    "hand. The walk stays where it is."
)

AFTER_TRIP: Final = "Discharge, and find the cause: no second try at a higher limit."


class Securing(Moves):
    """Stops, the way out, the bench, the supply's state."""

    # -- what may come at any time -----------------------------------------------------------------------------

    def _stop_asked(self, state: State, event: StopAsked) -> Step:
        never_on = never_on_by_hand(state)
        if (state.energised == "off" or never_on) and event.reason.startswith(MAKING_SURE):
            note = NOT_ON_YET if never_on else OFF_AS_SAID if switched_by_hand(state) else OFF_ASKED
            return replace(state, note=note), self._open_actions(state)
        return self._make_safe(state, event.reason, 4)

    def _tripped(self, state: State, event: Tripped) -> Step:
        state = heard(state, event.state)
        ask = not state.stopped and not self.way_out(state)
        if ask:
            state = replace(state, tripped=event, tripped_at=self.host(state).id)
        if ask and at_a_limit(event):
            limited = self._from_least_bias(state, event.reason)
            if limited is not None:
                return limited
        after, actions = self._make_safe(state, f"tripped: {event.reason}", 4)
        after, asked = self._ask_suspects(after) if ask else (after, ())
        return replace(after, note=f"Tripped: {event.reason}. {AFTER_TRIP}"), (*actions, *asked)

    def _contact_lost(self, state: State, event: ContactLost) -> Step:
        if event.who in RUNNERS:
            state = cut(state)
        return self._make_safe(state, f"contact with {event.who} was lost: {event.problem}", 3)

    def _output_went_off(self, state: State, event: OutputOff) -> Step:
        again = event.reason.startswith(MAKING_SURE) or event.reason == tripped_reason(state)
        sure = state.energised == "off" and event.confirmed and again
        state = off_heard(state, event)
        if sure:
            return replace(state, note=STILL_OFF), self._open_actions(state)
        if self.way_out(state) or state.phase == "closing":
            return replace(state, note=event.how), self._open_actions(state)
        if event.reason.startswith(RUNNER_GONE):
            state = cut(state)
        return self._make_safe(state, f"the supply was switched off: {event.reason}", 4)

    def _open_actions(self, state: State) -> tuple[Action, ...]:
        """Only a closing walk has to be asked anew: its last line counts the lines before it."""
        return self._close(state)[1] if state.phase == "closing" else ()

    def _noted(self, state: State, event: Noted) -> Step:
        if event.broken is not None:
            state = replace(state, broken="; ".join(event.broken) or NOTHING_BROKEN)
        return state, self._open_actions(state)

    def _resumed(self, state: State, event: Resumed) -> Step:
        before = frozenset(result.item for result in state.results)
        if state.cut_at is not None:
            # Whoever ran the walk went away: the walk itself had not been stopped.
            state = replace(state, index=state.cut_at, cut_at=None, stopped="", stopped_at="", stop_status=0)
        index = min(state.index, len(self.plan) - 1)
        state = replace(
            state, phase="securing", index=index, before=before, probes="", energised="unknown", supply=None,
            extra="", missing="", suspecting=0, narrowed={}, resumed_at=state.count, tripped=None,
            note="Earlier readings are marked as from before.",
        )  # fmt: skip
        return state, (Connect(item=self.item(state).id),)

    # -- opening, connecting, securing -------------------------------------------------------------------------

    def _opened(self, state: State, event: WalkOpened) -> Step:
        return self._enter(replace(state, opened=event), 0)

    def _bench_found(self, state: State, event: BenchFound) -> Step:
        state = heard(replace(state, meter=event.meter, supply_name=event.supply), event.supply_state)
        if event.supply_state is not None and state.energised != "off":
            note = NOT_SAID if state.energised == "unknown" else WAS_ON
            return replace(state, phase="securing", ever_on=True, note=note), (
                SwitchOff(item=self.item(state).id, reason=note),
            )
        return self._next(state)

    def _bench_missing(self, state: State, event: BenchMissing) -> Step:
        return self._decide(state, None, event.problem)

    def _secure_found(self, state: State, event: BenchFound) -> Step:
        state = heard(replace(state, meter=event.meter, supply_name=event.supply), event.supply_state)
        if state.on_lamp:
            return replace(state, unconfirmed=True), (
                Ask(item=self.item(state).id, question=questions.lamp_off(self.item(state))),
            )
        return state, (SwitchOff(item=self.item(state).id, reason="the walk goes on after it was cut off"),)

    def _secure_missing(self, state: State, event: BenchMissing) -> Step:
        question = questions.deciding(self.item(state), None, event.problem, way_out=False)
        question = replace(question, choices=(questions.AGAIN, questions.STOP))
        return replace(state, note=event.problem, missing=event.problem), (
            Ask(item=self.item(state).id, question=question),
        )

    def _secure_decided(self, state: State, event: Decided) -> Step:
        if event.choice not in ("again", "make safe"):
            raise IllegalEvent("Nobody knows whether the supply is off", "again, or make safe")
        if event.choice == "again":
            return state, (Connect(item=self.item(state).id),)
        stopped = replace(state, stopped=state.stopped or "the instruments did not answer", stop_status=3, ever_on=True)
        return self._enter(stopped, self.plan.made_safe)

    def _secured(self, state: State, event: OutputOff) -> Step:
        state = off_heard(state, event)
        if not event.confirmed:
            return state, (Ask(item=self.item(state).id, question=questions.by_hand_off(self.item(state), event.how)),)
        after, actions = self._go_back(state)
        if event.reason in (WAS_ON, NOT_SAID):
            after = replace(after, note=f"CAUTION: {event.reason} {FOUND_ON}")
        return after, actions

    def _secured_by_hand(self, state: State, event: Answered) -> Step:
        demand(event, "done")
        if not state.unconfirmed:
            raise IllegalEvent("The supply has not been asked to switch off yet", "its answer first")
        if self._switched_here(state):
            stopped = state if state.stopped else replace(state, stopped=NOT_CONFIRMED, stopped_at=self.item(state).id)
            return self._enter(replace(off_by_word(stopped), stop_status=3, ever_on=True), self.plan.made_safe)
        return self._go_back(off_by_word(state))

    def _switched_here(self, state: State) -> bool:
        """Whether benchkit itself switches what feeds the unit, so that an off that it can't confirm means trouble."""
        return not switched_by_hand(state)

    def _go_back(self, state: State) -> Step:
        if self.item(state).kind == "connect":
            return self._next(state)
        if state.stopped or self.way_out(state):
            return self._enter(state, self.plan.made_safe)
        return self._enter(state, min(state.index, self.plan.resume))


def demand(event: Answered, *choices: str) -> None:
    """Take no answer for another: only a plain yes passes a hold point."""
    if event.choice not in choices:
        raise IllegalEvent(f"{event.item} was answered {event.choice!r}", " or ".join(choices))
