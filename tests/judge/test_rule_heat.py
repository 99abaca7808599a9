"""Dissipation, heat-sink rise, runaway margin."""

from __future__ import annotations

import pytest

from benchkit.errors import EntryError
from benchkit.judge.rules import ModelFigure, RuleFacts, evaluate, evaluate_each
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


def test_device_dissipation_of_a_unit() -> None:
    """22 mV across 0.22 ohm (0.1 A) at 35 V less the drop: 3.498 W; the measured resistor counts once it is known."""
    facts = RuleFacts(
        design=tern(), readings=by_point(taken("emitter.upper.1", 0.022), taken("emitter.lower.1", 0.011))
    )
    upper, lower = evaluate_each("device dissipation", None, facts)
    assert upper.subject == "output.upper.1"
    assert upper.value == pytest.approx(0.1 * (35.0 - 0.022))
    assert lower.value == pytest.approx(0.05 * (35.0 - 0.011))
    assert upper.verdict == lower.verdict == "pass"
    cold = by_point(taken("emitter.upper.1", 0.20, unit="ohm", function="ohms 4-wire"))
    readings = by_point(taken("emitter.upper.1", 0.022), taken("rail+", 30.0), taken("output", -1.0))
    known = evaluate("device dissipation", 3.0, RuleFacts(design=tern(), readings=readings, cold=cold))
    assert known.value == pytest.approx(0.11 * (31.0 - 0.022))
    assert known.verdict == "fail"


def test_device_dissipation_close_to_its_number_asks_for_the_resistor() -> None:
    facts = RuleFacts(design=tern(), readings=by_point(taken("emitter.upper.1", 0.022)))
    result = evaluate("device dissipation", 3.5, facts)
    assert result.verdict == "undecided"
    assert "Measure emitter.upper.1" in result.would_decide


def test_the_model_is_asked_for_what_nobody_reads() -> None:
    facts = RuleFacts(design=tern(), readings={})
    margin = evaluate("runaway margin", None, facts)
    assert margin.verdict == "pass"
    assert margin.value is not None
    assert 0.2 < margin.value < 0.5
    watts = evaluate("device dissipation", None, facts)
    assert watts.verdict == "pass"
    assert watts.value is not None
    assert 3.4 < watts.value < 3.8


@pytest.mark.parametrize(("sink", "tracking"), [("2.2", "0.1"), ("8", "0.0")])
def test_poor_tracking_fails(sink: str, tracking: str) -> None:
    design = tern(
        ('heatsink = "1.2', f'heatsink = "{sink}'), ("spreader_tracking = 0.7", f"spreader_tracking = {tracking}")
    )
    result = evaluate("runaway margin", None, RuleFacts(design=design, readings={}))
    assert result.verdict == "fail"
    assert result.value is not None
    assert result.value > 0.5


def test_without_a_warm_state_there_is_no_power_to_judge() -> None:
    design = tern(('heatsink = "1.2', 'heatsink = "8'), ("spreader_tracking = 0.7", "spreader_tracking = 0.0"))
    result = evaluate("device dissipation", None, RuleFacts(design=design, readings={}))
    assert result.verdict == "undecided"
    assert "no warm state" in result.why
