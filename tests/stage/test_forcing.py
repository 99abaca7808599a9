"""Supplies in their current limit: rails taken at their readings."""

from __future__ import annotations

import math
from dataclasses import replace

import pytest

from benchkit.stage.conditions import Condition, Unpowered
from benchkit.stage.forcing import LIMIT_SHARE, Held, held_at_readings
from benchkit.stage.observations import Conditions
from benchkit.stage.suspects import suspect, suspect_many
from tests.stage.designs import tern
from tests.stage.unit_readings import POINTS, fault_of, first_group, observed, powered

LIMITED = Condition(positive_v=15.0, negative_v=-15.0, limit_a=0.05, trimmer="least", ambient_c=25.0)


def test_rails_at_their_settings_change_nothing() -> None:
    some = [observed(LIMITED, "rail+", 14.93), observed(LIMITED, "rail-", -15.04), observed(LIMITED, "spread", 2.0)]
    assert held_at_readings(some) == (some, {})
    assert held_at_readings([]) == ([], {})


def test_without_a_limit_no_supply_limits() -> None:
    some = [observed(replace(LIMITED, limit_a=None), "rail+", 3.0)]
    assert held_at_readings(some) == (some, {})


def test_what_is_no_number_says_nothing() -> None:
    some = [observed(LIMITED, "rail-", -math.inf), observed(LIMITED, "rail+", math.inf)]
    assert held_at_readings(some) == (some, {})


def test_one_rail_that_nobody_read_may_limit_too() -> None:
    some = [observed(LIMITED, "rail+", 3.0)]
    assert held_at_readings(some) == (some, {})
    single = [observed(replace(LIMITED, negative_v=0.0), "rail+", 3.0)]
    assert held_at_readings(single)[1]


@pytest.mark.parametrize(("rail", "read_v", "held_v"), [("rail+", 3.0, (3.0, -15.0)), ("rail-", -4.0, (15.0, -4.0))])
def test_a_fallen_rail_is_held_at_its_reading(rail: str, read_v: float, held_v: tuple[float, float]) -> None:
    standing = ("rail-", -15.0) if rail == "rail+" else ("rail+", 15.0)
    other = observed(replace(LIMITED, trimmer="most"), "spread", 2.0)
    unpowered = observed(Unpowered(point="ohm.rails"), "ohm.rails", 3e3)
    some = [
        observed(LIMITED, "spread", 1.0),
        observed(LIMITED, rail, read_v),
        other,
        unpowered,
        observed(LIMITED, *standing),
    ]
    result, original = held_at_readings(some)
    changed = result[0].conditions[0]
    assert isinstance(changed, Held)
    assert changed.held_v == held_v
    assert (changed.positive_v, changed.negative_v, changed.trimmer) == (15.0, -15.0, "least")
    assert changed.limit_a is not None
    assert changed.limit_a > 1.0
    assert [one.point for one in result] == ["spread", rail, "spread", "ohm.rails", standing[0], f"{rail}.current"]
    assert [one.value for one in result[:5]] == [one.value for one in some]
    assert result[2:4] == [other, unpowered]
    assert result[5].value == 0.05
    assert result[5].standard_uncertainty == pytest.approx(LIMIT_SHARE * 0.05)
    assert original == {(changed,): (LIMITED,)}


def test_a_current_that_was_read_is_not_made_up() -> None:
    some = [
        observed(LIMITED, "rail+", 3.0),
        observed(LIMITED, "rail+.current", 0.0493),
        observed(LIMITED, "rail-", -15.0),
    ]
    result, original = held_at_readings(some)
    assert original
    assert [(one.point, one.value) for one in result] == [(one.point, one.value) for one in some]
    assert result[0].conditions == result[1].conditions


def test_a_rail_at_nothing_is_still_a_rail() -> None:
    result, _ = held_at_readings([observed(LIMITED, "rail+", -0.001), observed(LIMITED, "rail-", -15.0)])
    held = result[0].conditions[0]
    assert isinstance(held, Held)
    assert 0.0 < held.held_v[0] < 0.01


def test_every_end_of_the_conditions_is_held() -> None:
    ends: Conditions = (LIMITED, replace(LIMITED, when="warm"))
    some = [
        replace(observed(LIMITED, point, volts), conditions=ends) for point, volts in (("rail+", 3.0), ("rail-", -15.0))
    ]
    result, original = held_at_readings(some)
    assert all(isinstance(one, Held) and one.held_v == (3.0, -15.0) for one in result[0].conditions)
    assert [getattr(one, "when", "") for one in result[0].conditions] == ["cold", "warm"]
    assert list(original.values()) == [ends]


PLANTED = ("output.upper.1: collector-emitter short", "driver.lower: collector-emitter short")


def test_shorts_behind_a_limit_are_named_and_told_of_in_the_stated_conditions() -> None:
    faults = [fault_of(name, tern()) for name in PLANTED]
    sets = powered(tern(), LIMITED, faults, POINTS, seed=3)
    for some in sets:
        fallen = {one.point: one.value for one in some if one.point in ("rail+", "rail-")}
        assert min(fallen["rail+"], -fallen["rail-"]) < 0.9 * 15.0
    candidates: list[tuple[Conditions, str]] = [((LIMITED,), "driver.upper.vbe"), ((LIMITED,), "output.upper.1.vbe")]
    for said, fault in zip(suspect_many(tern(), sets, candidates=candidates), faults, strict=True):
        assert fault in first_group(said), [(str(one.fault), one.probability) for one in said.suspects[:4]]
        assert fault not in said.unseen
        assert said.suspects[0].evidence
        for one in said.suspects[0].evidence:
            assert one.conditions == (LIMITED,)
            # a healthy unit is told of under what was set: its rails stand
            if one.point in ("rail+", "rail-"):
                assert abs(one.healthy) == pytest.approx(15.0, rel=0.01)
        assert {probe.conditions for probe in said.probe_next} <= {(LIMITED,)}


def test_without_a_reading_of_its_rail_a_limited_supply_is_solved_as_such() -> None:
    fault = fault_of(PLANTED[0], tern())
    points = [point for point in POINTS if not point.startswith("rail")]
    some = powered(tern(), LIMITED, [fault], points, seed=3)[0]
    said = suspect(tern(), some, candidates=[((LIMITED,), "driver.upper.vbe")])
    assert fault in {one.fault for one in said.suspects[:3]} | first_group(said)
