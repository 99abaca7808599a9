"""Junction drop, offset, quiescent target, optimum bias, hum."""

from __future__ import annotations

import pytest

from benchkit.judge.limits import Limits
from benchkit.judge.rules import RuleFacts, evaluate, evaluate_each
from benchkit.measure.accuracy import HANDHELD
from benchkit.measure.readings import Reading
from benchkit.stage.design import Design
from tests.judge.designs import by_point, taken, tern

AS_CURRENT = (('emitter_drop = "22 mV"', 'quiescent_current = "100 mA"'),)


def _facts(*readings: Reading, design: Design | None = None, **more: object) -> RuleFacts:
    return RuleFacts(design=design or tern(), readings=by_point(*readings), **more)  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("volts", "verdict"),
    [(0.45, "pass"), (0.55, "pass"), (0.68, "pass"), (0.0, "fail"), (1.2, "fail"), (0.35, "undecided")],
)
def test_junction_without_a_model(volts: float, verdict: str) -> None:
    """A power device at least bias shows 0.4 V to 0.55 V and must not fail for that."""
    result = evaluate("junction drop", None, _facts(taken("output.upper.1.vbe", volts)))
    assert result.verdict == verdict
    assert "common practice" in result.why


def test_junction_by_the_model() -> None:
    limits = {"output.upper.1.vbe": Limits(0.381, 0.486, 0.427, "V", "the model")}
    assert evaluate("junction drop", None, _facts(taken("output.upper.1.vbe", 0.43), limits=limits)).verdict == "pass"
    result = evaluate("junction drop", None, _facts(taken("output.upper.1.vbe", 0.55), limits=limits))
    assert result.verdict == "fail"
    assert result.limit == pytest.approx((0.381 - 0.15 * 0.105, 0.486 + 0.15 * 0.105)), "and what is rare"


def test_junction_overload_fails() -> None:
    over = Reading(
        point="driver.upper.vbe", value=None, unit="V", overload=True, standard_uncertainty=None, meter="m",
        function="dc volts",
    )  # fmt: skip
    assert evaluate("junction drop", None, _facts(over)).verdict == "fail"


@pytest.mark.parametrize(
    ("volts", "verdict"), [(0.003, "pass"), (-0.049, "pass"), (0.05, "undecided"), (0.051, "fail"), (-3.0, "fail")]
)
def test_offset(volts: float, verdict: str) -> None:
    result = evaluate("offset before load", None, _facts(taken("output", volts)))
    assert result.verdict == verdict
    assert result.value == pytest.approx(abs(volts))


def test_offset_of_a_handheld_that_reads_too_coarsely() -> None:
    reading = taken("output", 0.049, accuracy=HANDHELD, range_=60.0)
    assert evaluate("offset before load", None, _facts(reading)).verdict == "undecided"


def test_offset_from_a_rest_between_the_rails() -> None:
    design = tern(('rest = "0 V"', 'rest = "60 %"'))
    facts = _facts(taken("output", 3.0), design=design, positive_v=15.0, negative_v=-15.0)
    assert facts.rest_v == pytest.approx(3.0)
    assert evaluate("offset before load", None, facts).verdict == "pass"


@pytest.mark.parametrize(
    ("volts", "verdict"),
    [(0.0220, "pass"), (0.0240, "pass"), (0.0242, "undecided"), (0.0245, "fail"), (0.0195, "fail")],
)
def test_quiescent_drop(volts: float, verdict: str) -> None:
    result = evaluate("quiescent target", None, _facts(taken("emitter.upper.1", volts)))
    assert result.verdict == verdict
    assert isinstance(result.limit, tuple)
    assert list(result.limit) == pytest.approx([0.0198, 0.0242])


def test_quiescent_drop_of_both_resistors_counts_by_half() -> None:
    result = evaluate("quiescent target", None, _facts(taken("emitter.pair.1", 0.044)))
    assert result.value == pytest.approx(0.022)
    assert result.verdict == "pass"
    both = _facts(taken("emitter.pair.1", 0.080), taken("emitter.upper.1", 0.021), taken("emitter.lower.1", 0.022))
    assert evaluate("quiescent target", None, both).value == pytest.approx(0.0215)


def test_quiescent_current_knows_its_resistor_only_within_its_tolerance() -> None:
    design = tern(*AS_CURRENT)
    assert evaluate("quiescent target", None, _facts(taken("emitter.upper.1", 0.0220), design=design)).verdict == "pass"
    near = taken("emitter.upper.1", 0.0240)
    result = evaluate("quiescent target", None, _facts(near, design=design))
    assert (result.verdict, result.cause, result.unit) == ("undecided", "parts", "A")
    cold = {"emitter.upper.1": taken("ohm.emitter.upper.1", 0.2215, unit="ohm", function="ohms 4-wire", u=1e-4)}
    assert evaluate("quiescent target", None, _facts(near, design=design, cold=cold)).verdict == "pass"


def test_the_mean_of_two_readings_of_one_meter_keeps_its_gain_error() -> None:
    """Two readings with a meter of 5 %: their mean is no better than 5 %."""
    from benchkit.measure.accuracy import Accuracy, AccuracyRow

    poor = Accuracy("poor", {"dc volts": (AccuracyRow(0.1, 5.0),)})
    readings = [taken(f"emitter.{side}.1", 0.0231, accuracy=poor) for side in ("upper", "lower")]
    result = evaluate("quiescent target", None, _facts(*readings))
    assert (result.verdict, result.cause) == ("undecided", "meter")


def test_optimum_bias() -> None:
    """B. M. Oliver, 1971 (second-hand): 116.78 mA through 0.22 ohm at 25 degC, without ohmic parts of the devices."""
    bare = tern(
        ("RB = 1.5, RE = 0.012", "RB = 0, RE = 0"),
        ("RB = 1.3, RE = 0.014", "RB = 0, RE = 0"),
    )
    result = evaluate("optimum bias", None, _facts(taken("emitter.upper.1", 0.11678 * 0.22, u=0.0), design=bare))
    assert result.value == pytest.approx(1.0, abs=1e-4)
    assert result.verdict == "pass"
    for share, verdict in ((0.7, "fail"), (1.19, "undecided"), (1.5, "fail")):
        drop = taken("emitter.upper.1", share * 0.11678 * 0.22, u=0.0)
        assert evaluate("optimum bias", None, _facts(drop, design=bare)).verdict == verdict


def test_optimum_bias_with_the_ohmic_parts() -> None:
    """Oliver, 1971 (second-hand): re 0.1 ohm, rb 5 ohm, hFE 100 make it 69.44 mA."""
    lossy = tern(
        ("BF = 110, NF = 1.0, VAF = 120, IKF = 9.0, ISE = 1e-12, NE = 1.6, BR = 5, VAR = 15, RB = 1.5, RE = 0.012",
         "BF = 100, NF = 1.0, VAF = 120, IKF = 9.0, ISE = 1e-12, NE = 1.6, BR = 5, VAR = 15, RB = 5, RE = 0.1"),
        ("BF = 95, NF = 1.0, VAF = 90, IKF = 8.0, ISE = 1e-12, NE = 1.6, BR = 5, VAR = 12, RB = 1.3, RE = 0.014",
         "BF = 100, NF = 1.0, VAF = 90, IKF = 8.0, ISE = 1e-12, NE = 1.6, BR = 5, VAR = 12, RB = 5, RE = 0.1"),
    )  # fmt: skip
    result = evaluate("optimum bias", None, _facts(taken("emitter.upper.1", 0.06944 * 0.22, u=0.0), design=lossy))
    assert result.value == pytest.approx(1.0, abs=1e-4)


def test_hum() -> None:
    def hum(volts: float) -> Reading:
        return taken("output.ac", volts, function="ac volts", u=2e-5)

    assert evaluate("hum at rest", 0.001, _facts(hum(0.0003))).verdict == "pass"
    assert evaluate("hum at rest", 0.001, _facts(hum(0.0010))).verdict == "undecided"
    assert evaluate("hum at rest", 0.001, _facts(hum(0.0020))).verdict == "fail"


def test_every_junction_has_its_own_result() -> None:
    readings = [taken(f"{part}.vbe", 0.6) for part in ("driver.upper", "driver.lower", "spreader.transistor")]
    assert len(evaluate_each("junction drop", None, _facts(*readings))) == 3


def test_optimum_bias_of_a_feedback_pair_is_the_models() -> None:
    """The formula is for followers: 20 mV is near their optimum and far above that of a feedback pair."""
    from benchkit.stage.crossover import least_ripple_drop_v, setting_at
    from tests.stage.catalogue import few

    design = next(d for d in few().values() if d.output.topology == "complementary-feedback-pair")
    best_v = least_ripple_drop_v(design, setting_at(design, design.thermal.ambient_c))
    for share, verdict in ((1.0, "pass"), (1.5, "fail"), (0.5, "fail"), (0.02 / best_v, "fail")):
        result = evaluate("optimum bias", None, _facts(taken("emitter.upper.1", share * best_v, u=0.0), design=design))
        assert result.verdict == verdict
        assert result.value == pytest.approx(share, rel=1e-6)
        assert "ripples least" in result.why
