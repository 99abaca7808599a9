"""Gathers the facts of a walk from its events, one after the other; the rules stand in `benchkit.record.summary`."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass, field, replace

from benchkit.errors import BenchkitError
from benchkit.events import (
    Answered,
    BenchFound,
    BenchMissing,
    Closed,
    ContactLost,
    Decided,
    Event,
    Judged,
    Narrowed,
    Noted,
    OutputOff,
    PartsReplaced,
    Predicted,
    PredictionRefused,
    ReadingMissed,
    ReadingTaken,
    Resumed,
    StopAsked,
    SupplyRefused,
    SupplySet,
    SupplyState,
    Suspected,
    TrimEnded,
    Tripped,
    Waited,
    WalkOpened,
)
from benchkit.measure.readings import Reading
from benchkit.procedure.file import Procedure, parse_procedure
from benchkit.procedure.hearing import UNPROTECTED
from benchkit.procedure.modelling import TOO_SLOWLY
from benchkit.procedure.wording import fill, words_of
from benchkit.quantities import show
from benchkit.record.facts import Incident, Part, Result, Suspicion, Took
from benchkit.stage.design import parse_design

_NAME = re.compile(r"[a-z0-9][a-z0-9-]*")


@dataclass
class Gathering:
    """What has been gathered so far; `take` adds one event."""

    opened: WalkOpened
    meter: str = ""
    supply: str = ""
    results: list[Result] = field(default_factory=list)
    answers: list[tuple[str, Answered]] = field(default_factory=list)
    incidents: list[Incident] = field(default_factory=list)
    notes: list[Noted] = field(default_factory=list)
    replaced: list[PartsReplaced] = field(default_factory=list)
    took: Took | None = None
    soaks: list[tuple[str, Waited]] = field(default_factory=list)
    suspicions: list[Suspicion] = field(default_factory=list)
    narrowings: list[Narrowed] = field(default_factory=list)
    highest: tuple[float, float] | None = None
    ever_on: bool = False
    may_be_on: bool = False
    off: OutputOff | None = None
    said_off: bool = False
    cautions: list[str] = field(default_factory=list)
    lamp_on_at: str = ""
    lamp_off_at: str = ""
    left_out: list[str] = field(default_factory=list)
    closed: Closed | None = None
    where: str = ""

    def __post_init__(self) -> None:
        procedure = _procedure(self.opened)
        self.sections, titles, self._kinds = _titles(procedure)
        words = _words(self.opened)
        self._titles = {names: fill(title, words) for names, title in titles.items()}
        self._parts, self._driven = _marks(procedure)
        self._optional = {one.name for one in (procedure.sections if procedure else ()) if one.optional}
        self._rails: tuple[float, float] | None = None
        self._conditions: dict[str, str] = {}
        self._by_hand = self.opened.supply == "manual"
        self._lamp_asked_after_resume = False
        self.cautions += self.opened.cautions

    def take(self, seq: int, at: str, event: Event) -> None:
        """Add one event."""
        item = getattr(event, "item", "")
        if item and not isinstance(event, (Narrowed, Suspected)):
            self.where = self._title(item)
        match event:
            case BenchFound():
                self.meter, self.supply = event.meter, event.supply
                self._found(seq, at, event.supply_state)
                self._look_at(event.supply_state)
            case Predicted():
                self._conditions.update(dict.fromkeys((limits.point for limits in event.limits), event.condition))
            case ReadingTaken():
                self._add(seq, at, item, event.reading.point, reading=event.reading, how=event.how)
            case ReadingMissed():
                self._add(seq, at, item, event.point, missed=event.problem)
            case Judged():
                self._judge(seq, at, event)
                for said in (UNPROTECTED, TOO_SLOWLY):
                    if said in event.why and (caution := said.removeprefix("CAUTION: ")) not in self.cautions:
                        self.cautions.append(caution)
            case Narrowed():
                self.narrowings.append(event)
            case Suspected():
                self.suspicions.append(Suspicion(seq=seq, at=at, where=self._title(item), answer=event))
                # a trip names no item; what is asked because of it does
                self.incidents = [
                    replace(one, where=self._title(item)) if one.seq == event.after else one for one in self.incidents
                ]
            case Decided():
                self._decide(seq, at, event)
            case Answered():
                self._lamp(at, event)
                self.answers.append((self.where, event))
                if self.off is not None and not self.off.confirmed and self._by_hand and event.choice == "done":
                    self.said_off, self.may_be_on = True, False
                if self._whether(item):
                    if event.choice == "no":
                        self.left_out.append(self.sections.get(_parts(item)[0], item))
                elif event.choice == "no":
                    self._incident(seq, at, "answered no" + (f": {event.text}" if event.text else ""))
            case SupplySet():
                self._look_at(event.state)
                self._rails = _rails_of(event.state)
            case OutputOff():
                self._rails = None
                self.off = event
                self.said_off = False
                self.may_be_on = not event.confirmed
                if not event.confirmed and not self._by_hand:
                    self._incident(seq, at, f"the supply did not confirm that its output is off ({event.how})")
            case Resumed():
                self._lamp_asked_after_resume = bool(self.lamp_on_at and not self.lamp_off_at)
                self.results = [replace(result, from_before=True) for result in self.results]
                torn = "; the last line before it was torn and is lost" if event.torn else ""
                self._incident(seq, at, f"resumed by {event.operator}{torn}")
            case Noted():
                self.notes.append(event)
                self.took = _took(event) or self.took
            case Waited():
                if event.settled is not None:
                    self.soaks.append((self.where, event))
            case PartsReplaced():
                self.replaced.append(event)
            case Closed():
                self.closed = event
            case Tripped() | ContactLost() | StopAsked() | SupplyRefused() | BenchMissing() | TrimEnded():
                self._incident(seq, at, _disturbance(event))
            case PredictionRefused():
                self._incident(seq, at, f"no limits from the model for {event.condition}: {event.problem}")

    def _add(
        self,
        seq: int,
        at: str,
        item: str,
        subject: str,
        *,
        reading: Reading | None = None,
        missed: str = "",
        how: str = "",
    ) -> None:
        self._replace_earlier(item, subject)
        section, step = _parts(item)
        self.results.append(
            Result(
                seq=seq,
                at=at,
                item=item,
                section=section,
                step=step,
                title=self._title(item),
                subject=subject,
                reading=reading,
                missed=missed,
                how=how,
                condition=self._conditions.get(subject, ""),
                part=self._parts.get(section, ""),
                driven=(section, step) in self._driven,
                rails_v=self._rails,
            )
        )

    def _judge(self, seq: int, at: str, event: Judged) -> None:
        for index in range(len(self.results) - 1, -1, -1):
            result = self.results[index]
            if (
                result.item == event.item
                and not result.replaced
                and result.judged is None
                and (result.reading is not None or result.missed)
                and result.subject == event.subject
            ):
                self.results[index] = replace(result, judged=event)
                return
        self._add(seq, at, event.item, event.subject)
        self.results[-1] = replace(self.results[-1], judged=event)

    def _replace_earlier(self, item: str, subject: str) -> None:
        for index, result in enumerate(self.results):
            if result.item == item and result.subject == subject and not result.replaced:
                self.results[index] = replace(result, replaced=True)

    def _decide(self, seq: int, at: str, event: Decided) -> None:
        if event.choice == "make safe":
            self._incident(seq, at, "made safe by the operator" + (f": {event.reason}" if event.reason else ""))
        if event.choice != "go on":
            return
        for index, result in enumerate(self.results):
            if result.item == event.item and result.counts_against:
                self.results[index] = replace(result, overridden=event.reason)
                return
        if event.reason:  # going on after an odd reading needs none, nor does leaving an extra reading that is offered
            self._incident(seq, at, f"went on in spite of it: {event.reason}")

    def _look_at(self, state: SupplyState | None) -> None:
        if state is None:
            return
        if state.output_on is not False:
            old = self.highest or (0.0, 0.0)
            self.highest = (
                max(old[0], _largest(state.set_positive_v, state.positive_v)),
                max(old[1], _largest(state.set_negative_v, state.negative_v)),
            )
            self.ever_on = True
            self.may_be_on = True
        elif self.off is None or self.off.confirmed:
            self.may_be_on = False

    def _found(self, seq: int, at: str, state: SupplyState | None) -> None:
        """Note a supply that was on, or said nothing of it, when it was found."""
        if state is None or state.output_on is False:
            return
        said = "its output ON" if state.output_on else "nothing to say whether its output is on"
        rails = [show(volts, "V", 3) for volts in (state.positive_v, state.negative_v) if volts is not None]
        at_rails = f" ({' and '.join(rails)})" if rails else ""
        self._incident(seq, at, f"the supply was found with {said}{at_rails}, and was told to go off")

    def _lamp(self, at: str, event: Answered) -> None:
        """Follow the mains through a series lamp: it may be on from the yes before it, and goes off by word alone."""
        section, step = _parts(event.item)
        kind = self._kinds.get((section, step), "")
        if kind == "series lamp" and event.choice == "yes":
            if not self.lamp_on_at or self.lamp_off_at:
                self.lamp_on_at, self.lamp_off_at = at, ""
        elif self.lamp_on_at and event.choice == "done" and (kind == "off" or self._lamp_asked_after_resume):
            self.lamp_off_at = at
        self._lamp_asked_after_resume = False

    def _whether(self, item: str) -> bool:
        """Whether an item only asks if a section is to be done."""
        section, _, step = item.partition(".")
        return step == WHETHER and section in self._optional

    def _incident(self, seq: int, at: str, what: str) -> None:
        self.incidents.append(Incident(seq=seq, at=at, where=self.where, what=what))

    def _title(self, item: str) -> str:
        section, step = _parts(item)
        if step.startswith("extra-"):
            return f"Extra reading {step.removeprefix('extra-')}"
        if self._whether(item):
            return f"Whether it is done: {self.sections.get(section, section)}"
        if step == "warm-state":
            return "The design comes to rest warm"
        return self._titles.get((section, step), item)


def _largest(*volts: float | None) -> float:
    return max((abs(value) for value in volts if value is not None), default=0.0)


def _parts(item: str) -> tuple[str, str]:
    names = _NAME.findall(item)
    return (names[0] if names else "", names[1] if len(names) > 1 else "")


_ByStep = Mapping[tuple[str, str], str]


def _procedure(opened: WalkOpened) -> Procedure | None:
    """Return the record's procedure; None where this version can't read it."""
    try:
        return parse_procedure(opened.procedure_text, opened.procedure_name)
    except BenchkitError:
        return None


def _words(opened: WalkOpened) -> Mapping[str, str]:
    """What words in braces stand for, those that hang on the place of the walk left as they are."""
    try:
        design = parse_design(opened.design_text, opened.design_name)
    except BenchkitError:
        return {}
    words = words_of(design, design.rails.positive_v, design.rails.negative_v, 0.0)
    return {word: meaning for word, meaning in words.items() if word not in ("limit", "rails")}


def _titles(procedure: Procedure | None) -> tuple[dict[str, str], _ByStep, _ByStep]:
    """Return the sections' titles by name, in order, and the steps' titles and kinds by section and step."""
    if procedure is None:
        return {}, {}, {}
    steps = {(section.name, step.name): step for section in procedure.sections for step in section.step}
    kinds: dict[tuple[str, str], str] = {names: step.kind for names, step in steps.items()}
    for (names, kind), after in zip(list(kinds.items()), list(kinds.values())[1:], strict=False):
        if (kind, after) == ("hold", "series lamp"):
            kinds[names] = after  # the yes that mains goes on behind
    return (
        {section.name: section.title for section in procedure.sections},
        {names: step.title for names, step in steps.items()},
        kinds,
    )


def _marks(procedure: Procedure | None) -> tuple[dict[str, Part], frozenset[tuple[str, str]]]:
    """Return which sections are marked as found or as left, and which steps are read with the stage driven."""
    sections = () if procedure is None else procedure.sections
    parts: dict[str, Part] = {section.name: section.as_ for section in sections if section.as_ is not None}
    driven = ((section.name, step.name) for section in sections for step in section.step if step.state == "driven")
    return parts, frozenset(driven)


def _took(event: Noted) -> Took | None:
    """Return the time of the channel from the note about it; None of any other note."""
    seconds = event.figures.get("seconds")
    if seconds is None or not event.text.startswith(TIME_NOTE):
        return None
    return Took(seconds=seconds, target_s=event.figures.get("target_seconds"))


def _rails_of(state: SupplyState) -> tuple[float, float] | None:
    """Return what the rails were set to, or measure where the supply doesn't say what it is set to; V."""
    if state.output_on is False:
        return None
    pairs = ((state.set_positive_v, state.positive_v), (state.set_negative_v, state.negative_v))
    rails = [first if first is not None else second for first, second in pairs]
    if rails[0] is None:
        return None
    return rails[0], rails[1] or 0.0


WHETHER = "choose"
"""The step of a section that may be left out, at which that is asked."""

TIME_NOTE = "This channel took"
"""How the note begins that says how long a channel took."""


def _disturbance(event: Event) -> str:
    match event:
        case Tripped():
            return f"safety trip: {event.reason}"
        case ContactLost():
            return f"contact lost with {event.who}: {event.problem}"
        case StopAsked():
            return f"stopped: {event.reason}"
        case SupplyRefused():
            return f"the supply did not do what it was told: {event.problem}"
        case BenchMissing():
            return f"an instrument is missing: {event.problem}"
        case TrimEnded():
            return f"the trim ended without reaching the target: {event.problem}"
    return event.name
