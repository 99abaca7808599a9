"""Biases beside each other: half and twice the target, the present one, the best."""

from __future__ import annotations

import pytest

from benchkit.stage.bias_cost import bias_report
from benchkit.stage.conditions import Condition
from benchkit.stage.draws import nominal
from benchkit.stage.operate import solve_units
from benchkit.stage.trimmer import full_rails
from tests.stage.catalogue import few
from tests.stage.designs import breadboard, tern


def test_present_bias_of_a_whole_stage() -> None:
    """The stage's own spread and current, as the whole circuit has them."""
    design, condition = tern(), full_rails(tern(), trimmer=0.6, when="cold")
    report = bias_report(design, condition)
    whole = solve_units(design, nominal(design), condition, loading="none")
    assert report.present_v == pytest.approx(float(whole.points["emitter.pair.1"][0]) / 2.0)
    assert report["present"].current_a == pytest.approx(float(whole.solution.current("emitter.upper.1")[0]), rel=1e-3)
    assert report.sweeps["present"].spread_v == pytest.approx(float(whole.points["spread"][0]), rel=1e-3)
    assert report["double"].idle_w == pytest.approx(4.0 * report["half"].idle_w)


def test_the_rails_are_the_full_ones_whatever_the_condition() -> None:
    low = Condition(positive_v=15.0, negative_v=-15.0, trimmer="least")
    report = bias_report(tern(), low)
    assert report.regions_a[0] == pytest.approx(0.7 * 35.0 / 8.0)
    assert report["target"].idle_w == pytest.approx(7.0)


def test_too_little_dents_and_too_much_humps() -> None:
    report = bias_report(tern(), full_rails(tern()))
    assert report["half"].output_ohm > report["target"].output_ohm > report["double"].output_ohm
    best = report["least ripple"]
    assert all(best.ripples[0] < other.ripples[0] for other in report.biases if other is not best)
    assert 0.5 * report.target_v < report.least_ripple_v < 1.2 * report.target_v
    assert report.regions_a[0] == pytest.approx(0.7 * 35.0 / 8.0)
    assert [bias.drop_v for bias in report.biases] == sorted(bias.drop_v for bias in report.biases)


def test_a_stage_that_barely_conducts_has_no_present_row() -> None:
    report = bias_report(breadboard(), full_rails(breadboard(), trimmer="least", when="cold"))
    names = {bias.name for bias in report.biases}
    assert {"half", "target", "double"} <= names
    assert "present" in names or report.present_v < 1e-3 * report.target_v


@pytest.mark.parametrize("name", list(few()))
def test_every_topology_has_an_answer(name: str) -> None:
    design = few()[name]
    report = bias_report(design, full_rails(design), (8.0,))
    assert all(0.5 < bias.gain < 1.0 for bias in report.biases)
    assert all(0.0 < bias.output_ohm < 3.0 for bias in report.biases)
    assert (report.oliver_v is None) == (design.output.topology == "complementary-feedback-pair")
