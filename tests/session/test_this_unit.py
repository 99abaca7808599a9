"""How the model's answers about one unit become events."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import pytest

from benchkit.errors import ModelError
from benchkit.events import from_payload, to_payload
from benchkit.procedure.actions import Narrow, Suspect, Target
from benchkit.session import this_unit
from benchkit.stage import faults, narrowing, suspects
from benchkit.stage.conditions import Condition, Unpowered
from benchkit.stage.observations import Observation
from tests.stage.designs import breadboard

LOW = (Condition(positive_v=5.0, negative_v=-5.0, limit_a=0.05, trimmer="least"),)
COLD = (Unpowered(point="ohm.rails", trimmer="least"),)
KNOWN = (Observation(conditions=LOW, point="output", value=0.001, standard_uncertainty=1e-5),)
OUTPUT = Target(key="low", conditions=LOW, point="output", unit="V")
SPREAD = Target(key="low", conditions=LOW, point="spread", unit="V")
RAILS = Target(key="cold", conditions=COLD, point="ohm.rails", unit="ohm")


@dataclass
class FakeNarrowing:
    design: Any
    units: int
    seed: int

    def limits(self, known: Any, wanted: Any) -> Any:
        assert known == KNOWN
        limits = []
        for number, (conditions, point) in enumerate(wanted):
            high = math.inf if number else 0.2
            one = narrowing.NarrowedLimits(
                conditions=conditions, point=point, unit="V", low=0.1, high=high, design_low=0.0, design_high=1.0,
                narrowed=point != "output",
            )  # fmt: skip
            limits.append(one)
        return tuple(limits)


def test_narrowed_limits_become_an_event(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(narrowing, "Narrowing", FakeNarrowing)
    narrower = this_unit.Narrower(breadboard(), 700, 5)
    action = Narrow(item="i", after=9, known=KNOWN, near=(SPREAD, OUTPUT), later=(RAILS,))
    found = narrower.narrow(action, (SPREAD, OUTPUT, RAILS))
    assert (found.item, found.after, found.units, found.seed, found.readings, found.problem) == ("i", 9, 700, 5, 1, "")
    assert [(one.point, one.condition, one.low, one.high) for one in found.limits] == [
        ("spread", "low", 0.1, 0.2),
        ("output", "low", None, None),
        ("ohm.rails", "cold", 0.1, None),
    ]
    assert found.seconds >= 0.0
    assert from_payload("narrowed", to_payload(found)) == found


def test_no_answer_is_an_answer_in_words(monkeypatch: pytest.MonkeyPatch) -> None:
    def fails(*arguments: Any, **more: Any) -> Any:
        raise ModelError("3 of 90 units have no solution", "fewer", "Look at the design")

    monkeypatch.setattr(narrowing, "Narrowing", fails)
    narrow = Narrow(item="i", after=9, known=KNOWN, near=(SPREAD,))
    assert "3 of 90 units" in this_unit.Narrower(breadboard(), 7, 5).narrow(narrow, narrow.near).problem
    monkeypatch.setattr(suspects, "suspect", fails)
    suspect = Suspect(item="i", after=9, known=KNOWN, candidates=(SPREAD,), names=())
    found = this_unit.suspect(breadboard(), suspect)
    assert "3 of 90 units" in found.problem
    assert (found.item, found.after, found.suspects) == ("i", 9, ())


def test_suspects_become_an_event(monkeypatch: pytest.MonkeyPatch) -> None:
    open_fault = faults.Fault("output.upper.1", "open")
    weights = (2.0, math.inf, 0.5, -1.0, 1.0)
    evidence = tuple(
        suspects.Evidence(point="output", conditions=LOW, read=0.001, expected=math.inf, healthy=0.0, weight=weight)
        for weight in weights
    )
    others = [suspects.Suspect(fault=faults.Fault("feed.upper", "dead"), probability=0.05) for _ in range(4)]
    suspicion = suspects.Suspicion(
        suspects=(
            suspects.Suspect(fault=open_fault, probability=0.7, alike=(faults.Fault("output.upper.1", "missing"),),
                             evidence=evidence),
            *others,
            suspects.Suspect(fault=faults.HEALTHY, probability=0.1),
        ),
        probe_next=(suspects.Probe(point="spread", conditions=LOW, gain_bits=0.4, why="it tells"),
                    suspects.Probe(point="ohm.rails", conditions=COLD, gain_bits=0.2, why="")),
        unseen=(faults.Fault("driver.upper", "leaky"),),
        hypotheses=90,
        unsolved=(faults.Fault("servo", "dead"),),
        seconds=1.5,
    )  # fmt: skip
    asked: list[Any] = []

    def suspect(design: Any, known: Any, *, candidates: Any) -> Any:
        asked.append(candidates)
        return suspicion

    monkeypatch.setattr(suspects, "suspect", suspect)
    action = Suspect(item="i", after=9, known=KNOWN, candidates=(SPREAD, RAILS), names=((LOW, "low"),))
    found = this_unit.suspect(breadboard(), action)
    assert asked == [[(LOW, "spread"), (COLD, "ohm.rails")]]
    names = [one.fault for one in found.suspects]
    assert names[0] == "output.upper.1: open"
    assert names[-1] == "healthy", "healthy is always among them"
    assert len(names) == this_unit.MOST_SUSPECTS + 1
    first = found.suspects[0]
    assert first.alike == ("output.upper.1: missing",)
    assert [one.weight for one in first.evidence] == [this_unit.MOST_WEIGHT, 2.0, 1.0, 0.5]
    assert (first.evidence[0].expected, first.evidence[0].read, first.evidence[0].unit) == (None, 0.001, "V")
    assert [(one.point, one.condition) for one in found.probe_next] == [("spread", "low"), ("ohm.rails", "cold")]
    assert (found.unseen_count, found.unseen, found.unsolved) == (1, ("driver.upper: leaky",), ("servo: dead",))
    assert (found.hypotheses, found.readings, found.seconds) == (90, 1, 1.5)
    assert from_payload("suspected", to_payload(found)) == found
