"""Judging a file of readings: the object that is printed, the verdict over all, healthy and faulty units."""

from __future__ import annotations

import json
import math
from collections.abc import Iterable, Sequence
from dataclasses import replace

import numpy as np
import pytest

from benchkit.judge.rule_base import Cause, RuleResult
from benchkit.judge.table import Table, judge_files, judge_table, observations, overall
from benchkit.judge.verdicts import Verdict
from benchkit.measure.accuracy import BENCH_METER
from benchkit.stage import suspects
from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design, load_design
from benchkit.stage.draws import draw, nominal, seeds
from benchkit.stage.expected import expected
from benchkit.stage.faults import HEALTHY, Fault, faults_of, parse_fault
from benchkit.stage.observations import Observation
from benchkit.stage.operate import Solved, solve_units
from benchkit.stage.suspicion import Suspect, Suspicion
from tests.judge.designs import tern
from tests.stage.designs import BREADBOARD

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


@pytest.fixture
def limits_only(monkeypatch: pytest.MonkeyPatch) -> None:
    """For tests of limits and rules alone: the suspects are the table's priors, whatever was read."""

    ask = suspects.suspect_many

    def priors(design: Design, sets: Sequence[Sequence[Observation]]) -> list[Suspicion]:
        return ask(design, [[] for _ in sets])

    monkeypatch.setattr(suspects, "suspect_many", priors)


@pytest.fixture
def without_probes(monkeypatch: pytest.MonkeyPatch) -> None:
    """For tests that don't ask what to read next, which takes as long as all the rest."""
    monkeypatch.setattr(suspects, "default_candidates", lambda design, readings: ())


def test_a_nominal_unit_passes() -> None:
    table = _judge(_file(NOMINAL_AT_LEAST))
    assert table.verdict == "pass", [(one.entry.point.name, one.judgement.why) for one in table.readings]
    assert table.assumed == len(POINTS)


def test_the_object_that_is_printed() -> None:
    printed = _judge(_file(NOMINAL_AT_LEAST)).as_json()
    assert list(printed) == ["verdict", "readings", "rules", "suspects", "probe_next", "unseen"]
    assert json.loads(json.dumps(printed, allow_nan=False)) == printed
    assert [reading["point"] for reading in printed["readings"]] == list(POINTS)
    for reading in printed["readings"]:
        assert list(reading) == ["point", "value", "low", "high", "verdict"]
        assert reading["low"] <= reading["value"] <= reading["high"]
    assert {rule["rule"] for rule in printed["rules"]} == {"offset before load", "divider stiffness", "spreader ratio"}
    for rule in printed["rules"]:
        assert list(rule) == ["rule", "value", "limit", "verdict"]
    assert printed["suspects"][0]["part"] == "healthy"
    assert {"part": "healthy", "fault": "none"} not in printed["unseen"]
    assert len(printed["suspects"]) == 1 + len(faults_of(tern()))
    assert sum(suspect["probability"] for suspect in printed["suspects"]) == pytest.approx(1.0)
    for suspect in printed["suspects"]:
        assert list(suspect) == ["part", "fault", "probability", "alike"]
        assert len(suspect["alike"]) <= 3
        assert all(list(other) == ["part", "fault"] for other in suspect["alike"])
    assert all(list(probe) == ["point", "why"] for probe in printed["probe_next"])
    assert all(list(fault) == ["part", "fault"] for fault in printed["unseen"])


@pytest.mark.usefixtures("limits_only")
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


@pytest.mark.usefixtures("limits_only")
def test_each_line_is_judged_under_its_own_condition() -> None:
    spread = f"spread,{NOMINAL_AT_LEAST['spread']},V"
    text = f"{HEADER}\n{spread},{LEAST_CELLS}\n{spread},15,-15,,most\n"
    least, most = _judge(text).readings
    assert (least.judgement.verdict, most.judgement.verdict) == ("pass", "fail")


@pytest.mark.usefixtures("limits_only")
def test_a_reading_outside_fails_the_file() -> None:
    table = _judge(_file(NOMINAL_AT_LEAST | {"spread": 9.1}))
    assert table.verdict == "fail"
    assert [one.entry.point.name for one in table.readings if one.judgement.verdict == "fail"] == ["spread"]


@pytest.mark.usefixtures("limits_only")
def test_overload_fails() -> None:
    assert _judge(f"{HEADER}\nspread,OL,V,{LEAST_CELLS}\n").verdict == "fail"


@pytest.mark.usefixtures("limits_only")
def test_unpowered_readings() -> None:
    table = _judge("point,value,unit\nohm.spreader.lower,1000,ohm\nohm.heatsink.output.upper.1,OL,ohm\n")
    assert [one.judgement.verdict for one in table.readings] == ["pass", "pass"]
    assert _judge("point,value,unit\nohm.heatsink.output.upper.1,3,ohm\n").verdict == "fail"


def test_a_reading_without_a_model_is_undecided() -> None:
    printed = judge_table(tern(), "point,value,unit\noutput.ac,1,mV\n", units=UNITS).as_json()
    assert printed["verdict"] == "undecided"
    # nothing that the model knows was read: the suspects are the table's priors, and no fault was tested
    assert len(printed["unseen"]) == len(faults_of(tern()))
    assert printed["probe_next"] == []
    assert printed["readings"] == [
        {"point": "output.ac", "value": 0.001, "low": None, "high": None, "verdict": "undecided"}
    ]


@pytest.mark.usefixtures("limits_only")
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


@pytest.mark.usefixtures("limits_only")
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


@pytest.mark.usefixtures("without_probes")
def test_healthy_units_hardly_ever_fail() -> None:
    """40 fresh units, 13 readings each: at 0.27 % a reading, about one unit in 30 has one outside its limits."""
    design = tern()
    parameters = draw(design, 40, seeds("unit", 17))
    solved = solve_units(design, parameters, LEAST)
    assert solved.converged.all()
    rng = np.random.default_rng(19)
    files = [(f"unit {unit}", _file(_units_read(solved, unit, rng))) for unit in range(40)]
    tables = judge_files(design, files, accuracy=BENCH_METER, units=UNITS, seed=3)
    assert [table.verdict for table in tables].count("fail") <= 4
    assert [table.verdict for table in tables].count("pass") >= 10
    # What a good meter leaves undecided at the least-bias end is a few microvolts of emitter drop, and little else.
    undecided = [one for table in tables for one in table.readings if one.judgement.verdict == "undecided"]
    others = [one for one in undecided if not one.entry.point.name.startswith("emitter")]
    assert len(others) <= 3
    # the suspects: something before healthy in at most one of these forty
    assert sum(table.suspicion.suspects[0].fault != HEALTHY for table in tables) <= 1
    assert all(table.suspicion.unseen for table in tables)


@pytest.mark.usefixtures("limits_only")
def test_a_stage_between_two_feed_resistors() -> None:
    """The other demonstration design, at its own rails: nominal readings pass, and its feeds are compared."""
    design = load_design(BREADBOARD)
    model = expected(design, Condition(positive_v=10.0, negative_v=-10.0, trimmer="least"), units=200)
    names = ("output", "spread", "spread.lower", "feed.upper", "feed.lower")
    lines = [f"{name},{model[name].nominal:.7g},V,least" for name in names]
    table = judge_table(
        design, "\n".join(["point,value,unit,trimmer", *lines]), accuracy=BENCH_METER, units=UNITS, seed=3
    )
    assert {one.judgement.verdict for one in table.readings} == {"pass"}
    assert "feed symmetry" in {result.rule for result in table.rules}


FAULTY = (
    "spreader.upper: ten times high",
    "spreader.transistor: collector-emitter short",
    "driver.upper: base-emitter short",
    "output.upper.1: collector-emitter short",
    "feed.upper: dead",
    "spreader.upper: open",
)


def _faulty(names: Sequence[str]) -> list[Table]:
    """Nominal units with a fault each, read by a bench meter and judged together."""
    design = tern()
    faults = [parse_fault(name, design) for name in names]
    solved = solve_units(design, nominal(design), LEAST, faults, loading="each")
    rng = np.random.default_rng(2)
    files = [(name, _file(_units_read(solved, unit, rng))) for unit, name in enumerate(names)]
    return judge_files(design, files, accuracy=BENCH_METER, units=UNITS, seed=3)


@pytest.mark.usefixtures("limits_only")
def test_faulty_units_fail() -> None:
    assert [table.verdict for table in _faulty(FAULTY)] == ["fail"] * len(FAULTY)


@pytest.mark.usefixtures("without_probes")
def test_the_fault_of_a_faulty_unit_is_suspected() -> None:
    """It is first, or named together with the first."""
    for name, table in zip(FAULTY[4:5], _faulty(FAULTY[4:5]), strict=True):
        fault, first = parse_fault(name), table.suspicion.suspects[0]
        assert fault in (first.fault, *first.alike), (name, str(first.fault))
        assert fault not in table.suspicion.unseen


@pytest.mark.usefixtures("without_probes")
def test_files_judged_together_are_as_each_alone() -> None:
    """In the files' order, whether they were read alike or not."""
    small = load_design(BREADBOARD)
    texts = [
        "point,value,unit,trimmer\nspread,1.5,V,least\n",
        "point,value,unit\nohm.spreader.lower,1 kohm,ohm\n",
        "point,value,unit,trimmer\nspread,0.68,V,least\n",
    ]
    together = judge_files(small, [(f"{number}.csv", text) for number, text in enumerate(texts)], units=300)
    for text, table in zip(texts, together, strict=True):
        alone = judge_table(small, text, units=300)
        assert [one.limits for one in table.readings] == [one.limits for one in alone.readings]
        assert table.verdict == alone.verdict
        likely = [(one.fault, one.probability) for one in alone.suspicion.suspects[:3]]
        assert [one.fault for one in table.suspicion.suspects[:3]] == [fault for fault, _ in likely]
        for one, (_, probability) in zip(table.suspicion.suspects, likely, strict=False):
            assert one.probability == pytest.approx(probability, abs=0.02)


MIXED = """point,value,unit,positive,negative,limit,trimmer,when,ambient,uncertainty
spread,1.149,V,4,-4,50 mA,least,cold,25,
output,3 mV,V,4,-4,50 mA,least,cold,25,0.0001
emitter.upper.1,47 mV,V,10,-10,,target,warm,25,
heatsink,29,degC,10,-10,,target,warm,25,
ohm.heatsink.output.upper.1,OL,ohm,,,,target,,,
ohm.rails,4.0 kohm,ohm,,,,unknown,,,
ohm.heatsink.output.lower.1,OL,ohm,,,,unknown,,,
output.ac,1,mV,,,,,,,
"""


@pytest.mark.usefixtures("without_probes")
def test_conditions_of_every_kind_in_one_file() -> None:
    """Powered and unpowered, cold and warm, target and unknown, overloads, and a point without a model."""
    small = load_design(BREADBOARD)
    table = judge_table(small, MIXED, accuracy=BENCH_METER, units=300)
    printed = table.as_json()
    assert json.loads(json.dumps(printed, allow_nan=False)) == printed
    assert len(printed["readings"]) == MIXED.count("\n") - 1
    assert [one["value"] for one in printed["readings"]].count(None) == 2
    assert sum(suspect["probability"] for suspect in printed["suspects"]) == pytest.approx(1.0)
    taken = observations(small, [one.entry for one in table.readings])
    assert [one.point for one in taken] == [one["point"] for one in printed["readings"] if one["point"] != "output.ac"]
    assert [one.value for one in taken].count(math.inf) == 2
    assert all(math.isfinite(one.standard_uncertainty) and one.standard_uncertainty >= 0.0 for one in taken)


@pytest.mark.usefixtures("limits_only")
def test_a_negative_overload_is_below_everything() -> None:
    entries = judge_table(tern(), f"{HEADER}\nspread,-OL,V,{LEAST_CELLS}\n", units=300).readings
    assert [one.value for one in observations(tern(), [one.entry for one in entries])] == [-math.inf]


def _table(first: Fault, verdict: Verdict) -> Table:
    """A table of one reading with a made-up verdict and first suspect."""
    table = judge_table(tern(), "point,value,unit\noutput.ac,1,mV\n", units=300)
    judged = replace(table.readings[0], judgement=replace(table.readings[0].judgement, verdict=verdict))
    said = replace(table.suspicion, suspects=(Suspect(fault=first, probability=0.9),))
    return replace(table, readings=(judged,), suspicion=said)


def test_a_suspect_before_healthy_leaves_a_pass_undecided() -> None:
    """Single readings that pass may together speak of a fault; a failure stays a failure."""
    fault = faults_of(tern())[0]
    assert _table(HEALTHY, "pass").verdict == "pass"
    assert _table(fault, "pass").verdict == "undecided"
    assert _table(fault, "fail").verdict == _table(HEALTHY, "fail").verdict == "fail"
