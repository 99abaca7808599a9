"""Marks: never used again soon, recognised in an answer, not in a reading."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchkit.instruments.marks import MARKS, Marks, shows


def test_none_comes_again_before_half_of_the_others() -> None:
    marks = Marks()
    drawn = [marks.fresh() for _ in range(2000)]
    half = len(MARKS) // 2
    assert all(drawn[place] not in drawn[max(0, place - half) : place] for place in range(len(drawn)))
    assert set(drawn) == set(MARKS)


def test_they_fit_a_register_of_eight_bits_and_differ_from_walk_to_walk() -> None:
    assert all(0 < mark < 256 for mark in MARKS)
    assert len({tuple(Marks().fresh() for _ in range(5)) for _ in range(20)}) > 15


@pytest.mark.parametrize("line", ["37", " 37\r", "+37", "037", '"37"', "#H ESE 37"])
def test_shown(line: str) -> None:
    assert shows(line, 37)


@pytest.mark.parametrize(
    "line", ["", "3", "370", "137", "37.0", "3.7E+1", "+37,37", "37;1", "0,37", ".37", "37 37", "-"]
)
def test_not_shown(line: str) -> None:
    assert not shows(line, 37)


@given(value=st.floats(allow_nan=False, allow_infinity=False), mark=st.sampled_from(MARKS))
def test_a_reading_as_instruments_write_it_shows_no_mark(value: float, mark: int) -> None:
    assert not shows(f"{value:+.6E}", mark)
