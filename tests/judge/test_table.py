"""Judging a file of readings: the object that is printed, the verdict over all, healthy and faulty units."""

from __future__ import annotations

import json
from collections.abc import Iterable

import numpy as np
import pytest

from benchkit.judge.rule_base import Cause, RuleResult
from benchkit.judge.table import Table, judge_readings, judge_table, overall
from benchkit.judge.verdicts import Verdict
from benchkit.measure.accuracy import BENCH_METER
from benchkit.stage.conditions import Condition
from benchkit.stage.draws import draw, nominal, seeds
from benchkit.stage.expected import expected
from benchkit.stage.faults import parse_fault
from benchkit.stage.operate import Solved, solve_units
from tests.judge.designs import TERN, tern

UNITS = 1500
POINTS = (
    "rail+", "rail-", "output", "rail+.current", "rail-.current", "spread", "spread.upper", "spread.lower",
    "driver.resistor", "emitter.upper.1", "emitter.lower.1", "driver.upper.vbe", "output.upper.1.vbe",
)  # fmt: skip
LEAST = Condition(positive_v=15.0, negative_v=-15.0, limit_a=0.05, trimmer="least")
LEAST_CELLS = "15 V,-15 V,50 mA,least,cold,25"
HEADER = "point,value,unit,positive,negative,limit,trimmer,when,ambient"
NOMINAL_AT_LEAST = {
    point.point: point.nominal
    for point in expected(tern(), LEAST, units=200, seed=1).points
    if point.nominal is not None
}


def _file(values: dict[str, float], cells: str = LEAST_CELLS, points: Iterable[str] = POINTS) -> str:
    lines = [f"{point},{values[point]:.7g},{'A' if point.endswith('current') else 'V'},{cells}" for point in points]
    return "\n".join([HEADER, *lines, ""])


def _judge(text: str) -> Table:
    return judge_table(tern(), text, accuracy=BENCH_METER, units=UNITS, seed=3)


def test_a_nominal_unit_passes() -> None:
    table = _judge(_file(NOMINAL_AT_LEAST))
    assert table.verdict == "pass", [(one.entry.point.name, one.judgement.why) for one in table.readings]
    assert table.assumed == len(POINTS)


def test_the_object_that_is_printed() -> None:
    printed = judge_readings(tern(), _file(NOMINAL_AT_LEAST), accuracy=BENCH_METER, units=UNITS, seed=3)
    assert list(printed) == ["verdict", "readings", "rules"]
    assert json.loads(json.dumps(printed, allow_nan=False)) == printed
    assert [reading["point"] for reading in printed["readings"]] == list(POINTS)
    for reading in printed["readings"]:
        assert list(reading) == ["point", "value", "low", "high", "verdict"]
        assert reading["low"] <= reading["value"] <= reading["high"]
    assert {rule["rule"] for rule in printed["rules"]} == {"offset before load", "divider stiffness", "spreader ratio"}
    for rule in printed["rules"]:
        assert list(rule) == ["rule", "value", "limit", "verdict"]


def test_limits_are_those_of_the_model_for_that_condition() -> None:
    model = expected(tern(), LEAST, units=UNITS, seed=3)
    for judged in _judge(_file(NOMINAL_AT_LEAST)).readings:
        name = judged.entry.point.name
        assert judged.limits is not None
        if name in ("rail+", "rail-"):
            assert (judged.limits.low, judged.limits.high) == pytest.approx(
                (model[name].low - 0.15, model[name].high + 0.15)
            )
        else:
            assert (judged.limits.low, judged.limits.high) == (model[name].low, model[name].high)


def test_each_line_is_judged_under_its_own_condition() -> None:
    spread = f"spread,{NOMINAL_AT_LEAST['spread']},V"
    text = f"{HEADER}\n{spread},{LEAST_CELLS}\n{spread},15,-15,,most\n"
    least, most = _judge(text).readings
    assert (least.judgement.verdict, most.judgement.verdict) == ("pass", "fail")


def test_a_reading_outside_fails_the_file() -> None:
    table = _judge(_file(NOMINAL_AT_LEAST | {"spread": 9.1}))
    assert table.verdict == "fail"
    assert [one.entry.point.name for one in table.readings if one.judgement.verdict == "fail"] == ["spread"]


def test_overload_fails() -> None:
    assert _judge(f"{HEADER}\nspread,OL,V,{LEAST_CELLS}\n").verdict == "fail"


def test_unpowered_readings() -> None:
    table = _judge("point,value,unit\nohm.spreader.lower,1000,ohm\nohm.heatsink.output.upper.1,OL,ohm\n")
    assert [one.judgement.verdict for one in table.readings] == ["pass", "pass"]
    assert _judge("point,value,unit\nohm.heatsink.output.upper.1,3,ohm\n").verdict == "fail"


def test_a_reading_without_a_model_is_undecided() -> None:
    printed = judge_readings(tern(), "point,value,unit\noutput.ac,1,mV\n", units=UNITS)
    assert printed["verdict"] == "undecided"
    assert printed["readings"] == [
        {"point": "output.ac", "value": 0.001, "low": None, "high": None, "verdict": "undecided"}
    ]


def test_the_target_may_be_anywhere_within_its_tolerance() -> None:
    cells = "35,-35,,target,warm,25"
    model = expected(tern(), Condition(positive_v=35.0, negative_v=-35.0, trimmer="target", when="warm"), units=200)
    at_target = {point.point: point.nominal for point in model.points if point.nominal is not None}
    table = _judge(_file(at_target | {"emitter.upper.1": 0.0235, "emitter.lower.1": 0.0235}, cells))
    drop = next(one for one in table.readings if one.entry.point.name == "emitter.upper.1")
    assert drop.judgement.verdict == "pass"
    assert drop.limits is not None
    assert drop.limits.low == pytest.approx(0.0198, rel=0.012)
    assert drop.limits.high == pytest.approx(0.0242, rel=0.012)
    rules = {result.rule: result.verdict for result in table.rules}
    assert rules["quiescent target"] == "pass"
    assert rules["emitter symmetry"] == "undecided"


def test_cold_readings_of_the_emitter_resistors_decide_the_symmetry() -> None:
    cells = "35,-35,,target,warm,25"
    values = {"emitter.upper.1": 0.0221, "emitter.lower.1": 0.0219}
    text = _file(values, cells, values)
    without = next(result for result in _judge(text).rules if result.rule == "emitter symmetry")
    assert (without.verdict, without.cause) == ("undecided", "parts")
    text = text.replace(HEADER, HEADER + ",uncertainty")
    text += "ohm.emitter.upper.1,0.2210,ohm,,,,,,,0.0001\nohm.emitter.lower.1,0.2190,ohm,,,,,,,0.0001\n"
    measured = next(result for result in _judge(text).rules if result.rule == "emitter symmetry")
    assert measured.verdict == "pass"


def _rule(verdict: Verdict, cause: Cause) -> RuleResult:
    return RuleResult(rule="r", value=None, limit=None, unit="", verdict=verdict, why="", cause=cause)


@pytest.mark.parametrize(
    ("readings", "rules", "verdict"),
    [
        (["pass", "pass"], [], "pass"),
        (["pass"], [_rule("undecided", "parts")], "pass"),
        (["pass"], [_rule("undecided", "meter")], "undecided"),
        (["pass"], [_rule("fail", "")], "fail"),
        (["undecided"], [_rule("pass", "")], "undecided"),
        (["fail", "undecided"], [], "fail"),
        ([], [_rule("pass", "")], "undecided"),
    ],
)
def test_overall(readings: list[Verdict], rules: list[RuleResult], verdict: Verdict) -> None:
    assert overall(readings, rules) == verdict


def _units_read(solved: Solved, unit: int, rng: np.random.Generator) -> dict[str, float]:
    """What a bench meter reads of one unit: its error drawn within the specification."""
    read = {}
    for point in POINTS:
        true = float(solved.points[point][unit])
        function = "dc current" if point.endswith("current") else "dc volts"
        row = BENCH_METER.row(function, true)
        read[point] = true + rng.uniform(-1, 1) * row.gain_half_width(true) + rng.uniform(-1, 1) * row.rest_half_width()
    return read


def test_healthy_units_hardly_ever_fail() -> None:
    """40 fresh units, 13 readings each: at 0.27 % a reading, about one unit in 30 has one outside its limits."""
    design = tern()
    parameters = draw(design, 40, seeds("unit", 17))
    solved = solve_units(design, parameters, LEAST)
    assert solved.converged.all()
    rng = np.random.default_rng(19)
    tables = [_judge(_file(_units_read(solved, unit, rng))) for unit in range(40)]
    assert [table.verdict for table in tables].count("fail") <= 4
    assert [table.verdict for table in tables].count("pass") >= 10
    # What a good meter leaves undecided at the least-bias end is a few microvolts of emitter drop, and little else.
    undecided = [one for table in tables for one in table.readings if one.judgement.verdict == "undecided"]
    others = [one for one in undecided if not one.entry.point.name.startswith("emitter")]
    assert len(others) <= 3


def test_a_stage_between_two_feed_resistors() -> None:
    """The other demonstration design, at its own rails: nominal readings pass, and its feeds are compared."""
    from benchkit.stage.design import load_design

    design = load_design(TERN.with_name("breadboard.toml"))
    model = expected(design, Condition(positive_v=10.0, negative_v=-10.0, trimmer="least"), units=200)
    names = ("output", "spread", "spread.lower", "feed.upper", "feed.lower")
    lines = [f"{name},{model[name].nominal:.7g},V,least" for name in names]
    table = judge_table(
        design, "\n".join(["point,value,unit,trimmer", *lines]), accuracy=BENCH_METER, units=UNITS, seed=3
    )
    assert {one.judgement.verdict for one in table.readings} == {"pass"}
    assert "feed symmetry" in {result.rule for result in table.rules}


@pytest.mark.parametrize(
    "fault",
    [
        "spreader.upper: ten times high",
        "spreader.transistor: collector-emitter short",
        "driver.upper: base-emitter short",
        "output.upper.1: collector-emitter short",
        "feed.upper: dead",
        "spreader.upper: open",
    ],
)
def test_faulty_units_fail(fault: str) -> None:
    design = tern()
    solved = solve_units(design, nominal(design), LEAST, parse_fault(fault, design))
    assert _judge(_file(_units_read(solved, 0, np.random.default_rng(2)))).verdict == "fail"
