"""Symmetry of emitters and feeds, sharing of pairs, idle against driven current."""

from __future__ import annotations

import math
from collections.abc import Mapping

import numpy as np
import pytest

from benchkit.judge.rules import RuleFacts, RuleResult, evaluate, evaluate_each
from benchkit.measure.accuracy import HANDHELD
from benchkit.measure.readings import Reading
from tests.judge.designs import by_point, taken, tern

RESISTOR_FEEDS = (
    ('upper = "8 mA 5 %"', 'upper = "4.3 kohm 1 %"'),
    ('lower = "servo"', 'lower = "4.3 kohm 1 %"'),
    ('max_current = "24 mA"\n', ""),
    ('works_from = "8 V"\n', ""),
    ('settles_after = "3 s"\n', ""),
)
TWO_PAIRS = (("pairs = 1", "pairs = 2"),)


def _cold(**ohms: float) -> dict[str, Reading]:
    return {
        part.replace("_", "."): taken(
            f"ohm.{part.replace('_', '.')}", value, unit="ohm", function="ohms 4-wire", u=1e-5
        )
        for part, value in ohms.items()
    }


def _emitters(
    upper: float, lower: float, u: float | None = 0.0, cold: Mapping[str, Reading] | None = None
) -> RuleResult:
    readings = by_point(taken("emitter.upper.1", upper, u=u), taken("emitter.lower.1", lower, u=u))
    return evaluate("emitter symmetry", None, RuleFacts(design=tern(), readings=readings, cold=cold or {}))


def test_unmeasured_resistors_leave_the_symmetry_undecided() -> None:
    """0.22 ohm 1 %: equal drops do not say that the currents are equal within 1 %."""
    result = _emitters(0.022, 0.022)
    assert result.value == 0.0
    assert result.verdict == "undecided"
    assert result.cause == "parts"
    assert result.would_decide == (
        "Measure emitter.upper.1 and emitter.lower.1 4-wire or with a forced current, with the power off"
    )


def test_what_tolerances_explain_never_fails() -> None:
    assert _emitters(0.022, 0.022 * 1.029).verdict == "undecided"
    assert _emitters(0.022, 0.022 * 1.032).verdict == "fail"


def test_measured_resistors_decide() -> None:
    equal = _cold(emitter_upper_1=0.2210, emitter_lower_1=0.2190)
    assert _emitters(0.02210, 0.02190, cold=equal).verdict == "pass"
    assert _emitters(0.02200, 0.02200, cold=equal).value == pytest.approx(0.00909, abs=1e-4)
    assert _emitters(0.02190, 0.02210, cold=equal).verdict == "fail"


def test_one_measured_resistor_is_not_enough() -> None:
    result = _emitters(0.022, 0.022, cold=_cold(emitter_upper_1=0.22))
    assert result.verdict == "undecided"
    assert "emitter.lower.1" in result.would_decide
    assert "emitter.upper.1" not in result.would_decide


def test_a_meter_of_a_tenth_of_a_millivolt_cannot_decide_one_per_cent_of_20_mv() -> None:
    cold = _cold(emitter_upper_1=0.22, emitter_lower_1=0.22)
    readings = by_point(*(taken(f"emitter.{side}.1", 0.020, accuracy=HANDHELD) for side in ("upper", "lower")))
    result = evaluate("emitter symmetry", None, RuleFacts(design=tern(), readings=readings, cold=cold))
    assert result.verdict == "undecided"
    assert result.cause == "meter"
    assert "Use a meter that is good for" in result.would_decide


def test_a_bench_meter_decides_it_and_its_gain_error_cancels() -> None:
    cold = _cold(emitter_upper_1=0.22, emitter_lower_1=0.22)
    readings = by_point(taken("emitter.upper.1", 0.0200), taken("emitter.lower.1", 0.0201))
    assert evaluate("emitter symmetry", None, RuleFacts(design=tern(), readings=readings, cold=cold)).verdict == "pass"


def test_a_2_wire_measurement_of_the_resistors_is_no_help() -> None:
    cold = {
        f"emitter.{side}.1": taken(f"ohm.emitter.{side}.1", 0.25, unit="ohm", function="ohms")
        for side in ("upper", "lower")
    }
    result = _emitters(0.022, 0.022, cold=cold)
    assert result.verdict == "undecided"
    assert "4-wire" in result.would_decide


def test_no_current_no_symmetry() -> None:
    for pair in ((0.0, 0.0), (-0.01, 0.005)):
        result = _emitters(*pair)
        assert result.verdict == "undecided"
        assert result.value is None


def test_one_half_dead_fails() -> None:
    assert _emitters(0.022, 0.0).verdict == "fail"
    assert _emitters(0.022, -0.001).verdict == "fail"


def test_overload_is_told() -> None:
    over = Reading(
        point="emitter.upper.1", value=None, unit="V", overload=True, standard_uncertainty=None, meter="m",
        function="dc volts",
    )  # fmt: skip
    facts = RuleFacts(design=tern(), readings=by_point(over, taken("emitter.lower.1", 0.02)))
    assert evaluate("emitter symmetry", None, facts).why == "emitter.upper.1 reads overload."


@pytest.mark.parametrize("tolerance", [0.01, 0.05])
def test_good_units_with_unmeasured_parts_never_fail(tolerance: float) -> None:
    """Equal currents through two resistors within their tolerance: many differ by more than 1 %, none may fail.

    A quarter of pairs of 1 % resistors differ by more than 1 %, four fifths of 5 % ones (arithmetic).
    """
    rng = np.random.default_rng(1)
    design = tern(('emitter_resistor = "0.22 ohm 1 %"', f'emitter_resistor = "0.22 ohm {100 * tolerance:g} %"'))
    apart = 0
    for upper, lower in 0.022 * (1 + rng.uniform(-tolerance, tolerance, (400, 2))):
        readings = by_point(taken("emitter.upper.1", upper, u=0.0), taken("emitter.lower.1", lower, u=0.0))
        result = evaluate("emitter symmetry", None, RuleFacts(design=design, readings=readings))
        assert result.verdict == "undecided"
        assert result.value is not None
        apart += result.value > 0.01
    assert apart / 400 == pytest.approx(0.25 if tolerance == 0.01 else 0.81, abs=0.06)


def _feeds(upper: float, lower: float, **more: object) -> RuleResult:
    readings = by_point(taken("feed.upper", upper, u=0.0), taken("feed.lower", lower, u=0.0))
    return evaluate("feed symmetry", None, RuleFacts(design=tern(*RESISTOR_FEEDS), readings=readings, **more))  # type: ignore[arg-type]


def test_feed_drops() -> None:
    assert _feeds(33.0, 33.1).verdict == "pass"
    undecided = _feeds(33.0, 33.8)
    assert undecided.verdict == "undecided"
    assert undecided.would_decide == "Measure feed.upper and feed.lower with the power off"
    assert _feeds(33.0, 34.2).verdict == "fail"


def test_measured_feeds_compare_currents() -> None:
    cold = {
        "feed.upper": taken("ohm.rails", 4300.0, unit="ohm", function="ohms", u=0.1),
        "feed.lower": taken("ohm.rails", 4370.0, unit="ohm", function="ohms", u=0.1),
    }
    assert _feeds(33.0, 33.537, cold=cold).verdict == "pass"
    assert _feeds(33.0, 34.2, cold=cold).verdict == "fail"


def test_unequal_rails_explain_unequal_feeds() -> None:
    result = _feeds(33.0, 34.2, positive_v=35.0, negative_v=-36.2)
    assert result.verdict == "undecided"
    assert "rails" in result.would_decide or "feed" in result.would_decide


def test_feed_rule_does_not_fit_a_source_and_a_servo() -> None:
    result = evaluate("feed symmetry", None, RuleFacts(design=tern(), readings={}))
    assert result.verdict == "undecided"
    assert "not two resistors" in result.why


def _pairs(*drops: float, number: float | None = None, fraction: str = "1 %") -> tuple[RuleResult, ...]:
    design = tern(*TWO_PAIRS, ('emitter_resistor = "0.22 ohm 1 %"', f'emitter_resistor = "0.22 ohm {fraction}"'))
    names = ("emitter.upper.1", "emitter.upper.2", "emitter.lower.1", "emitter.lower.2")
    readings = by_point(*(taken(name, drop, u=0.0) for name, drop in zip(names, drops, strict=True)))
    return evaluate_each("pair sharing", number, RuleFacts(design=design, readings=readings))


def test_pair_sharing() -> None:
    good, bad = _pairs(0.0220, 0.0225, 0.018, 0.026)
    assert (good.verdict, bad.verdict) == ("pass", "fail")
    assert bad.value == pytest.approx(0.004 / 0.022)
    assert _pairs(0.0200, 0.0240, 0.022, 0.022)[0].verdict == "undecided"
    assert _pairs(0.0198, 0.0242, 0.022, 0.022, fraction="0.1 %")[0].verdict == "undecided"
    assert _pairs(0.0201, 0.0239, 0.022, 0.022, fraction="0.1 %")[0].verdict == "pass"


def test_pair_sharing_needs_pairs() -> None:
    assert "one pair" in evaluate("pair sharing", None, RuleFacts(design=tern(), readings={})).why


def test_the_mean_of_many_pairs_decides_the_symmetry_of_the_halves() -> None:
    design = tern(*TWO_PAIRS, ('emitter_resistor = "0.22 ohm 1 %"', 'emitter_resistor = "0.22 ohm 0.1 %"'))
    names = ("emitter.upper.1", "emitter.upper.2", "emitter.lower.1", "emitter.lower.2")
    readings = by_point(
        *(taken(name, drop, u=0.0) for name, drop in zip(names, (0.018, 0.026, 0.025, 0.019), strict=True))
    )
    assert evaluate("emitter symmetry", None, RuleFacts(design=design, readings=readings)).verdict == "pass"


def test_uncertainty_of_the_difference_against_draws() -> None:
    """The same meter on the same range for both: the scatter of the difference is what the rule says."""
    from benchkit.judge.rule_base import Current, Resistance, relative_difference

    first = taken("emitter.upper.1", 0.020)
    second = taken("emitter.lower.1", 0.021)
    difference, u = relative_difference(
        [Current("a", first, Resistance(0.22, 0.0))], [Current("b", second, Resistance(0.22, 0.0))]
    )
    rng = np.random.default_rng(9)
    gain = rng.uniform(-4e-5, 4e-5, 200_000)
    rest = rng.uniform(-3.5e-6, 3.5e-6, (2, 200_000))
    a, b = 0.020 * (1 + gain) + rest[0], 0.021 * (1 + gain) + rest[1]
    drawn = 2 * (a - b) / (a + b)
    assert difference == pytest.approx(float(drawn.mean()), abs=2e-6)
    assert u == pytest.approx(float(drawn.std()), rel=0.02)


def test_idle_against_driven() -> None:
    def current(value: float) -> dict[str, Reading]:
        return by_point(
            *(
                taken(point, value, unit="A", function="dc current", u=1e-4)
                for point in ("rail+.current", "rail-.current")
            )
        )

    facts = RuleFacts(design=tern(), readings=current(0.12), driven=current(0.8))
    assert [result.verdict for result in evaluate_each("idle against driven", None, facts)] == ["pass", "pass"]
    facts = RuleFacts(design=tern(), readings=current(0.9), driven=current(0.8))
    assert evaluate("idle against driven", None, facts).verdict == "fail"
    assert math.isclose(evaluate("idle against driven", None, facts).value or 0.0, 1.125)
