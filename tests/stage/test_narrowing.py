from __future__ import annotations

import math
import time
from dataclasses import replace
from functools import cache

import numpy as np
import pytest

from benchkit.errors import EntryError
from benchkit.stage.conditions import Condition, Unpowered
from benchkit.stage.design import Design
from benchkit.stage.draws import draw, nominal, seeds
from benchkit.stage.expected import expected, expected_unpowered
from benchkit.stage.faults import parse_fault
from benchkit.stage.narrowing import Known, Narrowing
from benchkit.stage.observations import Conditions, Observation
from benchkit.stage.operate import solve_units
from benchkit.stage.paired import Reading
from benchkit.stage.points import points_of
from benchkit.stage.reach import full_rails
from benchkit.stage.unpowered import solve_unpowered
from tests.benchmarks.narrowing_study import study
from tests.stage.designs import breadboard, tern

UNITS = 6000
HALF = full_rails(tern(), trimmer=0.5, when="cold")
RESISTORS = ("ohm.spreader.upper", "ohm.spreader.lower", "ohm.emitter.upper.1", "ohm.emitter.lower.1")
DROPS = ("emitter.upper.1", "emitter.lower.1")


@cache
def ensembles(design: Design) -> Narrowing:
    return Narrowing(design, UNITS)


def uncertainty(point: str, value: float) -> float:
    return 3e-4 * abs(value) + (2e-5 if not point.startswith("ohm.") else 1e-4)


def observed(conditions: Conditions, point: str, value: float) -> Observation:
    return made(conditions, point, value, uncertainty(point, value))


def made(conditions: Conditions, point: str, value: float, standard_uncertainty: float) -> Observation:
    return Observation(conditions=conditions, point=point, value=value, standard_uncertainty=standard_uncertainty)


def readings_of(condition: Condition, unit: int, fault: str = "") -> dict[str, Observation]:
    """Everything read of one drawn unit of the tern: resistors cold, then all that the condition has."""
    parameters = {k: v if v.ndim == 0 else v[unit : unit + 1] for k, v in draw(tern(), 40, seeds("unit", 5)).items()}
    found: dict[str, Observation] = {}
    planted = parse_fault(fault) if fault else None
    for point in RESISTORS:
        own = Unpowered(point=point, trimmer=condition.trimmer)
        found[point] = observed((own,), point, float(solve_unpowered(tern(), parameters, own, planted).values[0]))
    solved = solve_units(tern(), parameters, condition, planted)
    assert solved.converged.all()
    for point, value in solved.points.items():
        found[point] = observed((condition,), point, float(value[0]))
    return found


@pytest.mark.parametrize(
    ("design", "trimmer"),
    [(tern(), "least"), (tern(), 0.5), (tern(), "unknown"), (breadboard(), 0.5)],
    ids=["least", "half", "unknown", "breadboard half"],
)
def test_fresh_units_stay_inside(design: Design, trimmer: float) -> None:
    """A small version of the study (``tests/benchmarks/narrowing_study.py``): every seventh step, 2,000 fresh units."""
    condition = full_rails(design, trimmer=trimmer, when="cold")
    result = study(ensembles(design), condition, resistors=True, units=2000, every=7)
    assert len(result.outside) > 20
    assert result.mean < 0.005
    assert result.worst[2] <= 0.01
    assert max(result.odd) < 0.002


def test_emitter_drops_become_five_times_narrower_at_half_travel() -> None:
    for design in (tern(), breadboard()):
        condition = full_rails(design, trimmer=0.5, when="cold")
        result = study(ensembles(design), condition, resistors=True, units=500, only=DROPS)
        assert np.median([result.widths[drop] for drop in DROPS]) >= 5.0


def test_nothing_known_nothing_narrowed_and_the_designs_limits_are_those_of_expect() -> None:
    narrowing = ensembles(tern())
    wanted: list[Reading] = [((HALF,), "spread"), ((HALF,), "heatsink")]
    wanted += [((Unpowered(point=point, trimmer=0.5),), point) for point in (RESISTORS[0], "ohm.heatsink.driver.upper")]
    found = narrowing.limits([], wanted)
    powered = expected(tern(), HALF, units=UNITS)
    unpowered = expected_unpowered(tern(), [one.point for one in found[2:]], trimmer=0.5, units=UNITS)
    for one in found:
        same = powered[one.point] if one.point in powered else unpowered[one.point]
        assert (one.low, one.high) == (one.design_low, one.design_high) == (same.low, same.high)
        assert not one.narrowed
        assert not one.why
        assert one.unit == same.unit


def test_limits_lie_inside_the_designs_and_no_step_takes_long() -> None:
    readings = list(readings_of(HALF, 0).values())
    narrowing = ensembles(tern())
    wanted: list[Reading] = [(one.conditions, one.point) for one in readings if one.point not in RESISTORS]
    narrowing.limits(readings[:4], wanted)
    for step in range(5, len(readings), 4):
        seconds = []
        for again in range(3):
            known = [replace(one, standard_uncertainty=one.standard_uncertainty * (1 + again)) for one in readings]
            began = time.thread_time()
            found = narrowing.limits(known[:step], wanted)
            seconds.append(time.thread_time() - began)
        assert min(seconds) < 0.15
        for one in found:
            assert one.design_low <= one.low < one.high <= one.design_high or not one.narrowed
            assert one.narrowed == ((one.low, one.high) != (one.design_low, one.design_high))


def test_same_readings_same_limits_and_another_order_nearly_so() -> None:
    readings = list(readings_of(HALF, 1).values())[:12]
    wanted: list[Reading] = [((HALF,), drop) for drop in DROPS]
    once = Narrowing(tern(), 1000).limits(readings, wanted)
    other = Narrowing(tern(), 1000)
    assert other.limits(readings, wanted) == once
    for one, turned in zip(once, other.limits(readings[::-1], wanted), strict=True):
        assert turned.low == pytest.approx(one.low, rel=1e-6)
        assert turned.high == pytest.approx(one.high, rel=1e-6)


def test_many_units_at_once_are_the_same_as_one_by_one() -> None:
    narrowing = ensembles(tern())
    wanted: list[Reading] = [((HALF,), drop) for drop in DROPS]
    units = [list(readings_of(HALF, number).values())[:10] for number in range(3)]
    shared = [replace(one, standard_uncertainty=units[0][k].standard_uncertainty) for k, one in enumerate(units[1])]
    known = [Known((one.conditions, one.point), one.standard_uncertainty) for one in units[0]]
    values = np.array([[one.value for one in unit] for unit in (units[0], shared, units[2])])
    low, high, narrowed, odd = narrowing.limits_many(known, wanted, values)
    assert not odd.any()
    for number, one in enumerate(narrowing.limits(shared, wanted)):
        same = (low[1, number], high[1, number])
        assert (one.low, one.high) == pytest.approx(same, rel=1e-9)
        assert one.narrowed == narrowed[1, number]


def test_a_less_certain_reading_narrows_less() -> None:
    readings = list(readings_of(HALF, 2).values())[:9]
    widths = []
    for factor in (1.0, 30.0, 1e6):
        blurred = [replace(one, standard_uncertainty=one.standard_uncertainty * factor) for one in readings]
        (found,) = ensembles(tern()).limits(blurred, [((HALF,), DROPS[0])])
        widths.append(found.high - found.low)
        assert found.narrowed == (factor < 1e6)
    assert widths[0] < widths[1] < widths[2]


def test_units_of_a_room_and_supply_that_are_off_stay_inside_and_are_not_odd() -> None:
    result = study(ensembles(tern()), HALF, resistors=True, off_bench=True, units=2000, every=6)
    assert result.mean < 0.005
    assert result.worst[2] <= 0.01
    assert max(result.odd) < 0.002


@pytest.mark.parametrize(("first", "last"), [(0.0, 0.0), (1.0, 1.0), (0.2, 0.5)], ids=["cold", "warm", "warming"])
def test_readings_between_cold_and_warm(first: float, last: float) -> None:
    """A stage that is cold, warm, or warms while it is read; the last is held inside too, but promised no narrowing."""
    ends = (full_rails(tern(), trimmer=0.6, when="cold"), full_rails(tern(), trimmer=0.6, when="warm"))
    narrowing = between()
    cold, warm = (solve_units(tern(), draw(tern(), 600, seeds("unit", 9)), end) for end in ends)
    good = cold.converged & warm.converged
    places = np.linspace(first, last, len(cold.points))
    true = {
        name: ((1 - place) * value + place * warm.points[name])[good]
        for (name, value), place in zip(cold.points.items(), places, strict=True)
    }
    names = [name for name in true if not name.startswith("rail")]
    noise = np.random.default_rng(3)
    shares, factors = [], []
    for step in (5, 10):
        known = [Known((ends, name), uncertainty(name, float(np.median(true[name])))) for name in names[:step]]
        values = [true[one.reading[1]] + one.standard_uncertainty * noise.standard_normal(good.sum()) for one in known]
        left: list[Reading] = [(ends, name) for name in names[step:]]
        low, high, _, odd = narrowing.limits_many(known, left, np.array(values).T)
        assert odd.mean() < 0.005
        for number, reading in enumerate(left):
            value = true[reading[1]]
            shares.append(((value < low[:, number]) | (value > high[:, number])).mean())
            design_low, design_high = narrowing.units.design_limits(reading)
            factors.append((design_high - design_low) / np.median(high[:, number] - low[:, number]))
    assert np.mean(shares) < 0.005
    assert max(shares) <= 0.01
    if first == last:
        assert np.median(factors) > 1.3


@cache
def between() -> Narrowing:
    return Narrowing(tern(), 3000)


def test_after_a_trim_within_a_tolerance_the_drop_read_narrows_the_rest() -> None:
    middle = full_rails(tern(), trimmer="target", when="cold")
    trimmed = tuple(replace(middle, target_share=share) for share in (1.0, 0.9, 1.1))
    narrowing = between()
    solved = solve_units(tern(), draw(tern(), 400, seeds("unit", 9)), replace(middle, target_share=1.05))
    good = solved.converged & solved.in_reach
    drop = solved.points["emitter.upper.1"][good]
    known = [Known((trimmed, "emitter.upper.1"), uncertainty("", 0.022))]
    noise = known[0].standard_uncertainty * np.random.default_rng(3).standard_normal(len(drop))
    low, high, narrowed, odd = narrowing.limits_many(known, [(trimmed, "emitter.lower.1")], (drop + noise)[:, None])
    other = solved.points["emitter.lower.1"][good]
    assert ((other >= low[:, 0]) & (other <= high[:, 0])).mean() >= 0.99
    assert narrowed.all()
    assert not odd.any()
    design_low, design_high = narrowing.units.design_limits((trimmed, "emitter.lower.1"))
    assert np.median(high - low) < (design_high - design_low) / 3.0


@pytest.mark.parametrize("fault", ["emitter.upper.1: open", "driver.upper: emitter open", "spreader.upper: short"])
def test_a_faulty_unit_gets_the_designs_limits_back_with_the_reason(fault: str) -> None:
    limited = replace(HALF, limit_a=0.2)
    readings = readings_of(limited, 3, fault)
    left = [(readings[drop].conditions, drop) for drop in DROPS]
    known = [one for point, one in readings.items() if point not in DROPS]
    found = ensembles(tern()).limits(known, left)
    for one in found:
        assert not one.narrowed
        assert (one.low, one.high) == (one.design_low, one.design_high)
        assert "don't go together" in one.why
        assert all(math.isfinite(end) for end in (one.low, one.high))


def test_a_wrong_reading_is_named() -> None:
    readings = readings_of(HALF, 4)
    wrong = replace(readings["spread.upper"], value=readings["spread.upper"].value + 0.05)
    known = [*list(readings.values())[:10], wrong]
    found = ensembles(tern()).limits(known, [((HALF,), "emitter.lower.1")])
    assert "spread" in found[0].why


def test_overloads_and_numbers_that_bear_on_nothing_do_no_harm() -> None:
    narrowing = ensembles(tern())
    wanted: list[Reading] = [((HALF,), DROPS[0])]
    readings = list(readings_of(HALF, 5).values())[:9]
    plain = narrowing.limits(readings, wanted)
    heatsink = "ohm.heatsink.driver.upper"
    idle = [
        made((Unpowered(point=heatsink, trimmer=0.5),), heatsink, math.inf, 1.0),
        made((HALF,), "output.ac", 1e-3, 1e-4),
        made((HALF,), "no such point", 1.0, 1e-4),
        made((HALF,), "spread", math.nan, 1e-4),
        made((HALF,), "spread", 1.0, math.inf),
    ]
    assert narrowing.limits([*readings, *idle], wanted) == plain
    over = made((HALF,), "spread", math.inf, 1e-4)
    (found,) = narrowing.limits([*readings, over], wanted)
    assert not found.narrowed
    assert "spread, overload" in found.why
    with pytest.raises(EntryError):
        narrowing.limits(readings, [((HALF,), "no such point")])


def test_what_the_condition_holds_stays_as_it_is() -> None:
    """At the target the drop of the pair is held; the rest narrows, and an untouched nominal unit lies inside."""
    condition = full_rails(tern(), trimmer="target", when="cold")
    narrowing = ensembles(tern())
    solved = solve_units(tern(), nominal(tern()), condition)
    names = [point.name for point in points_of(tern()) if point.name in solved.points]
    known = [observed((condition,), name, float(solved.points[name][0])) for name in names[:6]]
    found = narrowing.limits(known, [((condition,), name) for name in names])
    for one in found:
        value = float(solved.points[one.point][0])
        slack = 1e-6 * (abs(value) + 1e-3)
        assert one.low - slack <= value <= one.high + slack, one
    assert not next(one for one in found if one.point == "emitter.pair.1").narrowed
    assert any(one.narrowed for one in found)


def test_few_units_narrow_nothing() -> None:
    readings = list(readings_of(HALF, 0).values())[:9]
    (found,) = Narrowing(tern(), 100).limits(readings, [((HALF,), DROPS[0])])
    assert not found.narrowed


def test_a_meter_that_is_off_by_its_gain_everywhere_keeps_limits_honest() -> None:
    """Half a per cent in all voltages alike; with own noise of each reading alone, 2.5 % of some lay outside."""
    solved = solve_units(tern(), draw(tern(), 2000, seeds("unit", 9)), HALF)
    names = [name for name in solved.points if not name.endswith(".current")]
    noise = np.random.default_rng(3)
    gain = 5e-3 * noise.standard_normal(2000)
    read = {name: solved.points[name] * (1.0 + gain) + 2e-5 * noise.standard_normal(2000) for name in names}
    u = {name: 5e-3 * float(np.median(np.abs(value))) + 2e-5 for name, value in solved.points.items()}
    shares = []
    for step in (5, 9, 15):
        known = [Known(((HALF,), name), u[name]) for name in names[:step]]
        left: list[Reading] = [((HALF,), name) for name in names[step:]]
        low, high, _, odd = ensembles(tern()).limits_many(known, left, np.array([read[n] for n in names[:step]]).T)
        assert odd.mean() < 0.005
        for number, (_, name) in enumerate(left):
            shares.append(((solved.points[name] < low[:, number]) | (solved.points[name] > high[:, number])).mean())
    assert np.mean(shares) < 0.005
    assert max(shares) <= 0.01
