"""How a walk gets from item to item: what each kind of item begins with, and how it ends.

The parts of `benchkit.procedure.walk` that handle events stand on this.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Final

from benchkit.events import Judged
from benchkit.judge.limits import Limits
from benchkit.procedure import knowledge, questions
from benchkit.procedure.actions import (
    Action,
    Ask,
    CheckWarm,
    Connect,
    Evaluate,
    Fall,
    Predict,
    Read,
    SetSupply,
    Suspect,
    SwitchOff,
    Trim,
    Wait,
    Write,
)
from benchkit.procedure.closing import closed_event, suspects_a_fault
from benchkit.procedure.items import RAIL_POINTS, Item, Joined, Plan, condition_key
from benchkit.procedure.limited import just_limited, limited_words, off_reason
from benchkit.procedure.sizing import protection_v
from benchkit.procedure.state import State

Step = tuple[State, tuple[Action, ...]]

MOST_EXTRAS: Final = 3
"""Extra readings that are offered at one item."""

MOST_TRIMS_AGAIN: Final = 3
"""How often a walk goes back to a trim from one and the same check; our own figure."""

LEAST_GAIN_BITS: Final = 0.02
"""A reading that is expected to tell less than this is not worth the way."""


@dataclass(frozen=True)
class Moves:
    """The plan, and how a walk moves through it."""

    plan: Plan

    def item(self, state: State) -> Item:
        """The item that is being done: an extra reading, or the plan's item (the last one when all are done)."""
        if state.extra:
            return next(item for item in state.extras if item.id == state.extra)
        return self.host(state)

    def host(self, state: State) -> Item:
        """The plan's item at which the walk is, whatever extra reading is being taken there."""
        return self.plan.items[min(state.index, len(self.plan) - 1)]

    def limits_for(self, state: State, item: Item) -> Limits | None:
        """The limits of an item's reading, as far as they are known."""
        if item.limits is not None or item.condition is None or item.point is None:
            return item.limits
        key = condition_key(item.condition)
        found = state.limits.get(key, {}).get(item.point.name)
        return None if found is None else questions.model_limits(found, key, item.allow)

    def unit_limits_for(self, state: State, item: Item) -> Limits | None:
        """Return an item's limits for this very unit; None where they are the design's or not known."""
        design = self.limits_for(state, item)
        if design is None or item.condition is None or item.point is None or item.limits is not None:
            return None
        found = state.narrowed.get(condition_key(item.told_under or item.condition), {}).get(item.point.name)
        return None if found is None else questions.unit_limits(found, design, item.allow)

    def offer(self, state: State) -> tuple[knowledge.Named, str] | None:
        """The extra reading that is offered as things stand, with why; None when there is none to offer."""
        suspicion, asked_at = state.suspicion, self.asked_at(state)
        if suspicion is None or state.suspecting or state.extra or suspicion.item != asked_at:
            return None
        if sum(item.host == asked_at for item in state.extras) >= MOST_EXTRAS:
            return None
        result = state.result(asked_at)
        failed = result is not None and result.verdict == "fail" and not self.way_out(state)
        if not failed and not self.suspects_a_fault(state):
            return None
        possible = {
            (condition_key(one), point.name): (one, point) for one, point in knowledge.possible_now(self.plan, state)
        }
        for probe in suspicion.probe_next:
            found = possible.get((probe.condition, probe.point))
            if found is not None and probe.gain_bits >= LEAST_GAIN_BITS:
                return found, probe.why
        return None

    def may_trim_again(self, state: State, item: Item, result: Judged | None) -> bool:
        """Whether the walk may go back from an item to the trim that set what was read there."""
        wrong = result is not None and result.verdict != "pass" and not result.rare
        return bool(item.back) and wrong and state.trims.get(item.id, 0) < MOST_TRIMS_AGAIN

    def suspects_a_fault(self, state: State) -> bool:
        """Whether the last answer about suspects puts something before healthy."""
        return suspects_a_fault(state)

    def asked_at(self, state: State) -> str:
        """The item that suspects are asked about: the present one; on the way out, the one that led there."""
        return state.stopped_at if self.way_out(state) else self.host(state).id

    def way_out(self, state: State) -> bool:
        """True in the last section, the way out."""
        return state.index >= self.plan.made_safe

    # -- entering items ----------------------------------------------------------------------------------------

    def _enter(self, state: State, index: int) -> Step:
        index = self._done_from(state, index)
        note = limited_words(state) if just_limited(self.plan, state, index) else ""
        state = replace(state, index=index, note=note, missing="", extra="")
        if index >= len(self.plan):
            return self._close(state)
        if self._offers_on_the_way_out(state):
            return self._offer_again(state)
        item = self.plan.items[index]
        if item.kind not in ("measure", "rule"):
            state = replace(state, keeping=frozenset())
        match item.kind:
            case "connect":
                return replace(state, phase="connecting"), (Connect(item=item.id),)
            case "warm state":
                return replace(state, phase="judging"), (CheckWarm(item=item.id, conditions=item.warm),)
            case "tell" | "confirm" | "text" | "hold" | "parts" | "choose":
                return replace(state, phase="asking"), (Ask(item=item.id, question=questions.question_for(item)),)
            case "measure" | "discharge":
                return self._enter_measure(state, item)
            case "rule":
                return replace(state, phase="judging"), (Evaluate(item=item.id, rule=item.rule, number=item.number),)
            case "lamp":
                # From the moment that it is told, a person may have put mains on.
                state = replace(state, phase="asking", energised="unknown", ever_on=True, on_lamp=True, supply=None)
                return state, (Ask(item=item.id, question=questions.question_for(item)),)
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
                    protection_v=_protection(state, item),
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
                    samples=item.samples,
                    share=item.share,
                    condition=item.slope_under,
                )
                return replace(state, phase="trimming"), (trim,)
            case "wait":
                return replace(state, phase="waiting"), (_waiting(item),)
            case "off" if state.on_lamp:
                return replace(state, phase="by hand off", unconfirmed=True), (
                    Ask(item=item.id, question=questions.lamp_off(item)),
                )
            case "off":
                reason = off_reason(self.plan, state, item)
                return replace(state, phase="switching off"), (SwitchOff(item=item.id, reason=reason),)

    def _done_from(self, state: State, index: int) -> int:
        """Return the first item from `index` on that is neither left out nor a reading that stands."""
        items = self.plan.items
        while index < len(items) and (items[index].id in state.keeping or state.leaves_out(items[index])):
            index += 1
        return index

    def _enter_measure(self, state: State, item: Item) -> Step:
        assert item.point is not None
        limits = self.limits_for(state, item)
        if limits is None:
            assert item.condition is not None
            key = condition_key(item.condition)
            points = (item.point.name,) if state.extra else self._points_under(key)
            conditions = item.condition.conditions if isinstance(item.condition, Joined) else (item.condition,)
            predict = Predict(item=item.id, key=key, conditions=conditions, points=points)
            return replace(state, phase="predicting"), (predict,)
        if item.point.name == state.probes or item.point.function == "dc current":
            return self._read(state, item)
        ask = Ask(item=item.id, question=questions.placing(item, limits))
        return replace(state, phase="placing"), (ask,)

    def _points_under(self, key: str) -> tuple[str, ...]:
        """All the points that the plan reads under a condition."""
        names = (
            item.point.name
            for item in self.plan.items
            if item.kind == "measure"
            and item.point is not None
            and item.condition is not None
            and condition_key(item.condition) == key
        )
        return tuple(dict.fromkeys(names))

    def _read(self, state: State, item: Item) -> Step:
        assert item.point is not None
        if item.kind == "discharge":
            assert item.limits is not None
            assert item.limits.high is not None
            held = item.falls
            fall = Fall(
                item=item.id,
                question=questions.falling(item),
                point=item.point.name,
                function=item.point.function,
                unit=item.point.unit,
                low_v=item.limits.high,
                tau_s=None if held is None else held.tau_s,
                slowest_tau_s=None if held is None else held.slowest_tau_s,
                help=item.caution,
            )
            return replace(state, phase="reading"), (fall,)
        limits = self.limits_for(state, item)
        read = Read(
            item=item.id,
            point=item.point.name,
            function=item.point.function,
            unit=item.point.unit,
            samples=item.samples,
            settle_s=item.settle_s,
            low=None if limits is None else limits.low,
            high=None if limits is None else limits.high,
        )
        return replace(state, phase="reading"), (read,)

    def _from_least_bias(self, state: State, reason: str) -> Step | None:
        """Go on from least bias where a unit as it was found came into its limit; None where that ends the walk."""
        item = self.host(state)
        if not item.limited_to or state.limited:
            return None
        state = replace(state, limited=reason, probes="")
        asked: tuple[Action, ...] = ()
        if state.suspecting != state.count:
            state, asked = self._ask_suspects(state)
        after, actions = self._enter(state, self._number_of(item.limited_to))
        return after, (*actions, *asked)

    def _number_of(self, name: str) -> int:
        return next(number for number, one in enumerate(self.plan.items) if one.id == name)

    def _next(self, state: State) -> Step:
        if state.stopped and self.item(state).kind == "off" and not self._may_hold_charge(state):
            return self._close(replace(state, index=len(self.plan)))
        asked: tuple[Action, ...] = ()
        following = next(
            (
                number
                for number in range(state.index + 1, len(self.plan))
                if not state.leaves_out(self.plan.items[number])
            ),
            len(self.plan),
        )
        if following == self.plan.made_safe and not state.stopped and any(one.rare for one in state.results):
            state, asked = self._ask_suspects(state)  # all readings there are decide about the rare ones
        after, actions = self._enter(state, following)
        return after, (*actions, *asked)

    def _may_hold_charge(self, state: State) -> bool:
        """Whether the rails have to be seen low: they had power, or a look at them came to no rail that is low."""
        if state.ever_on:
            return True
        for item in self.plan.items[: self.plan.made_safe]:
            if item.point is not None and item.point.name in RAIL_POINTS:
                result = state.result(item.id)
                low = result is not None and result.verdict == "pass" and item.id not in state.before
                if not low and (result is not None or item.id in state.readings or item.id == state.stopped_at):
                    return True
        return False

    def _close(self, state: State) -> Step:
        state = replace(state, phase="closing", extra="")
        closed = closed_event(self.plan, state)
        return state, (Write(item="", event=closed),)

    def _make_safe(self, state: State, reason: str, status: int) -> Step:
        if not state.stopped:
            state = replace(
                state, stopped=reason, stopped_at=self.host(state).id if state.phase != "closing" else "",
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
        """Let the operator choose what to do about the plan's item; `problem` is why it has no result."""
        item, offer = self.host(state), self.offer(state)
        question = questions.deciding(
            item, result, problem, way_out=self.way_out(state), offer=None if offer is None else offer[0][1],
            trim_again=self.may_trim_again(state, item, result),
        )  # fmt: skip
        if result is not None and result.rare and _inside(result):
            question = questions.open_by_the_meter(question, item)
        if item.retake:  # the same readings would give the same verdict
            others = tuple(choice for choice in question.choices if choice != questions.AGAIN)
            points = tuple(one.point for one in self.plan.items if one.id in item.retake and one.point is not None)
            question = replace(question, choices=(questions.reading_again(points), *others))
        state = replace(state, phase="deciding", note=problem, missing="" if result is not None else problem)
        return state, (Ask(item=item.id, question=question),)

    def _decide_again(self, state: State) -> Step:
        """Put the question anew: there is more, or less, to choose from."""
        return self._decide(state, None if state.missing else state.result(self.host(state).id), state.missing)

    def _ask_suspects(self, state: State) -> Step:
        """Ask, aside, what would explain this unit's readings; nothing where none has been kept."""
        known = knowledge.observations(self.plan, state)
        if not known:
            return state, ()
        state = replace(state, suspecting=state.count)
        named = knowledge.candidates(self.plan, replace(state, extra=""))
        suspect = Suspect(
            item=self.asked_at(state),
            after=state.count,
            known=known,
            candidates=tuple(knowledge.target_of(*one) for one in named),
            names=knowledge.names_of_conditions(self.plan, state),
        )
        return state, (suspect,)

    def _offers_on_the_way_out(self, state: State) -> bool:
        """An extra reading can be offered now that the unit has no power and its rails have been seen low."""
        if not (self.way_out(state) and state.stopped) or state.offers_left:
            return False
        return knowledge.rails_seen_low(self.plan, state) and self.offer(state) is not None

    def _offer_again(self, state: State) -> Step:
        item, offer = self.host(state), self.offer(state)
        question = questions.offering(item, None if offer is None else offer[0][1])
        return replace(state, phase="offering", extra=""), (Ask(item=item.id, question=question),)


def _inside(result: Judged) -> bool:
    """Whether the value itself lies inside the limits, its uncertainty left aside."""
    return result.value is not None and Limits(result.low, result.high, None, result.unit, "").hold(result.value)


def _waiting(item: Item) -> Wait:
    words = f"{item.title}. {item.do} {item.caution}".strip()
    wait = Wait(item=item.id, seconds=item.seconds, reason=words)
    if not item.until_settled:
        return wait
    assert item.point is not None
    assert item.limits is not None
    return replace(
        wait, point=item.point.name, function=item.point.function, unit=item.point.unit, target=item.limits.nominal,
        low=item.limits.low, high=item.limits.high, until_settled=True, least_s=item.least_s,
        drift_limit=item.drift_limit,
    )  # fmt: skip


def _protection(state: State, item: Item) -> tuple[float, float]:
    """Where the over-voltage protection goes: by the higher of where each rail is and where it goes."""
    told = state.supply
    now_v = (0.0, 0.0) if told is None or told.output_on is not True else (
        abs(told.set_positive_v or 0.0), abs(told.set_negative_v or 0.0)
    )  # fmt: skip
    return protection_v(max(item.positive_v, now_v[0]), -max(-item.negative_v, now_v[1]))
