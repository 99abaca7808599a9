"""Replies: one pattern or no number; overload is a type of its own; nothing unprintable gets through."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchkit.errors import InstrumentError
from benchkit.instruments.numbers import (
    NumberRules,
    parse_flags,
    parse_number,
    parse_numbers,
    parse_switches,
    visible,
)
from benchkit.quantities import Overload

RULES = NumberRules()
WITH_UNIT = NumberRules(units=("V", "VDC"))


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("1", 1.0),
        ("+1.23450000E-02", 0.012345),
        ("-.5", -0.5),
        ("5.", 5.0),
        ("1e3", 1000.0),
        (" 2.5\r", 2.5),
        ("0", 0.0),
        ("+0.000E+00", 0.0),
        ("8.9E37", 8.9e37),
    ],
)
def test_numbers(text: str, value: float) -> None:
    assert parse_number(text, RULES) == value


@pytest.mark.parametrize(
    ("text", "positive"),
    [
        ("+9.90000000E+37", True),
        ("-9.9E37", False),
        ("9.91E37", True),
        ("1e999", True),
        ("OL", True),
        ("-OL", False),
        ("ovld", True),
        ("NAN", True),
        ("-INF", False),
    ],
)
def test_overloads(text: str, positive: bool) -> None:
    assert parse_number(text, RULES) == Overload(positive=positive)


@pytest.mark.parametrize(
    "text",
    [
        "",
        " ",
        "+",
        ".",
        "e5",
        "1.2.3",
        "1,2",
        "1 2",
        "0x10",
        "1_000",
        "1e",
        "--1",
        "1.5V",
        "1.5 V",
        "1.5e-3 mV",
        "١٢",
        "1\x00",
        "\x1b[2J1",
        "infinite",
        "1.23e-02\n4",
        "True",
    ],
)
def test_what_is_no_number(text: str) -> None:
    with pytest.raises(InstrumentError) as caught:
        parse_number(text, RULES)
    assert caught.value.kind == "garbled"
    assert caught.value.message.isprintable()


def test_known_units_are_dropped_and_others_refused() -> None:
    assert parse_number("1.5V", WITH_UNIT) == parse_number("1.5 VDC", WITH_UNIT) == 1.5
    with pytest.raises(InstrumentError):
        parse_number("1.5 mV", WITH_UNIT)


@given(value=st.floats(min_value=-8e37, max_value=8e37))
def test_every_way_of_printing_a_number_comes_back(value: float) -> None:
    assert parse_number(repr(value), RULES) == value
    assert parse_number(f"{value:+.16E}", RULES) == pytest.approx(value, rel=1e-15)


@given(text=st.text(max_size=30))
def test_any_text_is_a_number_an_overload_or_garbled(text: str) -> None:
    try:
        value = parse_number(text, RULES)
    except InstrumentError as error:
        message = error.message
        assert message.isprintable()
    else:
        assert isinstance(value, Overload) or (math.isfinite(value) and abs(value) < 9e37)


@given(text=st.text(alphabet="0123456789+-.,eE ONF", max_size=12), count=st.integers(1, 3))
def test_lists_have_the_wanted_length_or_are_garbled(text: str, count: int) -> None:
    for parse in (
        lambda: parse_numbers(text, count, RULES),
        lambda: parse_switches(text, count),
        lambda: parse_flags(text, count),
    ):
        try:
            values = parse()
        except InstrumentError:
            continue
        assert len(values) == count


@pytest.mark.parametrize("text", ["1", "1,2,3", "1,", ",1", "1,9.9E37", "1,OL", "1;2"])
def test_two_numbers_or_nothing(text: str) -> None:
    with pytest.raises(InstrumentError):
        parse_numbers(text, 2, RULES)


def test_switches_and_flags() -> None:
    assert parse_switches("1,0", 2) == (True, False)
    assert parse_switches("ON, off\r", 2) == (True, False)
    assert parse_flags("0,+513", 2) == (0, 513)
    for text in ("2,0", "1", "CV,CC"):
        with pytest.raises(InstrumentError):
            parse_switches(text, 2)
    for text in ("-1,0", "1.0,0", "65536,0", "99999999,0"):
        with pytest.raises(InstrumentError):
            parse_flags(text, 2)


@given(data=st.binary(max_size=300))
def test_what_is_shown_is_printable_and_short(data: bytes) -> None:
    shown = visible(data)
    assert shown.isprintable()
    assert shown.isascii()
    assert len(shown) < 300
