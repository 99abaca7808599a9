"""Dissipation, heat-sink rise, runaway margin."""

from __future__ import annotations

import pytest

from benchkit.errors import EntryError
from benchkit.judge.rules import ModelFigure, RuleFacts, evaluate
from tests.judge.designs import by_point, taken, tern


@pytest.mark.parametrize(("volts", "verdict"), [(0.022, "pass"), (0.8125, "undecided"), (1.0, "fail")])
def test_resistor_dissipation(volts: float, verdict: str) -> None:
    """3 W in 0.22 ohm is 0.812 V."""
    facts = RuleFacts(design=tern(), readings=by_point(taken("emitter.upper.1", volts)))
    result = evaluate("resistor dissipation", None, facts)
    assert result.verdict == verdict
    assert result.value == pytest.approx(volts**2 / 0.22)


def test_no_rating_no_usual_number() -> None:
    design = tern(('"emitter" = { power = "3 W" }\n', ""))
    facts = RuleFacts(design=design, readings=by_point(taken("emitter.upper.1", 0.02)))
    with pytest.raises(EntryError, match="has no usual number"):
        evaluate("resistor dissipation", None, facts)
    assert evaluate("resistor dissipation", 0.5, facts).verdict == "pass"


@pytest.mark.parametrize(("celsius", "verdict"), [(33.0, "pass"), (60.3, "undecided"), (70.0, "fail")])
def test_heatsink_rise(celsius: float, verdict: str) -> None:
    reading = taken("heatsink", celsius, unit="degC", function="temperature")
    result = evaluate("heat-sink rise", None, RuleFacts(design=tern(), readings=by_point(reading)))
    assert result.verdict == verdict
    assert result.value == pytest.approx(celsius - 25.0)


@pytest.mark.parametrize(("rule", "good", "bad"), [("runaway margin", 0.3, 0.6), ("device dissipation", 40.0, 140.0)])
def test_figures_of_the_model(rule: str, good: float, bad: float) -> None:
    for figure, verdict in ((good, "pass"), (bad, "fail")):
        facts = RuleFacts(design=tern(), readings={}, figures={rule: ModelFigure(figure)})
        assert evaluate(rule, None, facts).verdict == verdict
