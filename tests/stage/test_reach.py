from __future__ import annotations

import pytest

from benchkit.errors import ModelError
from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design, parse_design
from benchkit.stage.draws import nominal
from benchkit.stage.operate import solve_units
from benchkit.stage.reach import (
    check_target,
    least_regulating_rails,
    open_wiper_lowers_bias,
    require_target,
)
from benchkit.stage.trimmer import authority
from tests.stage.designs import TERN, breadboard, changed, tern


@pytest.mark.parametrize("design", [tern(), breadboard()], ids=lambda d: d.name)
def test_demonstrations_reach_their_target(design: Design) -> None:
    assert check_target(design) == []
    require_target(design)
    found = authority(design)
    assert found.share >= 0.99
    assert 0.2 < found.travel.nominal < 0.8


def test_target_out_of_reach() -> None:
    design = changed(TERN, ('emitter_drop = "22 mV"', 'emitter_drop = "900 mV"'))
    (finding, *_) = check_target(design)
    assert finding.fatal
    assert finding.key == "target.emitter_drop"
    assert "900.0 mV is out of the trimmer's reach" in finding.came
    with pytest.raises(ModelError, match=r"target\.emitter_drop"):
        require_target(design)


def test_too_little_authority_is_no_reason_to_stop() -> None:
    design = changed(TERN, ('value = "500 ohm 10 %"', 'value = "50 ohm 10 %"'), ('"560 ohm 1 %"', '"787 ohm 1 %"'))
    (finding,) = check_target(design)
    assert not finding.fatal
    assert finding.key == "spreader.trimmer"
    require_target(design)


def test_unsafe_wiring_is_found() -> None:
    design = changed(
        TERN,
        ('arm = "lower"', 'arm = "upper"'),
        ('upper = "2.0 kohm 1 %"', 'upper = "1.8 kohm 1 %"'),
        ('lower = "560 ohm 1 %"', 'lower = "820 ohm 1 %"'),
        ('tolerance = "10 %"', 'tolerance = "10 %"'),
    )
    assert not open_wiper_lowers_bias(design)
    (finding,) = [f for f in check_target(design) if "wiper" in f.came]
    assert finding.key == "spreader.trimmer.wiring"
    assert "the drop goes from 22.0 mV to" in finding.came
    assert "only the supply's limit" in finding.came
    assert not finding.fatal
    assert open_wiper_lowers_bias(tern())
    assert open_wiper_lowers_bias(breadboard())


def test_without_a_trimmer_the_bias_must_be_right_by_itself() -> None:
    text = TERN.read_text(encoding="utf-8")
    text = text[: text.index("[spreader.trimmer]")] + text[text.index("[output]") :]
    (finding,) = check_target(parse_design(text))
    assert finding.fatal
    assert "no trimmer" in finding.expected
    with pytest.raises(ModelError, match="no trimmer"):
        authority(parse_design(text))


def test_least_regulating_rails() -> None:
    assert least_regulating_rails(tern()) == (8.0, -8.0)
    positive_v, negative_v = least_regulating_rails(breadboard())
    assert 1.0 < positive_v < 3.0
    assert negative_v == -positive_v


def test_without_works_from_the_feeds_decide() -> None:
    positive_v, _ = least_regulating_rails(changed(TERN, ('works_from = "8 V"', "")))
    assert 2.0 <= positive_v <= 4.0
    solved = solve_units(
        tern(),
        nominal(tern()),
        Condition(positive_v=positive_v, negative_v=-positive_v, trimmer="least"),
        loading="none",
    )
    assert solved.converged.all()


def test_a_stage_that_never_regulates() -> None:
    with pytest.raises(ModelError, match="doesn't regulate"):
        least_regulating_rails(
            changed(
                TERN,
                ('positive = "35 V"', 'positive = "1.2 V"'),
                ('negative = "-35 V"', 'negative = "-1.2 V"'),
                ('works_from = "8 V"', ""),
            )
        )
