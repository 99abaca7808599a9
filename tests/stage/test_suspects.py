"""Suspects of whole units: planted faults, what is said of them, and what must hold of every answer."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import pytest

from benchkit.errors import BenchkitError
from benchkit.stage.conditions import Condition, Unpowered
from benchkit.stage.design import Design
from benchkit.stage.faults import HEALTHY, Fault, faults_of, prior_of
from benchkit.stage.observations import Conditions, Observation
from benchkit.stage.points import find_point
from benchkit.stage.suspects import Suspicion, default_candidates, suspect, suspect_many
from tests.stage.catalogue import few
from tests.stage.designs import breadboard, tern
from tests.stage.unit_readings import POINTS, fault_of, first_group, observed, powered, probability_of, unpowered

SINGLE = "single resistor resistor lower series 1"
FEEDBACK = "feedback resistor resistor none 1"
COMMON = ("healthy", "spreader.transistor: reversed", "spreader.upper: ten times low")
PLANTED = {
    "breadboard": (*COMMON, "feed.lower: ten times low", "output.lower.1: base-collector short"),
    "tern": (*COMMON[:2], "driver.resistor: open", "output.upper.1: leaky"),
    SINGLE: (*COMMON, "spreader.upper: swapped", "emitter.lower.1: short"),
    FEEDBACK: (*COMMON, "driver.upper: open", "emitter.upper.1: short"),
}
CANDIDATE = "spread.lower"
"""Left out of the readings, to be probed."""


def _design(name: str) -> Design:
    return {"breadboard": breadboard, "tern": tern}[name]() if name in ("breadboard", "tern") else few()[name]


@dataclass(frozen=True)
class Case:
    design: Design
    condition: Condition
    faults: tuple[Fault, ...]
    sets: list[list[Observation]]
    candidates: list[tuple[Conditions, str]]
    said: list[Suspicion]


@pytest.fixture(scope="module", params=list(PLANTED))
def case(request: pytest.FixtureRequest) -> Case:
    return _case(request.param)


@pytest.fixture(scope="module")
def small() -> Case:
    return _case("breadboard")


_CASES: dict[str, Case] = {}


def _case(name: str) -> Case:
    """One case a design, made once."""
    if name not in _CASES:
        design = _design(name)
        rails = design.rails
        condition = Condition(
            positive_v=0.4 * rails.positive_v, negative_v=0.4 * rails.negative_v, limit_a=0.1, trimmer="least",
            ambient_c=25.0,
        )  # fmt: skip
        faults = tuple(fault_of(one, design) for one in PLANTED[name])
        sets = powered(design, condition, faults, [point for point in POINTS if point != CANDIDATE], seed=5)
        candidates: list[tuple[Conditions, str]] = [((condition,), CANDIDATE), ((condition,), "output.upper.1.vbe")]
        said = suspect_many(design, sets, candidates=candidates)
        _CASES[name] = Case(design, condition, faults, sets, candidates, said)
    return _CASES[name]


def _likely(said: Suspicion) -> dict[Fault, float]:
    return {one.fault: one.probability for one in said.suspects if one.probability > 1e-6}


# -- planted faults ---------------------------------------------------------------------------------------------------


def test_planted_faults_are_named(case: Case) -> None:
    for fault, said in zip(case.faults, case.said, strict=True):
        assert fault in first_group(said), (str(fault), [(str(s.fault), s.probability) for s in said.suspects[:4]])
        if fault != HEALTHY:
            assert probability_of(said, HEALTHY) < 0.05
            assert said.suspects[0].evidence


def test_what_holds_of_every_answer(case: Case) -> None:
    every = {HEALTHY, *faults_of(case.design)}
    for said in case.said:
        assert {one.fault for one in said.suspects} == every
        assert len(said.suspects) == said.hypotheses == len(every)
        probabilities = [one.probability for one in said.suspects]
        assert all(math.isfinite(one) and 0.0 <= one <= 1.0 for one in probabilities)
        assert sum(probabilities) == pytest.approx(1.0, abs=1e-9)
        assert probabilities == sorted(probabilities, reverse=True)
        assert HEALTHY not in said.unseen
        assert said.suspects[0].fault not in said.unseen
        assert set(said.unseen) <= every
        assert said.seconds > 0.0
        alike = {one.fault: one.alike for one in said.suspects}
        assert all(len(others) <= 3 for others in alike.values())
        assert all(fault in alike[other] for fault, others in alike.items() for other in others)
        for probe in said.probe_next:
            assert (probe.conditions, probe.point) in case.candidates
            assert math.isfinite(probe.gain_bits)
            assert probe.gain_bits > 0.0
        gains = [probe.gain_bits for probe in said.probe_next]
        assert gains == sorted(gains, reverse=True)


def test_healthy_is_never_certain(case: Case) -> None:
    """A healthy unit comes first, without evidence of its own; where faults stay unseen, they stay possible."""
    said = case.said[0]
    assert said.suspects[0].fault == HEALTHY
    assert said.suspects[0].probability > 0.8
    assert said.suspects[0].evidence == ()
    if said.unseen:
        unseen = sum(probability_of(said, fault) for fault in said.unseen)
        assert said.suspects[0].probability <= 1.0 - unseen + 1e-9
        prior = {one.fault: one.probability for one in suspect(case.design, []).suspects}
        # what can't be seen keeps at least a third of its prior odds (an expected Bayes factor below 3)
        assert unseen > 0.2 * sum(prior[fault] for fault in said.unseen)


def test_the_same_readings_give_the_same_answer(small: Case) -> None:
    again = suspect_many(small.design, small.sets, candidates=small.candidates)
    for one, other in zip(small.said, again, strict=True):
        assert replace(one, seconds=0.0) == replace(other, seconds=0.0)


def test_several_units_are_each_as_if_alone(small: Case) -> None:
    """The same meter read them all: nothing of one's answer hangs on the others."""
    for some, together in list(zip(small.sets, small.said, strict=True))[:4]:
        alone = suspect(small.design, some, candidates=small.candidates)
        likely = _likely(alone)
        assert likely.keys() == _likely(together).keys()
        assert _likely(together) == pytest.approx(likely, abs=0.01)
        assert alone.suspects[0].alike == together.suspects[0].alike


def test_units_that_were_read_differently_keep_their_places(small: Case) -> None:
    some = [small.sets[2], small.sets[1][:4], [], list(reversed(small.sets[2]))]
    first, short, nothing, backwards = suspect_many(small.design, some, candidates=small.candidates)
    assert first.suspects[0].fault == backwards.suspects[0].fault == small.faults[2]
    assert backwards.suspects[0].probability == pytest.approx(first.suspects[0].probability, abs=0.02)
    assert nothing.suspects[0].fault == HEALTHY
    assert len(short.unseen) > len(first.unseen)


# -- more readings, fewer doubts --------------------------------------------------------------------------------------


def test_no_reading_gives_the_priors() -> None:
    for design in (breadboard(), tern()):
        said = suspect(design, [])
        assert said.suspects[0].fault == HEALTHY
        assert set(said.unseen) == set(faults_of(design))
        assert said.probe_next == ()
        healthy = said.suspects[0].probability
        for one in said.suspects[1:]:
            prior = prior_of(design, one.fault)
            assert one.probability / healthy == pytest.approx(prior / (1.0 - prior), rel=0.01)
    assert suspect_many(breadboard(), []) == []


def test_a_resistor_measured_cold_decides() -> None:
    """A supply's current alone may have many reasons; ohms across the arms of the spreader say which."""
    design = breadboard()
    condition = _case("breadboard").condition
    planted = fault_of("spreader.upper: ten times low", design)
    under_power = powered(design, condition, [planted], ("rail+.current",), seed=2)[0]
    candidates: list[tuple[Conditions, str]] = [
        ((Unpowered(point=point, trimmer="least"),), point)
        for point in ("ohm.emitter.upper.1", "ohm.spreader.upper", "ohm.spreader.lower")
    ]
    before = suspect(design, under_power, candidates=candidates)
    assert probability_of(before, planted) < 0.9
    probe = before.probe_next[0]
    assert probe.point in ("ohm.spreader.upper", "ohm.spreader.lower")
    assert probe.conditions == (Unpowered(point=probe.point, trimmer="least"),)
    cold = unpowered(design, "least", [planted], ("ohm.spreader.upper", "ohm.spreader.lower"), seed=2)[0]
    after = suspect(design, [*under_power, *cold], candidates=candidates)
    assert after.suspects[0].fault == planted
    assert probability_of(after, planted) > 0.99
    assert any(one.conditions == (Unpowered(point=one.point, trimmer="least"),) for one in after.suspects[0].evidence)
    assert {probe.point for probe in after.probe_next} <= {"ohm.emitter.upper.1"}


def test_an_overload_is_a_reading() -> None:
    """An arm that measures open is open; one that measures its value is not."""
    design = breadboard()
    condition = Unpowered(point="ohm.spreader.lower", trimmer="least")
    candidates: list[tuple[Conditions, str]] = [((Unpowered(point="ohm.rails", trimmer="least"),), "ohm.rails")]
    opened = fault_of("spreader.lower: open", design)
    said = suspect(design, [observed(condition, condition.point, math.inf)], candidates=candidates)
    assert opened in first_group(said)
    assert probability_of(said, HEALTHY) < 0.01
    for one in said.suspects[0].evidence:
        assert (one.read, one.expected) == (math.inf, math.inf)
        assert math.isfinite(one.healthy)
        assert math.isfinite(one.weight)
    whole = unpowered(design, "least", [HEALTHY], [condition.point], seed=2)[0]
    assert probability_of(suspect(design, whole, candidates=candidates), opened) < 1e-6


def test_repeated_readings_are_one_reading(small: Case) -> None:
    """The same again adds nothing; two that differ stand for their mean."""
    some = small.sets[3]
    once = suspect(small.design, some, candidates=small.candidates)
    doubled = suspect(small.design, [*some, *some], candidates=small.candidates)
    assert _likely(doubled) == pytest.approx(_likely(once), abs=1e-6)
    apart = [replace(one, value=one.value + sign * one.standard_uncertainty) for one in some for sign in (-1.0, 1.0)]
    mean = suspect(small.design, apart, candidates=small.candidates)
    assert _likely(mean) == pytest.approx(_likely(once), abs=1e-3)


def test_less_certain_readings_say_less(small: Case) -> None:
    sharp = small.sets[1][-3:]
    blunt = [replace(one, standard_uncertainty=0.5) for one in sharp]
    said = suspect_many(small.design, [sharp, blunt], candidates=small.candidates)[1]
    assert probability_of(said, HEALTHY) > 0.5
    assert len(suspect(small.design, blunt, candidates=small.candidates).unseen) > len(
        suspect(small.design, sharp, candidates=small.candidates).unseen
    )


def test_between_cold_and_warm_is_neither() -> None:
    """A unit read on its way from cold to warm is healthy by both ends, and not by the cold one alone."""
    design = breadboard()
    cold = Condition(positive_v=10.0, negative_v=-10.0, limit_a=0.5, trimmer=0.75, ambient_c=25.0)
    warm = replace(cold, when="warm")
    points = ("emitter.upper.1", "emitter.lower.1", "spread")
    ends = [powered(design, one, [HEALTHY], points, seed=4)[0] for one in (cold, warm)]
    between = [replace(a, conditions=(cold, warm), value=0.5 * (a.value + b.value)) for a, b in zip(*ends, strict=True)]
    said = suspect(design, between, candidates=[((cold, warm), "output")])
    assert said.suspects[0].fault == HEALTHY
    assert said.suspects[0].probability > 0.5


# -- candidates -------------------------------------------------------------------------------------------------------


def test_the_usual_candidates_are_the_other_points_and_the_unpowered_ones() -> None:
    condition = _case("tern").condition
    found = default_candidates(tern(), [((condition,), "output"), ((condition,), "spread")])
    assert len(set(found)) == len(found)
    for conditions, point in found:
        first = conditions[0]
        if find_point(tern(), point).powered:
            assert first == condition
        else:
            assert first == Unpowered(point=point, trimmer="unknown", ambient_c=25.0)
    names = {point for _, point in found}
    assert {"spread.upper", "driver.resistor", "ohm.rails", "diode.output.upper.1"} <= names
    assert not names & {"rail+.drop", "rail-.drop", "heatsink", "output.ac"}
    assert "rail+.drop" in {
        p for _, p in default_candidates(tern(), [((replace(condition, fuse_ohm=10.0),), "output")])
    }
    cold = Unpowered(point="ohm.rails", trimmer="least")
    assert all(
        conditions[0] == Unpowered(point=point, trimmer="least")
        for conditions, point in default_candidates(tern(), [((cold,), "ohm.rails")])
    )


def test_what_was_read_is_not_probed_again(small: Case) -> None:
    some = small.sets[1][:3]
    candidates = [(one.conditions, one.point) for one in some]
    assert suspect(small.design, some, candidates=candidates).probe_next == ()
    doubled: list[tuple[Conditions, str]] = [*small.candidates, *small.candidates]
    probes = suspect(small.design, some, candidates=doubled).probe_next
    assert len({(probe.point, probe.conditions) for probe in probes}) == len(probes)


def test_a_point_that_is_not_the_design_s(small: Case) -> None:
    with pytest.raises((BenchkitError, KeyError)):
        suspect(small.design, [observed(small.condition, "driver.resistor", 1.0)])


def test_a_bias_that_was_left_too_far_up_is_no_fault() -> None:
    """Both rails in their limit at the lowest rails, trimmer anywhere: the upper third of its travel does that."""
    cold = Condition(positive_v=9.0, negative_v=-9.0, limit_a=0.195, trimmer="unknown")
    nothing = Unpowered(point="ohm.output", trimmer="unknown")
    said = suspect(
        tern(),
        [
            Observation(conditions=(nothing,), point="ohm.output", value=9461.0, standard_uncertainty=1.0),
            *(
                Observation(conditions=(cold,), point=point, value=0.195, standard_uncertainty=0.017, event=True)
                for point in ("rail+.current", "rail-.current")
            ),
        ],
    )
    assert said.suspects[0].fault == HEALTHY
    assert said.suspects[0].probability > 0.9
