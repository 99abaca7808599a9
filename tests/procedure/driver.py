"""Drives a walk without a session: for each action the event that answers it, good or bad.

`SMALL` is a short procedure with every kind of step; it is planned for a demonstration design, once.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from functools import cache
from pathlib import Path

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
    NarrowedLimits,
    Noted,
    OutputOff,
    PartsReplaced,
    PointLimits,
    Predicted,
    PredictionRefused,
    ProbeNamed,
    ReadingMissed,
    ReadingTaken,
    Resumed,
    StopAsked,
    SupplyRefused,
    SupplySet,
    SupplyState,
    Suspected,
    SuspectEvidence,
    SuspectNamed,
    TrimEnded,
    Tripped,
    Waited,
    WalkOpened,
)
from benchkit.measure.readings import Reading
from benchkit.procedure.actions import (
    Action,
    Ask,
    CheckWarm,
    Connect,
    Evaluate,
    Fall,
    Narrow,
    Predict,
    Read,
    SetSupply,
    Suspect,
    SwitchOff,
    Trim,
    Wait,
    Write,
)
from benchkit.procedure.file import load_procedure, parse_procedure
from benchkit.procedure.items import Item, Plan
from benchkit.procedure.plan import make_plan
from benchkit.procedure.state import State
from benchkit.procedure.walk import Walk
from tests.stage.designs import breadboard, tern

SHIPPED = Path(__file__).parents[2] / "procedures" / "first-power-on.toml"

SMALL = """
[procedure]
format = 1
name = "Small"
purpose = "One step of every kind."

[[section]]
name = "look"
title = "Look"
[[section.step]]
name = "parts"
kind = "confirm"
title = "Parts"
do = "Is everything as drawn?"

[[section]]
name = "cold"
title = "Cold"
resume = true
[[section.step]]
name = "least"
kind = "tell"
title = "Trimmer to its least-bias end"
do = "Turn it {less_bias_way}."
act = "trimmer to least"
[[section.step]]
name = "end"
kind = "measure"
title = "Trimmer's end"
points = ["ohm.spreader.ARM"]
limits = "the model"
[[section.step]]
name = "rails"
kind = "measure"
title = "Rail to rail"
points = ["ohm.rails"]
limits = "the model"
[[section.step]]
name = "remark"
kind = "text"
title = "Remark"
do = "Anything to remark?"

[[section]]
name = "limit"
title = "Limit"
[[section.step]]
name = "short"
kind = "tell"
title = "Short the leads"
do = "Join them."
act = "short the leads"
[[section.step]]
name = "check"
kind = "limit check"
title = "Limit into a short"
rails = "2 V"
limit = "50 mA"
[[section.step]]
name = "connect"
kind = "tell"
title = "Connect"
do = "Plug it in."
act = "connect the unit"

[[section]]
name = "power"
title = "Power"
[[section.step]]
name = "ready"
kind = "hold"
title = "Ready?"
do = "Power goes on."
[[section.step]]
name = "on"
kind = "supply"
title = "Rails up"
rails = "lowest"
limit = "20 mA"
[[section.step]]
name = "output-first"
kind = "measure"
title = "Output first"
points = ["output"]
limits = "the model"
override = false
[[section.step]]
name = "current"
kind = "measure"
title = "Current"
points = ["rail+.current"]
limits = "the model"
[[section.step]]
name = "full"
kind = "supply"
title = "Full rails"
rails = "full"
limit = "20 mA"
[[section.step]]
name = "offset"
kind = "rule"
title = "Offset"
rule = "offset before load"
number = "50 mV"

[[section]]
name = "bias"
title = "Bias"
[[section.step]]
name = "clip"
kind = "clip"
title = "Clip"
points = ["emitter.upper.1"]
[[section.step]]
name = "room"
kind = "supply"
title = "Room"
rails = "full"
limit = "for the target"
[[section.step]]
name = "trim"
kind = "trim"
title = "Trim"
points = ["emitter.upper.1"]
share = "100 %"
[[section.step]]
name = "soak"
kind = "wait"
title = "Soak"
seconds = "60 s"

[[section]]
name = "made-safe"
title = "Made safe"
[[section.step]]
name = "off"
kind = "off"
title = "Supply off"
[[section.step]]
name = "rails-low"
kind = "discharge"
title = "Rails low"
[[section.step]]
name = "unplug"
kind = "tell"
title = "Unplug"
do = "Take the clips off."
"""


@cache
def small() -> Walk:
    return Walk(make_plan(parse_procedure(SMALL, "small.toml"), breadboard()))


@cache
def shipped(design: str) -> Plan:
    return make_plan(load_procedure(SHIPPED), {"tern-40": tern, "breadboard": breadboard}[design]())


OPENED = WalkOpened(
    version="0",
    walk="w",
    kind="walk",
    unit="17",
    operator="Mara",
    design_name="d",
    design_text="",
    design_sha256="",
    procedure_name="p",
    procedure_text="",
    procedure_sha256="",
    bench_text="",
    bench_sha256="",
)
OFF = SupplyState(output_on=False, positive_v=0.0, negative_v=0.0)


def item_of(walk: Walk, item: str) -> Item:
    return next(one for one in walk.plan.items if one.id == item)


def reading(item: Item, value: float | None, u: float | None = 1e-6) -> ReadingTaken:
    assert item.point is not None
    return ReadingTaken(
        item=item.id,
        reading=Reading(
            point=item.point.name,
            value=value,
            unit=item.point.unit,
            overload=value is None,
            standard_uncertainty=None if value is None else u,
            meter="a meter",
            function=item.point.function,
        ),
    )


def limits_of(walk: Walk, action: Predict) -> tuple[PointLimits, ...]:
    units = {point.name: point.unit for point in walk.plan.points}
    return tuple(
        PointLimits(point=point, unit=units[point], nominal=0.5, low=-10.0, high=10.0) for point in action.points
    )


def supply_state(action: SetSupply) -> SupplyState:
    """What a healthy supply says after `action`: in its limit into a short, out of it otherwise."""
    short = not action.trip_on_limit
    return SupplyState(
        output_on=True,
        positive_v=0.0 if short else action.positive_v,
        negative_v=0.0 if short else action.negative_v,
        positive_a=action.limit_a if short else 0.01,
        negative_a=action.limit_a if short else 0.01,
        set_positive_v=action.positive_v,
        set_negative_v=action.negative_v,
        limit_a=action.limit_a,
        positive_in_limit=short,
        negative_in_limit=short,
    )


def good(walk: Walk, state: State, action: Action) -> Event:
    """The event that answers an action when everything is well."""
    item = walk.item(state)
    match action:
        case Connect():
            return BenchFound(meter="a meter", supply="a supply", supply_state=OFF)
        case Ask(question=question):
            if question.kind == "decide":
                usual = {choice.value for choice in question.choices if not choice.wants_reason}
                return Decided(item=action.item, choice="go on" if "go on" in usual else "again")
            if question.kind == "parts":
                return PartsReplaced(item=action.item, parts="", semiconductors=False)
            if question.kind == "choose":
                return Answered(item=action.item, choice="no")
            yes = question.kind in ("confirm", "hold")
            return Answered(item=action.item, choice="yes" if yes else "done")
        case Predict():
            return Predicted(
                item=action.item, condition=action.key, limits=limits_of(walk, action), units=9, solved=9, seed=1,
                seconds=0.1,
            )  # fmt: skip
        case Read() | Trim() | Fall():
            limits = walk.limits_for(state, item)
            assert limits is not None
            value = limits.nominal
            if value is None:
                value = 0.0 if limits.hold(0.0) else 1e6
            return reading(item, value)
        case SetSupply():
            return SupplySet(item=action.item, state=supply_state(action))
        case SwitchOff():
            return OutputOff(reason=action.reason, confirmed=True, how="read back as off", state=OFF)
        case Wait():
            settled = True if action.until_settled else None
            return Waited(item=action.item, seconds=action.seconds, settled=settled, point=action.point)
        case Evaluate() | CheckWarm():
            return judged(action.item, "pass")
        case Write():
            return action.event
    raise AssertionError(action)


def judged(item: str, verdict: str) -> Judged:
    return Judged(item=item, subject="s", verdict=verdict, value=0.0, unit="V", low=None, high=None)  # type: ignore[arg-type]


def bad(walk: Walk, state: State, action: Action) -> list[Event]:
    """Events that answer an action when something is wrong; all of them are legal there."""
    item = walk.item(state)
    match action:
        case Connect():
            return [
                BenchMissing(problem="no answer"),
                BenchFound(meter="m", supply="s", supply_state=SupplyState(output_on=True)),
                BenchFound(meter="m", supply="s", supply_state=SupplyState(output_on=None)),
            ]
        case Ask(question=question):
            if question.kind == "decide":
                return [
                    Decided(item=action.item, choice=choice.value, reason="because")  # type: ignore[arg-type]
                    for choice in question.choices
                ]
            if question.kind == "parts":
                return [
                    PartsReplaced(item=action.item, parts="output.upper.1", semiconductors=True),
                    PartsReplaced(item=action.item, parts="emitter.upper.1", semiconductors=False),
                ]
            if question.kind == "choose":
                return [Answered(item=action.item, choice="yes")]
            return [Answered(item=action.item, choice="no")] if question.kind in ("confirm", "hold") else []
        case Predict():
            refused = PredictionRefused(item=action.item, condition=action.key, problem="unsolved")
            nothing = Predicted(
                item=action.item, condition=action.key, limits=(), units=9, solved=9, seed=1, seconds=0.1
            )
            return [refused, nothing]
        case Read() | Fall():
            assert item.point is not None
            return [
                reading(item, -1e9),
                reading(item, None),
                reading(item, 0.0, None),
                ReadingMissed(item=action.item, point=item.point.name, problem="garbled"),
            ]
        case Trim():
            return [TrimEnded(item=action.item, problem="at its end"), reading(item, 1.0)]
        case SetSupply():
            state_now = supply_state(action)
            return [
                SupplyRefused(item=action.item, problem="refused"),
                SupplySet(item=action.item, state=SupplyState(output_on=True)),
                SupplySet(item=action.item, state=SupplyState(**{**vars(state_now), "positive_in_limit": False,
                                                                "positive_a": None, "positive_v": None})),
            ]  # fmt: skip
        case SwitchOff():
            return [OutputOff(reason=action.reason, confirmed=False, how="no answer")]
        case Wait() if action.until_settled:
            return [Waited(item=action.item, seconds=action.seconds, settled=False, point=action.point)]
        case Evaluate() | CheckWarm():
            return [judged(action.item, "fail"), judged(action.item, "undecided")]
    return []


def suspected(
    action: Suspect, *faults: str, probes: Sequence[str] = (), gain_bits: float = 0.5, **more: object
) -> Suspected:
    """An answer about suspects: likeliest first, healthy last unless it is named, and the probes that it asks for."""
    named = [*faults, *(() if "healthy" in faults else ("healthy",))]
    evidence = SuspectEvidence(
        point="output", condition="c", unit="V", read=0.5, expected=None, healthy=0.0, weight=3.0
    )
    keys = {target.point: target.key for target in action.candidates}
    return Suspected(
        item=action.item,
        after=action.after,
        suspects=tuple(
            SuspectNamed(fault=fault, probability=0.6 / 2**number, alike=("driver.upper: open",), evidence=(evidence,))
            for number, fault in enumerate(named)
        ),
        probe_next=tuple(
            ProbeNamed(point=point, condition=keys[point], gain_bits=gain_bits, why="it tells them apart")
            for point in probes
        ),
        unseen_count=2,
        unseen=("driver.upper: leaky", "feed.upper: dead"),
        hypotheses=90,
        readings=len(action.known),
        seconds=1.0,
        **more,  # type: ignore[arg-type]
    )


def narrowed(action: Narrow, low: float | None = -1.0, high: float | None = 1.0) -> Narrowed:
    """The same narrowed limits for everything that was asked for."""
    return Narrowed(
        item=action.item,
        after=action.after,
        limits=tuple(
            NarrowedLimits(point=target.point, condition=target.key, unit=target.unit, low=low, high=high)
            for target in (*action.near, *action.later)
        ),
        readings=len(action.known),
        units=9,
        seed=1,
        seconds=0.1,
    )


def aside(action: Action) -> list[Event]:
    """Answers to what the model is asked aside."""
    match action:
        case Narrow():
            return [
                narrowed(action),
                narrowed(action, 2.0, 3.0),
                Narrowed(item=action.item, after=action.after, problem="p"),
            ]
        case Suspect():
            points = [target.point for target in action.candidates]
            answers: list[Event] = [
                suspected(action, "output.upper.1: open", probes=points[:1]),
                suspected(action, "healthy", "output.upper.1: open", probes=points[-1:]),
                Suspected(item=action.item, after=action.after, problem="unsolved"),
            ]
            return answers
    return []


def sudden() -> list[Event]:
    """Events that may come at any time."""
    return [
        StopAsked(),
        Tripped(reason="rail+ in its limit", state=SupplyState(output_on=True, positive_in_limit=True)),
        ContactLost(who="the supply", problem="no answer"),
        OutputOff(reason="the screen", confirmed=True, how="read back", state=OFF),
        OutputOff(reason="the screen", confirmed=False, how="no answer"),
        Noted(text="a remark"),
        Resumed(operator="Mara"),
    ]


def every_event(walk: Walk, state: State) -> list[Event]:
    """One of each kind, addressed to the present item."""
    item = walk.item(state).id
    supply = SupplyState(output_on=True)
    volts = Reading(point="output", value=0.0, unit="V", standard_uncertainty=0.0, meter="m", function="dc volts")
    return [
        OPENED,
        BenchFound(meter="m", supply="s", supply_state=OFF),
        BenchMissing(problem="p"),
        Answered(item=item, choice="done"),
        Predicted(item=item, condition="c", limits=(), units=1, solved=1, seed=0, seconds=0.0),
        PredictionRefused(item=item, condition="c", problem="p"),
        ReadingTaken(item=item, reading=volts),
        ReadingMissed(item=item, point="output", problem="p"),
        judged(item, "pass"),
        Narrowed(item=item, after=state.count),
        Suspected(item=item, after=state.count),
        Decided(item=item, choice="again"),
        SupplySet(item=item, state=supply),
        SupplyRefused(item=item, problem="p"),
        Waited(item=item, seconds=1.0),
        PartsReplaced(item=item, parts="", semiconductors=False),
        TrimEnded(item=item, problem="p"),
        Tripped(reason="r"),
        ContactLost(who="w", problem="p"),
        OutputOff(reason="r", confirmed=True, how="h"),
        StopAsked(),
        Resumed(operator="o"),
        Noted(text="t"),
        Closed(count=state.count, verdict="pass", exit_status=0),
    ]


@dataclass
class Drive:
    """A walk that is being driven, with everything that it was told."""

    walk: Walk
    state: State = field(default_factory=State)
    actions: tuple[Action, ...] = ()
    open: Action | None = None
    told: list[tuple[Event, float]] = field(default_factory=list)
    asked: list[Action] = field(default_factory=list)
    asides: list[Action] = field(default_factory=list)

    def tell(self, event: Event) -> tuple[Action, ...]:
        now_s = float(len(self.told))
        before = (self.state.phase, self.state.index)
        self.state, actions = self.walk.handle(self.state, event, now_s)
        self.told.append((event, now_s))
        self.asked += actions
        self.asides += [action for action in actions if action.aside]
        fore = [action for action in actions if not action.aside]
        if fore:
            (self.open,) = fore
        elif (self.state.phase, self.state.index) != before:
            self.open = None
        self.actions = actions
        return actions

    def newest(self, kind: type[Action]) -> Action:
        """The last thing that the model was asked aside."""
        return next(action for action in reversed(self.asides) if isinstance(action, kind))

    def well(self) -> Event:
        """Answer the open action as if everything were well; an item that has no result yet is tried again."""
        assert self.open is not None
        event = good(self.walk, self.state, self.open)
        self.tell(event)
        return event

    def until(self, item: str, limit: int = 400) -> Drive:
        """Go on well up to an item."""
        for _ in range(limit):
            if self.walk.item(self.state).id == item:
                return self
            self.well()
        raise AssertionError(f"{item} was never reached")

    def to_end(self, limit: int = 400) -> Closed:
        """Go on well to the end."""
        for _ in range(limit):
            if self.state.closed is not None:
                return self.state.closed
            if self.state.phase == "closing" and self.state.suspecting:
                asked = self.newest(Suspect)
                assert isinstance(asked, Suspect)
                self.tell(suspected(asked, "healthy"))
            self.well()
        raise AssertionError("the walk doesn't end")


def begun(walk: Walk) -> Drive:
    drive = Drive(walk)
    drive.tell(OPENED)
    return drive


def kinds(actions: Sequence[Action]) -> list[str]:
    return [type(action).__name__ for action in actions]
