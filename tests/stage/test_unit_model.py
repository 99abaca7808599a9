"""Readings under several conditions side by side: layouts, shared coordinates, places between two conditions."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from benchkit.stage.conditions import Condition, Unpowered
from benchkit.stage.faults import HEALTHY
from benchkit.stage.forcing import Held
from benchkit.stage.observations import Conditions
from benchkit.stage.unit_model import DRIFT_SHARE, POSITION, Joint, UnitModel, answers, layout_of
from tests.stage.designs import breadboard, tern
from tests.stage.unit_readings import fault_of

COLD = Condition(positive_v=4.0, negative_v=-4.0, limit_a=0.1, trimmer="least", ambient_c=25.0)
WARM = replace(COLD, when="warm")
ANYWHERE = replace(COLD, trimmer="unknown")
TARGET = Condition(positive_v=10.0, negative_v=-10.0, limit_a=0.5, trimmer="target")


def ohm(point: str, trimmer: str = "least") -> Conditions:
    assert trimmer in ("least", "unknown", "target")
    return (Unpowered(point=point, trimmer="least" if trimmer == "least" else "unknown"),)


READINGS: list[tuple[Conditions, str]] = [
    ((COLD,), "spread"),
    (ohm("ohm.rails"), "ohm.rails"),
    ((COLD, WARM), "emitter.upper.1"),
    ((COLD,), "output"),
    (ohm("ohm.spreader.lower"), "ohm.spreader.lower"),
]


@pytest.fixture(scope="module")
def model() -> UnitModel:
    return UnitModel(breadboard(), layout_of(READINGS))


FAULTS = tuple(fault_of(name, breadboard()) for name in ("healthy", "spreader.lower: short", "emitter.upper.1: open"))


@pytest.fixture(scope="module")
def at_middle(model: UnitModel) -> Joint:
    return model.at(np.zeros((len(model.coordinates), len(FAULTS))), FAULTS)


def test_a_layout_keeps_what_was_read_and_groups_it() -> None:
    layout = layout_of([*READINGS, READINGS[0]])
    assert layout == (
        ((COLD,), ("spread", "output")),
        (ohm("ohm.rails"), ("ohm.rails", "ohm.spreader.lower")),
        ((COLD, WARM), ("emitter.upper.1",)),
    )
    assert layout_of([]) == ()


def test_every_reading_names_its_own_conditions(model: UnitModel) -> None:
    """Unpowered points share one circuit; each is still under its own name."""
    assert set(model.readings) == set(READINGS)
    assert len(model.readings) == len(READINGS)


def test_unpowered_points_at_other_trimmer_positions_stand_apart() -> None:
    layout = layout_of([(ohm("ohm.rails"), "ohm.rails"), (ohm("ohm.spreader.lower", "unknown"), "ohm.spreader.lower")])
    assert len(layout) == 2


def test_the_columns_are_those_of_each_condition_alone(model: UnitModel, at_middle: Joint) -> None:
    assert at_middle.good.all()
    for column, (conditions, point) in enumerate(model.readings):
        alone = UnitModel(breadboard(), layout_of([(conditions, point)]))
        found = alone.at(np.zeros((len(alone.coordinates), len(FAULTS))), FAULTS)
        np.testing.assert_allclose(found.f[:, 0], at_middle.f[:, column], rtol=1e-6, atol=1e-8, err_msg=point)
        shared = [model.coordinates.index[name] for name in ("spreader.lower", "emitter.upper.1", "output.upper.1.IS")]
        own = [alone.coordinates.index[name] for name in ("spreader.lower", "emitter.upper.1", "output.upper.1.IS")]
        np.testing.assert_allclose(
            found.slope[:, 0][:, own], at_middle.slope[:, column][:, shared], rtol=1e-3, atol=1e-4, err_msg=point
        )


def test_between_two_conditions(model: UnitModel, at_middle: Joint) -> None:
    """From the first condition's reading to the last one's, with the place a coordinate of its own."""
    column = model.readings.index(READINGS[2])
    name = next(name for name in model.coordinates.names if name.startswith("place"))
    number = model.coordinates.index[name]
    ends = []
    for condition in (COLD, WARM):
        alone = UnitModel(breadboard(), layout_of([((condition,), "emitter.upper.1")]))
        ends.append(alone.at(np.zeros((len(alone.coordinates), len(FAULTS))), FAULTS).f[:, 0])
    assert ends[0][0] != pytest.approx(ends[1][0], rel=1e-3)
    np.testing.assert_allclose(at_middle.f[:, column], 0.5 * (ends[0] + ends[1]), rtol=1e-5, atol=1e-9)
    np.testing.assert_allclose(at_middle.doubt[:, column], DRIFT_SHARE * np.abs(ends[1] - ends[0]), rtol=1e-3)
    others = [k for k in range(len(model.readings)) if k != column]
    assert (at_middle.doubt[:, others] == 0.0).all()
    assert (at_middle.slope[:, others, number] == 0.0).all()
    found = []
    for z in (-6.0, -0.02, 0.02, 6.0):
        moved = np.zeros((len(model.coordinates), len(FAULTS)))
        moved[number] = z
        found.append(model.at(moved, FAULTS, at_middle).f[:, column])
    np.testing.assert_allclose(found[0], ends[0], rtol=1e-5, atol=1e-9)
    np.testing.assert_allclose(found[3], ends[1], rtol=1e-5, atol=1e-9)
    np.testing.assert_allclose(at_middle.slope[:, column, number], (found[2] - found[1]) / 0.04, rtol=1e-3, atol=1e-9)


def test_the_same_condition_at_both_ends_is_one_condition() -> None:
    model = UnitModel(breadboard(), layout_of([((COLD, COLD), "spread")]))
    assert not any(name.startswith("place") for name in model.coordinates.names)


def test_a_trim_somewhere_in_its_tolerance_is_one_condition_with_its_own_travel() -> None:
    low, high = replace(TARGET, target_share=0.9), replace(TARGET, target_share=1.1)
    model = UnitModel(
        breadboard(), layout_of([((low, TARGET, high), "spread"), ((replace(TARGET, when="warm"),), "spread")])
    )
    names = model.coordinates.names
    assert sum(name.startswith("travel") for name in names) == 2
    assert not any(name.startswith("place") for name in names)


def test_an_unknown_position_is_one_coordinate_everywhere() -> None:
    readings: list[tuple[Conditions, str]] = [
        ((ANYWHERE,), "spread"), (ohm("ohm.spreader.lower", "unknown"), "ohm.spreader.lower"),
    ]  # fmt: skip
    model = UnitModel(breadboard(), layout_of(readings))
    assert model.coordinates.names.count(POSITION) == 1
    found = model.at(np.zeros((len(model.coordinates), 1)), [HEALTHY])
    slopes = found.slope[0, :, model.coordinates.index[POSITION]]
    assert (np.abs(slopes) > 1e-4).all()
    stated = UnitModel(breadboard(), layout_of(READINGS))
    at = stated.at(np.zeros((len(stated.coordinates), 1)), [HEALTHY])
    assert (at.slope[0, :, stated.coordinates.index[POSITION]] == 0.0).all()


def test_each_condition_has_its_own_setting_of_the_rails(model: UnitModel) -> None:
    assert len([name for name in model.coordinates.names if name.startswith("rail+")]) == 2


def test_only_unpowered_readings_have_an_end(model: UnitModel) -> None:
    for (conditions, _), most in zip(model.readings, model.most, strict=True):
        assert np.isfinite(most) == isinstance(conditions[0], Unpowered)


def test_taken_units_are_those_units(model: UnitModel, at_middle: Joint) -> None:
    index = np.array([2, 0])
    few = at_middle.take(index)
    np.testing.assert_array_equal(few.f, at_middle.f[index])
    z = np.zeros((len(model.coordinates), 2))
    again = model.at(z, [FAULTS[k] for k in index], few)
    np.testing.assert_allclose(again.f, at_middle.f[index], rtol=1e-7, atol=1e-9)
    assert again.good.all()
    assert max(int(solution.iterations.max()) for solution in again.solutions) <= 3


def test_what_the_model_answers() -> None:
    assert answers(tern(), COLD, "spread")
    assert answers(tern(), COLD, "heatsink")
    assert not answers(tern(), COLD, "rail+.drop")
    assert answers(tern(), replace(COLD, fuse_ohm=10.0), "rail+.drop")
    assert not answers(tern(), COLD, "output.ac")
    assert answers(tern(), Unpowered(point="ohm.rails"), "ohm.rails")


def test_held_rails_belong_to_their_entry_of_the_layout() -> None:
    """Units stand at rails of their own where a condition holds them, and at the settings under another one."""
    held = Held(**vars(COLD), held=(True, False))
    one = UnitModel(breadboard(), layout_of([((COLD,), "rail+"), ((held,), "rail+"), ((held,), "rail-")]))
    rails_v = np.full((2, 2, 2), np.nan)
    rails_v[:, 1, 0] = (1.5, 2.5)
    z = np.zeros((len(one.coordinates), 2))
    found = one.at(z, [HEALTHY, HEALTHY], rails_v=rails_v)
    assert found.good.all()
    np.testing.assert_allclose(found.f, [[4.0, 1.5, -4.0], [4.0, 2.5, -4.0]], rtol=1e-3)
    # entries that were added to the layout have no held rails
    added = UnitModel(breadboard(), layout_of([((held,), "rail+"), ((COLD,), "rail+")]))
    found = added.at(z, [HEALTHY, HEALTHY], rails_v=rails_v[:, 1:])
    np.testing.assert_allclose(found.f, [[1.5, 4.0], [2.5, 4.0]], rtol=1e-3)
