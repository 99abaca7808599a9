"""Supplies in their current limit: rails taken at their readings."""

from __future__ import annotations

import math
from dataclasses import replace

import pytest

from benchkit.stage.conditions import Condition, Unpowered
from benchkit.stage.forcing import LIMIT_SHARE, Held, held_at_readings
from benchkit.stage.observations import Conditions, Observation
from benchkit.stage.suspects import Suspicion, suspect, suspect_many
from tests.stage.designs import tern
from tests.stage.unit_readings import POINTS, fault_of, first_group, observed, powered

LIMITED = Condition(positive_v=15.0, negative_v=-15.0, limit_a=0.05, trimmer="least", ambient_c=25.0)


def test_rails_at_their_settings_change_nothing() -> None:
    some = [observed(LIMITED, "rail+", 14.93), observed(LIMITED, "rail-", -15.04), observed(LIMITED, "spread", 2.0)]
    assert held_at_readings(some) == (some, {}, {})
    assert held_at_readings([]) == ([], {}, {})


def test_without_a_limit_no_supply_limits() -> None:
    some = [observed(replace(LIMITED, limit_a=None), "rail+", 3.0)]
    assert held_at_readings(some) == (some, {}, {})


def test_what_is_no_number_says_nothing() -> None:
    some = [observed(LIMITED, "rail-", -math.inf), observed(LIMITED, "rail+", math.inf)]
    assert held_at_readings(some) == (some, {}, {})


def test_one_rail_that_nobody_read_may_limit_too() -> None:
    some = [observed(LIMITED, "rail+", 3.0)]
    assert held_at_readings(some) == (some, {}, {})
    single = [observed(replace(LIMITED, negative_v=0.0), "rail+", 3.0)]
    assert held_at_readings(single).original


@pytest.mark.parametrize(
    ("rail", "read_v", "held_v"), [("rail+", 3.0, (3.0, math.nan)), ("rail-", -4.0, (math.nan, -4.0))]
)
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
    result, original, rails_v = held_at_readings(some)
    changed = result[0].conditions[0]
    assert isinstance(changed, Held)
    assert changed.held == (rail == "rail+", rail == "rail-")
    assert list(rails_v) == [(changed,)]
    assert rails_v[(changed,)] == pytest.approx(held_v, nan_ok=True)
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
    result, original, _ = held_at_readings(some)
    assert original
    assert [(one.point, one.value) for one in result] == [(one.point, one.value) for one in some]
    assert result[0].conditions == result[1].conditions


def test_a_rail_at_nothing_is_still_a_rail() -> None:
    taken = held_at_readings([observed(LIMITED, "rail+", -0.001), observed(LIMITED, "rail-", -15.0)])
    (held_v,) = taken.rails_v.values()
    assert 0.0 < held_v[0] < 0.01


def test_every_end_of_the_conditions_is_held() -> None:
    ends: Conditions = (LIMITED, replace(LIMITED, when="warm"))
    some = [
        replace(observed(LIMITED, point, volts), conditions=ends) for point, volts in (("rail+", 3.0), ("rail-", -15.0))
    ]
    result, original, rails_v = held_at_readings(some)
    assert all(isinstance(one, Held) and one.held == (True, False) for one in result[0].conditions)
    assert next(iter(rails_v.values())) == pytest.approx((3.0, math.nan), nan_ok=True)
    assert [getattr(one, "when", "") for one in result[0].conditions] == ["cold", "warm"]
    assert list(original.values()) == [ends]


def test_units_whose_rails_fell_in_the_same_pattern_are_read_alike() -> None:
    """To whatever voltages: those are data. Another pattern is another condition."""
    pairs = ((1.9, -0.7), (1.2, -1.3), (2.0, -15.0))
    taken = [
        held_at_readings([observed(LIMITED, "rail+", plus), observed(LIMITED, "rail-", minus)]) for plus, minus in pairs
    ]
    conditions = [one.observations[0].conditions for one in taken]
    assert conditions[0] == conditions[1] != conditions[2]
    assert [one.rails_v[conditions[0]] for one in taken[:2]] == list(pairs[:2])


PLANTED = ("output.upper.1: collector-emitter short", "driver.lower: collector-emitter short")
CANDIDATES: list[tuple[Conditions, str]] = [((LIMITED,), "driver.upper.vbe"), ((LIMITED,), "output.upper.1.vbe")]


@pytest.fixture(scope="module")
def shorted() -> tuple[list[list[Observation]], list[Suspicion]]:
    sets = powered(tern(), LIMITED, [fault_of(name, tern()) for name in PLANTED], POINTS, seed=3)
    return sets, suspect_many(tern(), sets, candidates=CANDIDATES)


def test_shorts_behind_a_limit_are_named_and_told_of_in_the_stated_conditions(
    shorted: tuple[list[list[Observation]], list[Suspicion]],
) -> None:
    sets, answers = shorted
    faults = [fault_of(name, tern()) for name in PLANTED]
    for some in sets:
        fallen = {one.point: one.value for one in some if one.point in ("rail+", "rail-")}
        assert min(fallen["rail+"], -fallen["rail-"]) < 0.9 * 15.0
    for said, fault in zip(answers, faults, strict=True):
        assert fault in first_group(said), [(str(one.fault), one.probability) for one in said.suspects[:4]]
        assert fault not in said.unseen
        assert said.suspects[0].evidence
        for one in said.suspects[0].evidence:
            assert one.conditions == (LIMITED,)
            # a healthy unit is told of under what was set: its rails stand
            if one.point in ("rail+", "rail-"):
                assert abs(one.healthy) == pytest.approx(15.0, rel=0.01)
        assert {probe.conditions for probe in said.probe_next} <= {(LIMITED,)}


def test_a_unit_behind_a_limit_is_worked_out_among_others_as_if_alone(
    shorted: tuple[list[list[Observation]], list[Suspicion]],
) -> None:
    sets, answers = shorted
    first, second = (held_at_readings(some) for some in sets)
    assert first.original == second.original != {}
    assert first.rails_v != second.rails_v
    alone, among = suspect(tern(), sets[1], candidates=CANDIDATES), answers[1]
    likely = {one.fault: one.probability for one in alone.suspects}
    assert {one.fault: one.probability for one in among.suspects} == pytest.approx(likely, abs=1e-3)
    assert among.suspects[0].fault == alone.suspects[0].fault
    assert among.suspects[0].alike == alone.suspects[0].alike
    assert among.unseen == alone.unseen
    assert [probe.point for probe in among.probe_next] == [probe.point for probe in alone.probe_next]


def test_without_a_reading_of_its_rail_a_limited_supply_is_solved_as_such() -> None:
    fault = fault_of(PLANTED[0], tern())
    points = [point for point in POINTS if not point.startswith("rail")]
    some = powered(tern(), LIMITED, [fault], points, seed=3)[0]
    said = suspect(tern(), some, candidates=[((LIMITED,), "driver.upper.vbe")])
    assert fault in {one.fault for one in said.suspects[:3]} | first_group(said)
