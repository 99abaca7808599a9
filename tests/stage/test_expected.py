from __future__ import annotations

import json
import math

import numpy as np
import pytest

from benchkit.errors import EntryError, ModelError
from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design
from benchkit.stage.draws import draw, nominal, seeds
from benchkit.stage.expected import (
    DEFAULT_UNITS,
    expected,
    expected_json,
    expected_unpowered,
    share_inside,
    solve_units,
)
from benchkit.stage.latent import RAIL_SHARE
from benchkit.stage.points import points_of
from tests.stage.catalogue import few
from tests.stage.designs import TERN, breadboard, changed, tern

LEAST = Condition(positive_v=15.0, negative_v=-15.0, limit_a=0.05, trimmer="least")
TARGET = Condition(positive_v=35.0, negative_v=-35.0, trimmer="target", when="warm")


def test_every_modelled_powered_point_is_there() -> None:
    found = expected(tern(), LEAST, units=200)
    wanted = [p.name for p in points_of(tern()) if p.powered and p.modelled and not p.name.endswith(".drop")]
    assert [limits.point for limits in found.points] == wanted
    assert "rail+.drop" in expected(tern(), Condition(positive_v=15, negative_v=-15, fuse_ohm=10.0), units=200)


def test_nominal_lies_within_its_limits() -> None:
    for condition in (LEAST, TARGET):
        for limits in expected(tern(), condition, units=500).points:
            assert limits.nominal is not None
            assert limits.low - 1e-9 <= limits.nominal <= limits.high + 1e-9, limits


def test_same_seed_same_limits_another_seed_others() -> None:
    one, two, three = (expected(breadboard(), LEAST, units=200, seed=seed) for seed in (3, 3, 4))
    assert one.points == two.points
    assert one.points != three.points
    assert [p.nominal for p in one.points] == [p.nominal for p in three.points]


@pytest.mark.parametrize("design", [tern(), breadboard()], ids=lambda d: d.name)
def test_fresh_healthy_units_lie_inside(design: Design) -> None:
    """The limits' own units and fresh ones come from different streams; about 0.27 % of fresh ones lie outside."""
    condition = Condition(positive_v=10.0, negative_v=-10.0, trimmer="unknown")
    found = expected(design, condition, units=3000, seed=11)
    fresh = solve_units(design, draw(design, 3000, seeds("unit", 11)), condition)
    for limits in found.points:
        if limits.high > limits.low:
            assert 0.99 < share_inside(limits, fresh.points[limits.point]) < 1.0, limits.point


def test_an_output_that_rests_at_half_the_rail_may_follow_the_supplys_error() -> None:
    design = few()["double resistor servo upper tied 1 stopper one supply"]
    condition = Condition(positive_v=60.0, negative_v=0.0, trimmer="unknown")
    found = expected(design, condition, units=3000, seed=11)
    rng = np.random.default_rng(8)
    rails_v = 60.0 * (1.0 + RAIL_SHARE * rng.standard_normal(3000)), np.zeros(3000)
    fresh = solve_units(design, draw(design, 3000, seeds("unit", 11)), condition, rails_v=rails_v)
    for point in ("output", "spread", "rail+.current"):
        assert 0.99 < share_inside(found[point], fresh.points[point]) < 1.0, point
    assert found["rail+"].held
    assert found["output"].high - found["output"].low < 0.02 * 60.0


def test_a_trimmed_drop_is_held_by_its_resistor() -> None:
    found = expected(tern(), TARGET, units=500)
    pair, upper = found["emitter.pair.1"], found["emitter.upper.1"]
    assert pair.low == pytest.approx(0.044, rel=1e-6)
    assert pair.high == pytest.approx(0.044, rel=1e-6)
    assert 0.0216 < upper.low < 0.022 < upper.high < 0.0224
    assert found.out_of_reach == 0


def test_what_the_condition_holds_is_no_prediction() -> None:
    cold = expected(tern(), LEAST, units=200)
    assert {limits.point for limits in cold.points if limits.held} == {"rail+", "rail-", "heatsink"}
    warm = expected(tern(), TARGET, units=200)
    assert {limits.point for limits in warm.points if limits.held} == {"rail+", "rail-", "emitter.pair.1"}
    collapsed = expected(tern(), Condition(positive_v=35, negative_v=-35, limit_a=0.018, trimmer="least"), units=200)
    assert not collapsed["rail+"].held
    assert collapsed["rail+"].high - collapsed["rail+"].low > 1.0


def test_units_out_of_reach_are_left_out_and_counted() -> None:
    design = changed(TERN, ('value = "500 ohm 10 %"', 'value = "40 ohm 10 %"'), ('"560 ohm 1 %"', '"790 ohm 1 %"'))
    found = expected(design, TARGET, units=400)
    assert 0 < found.out_of_reach < 200
    assert found["emitter.pair.1"].high == pytest.approx(0.044, rel=1e-6)


def test_target_nobody_reaches_is_no_prediction() -> None:
    design = changed(TERN, ('emitter_drop = "22 mV"', 'emitter_drop = "900 mV"'))
    with pytest.raises(ModelError, match="reaches the target in 0 of 100"):
        expected(design, Condition(positive_v=35.0, negative_v=-35.0, trimmer="target"), units=100)


def test_runaway_is_no_prediction() -> None:
    design = changed(TERN, ("spreader_tracking = 0.7", "spreader_tracking = 0.0"), ('heatsink = "1.2', 'heatsink = "8'))
    with pytest.raises(ModelError, match="no warm state"):
        expected(design, Condition(positive_v=35.0, negative_v=-35.0, trimmer=0.6, when="warm"), units=100)


def test_some_points_only() -> None:
    found = expected(tern(), LEAST, units=100, points=["spread", "output"])
    assert {limits.point for limits in found.points} == {"spread", "output"}
    with pytest.raises(EntryError, match="no test point"):
        expected(tern(), LEAST, units=100, points=["sprad"])
    with pytest.raises(EntryError, match="units"):
        expected(tern(), LEAST, units=10)
    assert "spread" in found
    assert "rail+" not in found
    with pytest.raises(KeyError):
        _ = found["rail+"]


def test_json_object_is_the_fixed_one() -> None:
    made = expected_json(tern(), LEAST, units=100, seed=5)
    assert list(made)[:6] == ["format", "design", "conditions", "units", "solved", "out_of_reach"]
    assert made["format"] == 1
    assert (made["units"], made["solved"], made["seed"]) == (100, 100, 5)
    points = made["points"]
    assert isinstance(points, list)
    assert all(list(point) == ["point", "unit", "nominal", "low", "high"] for point in points)
    assert made["conditions"]["trimmer"] == "least"  # type: ignore[index]
    again = json.loads(json.dumps(made, allow_nan=False))
    assert again == made


def test_unpowered_limits() -> None:
    found = expected_unpowered(tern(), trimmer="least", units=300)
    assert [limits.point for limits in found.points] == [p.name for p in points_of(tern()) if not p.powered]
    arm = found["ohm.spreader.upper"]
    assert 1979.0 < arm.low < 1982.0 < 2018.0 < arm.high < 2021.0
    resistor = found["ohm.emitter.upper.1"]
    assert 0.2176 < resistor.low < 0.2182
    insulation = found["ohm.heatsink.output.upper.1"]
    assert insulation.nominal is None
    assert insulation.low == 1e6
    assert insulation.high == math.inf
    rail = expected_unpowered(breadboard(), "ohm.rail+", units=100)["ohm.rail+"]
    assert rail.nominal is None
    assert rail.low == pytest.approx(1.2e6)


def test_default_number_of_units() -> None:
    found = expected(breadboard(), Condition(positive_v=10.0, negative_v=-10.0, trimmer="target"))
    assert found.units == found.solved == DEFAULT_UNITS
    assert found.solve_seconds < 20.0


def test_limits_come_from_the_limits_stream() -> None:
    """The nominal unit's own readings and the first drawn unit's are what the streams say."""
    found = expected(breadboard(), LEAST, units=60, seed=9)
    drawn = solve_units(breadboard(), draw(breadboard(), 60, seeds("limits", 9)), LEAST)
    assert found["spread"].low <= np.min(drawn.points["spread"])
    assert found["spread"].high >= np.max(drawn.points["spread"])
    unit = solve_units(breadboard(), nominal(breadboard()), LEAST)
    assert found["spread"].nominal == pytest.approx(float(unit.points["spread"][0]), abs=1e-9)
