"""The table that ``benchkit judge`` prints: narrow, in ASCII where the readings are, and never sounding certain."""

from __future__ import annotations

import math
from dataclasses import replace

import pytest

from benchkit.judge.table import Table, judge_table
from benchkit.measure.accuracy import BENCH_METER
from benchkit.stage.conditions import Condition, Unpowered
from benchkit.stage.design import load_design
from benchkit.stage.faults import HEALTHY, Fault, faults_of
from benchkit.stage.suspicion import Evidence, Probe, Suspect
from benchkit.ui.judge_text import (
    WIDTH,
    condition_words,
    judged_text,
    probe_lines,
    suspect_lines,
    unseen_lines,
)
from tests.stage.designs import BREADBOARD, breadboard

COLD = Condition(positive_v=4.0, negative_v=-4.0, limit_a=0.05, trimmer="least")
OPEN, SHORT = Fault("spreader.lower", "open"), Fault("spreader.upper", "short")


def joined(lines: list[str]) -> str:
    """The words in one line, so that a wrapped sentence is found."""
    return " ".join(" ".join(lines).split())


@pytest.fixture(scope="module")
def table() -> Table:
    """A unit whose lower arm is open, and a reading without a model."""
    text = (
        "point,value,unit,positive,negative,limit,trimmer\n"
        "spread,0.6866,V,4,-4,50 mA,least\nspread.upper,16.02 mV,V,4,-4,50 mA,least\n"
        "ohm.spreader.upper,OL,ohm,,,,least\noutput.ac,1,mV,,,,\n"
    )
    return judge_table(load_design(BREADBOARD), text, accuracy=BENCH_METER, units=200)


def test_the_whole_text(table: Table) -> None:
    lines = judged_text(table, "unit 7.csv").splitlines()
    assert max(len(line) for line in lines) <= WIDTH
    assert lines[0] == "unit 7.csv: FAIL"
    told = joined(lines)
    for judged in table.readings:
        row = next(line for line in lines if line.startswith(judged.entry.reading.point + " "))
        assert row.endswith(judged.judgement.verdict)
    assert "overload" in told
    heading = "What would explain these readings, if one part is at fault at most:"
    assert (heading in told) == table.suspicion.explained
    assert ("Nothing that the model knows explains these readings" in told) != table.suspicion.explained
    assert "Not tested" in told
    assert "rails 4.00 V and -4.00 V, current limit 50.0 mA, trimmer at its least-bias end, cold" in told
    assert "unpowered, trimmer at its least-bias end" in told
    assert BENCH_METER.name in told
    first = table.suspicion.suspects[0]
    assert f"{first.fault.part} {first.fault.fault}" in told
    for other in first.alike:
        assert f"{other.part} {other.fault}" in told


def test_rules_say_what_would_decide_them(table: Table) -> None:
    undecided = [rule for rule in table.rules if rule.would_decide]
    text = joined(judged_text(table, "x").splitlines())
    for rule in table.rules:
        assert f"{rule.rule}: {rule.verdict}." in text
    assert text.count("What would decide it:") == len(undecided)


def test_nothing_sounds_proven() -> None:
    """Neither a probability of one nor a complete set of readings makes a unit healthy."""
    told = joined(suspect_lines((Suspect(fault=HEALTHY, probability=1.0), Suspect(fault=OPEN, probability=0.0))))
    assert "100" not in told
    assert ">99.9% a healthy unit" in told
    assert "spreader.lower" not in told
    assert joined(suspect_lines([Suspect(fault=HEALTHY, probability=0.9994)])).endswith("99.9% a healthy unit")
    complete = unseen_lines(())
    assert max(len(line) for line in complete) <= WIDTH
    assert "Not tested: faults that are not in the table, two faults at once" in joined(complete)


def test_suspects_with_what_speaks_for_them() -> None:
    def evidence(point: str, value: float, condition: Condition | Unpowered = COLD) -> Evidence:
        return Evidence(
            point=point, conditions=(condition,), read=value, expected=2.0 * value, healthy=math.inf, weight=3.0
        )

    cold = Unpowered(point="ohm.rails")
    some = (
        evidence("spread", 1.0), evidence("rail+.current", 0.02), evidence("ohm.rails", 5e3, cold),
        evidence("heatsink", 30.0), evidence("diode.output.upper.1", 0.6, cold),
    )  # fmt: skip
    lines = suspect_lines([
        Suspect(fault=OPEN, probability=0.7, alike=(SHORT,), evidence=some),
        Suspect(fault=SHORT, probability=0.3, alike=(OPEN,)),
        Suspect(fault=HEALTHY, probability=1e-5),
    ])  # fmt: skip
    told = joined(lines)
    assert max(len(line) for line in lines) <= WIDTH
    assert "70.0% spreader.lower open" in told
    assert "these readings can't tell it from: spreader.upper short" in told
    assert "healthy unit" not in told
    for words in (
        "spread reads 1.000 V; with this fault 2.000 V, healthy overload",
        "rail+.current reads 20.00 mA", "ohm.rails reads 5.000 kohm", "heatsink reads 30.00 degC",
        "diode.output.upper.1 reads 600.0 mV",
    ):  # fmt: skip
        assert words in told


def test_only_the_first_few_are_shown() -> None:
    faults = faults_of(breadboard())[:8]
    lines = suspect_lines([Suspect(fault=fault, probability=0.125) for fault in faults])
    assert len(lines) == 6
    # the likeliest is shown however little it is
    assert len(suspect_lines([Suspect(fault=fault, probability=1e-4) for fault in faults])) == 2


def test_probes_and_their_reasons() -> None:
    assert list(probe_lines(())) == []
    one = Probe(point="spread", conditions=(COLD,), gain_bits=0.5, why="this would read 1 V; that would read 2 V " * 3)
    lines = list(probe_lines([replace(one, point=f"p{number}") for number in range(5)]))
    assert max(len(line) for line in lines) <= WIDTH
    told = joined(lines)
    assert [f"p{number} (rails" in told for number in range(5)] == [True] * 3 + [False] * 2
    assert "this would read 1 V" in told


def test_unseen_faults_by_part() -> None:
    lines = unseen_lines(faults_of(breadboard()))
    assert max(len(line) for line in lines) <= WIDTH
    told = joined(lines)
    assert f"Not tested ({len(faults_of(breadboard()))} faults these readings could not have shown)" in told
    assert "spreader.lower: open, short, ten times high, ten times low" in told


@pytest.mark.parametrize(
    ("condition", "words"),
    [
        (COLD, "rails 4.00 V and -4.00 V, current limit 50.0 mA, trimmer at its least-bias end, cold"),
        (replace(COLD, limit_a=None, trimmer="target", when="warm"), "no current limit, trimmer at the target, warm"),
        (
            replace(COLD, negative_v=0.0, trimmer="most"),
            "rails 4.00 V, current limit 50.0 mA, trimmer at its most-bias end",
        ),
        (replace(COLD, trimmer="unknown"), "trimmer anywhere, cold"),
        (replace(COLD, trimmer=0.25), "trimmer at 25.0% of its travel from the least-bias end"),
        (Unpowered(point="ohm.rails", trimmer="target"), "unpowered, trimmer at the target"),
    ],
)
def test_conditions_in_words(condition: Condition | Unpowered, words: str) -> None:
    assert words in condition_words(condition)
