from __future__ import annotations

from dataclasses import replace

import hypothesis.strategies as st
import pytest
from hypothesis import given

from benchkit.events import ProbeNamed, Suspected, SuspectEvidence, SuspectNamed
from benchkit.procedure import suspect_words as words

DROP = SuspectEvidence(
    point="emitter.upper.1", condition="c", unit="V", read=0.0, expected=0.0, healthy=0.0121, weight=9.0
)
OPEN = SuspectNamed(fault="emitter.upper.1: open", probability=0.83, evidence=(DROP,))
GOOD = SuspectNamed(fault="healthy", probability=0.1)
ANSWER = Suspected(
    item="i", after=3, suspects=(OPEN, GOOD), unseen_count=2, unseen=("a: open", "b: short"), hypotheses=92, readings=21
)


def test_what_speaks_for_a_suspect() -> None:
    assert words.evidence_words(DROP) == (
        "emitter.upper.1 reads 0.000 V, expected 0.000 V; healthy would read 12.10 mV"
    )
    against = replace(DROP, point="spread", weight=-2.0)
    more = tuple(replace(DROP, point=f"p{number}", weight=float(number)) for number in range(1, 5))
    named = replace(OPEN, evidence=(against, *more))
    assert [line.split()[0] for line in words.evidence_for(named)] == ["p4", "p3"]


@given(st.floats(0.0, 1.0))
def test_no_chance_is_said_to_be_none_or_certain(probability: float) -> None:
    said = words.chance_words(probability)
    assert said not in ("0 %", "100 %")
    assert said.endswith("%")


def test_a_suspect_is_named_and_healthy_is_not_called_proven() -> None:
    assert words.heading_words(ANSWER) == "92 explanations of 21 readings, likeliest first: emitter.upper.1 open."
    healthy = replace(ANSWER, suspects=(GOOD, OPEN), readings=1)
    assert "1 reading " in words.heading_words(healthy)
    assert "proves nothing" in words.heading_words(healthy)
    assert words.unseen_words(healthy) == "2 faults could not have shown yet."


@pytest.mark.parametrize(
    ("count", "names", "said"),
    [
        (2, 1, "2 faults could not have shown yet: a open, and more."),
        (2, 2, "2 faults could not have shown yet: a open, b short."),
        (0, 2, "Each fault that the model knows would have shown; faults that it doesn't know may still be there."),
    ],
)
def test_what_could_not_have_shown(count: int, names: int, said: str) -> None:
    assert words.unseen_words(replace(ANSWER, unseen_count=count, unseen=ANSWER.unseen[:count]), names) == said


def test_one_alone_is_said_of_one() -> None:
    assert words.unseen_words(replace(ANSWER, unseen_count=1, unseen=("a: open",)), 3) == (
        "1 fault could not have shown yet: a open."
    )


def test_a_fault_that_is_named_is_not_said_to_be_unseen_as_well() -> None:
    good = replace(GOOD, alike=("spreader.transistor: leaky",))
    one = replace(ANSWER, suspects=(good,), unseen_count=1, unseen=("spreader.transistor: leaky",))
    assert words.unseen_words(one, 3).startswith("Each fault that isn't named here would have shown")
    two = replace(one, unseen_count=2, unseen=("spreader.transistor: leaky", "a: open"))
    assert words.unseen_words(two, 3) == "1 other fault could not have shown yet: a open."


def test_without_an_answer_only_that_is_said() -> None:
    none = Suspected(item="i", after=3, problem="no solution")
    assert words.heading_words(none) == "The model has no answer about suspects: no solution"
    assert words.unseen_words(none, 3) == ""
    assert words.heading_words(Suspected(item="i", after=3)) == "The model has no answer about suspects."


def test_the_unlikely_are_left_out_but_never_all() -> None:
    tiny = replace(GOOD, probability=0.001)
    assert words.shown_suspects(replace(ANSWER, suspects=(OPEN, tiny))) == (OPEN,)
    assert words.shown_suspects(replace(ANSWER, suspects=(tiny, tiny))) == (tiny,)
    many = replace(ANSWER, suspects=tuple(replace(OPEN, fault=f"p{number}: open") for number in range(5)))
    assert len(words.shown_suspects(many)) == words.SHOWN


def test_the_next_reading() -> None:
    probe = ProbeNamed(point="spread", condition="+9 V -9 V", gain_bits=0.4, why="It tells a from b.")
    assert words.probe_words(probe, now=True) == "Most telling next: spread (+9 V -9 V). It tells a from b."
    assert "make safe first" in words.probe_words(probe, now=False)


def test_what_is_alike() -> None:
    assert words.alike_words(OPEN) == ""
    assert words.alike_words(replace(OPEN, alike=("a: open", "b: short"))) == ("or a open or b short")


def test_what_was_named_with_an_earlier_one_needs_no_line_of_its_own() -> None:
    first = replace(OPEN, fault="a: open", alike=("b: open", "c: open"))
    second = replace(OPEN, fault="b: open", probability=0.12, alike=("a: open", "c: open"))
    answer = replace(ANSWER, suspects=(first, second, GOOD))
    assert words.shown_suspects(answer) == (first, GOOD)
    assert words.alike_words(first, answer.suspects) == "or b open (12 %) or c open"
    likelier = replace(second, fault="c: open", probability=0.4)
    answer = replace(ANSWER, suspects=(first, likelier, second, GOOD))
    assert words.alike_words(first, answer.suspects) == "or c open (40 %) or b open (12 %)", "likeliest first"
