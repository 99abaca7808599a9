from __future__ import annotations

import numpy as np
import pytest

from benchkit.errors import EntryError
from benchkit.stage.draws import SEED_USES, draw, nominal, seeds, take
from tests.stage.designs import tern


def test_seeds_are_children_in_a_fixed_order() -> None:
    assert SEED_USES == ("limits", "unit", "noise", "stand-in")
    first = [seeds(use, 7).random() for use in SEED_USES]
    assert first == [seeds(use, 7).random() for use in SEED_USES]
    assert len(set(first)) == 4
    child = np.random.SeedSequence(7).spawn(4)[1]
    assert seeds("unit", 7).random() == np.random.default_rng(child).random()
    assert seeds("limits", 8).random() != first[0]


def test_a_negative_seed_is_refused() -> None:
    with pytest.raises(EntryError, match="zero or more"):
        seeds("limits", -1)


def test_nominal_is_the_marked_value() -> None:
    unit = nominal(tern())
    assert all(value.shape == () for value in unit.values())
    assert unit["emitter.upper.1"] == 0.22
    assert unit["output.offset"] == 0.0
    assert unit["output.lower.1.polarity"] == -1.0
    assert unit["output.upper.1.ce"] == 1e12


def test_marked_tolerances_are_uniform() -> None:
    """JCGM 100:2008, 4.3.7: standard deviation = half-width / sqrt(3)."""
    drawn = draw(tern(), 20000, seeds("unit", 1))
    value = drawn["driver.resistor"]
    assert value.min() > 220 * 0.95
    assert value.max() < 220 * 1.05
    assert value.std() == pytest.approx(220 * 0.05 / np.sqrt(3), rel=0.02)
    assert np.ptp(value) > 220 * 0.0999
    offset = drawn["output.offset"]
    assert np.abs(offset).max() <= 0.02
    assert offset.std() == pytest.approx(0.02 / np.sqrt(3), rel=0.02)


def test_spread_is_log_normal_with_95_percent_inside() -> None:
    drawn = draw(tern(), 40000, seeds("unit", 2))["driver.upper.BF"]
    inside = np.mean((drawn > 140 / 1.5) & (drawn < 140 * 1.5))
    assert inside == pytest.approx(0.95, abs=0.005)
    assert np.median(drawn) == pytest.approx(140, rel=0.01)


def test_unmarked_is_exact_and_devices_are_independent() -> None:
    drawn = draw(tern(), 5000, seeds("unit", 3))
    assert drawn["feed.lower.max_a"].shape == ()
    assert drawn["output.upper.1.RB"].shape == ()
    correlation = np.corrcoef(drawn["output.upper.1.BF"], drawn["output.lower.1.BF"])[0, 1]
    assert abs(correlation) < 0.05


def test_same_seed_same_units_and_fewer_parts_of_it() -> None:
    one, two = (draw(tern(), 10, seeds("limits", 5)) for _ in range(2))
    assert all(np.array_equal(one[key], two[key]) for key in one)
    few = take(one, np.array([2, 4]))
    assert few["emitter.upper.1"].tolist() == one["emitter.upper.1"][[2, 4]].tolist()
    assert few["output.upper.1.RB"].shape == ()
