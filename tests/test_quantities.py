"""Entry lines: what is taken, what is refused and in which words, and that showing and reading belong together."""

from __future__ import annotations

import math
import re
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchkit.errors import EntryError
from benchkit.quantities import Overload, Tolerance, parse, parse_reading, parse_tolerance, quoted, show, show_within
from benchkit.quantities.units import wanted

UNITS = ["V", "A", "ohm", "F", "degC", "K", "K/W", "J/K", "s", "W", "Hz", "%"]
BOUNDS = {
    "V": 1e6, "A": 1e6, "ohm": 1e15, "F": 1e6, "degC": 1e4, "K": 1e4, "K/W": 1e9, "J/K": 1e9, "s": 1e9, "W": 1e9,
    "Hz": 1e12, "%": 1e6,
}  # fmt: skip

TAKEN = [
    ("12.3 mV", "V", 0.0123),
    ("12.3mV", "V", 0.0123),
    ("  12.3   mV\n", "V", 0.0123),
    ("12.3m", "V", 0.0123),
    ("15V", "V", 15.0),
    ("15 v", "V", 15.0),
    ("-35 V", "V", -35.0),
    ("\N{MINUS SIGN}35 V", "V", -35.0),
    ("+5", "V", 5.0),
    ("1e-3", "V", 0.001),
    ("1e-3 mV", "V", 1e-6),
    (".5", "V", 0.5),
    ("5.", "V", 5.0),
    ("12 \N{MICRO SIGN}V", "V", 12e-6),
    ("12 \N{GREEK SMALL LETTER MU}V", "V", 12e-6),
    ("12 uV", "V", 12e-6),
    ("12\N{NO-BREAK SPACE}mV", "V", 0.012),
    ("50 mA", "A", 0.05),
    ("4k7", "ohm", 4700.0),
    ("4K7", "ohm", 4700.0),
    ("4k7 ohm", "ohm", 4700.0),
    ("4k7\N{OHM SIGN}", "ohm", 4700.0),
    ("0R22", "ohm", 0.22),
    ("R22", "ohm", 0.22),
    ("47R", "ohm", 47.0),
    ("0.22R", "ohm", 0.22),
    ("22K", "ohm", 22e3),
    ("22k", "ohm", 22e3),
    ("1Meg", "ohm", 1e6),
    ("2M2", "ohm", 2.2e6),
    ("1 kohm", "ohm", 1e3),
    ("1 kΩ", "ohm", 1e3),
    ("1 k\N{OHM SIGN}", "ohm", 1e3),
    ("1 KOHM", "ohm", 1e3),
    ("22", "ohm", 22.0),
    ("1 mohm", "ohm", 1e-3),
    ("1 Mohm", "ohm", 1e6),
    ("4n7", "F", 4.7e-9),
    ("4n7 F", "F", 4.7e-9),
    ("10 mF", "F", 0.01),
    ("100u", "F", 1e-4),
    ("25 degC", "degC", 25.0),
    ("25 °C", "degC", 25.0),
    ("25\N{DEGREE CELSIUS}", "degC", 25.0),
    ("-10", "degC", -10.0),
    ("300 K", "K", 300.0),
    ("1.2 K/W", "K/W", 1.2),
    ("400 J/K", "J/K", 400.0),
    ("3 s", "s", 3.0),
    ("10 kHz", "Hz", 1e4),
    ("5 %", "%", 5.0),
    ("5", "%", 5.0),
]

REFUSED = [
    ("", "V", "Nothing was entered"),
    ("   ", "V", "Nothing was entered"),
    ("abc", "V", "is not a quantity"),
    ("V", "V", "is not a quantity"),
    ("12,3 mV", "V", "holds a comma"),
    ("1,234", "ohm", "holds a comma"),
    ("1_000", "V", "where a unit belongs"),
    ("1 000 V", "V", "where a unit belongs"),
    ("1.2.3", "V", "where a unit belongs"),
    ("--5", "V", "is not a quantity"),
    ("0x10", "V", "where a unit belongs"),
    ("nan", "V", "is not a finite number"),
    ("NaN V", "V", "is not a finite number"),
    ("-inf", "V", "is not a finite number"),
    ("1e400", "V", "is not a finite number"),
    ("1e99999", "V", "where a unit belongs"),
    ("9.9E37", "V", "beyond anything"),
    ("2 GV", "V", "where a unit belongs"),
    ("12 MV", "V", "says mega"),
    ("12 MA", "A", "says mega"),
    ("100m", "ohm", "could be milliohms or megohms"),
    ("4m7", "ohm", "where a unit belongs"),
    ("4k7", "V", "written like the code on a resistor"),
    ("4k7 V", "V", "written like the code on a resistor"),
    ("3V3", "V", "where a unit belongs"),
    ("4k7k7", "ohm", "where a unit belongs"),
    ("k", "ohm", "is not a quantity"),
    ("12 mV", "A", "is a voltage"),
    ("12 mA", "V", "is a current"),
    ("1 kohm", "V", "is a resistance"),
    ("5 V", "ohm", "is a voltage"),
    ("25 degC", "V", "is a temperature"),
    ("OL", "V", "is an overload"),
    ("٣ V", "V", "digits other than 0 to 9"),
    ("12\x1b[2J", "V", "can't be printed"),
    ("12\x00", "V", "can't be printed"),
    ("12\N{RIGHT-TO-LEFT OVERRIDE}V", "V", "can't be printed"),
    ("-300", "degC", "beyond anything"),
    ("-1", "K", "beyond anything"),
    ("1" * 61, "V", "61 characters long"),
]


@pytest.mark.parametrize(("text", "unit", "value"), TAKEN)
def test_taken(text: str, unit: str, value: float) -> None:
    assert parse(text, unit) == value
    assert parse_reading(text, unit) == value


@pytest.mark.parametrize(("text", "unit", "words"), REFUSED)
def test_refused(text: str, unit: str, words: str) -> None:
    with pytest.raises(EntryError, match="Expected a") as caught:
        parse(text, unit)
    if text.strip():
        assert words in caught.value.came
    assert caught.value.message.isprintable()
    assert caught.value.exit_status == 2


def test_refusals_say_what_to_write_instead() -> None:
    with pytest.raises(EntryError) as caught:
        parse("12,3 mV", "V")
    assert str(caught.value) == (
        '"12,3 mV" holds a comma, which can mean a decimal point or thousands. Expected a voltage, such as "12.3 mV" '
        'or "0.0123 V". Write the number with a point and without separators.'
    )


def test_rounded_once() -> None:
    """The prefix moves the decimal point; it doesn't multiply a rounded number."""
    assert parse("0.7 mV", "V") == 0.0007
    assert parse("1.1 mA", "A") == 0.0011
    assert parse("0.11 uV", "V") == 0.11e-6
    assert 0.11 * 1e-6 != 0.11e-6


@pytest.mark.parametrize(
    "text", ["OL", "ol", "o.l.", "O.L", "0L", "0.L", "overload", "Over load", "OVLD", "9.9E37", "+9.9e+37"]
)
def test_overload(text: str) -> None:
    assert parse_reading(text, "V") == Overload(positive=True)


@pytest.mark.parametrize("text", ["-OL", "- overload", "-9.9E37", "-9.90000000E+37"])
def test_negative_overload(text: str) -> None:
    assert parse_reading(text, "ohm") == Overload(positive=False)


def test_not_a_number_of_an_instrument() -> None:
    """SCPI-1999, volume 1, 7.2.1.5."""
    with pytest.raises(EntryError, match="no number"):
        parse_reading("9.91E37", "V")


@pytest.mark.parametrize(
    ("text", "unit", "value", "fraction"),
    [
        ("1 kohm 1 %", "ohm", 1000.0, 0.01),
        ("1 kohm 1%", "ohm", 1000.0, 0.01),
        ("1 kohm ±1 %", "ohm", 1000.0, 0.01),
        ("1 kohm +/- 1 %", "ohm", 1000.0, 0.01),
        ("4k7 5 %", "ohm", 4700.0, 0.05),
        ("4k7J", "ohm", 4700.0, 0.05),
        ("22KK", "ohm", 22e3, 0.10),
        ("22K", "ohm", 22e3, 0.0),
        ("8 mA 5 %", "A", 0.008, 0.05),
        ("8 mA", "A", 0.008, 0.0),
        ("8 mA 0 %", "A", 0.008, 0.0),
        ("10 V 0.1 %", "V", 10.0, 0.001),
    ],
)
def test_tolerance(text: str, unit: str, value: float, fraction: float) -> None:
    found = parse_tolerance(text, unit)
    assert isinstance(found, Tolerance)
    assert found.value == value
    assert found.fraction == pytest.approx(fraction, rel=1e-15)


@pytest.mark.parametrize(
    "text", ["8 mA -5 %", "8 mA 100 %", "8 mA 5", "5 %", "%", "8 mA 5 % 5 %", "8 mA nan %", "8 V 5 %", ""]
)
def test_tolerance_refused(text: str) -> None:
    with pytest.raises(EntryError):
        parse_tolerance(text, "A")


@pytest.mark.parametrize(
    ("value", "unit", "digits", "text"),
    [
        (0.0123, "V", 4, "12.30 mV"),
        (0.0123, "V", 2, "12 mV"),
        (-35.0, "V", 4, "-35.00 V"),
        (4700.0, "ohm", 4, "4.700 kohm"),
        (0.22, "ohm", 4, "0.2200 ohm"),
        (0.99999, "ohm", 4, "1.000 ohm"),
        (0.099996, "V", 4, "100.0 mV"),
        (0.0, "V", 4, "0.000 V"),
        (25.0, "degC", 3, "25.0 degC"),
        (0.01, "%", 1, "0.01 %"),
        (12345.0, "s", 4, "12345 s"),
        (1e-15, "A", 4, "1.000e-15 A"),
        (None, "V", 4, "no number"),
        (math.nan, "V", 4, "no number"),
        (math.inf, "V", 4, "no number"),
        (Overload(), "V", 4, "overload"),
        (Overload(positive=False), "V", 4, "overload, negative"),
    ],
)
def test_show(value: float | Overload | None, unit: str, digits: int, text: str) -> None:
    assert show(value, unit, digits) == text


def test_ohms_are_never_shown_in_milli() -> None:
    """Nobody may take "220 mohm" for 220 Mohm."""
    for exponent in range(-12, 12):
        assert " mohm" not in show(2.2 * 10.0**exponent, "ohm")


def test_unknown_unit_is_a_mistake_of_ours() -> None:
    for read in (parse, parse_reading, parse_tolerance):
        with pytest.raises(ValueError, match="no unit"):
            read("1", "furlong")


def test_quoted_is_fit_for_a_line() -> None:
    assert quoted("a\x1b[2J\n") == '"a\\x1b[2J\\n"'
    assert quoted("x" * 100) == f'"{"x" * 40}…"'
    assert quoted(3) == 'int "3"'


def test_preferences_of_others_do_not_reach_us() -> None:
    from quantiphy import Quantity

    others: Any = Quantity
    with others.prefs(spacer="", output_sf="", radix=",", map_sf={"m": "x"}):
        assert show(0.0123, "V") == "12.30 mV"
        assert parse("12.3 mV", "V") == 0.0123


entry_characters = st.text(
    alphabet=st.sampled_from("0123456789.,+-eE kKmMuµμnpGRrLΩVAFohmdegC°%/W±\N{MINUS SIGN}\N{NO-BREAK SPACE}naiflOL"),
    max_size=14,
)


def _fit_for_a_line(error: EntryError) -> None:
    assert error.message.isprintable()
    assert len(error.message) < 500


@given(st.one_of(st.text(max_size=70), entry_characters), st.sampled_from(UNITS))
def test_anything_is_a_finite_number_or_refused(text: str, unit: str) -> None:
    for read in (parse, parse_reading):
        try:
            value = read(text, unit)
        except EntryError as error:
            _fit_for_a_line(error)
        else:
            assert isinstance(value, Overload) or math.isfinite(value)
    if unit != "%":
        try:
            marked = parse_tolerance(text, unit)
        except EntryError:
            pass
        else:
            assert math.isfinite(marked.value)
            assert 0 <= marked.fraction < 1


@given(st.data(), st.sampled_from(UNITS))
def test_shown_with_all_digits_reads_back_exactly(data: st.DataObject, unit: str) -> None:
    low = {"K": 0.0, "degC": -273.15}.get(unit, -BOUNDS[unit])
    value = data.draw(st.floats(low, BOUNDS[unit], allow_nan=False, allow_infinity=False))
    assert parse(show(value, unit, 17), unit) == value


@given(st.data(), st.sampled_from(UNITS), st.integers(1, 16))
def test_shown_with_fewer_digits_reads_back_rounded(data: st.DataObject, unit: str, digits: int) -> None:
    size = data.draw(st.floats(1e-12, 0.9)) * BOUNDS[unit] * 0.5
    assert parse(show(size, unit, digits), unit) == pytest.approx(size, rel=0.51 * 10.0 ** (1 - digits) + 1e-15)


@given(st.floats(1e-2, 9.9e8, allow_nan=False), st.floats(0, 99, allow_nan=False))
def test_tolerance_reads_back(value: float, percent: float) -> None:
    found = parse_tolerance(f"{show(value, 'ohm', 17)} {show(percent, '%', 17)}", "ohm")
    assert found.value == value
    assert found.fraction == pytest.approx(percent / 100, rel=1e-15)


@pytest.mark.parametrize("unit", UNITS)
def test_the_examples_of_a_refusal_carry_their_unit_and_can_be_read(unit: str) -> None:
    examples = re.findall('"([^"]+)"', wanted(unit))
    assert examples
    for example in examples:
        assert not re.fullmatch(r"[-+0-9.eE]+", example), f"{example} leaves its unit out"
        assert math.isfinite(parse(example, unit))


@pytest.mark.parametrize(
    ("value", "unit", "uncertainty", "shown"),
    [
        (610e-9, "V", 4e-6, "0.6 uV"),
        (80e-9, "V", 4e-6, "0.1 uV"),
        (2e-6, "V", 4.04e-6, "2.0 uV"),
        (86e-6, "V", 400e-6, "90 uV"),
        (-1e-9, "V", 4e-6, "0.0 uV"),
        (-80e-9, "V", 4e-6, "-0.1 uV"),
        (0.0, "V", 4e-6, "0.0 uV"),
        (12.3456e-3, "V", 0.2e-3, "12.35 mV"),
        (12.3456e-3, "V", 2e-3, "12.3 mV"),
        (35.012, "V", 0.2, "35.01 V"),
        (0.22, "ohm", 0.05, "0.220 ohm"),
        (0.01, "ohm", 0.05, "0.010 ohm"),
        (12.3456e-3, "V", None, "12.35 mV"),
        (12.3456e-3, "V", 0.0, "12.35 mV"),
        (None, "V", 1.0, "no number"),
        (Overload(), "V", 1.0, "overload"),
    ],
)
def test_no_digit_is_shown_below_the_uncertainty(
    value: float | Overload | None, unit: str, uncertainty: float | None, shown: str
) -> None:
    assert show_within(value, unit, uncertainty) == shown


@given(st.floats(-270.0, 9e3), st.floats(1e-9, 1e3), st.sampled_from(["V", "A", "ohm", "degC"]))
def test_what_is_left_out_is_small_beside_the_uncertainty(value: float, uncertainty: float, unit: str) -> None:
    text = show_within(value, unit, uncertainty, 17)
    assert abs(parse(text, unit) - value) <= 0.05 * uncertainty * (1 + 1e-9) + 1e-11
