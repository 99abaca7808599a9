"""A walk played from a script, in place of a session: what the screens are tested and looked at with."""

from __future__ import annotations

import asyncio
import math
from collections.abc import Awaitable, Callable
from dataclasses import replace

from benchkit.events import Closed, SupplyState, Verdict
from benchkit.procedure.actions import Choice, Question
from benchkit.session.front import (
    AimView,
    Energised,
    Front,
    LiveView,
    Reply,
    ResultView,
    SectionView,
    SupplyView,
    SuspectsView,
    SuspectView,
    View,
)
from benchkit.ui.app import BenchApp
from benchkit.ui.entry import Identity, Opening

OPENING = Opening(
    kind="rehearsal",
    design="Tern 40, revision C",
    procedure="First power-on",
    purpose="Brings a stage that has never been powered to its first safe quiescent current.",
    meter="SCPI meter on 127.0.0.1, good to 0.0035 % + 5 µV",
    supply="SCPI supply on 127.0.0.1, two rails",
    record="records/tern-40-0042.jsonl",
)

TITLES = ("Before power", "Shorts and paths", "Supply limit", "First volts", "Full rails", "Trim", "Soak", "Wrap up")


def sections(current: int, verdicts: tuple[Verdict | None, ...] = ()) -> tuple[SectionView, ...]:
    return tuple(
        SectionView(
            name=title.lower(),
            title=title,
            done=7 if number < current else (3 if number == current else 0),
            total=7,
            current=number == current,
            verdict=verdicts[number] if number < len(verdicts) else None,
        )
        for number, title in enumerate(TITLES)
    )


OFF = SupplyView(
    energised="off", words="Output off, confirmed; 0.0 V and 0.0 V at its terminals.", by_hand=False, state=None
)
ON = SupplyView(
    energised="on",
    words="+15.00 V and -15.00 V, limit 50 mA per rail; draws 21.4 mA and 21.6 mA.",
    by_hand=False,
    state=SupplyState(output_on=True, positive_v=15.0, negative_v=-15.0, positive_a=0.0214, negative_a=0.0216),
)
UNKNOWN = SupplyView(
    energised="unknown",
    words="The supply did not confirm output off: switch it off by hand.",
    by_hand=False,
    state=None,
)
BY_HAND = SupplyView(
    energised="on", words="Nothing switches this supply off by itself: it is worked by hand.", by_hand=True, state=None
)


def supply(energised: Energised) -> SupplyView:
    return {"off": OFF, "on": ON, "unknown": UNKNOWN}[energised]


PASSED = ResultView(
    item="spread",
    title="spread, across the bias spreader",
    value_text="2.412 V",
    low_text="2.310 V",
    high_text="2.520 V",
    verdict="pass",
    why="0.10 V from the nearer limit; the meter is good to 0.2 mV.",
    value=2.412,
    low=2.31,
    high=2.52,
    uncertainty=0.0001,
)
FAILED = ResultView(
    item="upper",
    title="emitter.upper.1, drop across the emitter resistor",
    value_text="31.20 mV",
    low_text="1.20 mV",
    high_text="24.00 mV",
    verdict="fail",
    why="Too high by 7.2 mV. Most likely: spreader.lower ten times low, or spreader.trimmer with its wiper open.",
    value=0.0312,
    low=0.0012,
    high=0.024,
    uncertainty=0.0002,
)
NEAR = ResultView(
    item="rail",
    title="rail+.current",
    value_text="22.40 mA",
    low_text="18.00 mA",
    high_text="22.50 mA",
    verdict="undecided",
    why="The meter's uncertainty reaches over the upper limit.",
    value=0.0224,
    low=0.018,
    high=0.0225,
    uncertainty=0.0002,
)
ONE_SIDED = ResultView(
    item="symmetry",
    title="emitter symmetry",
    value_text="3.1 %",
    low_text="",
    high_text="10 %",
    verdict="pass",
    why="",
    value=0.031,
    high=0.1,
    uncertainty=0.001,
)

VIEW = View(
    kind="rehearsal",
    procedure="First power-on",
    purpose=OPENING.purpose,
    unit="0042",
    operator="R. Holm",
    design=OPENING.design,
    meter=OPENING.meter,
    record=OPENING.record,
    sections=sections(3, ("pass", "pass", "undecided")),
    section_title="First volts",
    item="upper",
    item_title="Upper emitter drop",
    item_number=3,
    item_count=7,
    results=(ONE_SIDED, PASSED),
    supply=OFF,
    live=None,
    busy="",
    busy_share=None,
    remaining_s=None,
    message="",
    kept=57,
    verdict=None,
    stopped="",
    exit_status=None,
)

DONE = Choice(value="done", label="done")
PROBES = Question(
    item="upper",
    kind="probes",
    title="Upper emitter drop",
    do="Clip the meter across the upper emitter resistor of pair 1.",
    why="At the least-bias end almost no current may flow yet; a drop here says that the spreader "
    "holds the bases too far apart, or that an output device leaks.",
    caution="Clip on with the power off: a slip shorts a base to a rail and kills the stage.",
    expected="0.00 mV to 1.20 mV, typically 0.11 mV",
    point="emitter.upper.1",
    red="the end of emitter.upper.1 at the emitter of output.upper.1",
    black="output, where the emitter resistors meet",
    choices=(DONE, Choice(value="make safe", label="I can't: make safe", wants_reason=True)),
)
CONFIRM = Question(
    item="earth",
    kind="confirm",
    title="Protective earth",
    do="Is the protective earth of the unit and of the test gear still connected?",
    choices=(Choice(value="yes", label="yes, both"), Choice(value="no", label="no")),
)
TEXT = Question(
    item="ambient",
    kind="text",
    title="Ambient",
    do="How warm is the air at the bench?",
    expected="15 degC to 35 degC",
    choices=(Choice(value="done", label="keep it"),),
)
BY_HAND_READING = Question(
    item="upper",
    kind="by hand",
    title="Upper emitter drop",
    do="Read the drop across the upper emitter resistor of pair 1.",
    point="emitter.upper.1",
    red="the emitter end",
    black="output",
    expected="0.00 mV to 1.20 mV",
    choices=(DONE,),
)
HOLD = Question(
    item="power",
    kind="hold",
    title="First power",
    do="The rails go up to +15 V and -15 V now, with 50 mA at most per rail. Does nobody touch the unit?",
    why="Everything before this point was measured without power. "
    "The trimmer stands at its least-bias end and the limit was proven into a short.",
    caution="More than 30 V from rail to rail. Heat sinks and emitter resistors burn.",
    expected="both rails out of their limit within 0.5 s",
    choices=(Choice(value="yes", label="yes"), Choice(value="make safe", label="make safe", wants_reason=True)),
)
DECIDE = Question(
    item="upper",
    kind="decide",
    title="Upper emitter drop",
    do="The drop across emitter.upper.1 is too high. What now?",
    why="A drop of this size at the least-bias end means more bias than the trimmer can take back.",
    choices=(
        Choice(value="again", label="read it again"),
        Choice(value="go on", label="go on all the same; the verdict stays", wants_reason=True),
        Choice(value="make safe", label="switch off and make safe"),
    ),
)
TRIM = Question(
    item="trim",
    kind="trim",
    title="Trim",
    do="Turn the trimmer ANTICLOCKWISE, slowly, until the drop reads 20 mV; wait after each turn.",
    why="The last part of the way is the heat sink's: the drop goes on creeping after the screw has stopped.",
    expected="18.00 mV to 22.00 mV",
    point="emitter.upper.1",
    red="the emitter end of emitter.upper.1",
    black="output",
    choices=(
        Choice(value="take", label="take this reading"),
        Choice(value="end", label="it can't be reached", wants_reason=True),
        Choice(value="turn", label="turn the screw"),
    ),
)


def live(value: float, seconds: float = 60.0, age_s: float = 0.1) -> LiveView:
    trend = tuple(
        (at * seconds / 120, 0.004 + (value - 0.004) * (1 - math.exp(-at / 30)) / (1 - math.exp(-4)))
        for at in range(121)
    )
    return LiveView(
        point="emitter.upper.1",
        unit="V",
        value=value,
        text=f"{value * 1e3:.2f} mV",
        low=0.018,
        high=0.022,
        target=0.02,
        age_s=age_s,
        inside=0.018 <= value <= 0.022,
        trend=trend,
    )


FALL = Question(
    item="rails-low",
    kind="watch",
    title="Seen low at the unit: rail+",
    do="Keep the probes where they are, hands off the circuit: the rail is watched down.",
    caution="Never a short. If it doesn't fall: a resistor of 1.0 kohm rated 5 W or more.",
    expected="-1.000 V to 1.000 V (common practice); falls from 35.0 V in 78 s",
    point="rail+",
    red="positive rail",
    black="0 V",
    choices=(Choice(value="done", label="Go on watching"), Choice(value="enough", label="Take it as it reads now")),
)
FALL_VIEW = replace(
    VIEW,
    supply=OFF,
    live=LiveView(
        point="rail+", unit="V", value=12.34, text="12.34 V", low=-1.0, high=1.0, target=0.0, age_s=0.0, inside=False
    ),
    busy="Falling to 1.0 V.",
    busy_share=0.29,
    remaining_s=55.0,
)
TRIM_VIEW = replace(VIEW, sections=sections(5, ("pass",) * 5), supply=ON, live=live(0.01931), results=(PASSED,))
END_VIEW = replace(
    VIEW,
    sections=sections(7, ("pass", "pass", "undecided", "fail", "pass", "pass", "pass", "pass")),
    results=(ONE_SIDED, PASSED, NEAR, FAILED),
    verdict="fail",
    exit_status=1,
    kept=211,
)


def closed(exit_status: int = 0, verdict: Verdict = "pass") -> Closed:
    return Closed(count=12, verdict=verdict, exit_status=exit_status)


class Bench:
    """Counts what the app asked of the outside."""

    def __init__(self) -> None:
        self.offs: list[str] = []
        self.beats = 0
        self.off_asked = asyncio.Event()
        self.front: Front | None = None
        self.identity: Identity | None = None
        self.replies: list[Reply] = []

    def off_now(self, reason: str) -> None:
        self.offs.append(reason)
        self.off_asked.set()

    def beat(self) -> None:
        self.beats += 1


Script = Callable[[Front, Bench], Awaitable[Closed]]


def app_for(
    script: Script, bench: Bench, *, identity: Identity | None = None, guard_s: float = 0.0, bell: bool = True
) -> BenchApp:
    async def start(front: Front, identity: Identity) -> Closed:
        bench.front, bench.identity = front, identity
        return await script(front, bench)

    return BenchApp(
        start,
        off_now=bench.off_now,
        heartbeat=bench.beat,
        opening=OPENING,
        identity=identity,
        guard_s=guard_s,
        bell=bell,
    )


WHO = Identity(unit="0042", operator="R. Holm")


def asking(*questions: Question, view: View = VIEW) -> Script:
    """A script that puts questions one after the other under one view."""

    async def script(front: Front, bench: Bench) -> Closed:
        front.show(view)
        for question in questions:
            bench.replies.append(await front.ask(question))
        front.show(replace(view, exit_status=0, verdict="pass", supply=OFF))
        return closed()

    return script


# -- what the model says of this unit -------------------------------------------------------------------------------

SUSPECTED = SuspectsView(
    item="upper",
    working=False,
    heading="92 explanations of 21 readings, likeliest first: emitter.upper.1 open.",
    suspects=(
        SuspectView(
            title="emitter.upper.1 open",
            share=0.83,
            share_text="83 %",
            alike="or output.upper.1 emitter open",
            evidence=(
                "emitter.upper.1 reads 0.000 V, expected 0.000 V; healthy would read 12.10 mV",
                "output.upper.1.vbe reads 612.0 mV, expected 611.4 mV; healthy would read 542.0 mV",
            ),
        ),
        SuspectView(
            title="driver.upper collector open",
            share=0.11,
            share_text="11 %",
            evidence=("driver.resistor reads 1.130 V, expected 1.105 V; healthy would read 773.0 mV",),
        ),
        SuspectView(title="no single fault", share=0.02, share_text="2 %"),
    ),
    unseen="14 faults could not have shown yet: output.lower.1 leaky, feed.upper stuck low, and more.",
    next_step="Most telling next: driver.upper.vbe (+9 V -9 V, limit 45.00 mA, trimmer least, cold to warm). It tells "
    "emitter.upper.1 open from driver.upper collector open.",
    accuses=True,
)
WORKING = SuspectsView(
    item="upper", working=True, heading="The model works out what would explain the readings. Nothing waits for it."
)
PROBE = Choice(value="probe", label="Read driver.upper.vbe next")
SUSPECTING = replace(DECIDE, choices=(*DECIDE.choices, PROBE))
ODD = replace(
    PASSED,
    unit_low=2.42,
    unit_high=2.47,
    unit_low_text="2.420 V",
    unit_high_text="2.470 V",
    odd=True,
    why="2.412 V ± 0.2 mV lies within 2.310 V to 2.520 V. Odd for this unit: its readings so far lead to 2.420 V to "
    "2.470 V.",
)
ODD_QUESTION = Question(
    item="spread",
    kind="decide",
    title="The spreader: spread is odd for this unit.",
    do=ODD.why,
    caution="Inside the design's limits, so no failure: see what the other readings say.",
    choices=(Choice(value="go on", label="Go on"), DECIDE.choices[0], DECIDE.choices[2]),
)
AIM = AimView(point="emitter.upper.1", design_text="0.00 mV to 1.20 mV", unit_text="80.00 uV to 140.0 uV")
