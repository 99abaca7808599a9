"""Oscillation: a person's eyes decide, readings hint."""

from __future__ import annotations

import pytest

from benchkit.judge.limits import Limits
from benchkit.judge.rules import RuleFacts, evaluate
from tests.judge.designs import by_point, taken, tern

LIMITS = {
    "rail+.current": Limits(0.08, 0.12, 0.1, "A", "the model"),
    "emitter.upper.1": Limits(0.018, 0.024, 0.022, "V", "the model"),
}


def _facts(seen: bool | None, rail_a: float = 0.1, drop_v: float = 0.022) -> RuleFacts:
    readings = by_point(
        taken("rail+.current", rail_a, unit="A", function="dc current"), taken("emitter.upper.1", drop_v)
    )
    said = {} if seen is None else {"oscillation": seen}
    return RuleFacts(design=tern(), readings=readings, limits=LIMITS, seen=said)


@pytest.mark.parametrize(("seen", "verdict"), [(False, "pass"), (True, "fail"), (None, "undecided")])
def test_a_person_decides(seen: bool | None, verdict: str) -> None:
    result = evaluate("oscillation", None, _facts(seen))
    assert result.verdict == verdict
    if seen is None:
        assert "oscilloscope" in result.would_decide
        assert result.cause == "nothing to judge"


def test_current_that_no_emitter_carries_is_a_hint() -> None:
    hinted = evaluate("oscillation", None, _facts(False, rail_a=0.2))
    assert hinted.verdict == "undecided"
    assert "rail+.current is 200.0 mA" in hinted.why
    assert "oscilloscope" in hinted.would_decide
    assert evaluate("oscillation", None, _facts(True, rail_a=0.2)).verdict == "fail"
    assert "sign of oscillation" in evaluate("oscillation", None, _facts(None, rail_a=0.2)).why


def test_current_that_emitters_carry_is_none() -> None:
    assert evaluate("oscillation", None, _facts(False, rail_a=0.2, drop_v=0.04)).verdict == "pass"


def test_without_limits_nothing_hints() -> None:
    drawn = taken("rail+.current", 2.0, unit="A", function="dc current")
    facts = RuleFacts(design=tern(), readings=by_point(drawn), seen={"oscillation": False})
    assert evaluate("oscillation", None, facts).verdict == "pass"
