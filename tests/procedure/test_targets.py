from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from benchkit.errors import EntryError, ModelError
from benchkit.procedure.targets import (
    LEAST_PRESET,
    MOST_PRESET,
    USUAL_DRIFT,
    drift_per_s,
    preset_share,
    target_limits,
    tells_target,
)
from benchkit.stage.conditions import Condition
from benchkit.stage.design import target_drop_v
from benchkit.stage.points import find_point
from benchkit.stage.trimmer import at_target, cold_to_warm, full_rails
from benchkit.stage.warm_up import warm_up
from tests.stage.catalogue import few
from tests.stage.designs import TERN, breadboard, changed, tern

FULL = Condition(positive_v=35.0, negative_v=-35.0, trimmer="target", when="warm")


@pytest.mark.parametrize(
    ("name", "tells"),
    [
        ("emitter.upper.1", True),
        ("emitter.lower.1", True),
        ("emitter.pair.1", True),
        ("rail+.current", True),
        ("rail-.drop", True),
        ("rail+", False),
        ("output", False),
        ("spread", False),
        ("ohm.emitter.upper.1", False),
        ("output.ac", False),
    ],
)
def test_where_a_target_is_known(name: str, tells: bool) -> None:
    assert tells_target(find_point(tern(), name)) == tells


@pytest.mark.parametrize(
    ("name", "times"), [("emitter.upper.1", 1.0), ("emitter.lower.1", 1.0), ("emitter.pair.1", 2.0)]
)
def test_a_drop_is_the_designs_own(name: str, times: float) -> None:
    found = target_limits(tern(), find_point(tern(), name), FULL, share=0.5)
    drop = 0.5 * times * target_drop_v(tern())
    assert (found.low, found.nominal, found.high) == pytest.approx((0.9 * drop, drop, 1.1 * drop))
    assert "50%" in found.source


def test_a_rails_current_is_that_of_the_nominal_unit_at_its_target() -> None:
    unit, _ = at_target(tern())
    found = target_limits(tern(), find_point(tern(), "rail+.current"), FULL, share=1.0)
    assert found.nominal == pytest.approx(float(unit.points["rail+.current"][0]), rel=1e-6)
    assert found.low is not None
    assert found.high is not None
    assert found.nominal is not None
    # A tenth of the bias current more or less, beside what doesn't move with it.
    bias = target_drop_v(tern()) / tern().output.emitter_resistor.value
    assert found.high - found.nominal == pytest.approx(0.1 * bias, rel=0.05)
    assert found.nominal - found.low == pytest.approx(0.1 * bias, rel=0.05)


def test_a_drop_in_the_fuses_place_is_ohms_law() -> None:
    point, current = find_point(tern(), "rail+.drop"), find_point(tern(), "rail+.current")
    one = target_limits(tern(), point, replace(FULL, fuse_ohm=1.0), share=1.0)
    amps = target_limits(tern(), current, replace(FULL, fuse_ohm=1.0), share=1.0)
    assert one.nominal == pytest.approx(amps.nominal, rel=1e-6)
    assert one.unit == "V"
    with pytest.raises(ModelError, match="nobody has named"):
        target_limits(tern(), point, FULL, share=1.0)


def test_without_a_trimmer_a_rails_current_tells_of_no_target() -> None:
    design = few()["feedback resistor resistor none 1"]
    with pytest.raises(ModelError, match="no trimmer"):
        target_limits(design, find_point(design, "rail+.current"), FULL, share=1.0)


def test_the_cold_pre_set_is_what_the_warm_up_passes_a_minute_after_power_on() -> None:
    share = preset_share(tern())
    _, travel = at_target(tern())
    curve = warm_up(tern(), full_rails(tern(), trimmer=travel, when="cold"), travel=travel)
    after_a_minute = float(np.interp(60.0, curve.times_s, curve.drop_v[0]))
    assert share * target_drop_v(tern()) == pytest.approx(after_a_minute, rel=0.02)
    assert LEAST_PRESET <= share <= MOST_PRESET
    assert cold_to_warm(tern()).cold_v.nominal < 0.7 * after_a_minute, "its drivers have warmed themselves by then"
    assert preset_share(breadboard()) == pytest.approx(0.98, abs=0.01), "this one hardly moves"
    assert preset_share(few()["feedback resistor resistor none 1"]) == 1.0, "there is nothing to set"
    cold = changed(TERN, ('when = "warm"', 'when = "cold"'))
    assert preset_share(cold) == 1.0, "its target is a cold one"


@pytest.mark.parametrize(
    ("text", "per_s"),
    [(None, USUAL_DRIFT * 0.03 / 60.0), ("2 %/min", 1e-5), ("0.3 mV/min", 5e-6), (" 0.3 mV /min", 5e-6)],
)
def test_how_still_is_still(text: str | None, per_s: float) -> None:
    assert drift_per_s(text, find_point(tern(), "emitter.upper.1"), 0.030) == pytest.approx(per_s)


def test_a_drift_of_another_kind_is_refused() -> None:
    with pytest.raises(EntryError):
        drift_per_s("3 mA/min", find_point(tern(), "emitter.upper.1"), 0.030)
