"""How the thousand are drawn and counted: `tests.benchmarks.thousand` runs them."""

from __future__ import annotations

from dataclasses import asdict, replace

import pytest

from benchkit.rehearsal.bench import RehearsalBench
from benchkit.stage.design import Design
from benchkit.stage.operate import solve_units
from benchkit.stage.trimmer import full_rails
from tests.benchmarks.thousand import PROCEDURES, Drawn, Told, drawn, hour_later, line, read_row, table
from tests.stage.designs import breadboard

UNIT = Drawn(number=0, procedure="re-bias", design="tern-40", seed=1, plant="", wrong_end=False, optional=False)
FAULTY = replace(UNIT, plant="emitter.upper.1: open")


def test_units_are_drawn_the_same_each_time_and_over_everything(tern: Design) -> None:
    known = {"tern-40": tern, "breadboard": breadboard()}
    units = list(drawn(300, 1, known))
    assert units == list(drawn(300, 1, known))
    assert units != list(drawn(300, 2, known))
    assert {(one.procedure, one.design) for one in units} == {(name, key) for name in PROCEDURES for key in known}
    assert 70 < sum(bool(one.plant) for one in units) < 130
    assert not any(one.wrong_end for one in units if one.procedure == "re-bias")
    parts = [one for which in (1, 2) for one in drawn(300, 1, known, which, 2)]
    assert sorted(parts, key=lambda one: one.number) == units


@pytest.mark.parametrize(
    ("told", "passed", "wrong_pass", "wrong_fail"),
    [
        (Told(drawn=UNIT, verdict="pass", off_share=0.05, inside=True), True, False, False),
        (Told(drawn=UNIT, verdict="pass", off_share=0.15, inside=False), True, True, False),
        (Told(drawn=UNIT, verdict="pass", stopped="a trip"), False, False, True),
        (Told(drawn=UNIT, verdict="fail"), False, False, True),
        (Told(drawn=UNIT, verdict="undecided"), False, False, False),
        (Told(drawn=FAULTY, verdict="fail", stopped="made safe"), False, False, False),
        (Told(drawn=FAULTY, verdict="pass", inside=True), True, False, False),
        (Told(drawn=FAULTY, verdict="pass", inside=True, harmful=True), True, True, False),
        (Told(drawn=FAULTY, verdict="pass", inside=True, harmful=True, repaired=True), True, False, False),
        (Told(drawn=FAULTY, verdict="pass", inside=False, repaired=True), True, True, False),
    ],
)
def test_what_counts_as_wrong(told: Told, passed: bool, wrong_pass: bool, wrong_fail: bool) -> None:
    assert (told.passed, told.wrong_pass, told.wrong_fail) == (passed, wrong_pass, wrong_fail)
    words = line(told)
    assert ("WRONG PASS" in words, "WRONG FAIL" in words) == (wrong_pass, wrong_fail)


def test_the_table_counts_each_procedure() -> None:
    found = [
        Told(drawn=UNIT, verdict="pass", inside=True, minutes=10.0),
        Told(drawn=FAULTY, verdict="fail", stopped="made safe", place=1, alike=True, burnt=["driver.upper"]),
        Told(drawn=replace(FAULTY, procedure="production-trim"), verdict="fail", stopped="made safe", place=3),
    ]
    rows = {row[:24].strip(): row[24:].split() for row in table(found).splitlines()}
    assert rows["units"] == ["3", "0", "1", "2"]
    assert rows["with a fault"] == ["2", "0", "1", "1"]
    assert rows["parts burnt"] == ["1", "0", "0", "1"]
    assert rows["planted fault first"] == ["1", "0", "0", "1"]
    assert rows["in the first three"] == ["2", "0", "1", "1"]
    assert rows["minutes, passed units"] == ["10.0", "-", "-", "10.0"]


def test_a_row_of_a_file_is_read_back() -> None:
    import json

    told = Told(drawn=FAULTY, verdict="pass", inside=True, place=0)
    assert read_row(json.dumps(asdict(told))) == told


def test_an_hour_later_is_the_unit_itself(tern: Design) -> None:
    bench = RehearsalBench(tern, 3)
    solved = solve_units(tern, bench.unit.parameters, full_rails(tern), loading="none")
    assert solved.position is not None
    bench.table.set_travel(float(solved.position[0]))
    # The model trims on rails of exactly 35 V; this supply is off by a few millivolts, which moves the drop by less.
    assert hour_later(bench, tern) == pytest.approx(0.0, abs=0.01)
    assert bench.table.sim_s == pytest.approx(3600.0)
