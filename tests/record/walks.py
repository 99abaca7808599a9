"""Records made for the tests, through the real writer of journals."""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

from benchkit.events import (
    Answered,
    BenchFound,
    Closed,
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
    ProbeNamed,
    ReadingTaken,
    SupplySet,
    SupplyState,
    Suspected,
    SuspectEvidence,
    SuspectNamed,
    Verdict,
    Waited,
    WalkOpened,
    to_payload,
)
from benchkit.journal.writer import Writer
from benchkit.measure.readings import FUNCTIONS, Reading

START = datetime(2031, 4, 5, 6, 7, 8, tzinfo=UTC)

PROCEDURE = """
[procedure]
format = 1
name = "short walk"
purpose = "for tests"

[[section]]
name = "cold"
title = "No power yet"
resume = true

[[section.step]]
name = "rails"
kind = "measure"
title = "Rail to rail"
points = ["ohm.rails"]
limits = "the model"

[[section]]
name = "first-power"
title = "First power"

[[section.step]]
name = "up"
kind = "supply"
title = "Rails up"
rails = "lowest"
limit = "50 mA"

[[section.step]]
name = "output"
kind = "measure"
title = "Output at rest"
points = ["output"]
limits = "the model"

[[section]]
name = "made-safe"
title = "The way out"

[[section.step]]
name = "off"
kind = "off"
title = "Supply off"
"""

ON = SupplyState(output_on=True, positive_v=12.01, negative_v=-12.0, set_positive_v=12.0, set_negative_v=-12.0)


def sha(text: str) -> str:
    return hashlib.sha256(text.encode()).hexdigest()


def opened(**changes: Any) -> WalkOpened:
    values: dict[str, Any] = {
        "version": "0.1.0",
        "walk": "w1",
        "kind": "walk",
        "unit": "T40-0017",
        "operator": "Mara",
        "design_name": "Tern 40",
        "design_text": "name = 1\n",
        "design_sha256": sha("name = 1\n"),
        "procedure_name": "short walk",
        "procedure_text": PROCEDURE,
        "procedure_sha256": sha(PROCEDURE),
        "bench_text": "",
        "bench_sha256": sha(""),
    }
    return WalkOpened(**{**values, **changes})


REPAIR = """
[procedure]
format = 1
name = "short repair"
purpose = "for tests"

[[section]]
name = "found"
title = "As found"
resume = true
as = "found"

[[section.step]]
name = "drops"
kind = "measure"
title = "Drops"
points = ["emitter.upper.1"]
limits = { low = "18 mV", high = "22 mV" }

[[section.step]]
name = "output"
kind = "measure"
title = "Offset"
points = ["output"]
limits = { low = "-50 mV", high = "50 mV" }

[[section.step]]
name = "driven"
kind = "measure"
title = "Rail currents, driven"
points = ["rail+.current"]
limits = { low = "0 A", high = "2 A" }
state = "driven"

[[section]]
name = "soak"
title = "Power soak"
optional = "Was a power soak asked for?"

[[section.step]]
name = "look"
kind = "confirm"
title = "Look"
do = "Is it quiet?"

[[section]]
name = "left"
title = "As left"
as = "left"

[[section.step]]
name = "drops"
kind = "measure"
title = "Drops"
points = ["emitter.upper.1"]
limits = { low = "18 mV", high = "22 mV" }

[[section.step]]
name = "output"
kind = "measure"
title = "Offset"
points = ["output"]
limits = { low = "-50 mV", high = "50 mV" }

[[section]]
name = "made-safe"
title = "The way out"

[[section.step]]
name = "off"
kind = "off"
title = "Supply off"
"""


def repair_events(
    *, found_v: float = 0.0312, left_v: float = 0.02005, walk: str = "w1", rails_v: float = 35.0, **changes: Any
) -> list[Event]:
    """A repair: drop and offset as found, one part replaced, a soak, drop and offset as left."""
    on = SupplyState(output_on=True, set_positive_v=rails_v, set_negative_v=-rails_v)
    limits: dict[str, Any] = {"low": 0.018, "high": 0.022}
    return [
        opened(**{"procedure_name": "short repair", "procedure_text": REPAIR, "procedure_sha256": sha(REPAIR),
                  "walk": walk, **changes}),
        SupplySet(item="found.power", state=on),
        reading("found.drops.emitter.upper.1", "emitter.upper.1", found_v + 0.005),
        reading("found.drops.emitter.upper.1", "emitter.upper.1", found_v),
        judged("found.drops.emitter.upper.1", "emitter.upper.1", "fail", found_v, **limits),
        reading("found.output.output", "output", 0.0031),
        reading("found.driven.rail+.current", "rail+.current", 1.2, "dc current"),
        PartsReplaced(item="found.parts", parts="R21", semiconductors=False),
        Waited(item="left.soak", seconds=243.0, settled=True, point="emitter.upper.1", unit="V", final=0.0201,
               low=0.02, high=0.0202),
        reading("left.drops.emitter.upper.1", "emitter.upper.1", left_v),
        judged("left.drops.emitter.upper.1", "emitter.upper.1", "pass", left_v, **limits),
        reading("left.output.output", "output", 0.0033),
        reading("left.extra-1.emitter.upper.1", "emitter.upper.1", 0.5),
        OutputOff(reason="end of the walk", confirmed=True, how="OUTP? read 0,0"),
        Noted(text="This channel took 3 min 12 s; the target is 5 min.",
              figures={"seconds": 192.0, "target_seconds": 300.0}),
    ]  # fmt: skip


def reading(item: str, point: str, value: float | None, function: str = "dc volts") -> ReadingTaken:
    return ReadingTaken(
        item=item,
        reading=Reading(
            point=point,
            value=value,
            unit=FUNCTIONS[function],
            overload=value is None,
            standard_uncertainty=None if value is None else 0.0004,
            meter="Maker,Meter,123,1.0",
            function=function,
        ),
    )


def judged(item: str, subject: str, verdict: Verdict, value: float | None, **more: Any) -> Judged:
    values: dict[str, Any] = {"unit": "V", "low": -0.02, "high": 0.02, "uncertainty": 0.0005}
    return Judged(item=item, subject=subject, verdict=verdict, value=value, **{**values, **more})


def good_events() -> list[Event]:
    """A short walk that passes: one cold reading, one powered, supply off and confirmed."""
    return [
        opened(),
        BenchFound(meter="Maker,Meter,123,1.0", supply="Maker,Supply,9,1.0", supply_state=SupplyState(output_on=False)),
        reading("cold.rails.ohm.rails", "ohm.rails", None, "ohms"),
        judged("cold.rails.ohm.rails", "ohm.rails", "pass", None, unit="ohm", low=1000.0, high=None, uncertainty=None),
        Answered(item="first-power.up.hold", choice="yes", text="yes"),
        SupplySet(item="first-power.up", state=ON),
        Predicted(
            item="first-power.output.output",
            condition="+12 V -12 V, trimmer least, cold",
            limits=(PointLimits(point="output", unit="V", nominal=0.0, low=-0.02, high=0.02),),
            units=2000,
            solved=2000,
            seed=1,
            seconds=0.5,
        ),
        reading("first-power.output.output", "output", 0.0123),
        judged("first-power.output.output", "output", "pass", 0.0123, probability=0.99),
        OutputOff(reason="end of the walk", confirmed=True, how="OUTP? read 0,0"),
        Noted(text="Highest at the unit", figures={"highest_rail_v": 12.02, "energy_j": 1.5}),
    ]


def overridden_events() -> list[Event]:
    """The output fails, is measured again, is undecided, and somebody goes on with a reason."""
    events = good_events()
    item = "first-power.output.output"
    events[7:9] = [
        reading(item, "output", 0.5),
        judged(item, "output", "fail", 0.5, why="0.5 V is above the limit"),
        Decided(item=item, choice="again"),
        reading(item, "output", 0.0199),
        judged(item, "output", "undecided", 0.0199, why="the uncertainty reaches over the limit"),
        Decided(item=item, choice="go on", reason="the front end is not fitted"),
        judged("first-power.offset-rule", "offset before load", "fail", 0.0199),
    ]
    return events


def suspicious_events() -> list[Event]:
    """The output is odd for this unit, suspects are asked, an extra reading is taken, and the operator goes on."""
    events = good_events()
    item = "first-power.output.output"
    condition = "+12 V -12 V, trimmer least, cold"
    limits = NarrowedLimits(point="output", condition=condition, unit="V", low=-0.001, high=0.002)
    evidence = SuspectEvidence(
        point="output", condition=condition, unit="V", read=0.0123, expected=0.012, healthy=0.0004, weight=4.2
    )
    events[7:9] = [
        Narrowed(item="cold.rails.ohm.rails", after=4, limits=(limits,), readings=1, units=2000, seed=1, seconds=0.2),
        reading(item, "output", 0.0123),
        judged(
            item, "output", "pass", 0.0123, probability=0.99, unit_low=-0.001, unit_high=0.002, odd=True,
            why="Inside. Odd for this unit: its readings so far lead to -1.000 mV to 2.000 mV.",
        ),
        Suspected(
            item=item,
            after=10,
            suspects=(
                SuspectNamed(
                    fault="feed.upper: stuck low", probability=0.9, alike=("feed.lower: dead",), evidence=(evidence,)
                ),
                SuspectNamed(fault="healthy", probability=0.08),
            ),
            probe_next=(ProbeNamed(point="spread", condition=condition, gain_bits=0.4, why="It tells."),),
            unseen_count=1,
            unseen=("driver.upper: leaky",),
            hypotheses=92,
            readings=2,
            seconds=2.0,
        ),
        Decided(item=item, choice="probe"),
        reading("first-power.extra-1.spread", "spread", 1.9),
        judged("first-power.extra-1.spread", "spread", "pass", 1.9, low=1.8, high=2.1),
        Decided(item=item, choice="go on"),
    ]  # fmt: skip
    return events


def closed(events: Sequence[Event], verdict: Verdict = "pass", **more: Any) -> list[Event]:
    """Return the events with a closing one behind them."""
    status = {"exit_status": 0 if verdict == "pass" else 1}
    return [*events, Closed(count=len(events), verdict=verdict, **{**status, **more})]


def write(path: Path, events: Sequence[Event], days: float = 0.0) -> Path:
    """Write a record, one event a second, begun so many days after `START`."""
    with Writer.create(path) as writer:
        for number, event in enumerate(events):
            at = (START + timedelta(days=days, seconds=number)).strftime("%Y-%m-%dT%H:%M:%S.%fZ")
            writer.append(event.name, to_payload(event), float(number), at)
    return path
