"""Readings and verdicts of a walk, and what the model makes of them.

Rules
-----
* A verdict comes from the design's limits, or from the named rule.  A reading inside those and outside this unit's
  narrowed limits is *odd*: no failure by itself, but it is said, it stands in the record, and the suspects are asked.
* A reading just outside the model's limits is *rare* and undecided; all readings together decide
  (`benchkit.judge.rare`).
* The model is asked aside: after each reading for the narrowed limits of those to come, and for suspects after a
  reading that failed or is odd, or a rule that failed.  Nothing waits for either.
* Up to three extra readings are offered there, one after the other, from what the model calls most telling.  They are
  read, judged and kept like any other.
"""

from __future__ import annotations

import math
from dataclasses import replace
from typing import Final

from benchkit import quantities
from benchkit.errors import IllegalEvent
from benchkit.events import (
    Decided,
    Judged,
    Narrowed,
    Predicted,
    PredictionRefused,
    ReadingMissed,
    ReadingTaken,
    Suspected,
    TrimEnded,
)
from benchkit.judge.limits import Limits
from benchkit.judge.rare import is_rare
from benchkit.judge.verdicts import judge_reading
from benchkit.measure.readings import Reading
from benchkit.measure.uncertainty import coverage_factor
from benchkit.procedure import knowledge, questions
from benchkit.procedure.actions import Action, Narrow, Write
from benchkit.procedure.file import MADE_SAFE
from benchkit.procedure.hearing import drew_its_limit
from benchkit.procedure.items import Item
from benchkit.procedure.moves import Moves, Step
from benchkit.procedure.sizing import time_text
from benchkit.procedure.state import State


class Modelling(Moves):
    """Predictions, readings, verdicts, narrowed limits, suspects, extra readings."""

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
        judged = with_unit(self._verdict(item, event.reading, limits), event.reading, self.unit_limits_for(state, item))
        if judged.verdict == "pass" and item.section == MADE_SAFE and state.energised == "on":
            why = "The supply itself says that its output is on: the reading can't be of a unit that is off."
            judged = replace(judged, verdict="fail", why=why)
        if item.kind == "discharge":
            judged = replace(judged, why=f"{judged.why} {fall_text(item, event)}".strip())
        state = replace(state, phase="judging", readings={**state.readings, item.id: event.reading})
        return state, (Write(item=item.id, event=judged),)

    def _verdict(self, item: Item, reading: Reading, limits: Limits) -> Judged:
        judgement = judge_reading(reading, limits, acceptance=item.acceptance)
        of_model = item.limits is None and item.condition is not None
        rare = of_model and judgement.verdict != "pass" and is_rare(reading, limits)
        why = judgement.why
        if rare:
            inside = reading.value is not None and limits.hold(reading.value)
            why += f" {questions.INSIDE_WHY if inside else 'It is so near that a good unit may read it.'}"
        return Judged(
            item=item.id, subject=reading.point, verdict="undecided" if rare else judgement.verdict,
            value=reading.value, unit=reading.unit, low=limits.low, high=limits.high,
            uncertainty=reading.standard_uncertainty, probability=judgement.conformance_probability, why=why, rare=rare,
        )  # fmt: skip

    def _reading_missed(self, state: State, event: ReadingMissed) -> Step:
        if state.extra:
            state, actions = self._back_to_host(state)
            return replace(state, note=event.problem), actions
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
            outdated=state.outdated - {item.id},
            attempts={**state.attempts, item.id: state.attempts.get(item.id, 0) + 1},
            overrides={name: reason for name, reason in state.overrides.items() if name != item.id},
        )
        state, asked = self._ask_model(state, item, event)
        after, actions = self._after_verdict(state, item, event)
        return after, (*actions, *asked)

    def _after_verdict(self, state: State, item: Item, event: Judged) -> Step:
        if state.extra:
            return self._back_to_host(state)
        if event.verdict == "pass" and not event.odd:
            return self._next(state)
        if item.kind in ("supply", "limit check"):
            limited = self._from_least_bias(state, event.why.rstrip(".")) if drew_its_limit(state.supply) else None
            return limited or self._make_safe(state, event.why, 4)
        if item.kind == "lamp":
            return self._make_safe(state, f"the operator said no at: {item.title}", 4)
        return self._decide(state, event)

    # -- what the model is asked, aside ------------------------------------------------------------------------

    def _ask_model(self, state: State, item: Item, event: Judged) -> Step:
        """Ask for narrowed limits after a reading, and for suspects after something that is not as it should be."""
        known = knowledge.observations(self.plan, state)
        asked: list[Action] = []
        if not known:
            return state, ()
        if item.kind == "measure" and knowledge.model_condition(item) is not None and not self.way_out(state):
            near, later = knowledge.still_to_come(self.plan, state)
            if near or later:
                asked.append(Narrow(item=item.id, after=state.count, known=known, near=near, later=later))
        explained = item.kind in ("measure", "rule", "trim")
        wrong = event.odd or event.rare or (event.verdict == "fail" and explained)
        if explained and state.attempts[item.id] > 1 and (state.suspecting or state.suspicion is not None):
            wrong = True  # what was said of the earlier reading no longer holds
        if self.may_trim_again(state, item, event):
            wrong = False  # a bias that has moved is trimmed again before anything is suspected
        if item.kind == "supply" and event.verdict == "fail":
            wrong = True  # a rail in its limit is asked about like a reading that failed
        if state.extra or (wrong and not self.way_out(state)):
            state, suspect = self._ask_suspects(state)
            asked += suspect
        return state, tuple(asked)

    def _narrowed(self, state: State, event: Narrowed) -> Step:
        if not state.resumed_at <= event.after <= state.count:
            raise IllegalEvent(f"Limits came that were asked for at line {event.after}", "an answer to this walk")
        narrowed = {key: dict(points) for key, points in state.narrowed.items()}
        for limits in event.limits:
            narrowed.setdefault(limits.condition, {})[limits.point] = limits
        state = replace(state, narrowed=narrowed)
        return self._close(state) if state.phase == "closing" else (state, ())

    def _suspected(self, state: State, event: Suspected) -> Step:
        if not state.suspecting or event.after != state.suspecting:
            raise IllegalEvent(f"Suspects came that were asked for at line {event.after}", "those asked for last")
        state = replace(state, suspecting=0, suspicion=event)
        if state.phase == "closing":
            return self._close(state)
        if state.phase == "deciding" and self.offer(state) is not None:
            return self._decide_again(state)
        if state.phase == "offering":
            return self._offer_again(state)
        return state, ()

    # -- extra readings ----------------------------------------------------------------------------------------

    def _probe(self, state: State) -> Step:
        """Begin the extra reading that is offered."""
        offered = self.offer(state)
        if offered is None:
            raise IllegalEvent("No extra reading is offered now", "one of the answers that are")
        named, why = offered
        item = knowledge.extra_item(self.plan, state, named, why, self.asked_at(state))
        state = replace(state, extras=(*state.extras, item), extra=item.id, note="", missing="")
        return self._enter_measure(state, item)

    def _back_to_host(self, state: State) -> Step:
        """Go back from an extra reading to what it is to explain."""
        state = replace(state, extra="")
        return self._offer_again(state) if self.way_out(state) else self._decide_again(state)

    def _offered(self, state: State, event: Decided) -> Step:
        """Take, or leave, an extra reading on the way out."""
        if event.choice == "probe":
            return self._probe(state)
        if event.choice != "go on":
            raise IllegalEvent(f"An extra reading was answered {event.choice!r}", "probe, or go on")
        return self._enter(replace(state, offers_left=True), state.index)


def with_unit(judged: Judged, reading: Reading, unit: Limits | None) -> Judged:
    """Add this unit's own limits to a verdict; a reading that did not fail and lies outside them is odd."""
    if unit is None:
        return judged
    odd = judged.verdict != "fail" and lies_outside(reading, unit)
    why = f"{judged.why} Odd for this unit: its readings so far lead to {unit}." if odd else judged.why
    return replace(judged, unit_low=unit.low, unit_high=unit.high, odd=odd, why=why)


def lies_outside(reading: Reading, limits: Limits) -> bool:
    """Whether a reading lies outside limits by more than its expanded uncertainty (95 %)."""
    if reading.overload:
        return (limits.low if reading.negative else limits.high) is not None
    if reading.value is None or reading.standard_uncertainty is None:
        return False
    expanded = coverage_factor(0.95) * reading.standard_uncertainty
    low = -math.inf if limits.low is None else limits.low - expanded
    high = math.inf if limits.high is None else limits.high + expanded
    return not low <= reading.value <= high


def _subject(item: Item) -> str:
    return item.title if item.point is None else item.point.name


def fall_text(item: Item, event: ReadingTaken) -> str:
    """Say how a rail came down, and whether its bleed resistor explains it; "" where there was nothing to see."""
    from_v, seconds = event.fell_from_v, event.fell_s
    if from_v is None or seconds is None or event.reading.value is None:
        return ""
    text = f"It came down from {quantities.show(from_v, 'V', 3)} in {time_text(seconds)}"
    held = item.falls
    expected_s = None if held is None else held.fall_s(from_v, max(abs(event.reading.value), 1e-3))
    text += "." if expected_s is None else f"; the bleed resistor alone takes {time_text(expected_s)} by the design."
    return f"{text} {TOO_SLOWLY}" if event.fell_slowly else text


TOO_SLOWLY: Final = "CAUTION: it falls too slowly. Is the bleed resistor open?"
"""Said of a rail whose time constant, as read, is beyond what the design's tolerances explain."""
