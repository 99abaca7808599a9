from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchkit.ui.look import SAFE
from benchkit.ui.widgets.ring_cells import Sense, amount_of, ring_rows, ring_width, sense_of, turns_text

SENSES = st.sampled_from(("clockwise", "anticlockwise"))


@given(st.integers(3, 16), st.floats(0.0, 1.0), SENSES, st.text("0123456789/ %", max_size=8))
def test_size_and_characters(rows: int, share: float, sense: Sense, centre: str) -> None:
    drawn = ring_rows(rows, share, sense=sense, centre=centre)
    assert len(drawn) == rows
    assert {len(row) for row in drawn} == {ring_width(rows)}
    assert all(c.isascii() or c in SAFE for row in drawn for c in row)


@given(st.integers(5, 14), SENSES, st.floats(0.0, 0.9), st.floats(0.05, 0.1))
def test_more_fills_more(rows: int, sense: Sense, share: float, more: float) -> None:
    less, fuller = ("".join(ring_rows(rows, part, sense=sense)).count("█") for part in (share, share + more))
    assert less <= fuller
    assert "".join(ring_rows(rows, 1.0, sense=sense)).count("░") == 0
    assert "".join(ring_rows(rows, 0.0, sense=sense)).count("█") == 0


def test_a_quarter_lies_where_the_screw_is_turned_to() -> None:
    width = ring_width(7)
    for sense, left in (("clockwise", False), ("anticlockwise", True)):
        rows = ring_rows(7, 0.25, sense=sense)  # type: ignore[arg-type]
        filled = [(x, y) for y, row in enumerate(rows) for x, c in enumerate(row) if c == "█"]
        assert all((x <= width // 2) == left or x == width // 2 for x, _ in filled)
        assert all(y <= 3 for _, y in filled)


@pytest.mark.parametrize(
    ("advice", "sense"),
    [
        ("a quarter turn anticlockwise", "anticlockwise"),
        ("half a turn Clockwise", "clockwise"),
        ("hold: it is still rising", None),
        ("", None),
    ],
)
def test_the_sense_stands_in_the_words(advice: str, sense: str | None) -> None:
    assert sense_of(advice) == sense


@given(st.floats(0.0, 12.0))
def test_turns_in_words_are_near_what_is_meant(turns: float) -> None:
    text = turns_text(turns)
    if text == "a touch":
        assert turns < 0.02
        return
    total = 0.0
    for word in text.split():
        above, _, below = word.partition("/")
        total += int(above) / int(below or 1)
    assert math.isclose(total, turns, abs_tol=0.07)
    assert turns_text(-turns) == text


def test_degrees_and_a_touch_are_told_in_the_words_of_the_advice() -> None:
    assert amount_of("about 35 degrees clockwise", -0.1) == "35°"
    assert amount_of("a touch anticlockwise", 0.04) == "touch"
    assert amount_of("two turns clockwise", -2.0) == "2"
