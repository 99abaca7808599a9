"""The table of rules, and how a value with both kinds of doubt is decided."""

from __future__ import annotations

import inspect
import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchkit.errors import EntryError
from benchkit.judge.rule_base import decide
from benchkit.judge.rules import RULES, RuleFacts, evaluate, evaluate_each, find_rule
from benchkit.stage.points import points_of
from tests.judge.designs import by_point, taken, tern


def test_every_rule_says_what_it_is() -> None:
    for name, rule in RULES.items():
        assert rule.name == name
        assert rule.title
        assert rule.source
        words = inspect.getdoc(rule.check) or ""
        assert "sual number" in words, name
        assert "Source" in words or "source" in words or "from the model" in words, name


def test_rules_need_points_of_the_design() -> None:
    design = tern()
    known = {point.name for point in points_of(design)} | {"feed.upper", "feed.lower"}
    for rule in RULES.values():
        assert set(rule.needs(design)) <= known


ASK_THE_MODEL = {"fail-safe trimmer", "trimmer authority", "device dissipation", "runaway margin"}
"""Rules that judge the design and need no reading."""


def test_every_rule_is_undecided_when_nothing_is_known() -> None:
    facts = RuleFacts(design=tern(), readings={})
    for name in RULES.keys() - ASK_THE_MODEL:
        for result in evaluate_each(name, 1.0, facts):
            assert result.verdict == "undecided", name
            assert result.cause == "nothing to judge"
            assert result.why
            assert result.would_decide


def test_only_the_offset_has_no_override() -> None:
    assert [rule.name for rule in RULES.values() if not rule.override] == ["offset before load"]


def test_unknown_rules_and_numbers_are_refused() -> None:
    facts = RuleFacts(design=tern(), readings={})
    with pytest.raises(EntryError, match="perhaps emitter symmetry"):
        find_rule("emiter symetry")
    with pytest.raises(EntryError, match="has no usual number"):
        evaluate("hum at rest", None, facts)
    for number in (0.0, -1.0, math.nan, math.inf):
        with pytest.raises(EntryError, match="above zero"):
            evaluate("emitter symmetry", number, facts)


def test_numbers_of_the_design() -> None:
    design = tern()
    assert RULES["quiescent target"].number_for(design) == pytest.approx(0.10)
    assert RULES["resistor dissipation"].number_for(design) == 3.0
    assert RULES["device dissipation"].number_for(design) == 130.0
    assert RULES["heat-sink rise"].number_for(design) == 35.0
    assert RULES["emitter symmetry"].number_for(design) == 0.01


def test_evaluate_gives_the_worst() -> None:
    readings = by_point(taken("driver.upper.vbe", 0.65), taken("driver.lower.vbe", 0.01))
    facts = RuleFacts(design=tern(), readings=readings)
    assert [result.verdict for result in evaluate_each("junction drop", None, facts)] == ["pass", "fail"]
    assert evaluate("junction drop", None, facts).subject == "driver.lower.vbe"


@pytest.mark.parametrize(
    ("value", "u", "parts", "verdict", "cause"),
    [
        (0.0, 0.0, 0.0, "pass", ""),
        (0.5, 0.1, 0.1, "pass", ""),
        (0.9, 0.1, 0.0, "undecided", "meter"),
        (0.9, 0.0, 0.2, "undecided", "parts"),
        (0.9, 0.0, 0.0, "pass", ""),
        (0.0, 0.0, 2.0, "undecided", "parts"),
        (1.5, 0.0, 1.0, "undecided", "parts"),
        (2.5, 0.0, 1.0, "fail", ""),
        (0.8, 0.05, 0.15, "undecided", "parts and meter"),
        (1.0, 0.1, 0.1, "undecided", "parts and meter"),
        (1.5, 0.05, 0.6, "undecided", "parts"),
    ],
)
def test_decide(value: float, u: float, parts: float, verdict: str, cause: str) -> None:
    decided = decide(value, u, parts, low=-1.0, high=1.0, coverage=0.95)
    assert (decided.verdict, decided.cause) == (verdict, cause)


def test_an_unknown_meter_decides_nothing() -> None:
    assert decide(0.0, None, 0.0, low=-1.0, high=1.0, coverage=0.95).verdict == "undecided"


@given(st.floats(-5, 5), st.floats(0, 1), st.floats(0, 1), st.floats(-1, 1))
def test_parts_never_fail_what_they_explain(value: float, u: float, parts: float, share: float) -> None:
    """Whatever the parts are within their tolerance: a fail is outside for all of them, a pass inside for all."""
    decided = decide(value, u, parts, low=-1.0, high=1.0, coverage=0.95)
    true = value + share * parts
    if decided.verdict == "fail":
        assert abs(true) > 1.0 - 1e-9
    if decided.verdict == "pass":
        assert abs(true) <= 1.0 + 1e-9
    assert (decided.verdict == "undecided") == bool(decided.cause)
