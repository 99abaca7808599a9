"""Accuracy tables: ranges, half-widths, and reading them from plain rows."""

from __future__ import annotations

import math
import pickle
from itertools import pairwise
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchkit.errors import EntryError
from benchkit.measure.accuracy import (
    BENCH_METER,
    HANDHELD,
    STATED_DEFAULT,
    Accuracy,
    AccuracyRow,
    accuracy_from_rows,
)


def test_the_smallest_range_that_holds_the_reading() -> None:
    assert BENCH_METER.row("dc volts", 0.0).full_scale == 0.1
    assert BENCH_METER.row("dc volts", -0.1).full_scale == 0.1
    assert BENCH_METER.row("dc volts", 0.11).full_scale == 1.0
    assert BENCH_METER.row("dc volts", 0.01, range=10.0).full_scale == 10.0


def test_a_wider_range_is_never_better() -> None:
    for meter in (BENCH_METER, HANDHELD):
        for function, rows in meter.rows.items():
            for smaller, larger in pairwise(rows):
                at = smaller.full_scale
                assert larger.half_width(at) >= smaller.half_width(at), (meter.name, function, at)


def test_handheld_default() -> None:
    """0.5 % + 2 counts: 20 mV on 600 mV in 6000 steps is ±0.3 mV, so 0.1 mV is all it resolves."""
    assert STATED_DEFAULT is HANDHELD
    assert HANDHELD.row("dc volts", 0.02).half_width(0.02) == pytest.approx(0.0003)
    assert HANDHELD.standard_uncertainty("dc volts", 0.02) == pytest.approx(0.0003 / math.sqrt(3))


def test_two_wires_do_not_measure_an_emitter_resistor() -> None:
    """A 2-wire ohmmeter can't measure 0.22 ohm."""
    assert HANDHELD.row("ohms", 0.22).half_width(0.22) > 0.22


@pytest.mark.parametrize(
    ("function", "value", "range_", "words"),
    [
        ("dc current", 11.0, None, "beyond every dc current range"),
        ("dc volts", 1.0, 3.0, "has no 3.000 V range"),
        ("ohms 4-wire", 1.0, None, "says nothing about ohms 4-wire"),
    ],
)
def test_what_the_table_does_not_cover(function: str, value: float, range_: float | None, words: str) -> None:
    with pytest.raises(EntryError, match=words):
        HANDHELD.standard_uncertainty(function, value, range_)


@given(st.floats(-1000, 1000), st.floats(-1000, 1000))
def test_uncertainty_grows_with_the_reading(first: float, second: float) -> None:
    small, large = sorted((abs(first), abs(second)))
    for meter in (BENCH_METER, HANDHELD):
        assert 0 < meter.standard_uncertainty("dc volts", small) <= meter.standard_uncertainty("dc volts", large)
        assert meter.standard_uncertainty("dc volts", -large) == meter.standard_uncertainty("dc volts", large)


def test_rows_from_a_bench_file() -> None:
    meter = accuracy_from_rows(
        "shop meter",
        [
            {"function": "dc volts", "range": "20 V", "percent_of_reading": 0.05, "counts": 3, "resolution": "1 mV"},
            {"function": "dc volts", "range": 2, "percent_of_reading": "0.05 %", "percent_of_range": "0.01"},
            {"function": "ohms", "range": "200 ohm", "percent_of_reading": 0.2, "floor": "0R1"},
        ],
    )
    assert [row.full_scale for row in meter.rows["dc volts"]] == [2.0, 20.0]
    assert meter.row("dc volts", 10.0).half_width(10.0) == pytest.approx(0.005 + 0.003)
    assert meter.row("dc volts", 1.0).half_width(1.0) == pytest.approx(0.0005 + 0.0002)
    assert meter.row("ohms", 10.0).half_width(10.0) == pytest.approx(0.12)


@pytest.mark.parametrize(
    ("row", "words"),
    [
        ({}, "row 1 has no function"),
        ({"function": "weight"}, 'has "weight" as function'),
        ({"function": "dc volts"}, "has no range"),
        ({"function": "dc volts", "range": "2 A", "percent_of_reading": 1}, "range: .* is a current"),
        ({"function": "dc volts", "range": 0, "percent_of_reading": 1}, "is no full scale"),
        ({"function": "dc volts", "range": 1, "percent_of_reading": -1}, "negative"),
        ({"function": "dc volts", "range": 1, "percent_of_reading": True}, "bool"),
        ({"function": "dc volts", "range": 1, "percent_of_reading": float("nan")}, "nan"),
        ({"function": "dc volts", "range": 1, "percent_of_reading": 10**400}, "int"),
        ({"function": "dc volts", "range": 1, "percent_of_reading": []}, "list"),
        ({"function": "dc volts", "range": 1, "counts": 2}, "counts but no resolution"),
        ({"function": "dc volts", "range": 1}, "no error at all"),
        ({"function": "dc volts", "range": 1, "percent": 1}, 'has "percent"'),
    ],
)
def test_rows_refused(row: dict[str, Any], words: str) -> None:
    with pytest.raises(EntryError, match=words):
        accuracy_from_rows("shop meter", [row])


def test_no_rows_are_refused() -> None:
    with pytest.raises(EntryError, match="is empty"):
        accuracy_from_rows("shop meter", [])


def test_a_specification_is_plain_and_frozen() -> None:
    assert pickle.loads(pickle.dumps(BENCH_METER)) == BENCH_METER
    with pytest.raises(TypeError):
        BENCH_METER.rows["dc volts"] = ()  # type: ignore[index]
    with pytest.raises(ValueError, match="no function"):
        Accuracy("x", {"weight": (AccuracyRow(1.0, 1.0),)})
