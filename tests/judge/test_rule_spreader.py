"""Divider stiffness, spreader ratio, fail-safe trimmer, trimmer authority."""

from __future__ import annotations

import pytest

from benchkit.errors import ModelError
from benchkit.judge.rules import ModelFigure, RuleFacts, RuleResult, evaluate
from benchkit.measure.readings import Reading
from benchkit.stage.design import Design
from tests.judge.designs import by_point, taken, tern

TRIMMER = """[spreader.trimmer]
value = "500 ohm 10 %"
arm = "lower"
end_resistance = "2 ohm"
turns = 12
raises_bias = "anticlockwise"
wiring = "series"
"""
WITHOUT_TRIMMER = ((TRIMMER, ""),)


def _arms(upper: float, lower: float) -> dict[str, Reading]:
    return {
        f"spreader.{arm}": taken(f"ohm.spreader.{arm}", ohm, unit="ohm", function="ohms", u=0.01)
        for arm, ohm in (("upper", upper), ("lower", lower))
    }


def _stiffness(upper_v: float, lower_v: float, design: Design, **more: object) -> RuleResult:
    readings = by_point(taken("spread.upper", upper_v, u=1e-6), taken("spread.lower", lower_v, u=1e-6))
    return evaluate("divider stiffness", None, RuleFacts(design=design, readings=readings, **more))  # type: ignore[arg-type]


def test_unmeasured_arms_leave_the_stiffness_undecided() -> None:
    """Base current a twelfth of the divider's: from 1 % resistors it is uncertain by as much as itself."""
    result = _stiffness(2000 * 1.25e-3 * 13 / 12, 560 * 1.25e-3, tern(*WITHOUT_TRIMMER))
    assert result.value == pytest.approx(12.0, rel=1e-3)
    assert result.verdict == "undecided"
    assert "uncertain by as much as itself" in result.why
    assert "Measure both arms" in result.would_decide


def test_measured_arms_decide_the_stiffness() -> None:
    design = tern(*WITHOUT_TRIMMER)
    for ratio, verdict in ((12.0, "pass"), (8.0, "fail")):
        result = _stiffness(2013 * 1.25e-3 * (1 + 1 / ratio), 557 * 1.25e-3, design, cold=_arms(2013, 557))
        assert result.value == pytest.approx(ratio, rel=1e-3)
        assert result.verdict == verdict


def test_far_from_the_limit_even_unmeasured_arms_decide() -> None:
    """A base current of a third of the divider's is no tolerance."""
    assert _stiffness(2000 * 1e-3 * 4 / 3, 560 * 1e-3, tern(*WITHOUT_TRIMMER)).verdict == "fail"


def test_a_trimmer_anywhere_leaves_it_undecided_without_a_value() -> None:
    result = _stiffness(1.75, 0.681, tern())
    assert (result.verdict, result.value) == ("undecided", None)
    assert "may stand anywhere" in result.why
    at_least = _stiffness(1.4034, 0.69575, tern(), trimmer="least")
    assert at_least.verdict == "undecided"
    assert at_least.value is not None


def test_a_divider_without_current() -> None:
    assert _stiffness(0.0, 0.0, tern()).cause == "nothing to judge"


def _ratio(spread: float, vbe: float, design: Design, **more: object) -> RuleResult:
    readings = by_point(taken("spread", spread, u=1e-3), taken("spread.lower", vbe, u=1e-3))
    return evaluate("spreader ratio", None, RuleFacts(design=design, readings=readings, **more))  # type: ignore[arg-type]


def test_spreader_ratio() -> None:
    """VBE·(1 + 2000/560) = 3.2 V at 0.7 V, and something for the base current."""
    design = tern(*WITHOUT_TRIMMER)
    assert _ratio(3.30, 0.70, design).verdict == "pass"
    high = _ratio(4.20, 0.70, design)
    assert high.verdict == "fail"
    assert "too large" in high.why
    low = _ratio(2.90, 0.70, design)
    assert low.verdict == "fail"
    assert "too small" in low.why
    assert _ratio(2.10, -0.1, design).cause == "nothing to judge"


def test_spreader_ratio_of_the_published_spreader() -> None:
    """Arithmetic: IS 1e-14, 3.3 kohm over 1 kohm, 8 mA, gain 200: 3.1371001 V at VBE 0.7016924 V."""
    design = tern(
        *WITHOUT_TRIMMER,
        ('upper = "2.0 kohm 1 %"', 'upper = "3.3 kohm"'),
        ('lower = "560 ohm 1 %"', 'lower = "1 kohm"'),
        ("IS = 2e-14, BF = 320", "IS = 1e-14, BF = 200"),
    )
    assert _ratio(3.1371001, 0.7016924, design).verdict == "pass"


def test_the_trimmer_widens_the_ratio_unless_its_place_is_known() -> None:
    assert _ratio(2.9, 0.69, tern()).verdict == "pass"
    assert _ratio(2.9, 0.69, tern(), trimmer="least").verdict == "fail"


@pytest.mark.parametrize(
    ("drops", "verdict"), [((0.022, 1e-6), "pass"), ((0.022, 0.5), "fail"), ((0.022, 0.022), "undecided")]
)
def test_fail_safe_trimmer(drops: tuple[float, float], verdict: str) -> None:
    facts = RuleFacts(design=tern(), readings={}, wiper_open=lambda: drops)
    assert evaluate("fail-safe trimmer", None, facts).verdict == verdict


def test_fail_safe_trimmer_without_an_answer() -> None:
    def no_answer() -> tuple[float, float]:
        raise ModelError("The nominal unit found no operating point", "", "Look at the design file")

    result = evaluate("fail-safe trimmer", None, RuleFacts(design=tern(), readings={}, wiper_open=no_answer))
    assert result.verdict == "undecided"
    assert "no operating point" in result.why
    for nonsense in ((float("nan"), 1.0), (0.0, 1.0)):
        facts = RuleFacts(design=tern(), readings={}, wiper_open=lambda drops=nonsense: drops)  # type: ignore[misc]
        assert evaluate("fail-safe trimmer", None, facts).verdict == "undecided"


def test_a_design_without_a_trimmer_is_safe() -> None:
    facts = RuleFacts(design=tern(*WITHOUT_TRIMMER), readings={})
    assert evaluate("fail-safe trimmer", None, facts).verdict == "pass"


def test_fail_safe_trimmer_from_the_model() -> None:
    """The demonstration's trimmer opens the lower arm, which lowers the bias; in the upper arm it would raise it."""
    from benchkit.stage.conditions import Condition
    from benchkit.stage.draws import nominal
    from benchkit.stage.faults import parse_fault
    from benchkit.stage.operate import solve_units

    for design, verdict in (
        (tern(), "pass"),
        (tern(('arm = "lower"', 'arm = "upper"'), ('lower = "560 ohm 1 %"', 'lower = "900 ohm 1 %"')), "fail"),
    ):
        condition = Condition(positive_v=35.0, negative_v=-35.0, limit_a=1.0, trimmer=0.5)

        def drops(design: Design = design, condition: Condition = condition) -> tuple[float, float]:
            now = solve_units(design, nominal(design), condition)
            opened = solve_units(
                design, nominal(design), condition, parse_fault("spreader.trimmer: wiper open", design)
            )
            return float(now.points["emitter.upper.1"][0]), float(opened.points["emitter.upper.1"][0])

        result = evaluate("fail-safe trimmer", None, RuleFacts(design=design, readings={}, wiper_open=drops))
        assert result.verdict == verdict, result.why


@pytest.mark.parametrize(
    ("share", "u", "verdict"), [(0.999, 1e-3, "pass"), (0.98, 1e-3, "fail"), (0.991, 1e-3, "undecided")]
)
def test_trimmer_authority(share: float, u: float, verdict: str) -> None:
    facts = RuleFacts(design=tern(), readings={}, figures={"trimmer authority": ModelFigure(share, u)})
    assert evaluate("trimmer authority", None, facts).verdict == verdict


def test_both_trimmer_rules_ask_the_model_themselves() -> None:
    """Without figures of others: the demonstration's trimmer is safe and reaches; in the upper arm it is not safe."""
    facts = RuleFacts(design=tern(), readings={})
    assert evaluate("fail-safe trimmer", None, facts).verdict == "pass"
    found = evaluate("trimmer authority", None, facts)
    assert found.verdict == "pass"
    assert found.value == pytest.approx(1.0, abs=0.01)
    upper = tern(
        ('arm = "lower"', 'arm = "upper"'),
        ('upper = "2.0 kohm 1 %"', 'upper = "1.8 kohm 1 %"'),
        ('lower = "560 ohm 1 %"', 'lower = "820 ohm 1 %"'),
    )
    unsafe = evaluate("fail-safe trimmer", None, RuleFacts(design=upper, readings={}))
    assert unsafe.verdict == "fail"
    assert "only the supply's limit" in unsafe.why


def test_authority_of_a_small_trimmer_fails() -> None:
    small = tern(('value = "500 ohm 10 %"', 'value = "50 ohm 10 %"'), ('"560 ohm 1 %"', '"787 ohm 1 %"'))
    assert evaluate("trimmer authority", None, RuleFacts(design=small, readings={})).verdict == "fail"


def test_authority_without_a_trimmer_is_the_share_that_is_right_by_itself() -> None:
    result = evaluate("trimmer authority", None, RuleFacts(design=tern(*WITHOUT_TRIMMER), readings={}))
    assert result.verdict == "fail"
    assert "fixed bias" in result.why
