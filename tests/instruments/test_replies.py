"""Replies of other dialects: the whole reply fits, in the unit that was asked for, or it is no reading."""

from __future__ import annotations

from typing import Any

import pytest

from benchkit.errors import InstrumentError
from benchkit.instruments.profile import meter_profile
from benchkit.instruments.profile_parts import NumbersPart
from benchkit.instruments.replies import WordRules
from benchkit.quantities import Overload

UNITS = {"mV": "1 mV", "V": "1 V", "ohm": "1 ohm", "kohm": "1 kohm", "Mohm": "1 Mohm", "C": "1 degC", "VDC": "1 V"}
SERIAL = meter_profile("serial-meter").numbers


@pytest.mark.parametrize(
    ("part", "unit", "text", "value"),
    [
        ({}, "V", "+1.25E-03", 0.00125),
        ({"units": ["V", "OHM"]}, "V", "1.5 V", 1.5),
        ({"units": ["V", "OHM"]}, "V", "1.5V\r", 1.5),
        ({"units": UNITS}, "V", "12.5 mV", 0.0125),
        ({"units": UNITS}, "V", "12.5VDC", 12.5),
        ({"units": UNITS}, "V", "1.5", 1.5),
        ({"units": UNITS}, "ohm", "4.7 kohm", 4700.0),
        ({"units": UNITS}, "ohm", "4.7 Mohm", 4.7e6),
        ({"units": UNITS}, "degC", "31.5C", 31.5),
        ({"reply": "{any},{value}"}, "V", "DCV,1.5", 1.5),
        ({"reply": "{value},{any},{any}"}, "V", "-1.5E+0,3,AUTO", -1.5),
        ({"reply": "<{value}>"}, "V", "<2>", 2.0),
        ({"digits_after_point": 3}, "V", "1.500", 1.5),
    ],
)
def test_taken(part: dict[str, Any], unit: str, text: str, value: float) -> None:
    assert NumbersPart(**part).rules(unit).read(text) == pytest.approx(value)


@pytest.mark.parametrize(
    ("part", "text", "positive"),
    [
        ({}, "9.9E37", True),
        ({}, "-9.90000000E+37", False),
        ({}, "9.91E37", True),
        ({}, "OVLD", True),
        ({"overload_from": 1e9}, "+1.0E+9", True),
        ({"overload_values": [9999.0]}, "9.999E+03", True),
        ({"overload_values": [9999.0], "units": UNITS}, "-9999 mV", False),
        ({"overload_words": ["O.F"]}, "O.F", True),
        ({"units": UNITS}, "OL V", True),
        ({"unit_needed": True, "units": UNITS}, "OL", True),
        ({"reply": "{any} {value}"}, "DCV OL", True),
    ],
)
def test_overloads_are_no_numbers(part: dict[str, Any], text: str, positive: bool) -> None:
    assert NumbersPart(**part).rules("V").read(text) == Overload(positive=positive)
    with pytest.raises(InstrumentError, match="not beyond the range"):
        NumbersPart(**part).rules("V").number(text)


@pytest.mark.parametrize(
    ("part", "text"),
    [
        ({}, "1.5 V"),
        ({}, ""),
        ({}, "1.5,2.5"),
        ({}, "nan"[:2]),
        ({"units": UNITS}, "1.5 ohm"),
        ({"units": UNITS}, "1.5 kohm"),
        ({"units": UNITS}, "1.5 mW"),
        ({"units": UNITS}, "mV"),
        ({"units": UNITS}, "1.5 mV V"),
        ({"units": UNITS}, "1,5 V"),
        ({"unit_needed": True, "units": UNITS}, "1.5"),
        ({"unit_needed": True, "units": UNITS}, "1.5 m"),
        ({"digits_after_point": 3}, "1.50"),
        ({"digits_after_point": 3}, "1.5000"),
        ({"digits_after_point": 3}, "1"),
        ({"reply": "{any},{value}"}, "1.5"),
        ({"reply": "{any},{value}"}, "A,B,1.5"),
        ({"reply": "<{value}>"}, "<2"),
        ({"reply": "{value}."}, "2x"),
        ({"overload_words": []}, "OL"),
    ],
)
def test_refused(part: dict[str, Any], text: str) -> None:
    with pytest.raises(InstrumentError) as caught:
        NumbersPart(**part).rules("V").read(text)
    assert caught.value.kind == "garbled"


@pytest.mark.parametrize("length", range(len("DCV 12.345 mV")))
def test_a_reply_cut_short_anywhere_is_no_reading(length: int) -> None:
    whole = "DCV 12.345 mV"
    assert SERIAL.rules("V").read(whole) == pytest.approx(0.012345)
    with pytest.raises(InstrumentError):
        SERIAL.rules("V").read(whole[:length])


@pytest.mark.parametrize(
    ("rules", "text", "value"),
    [
        (WordRules(), "1", True),
        (WordRules(), " off\r", False),
        (WordRules(yes=("CC",), no=("CV", "OFF")), '"cc"', True),
        (WordRules(yes=("CC",), no=("CV", "OFF")), "OFF", False),
        (WordRules(bits=2), "3", True),
        (WordRules(bits=2), "1", False),
        (WordRules(), "2", None),
        (WordRules(), "", None),
        (WordRules(yes=("CC",), no=("CV",)), "1", None),
        (WordRules(bits=2), "ON", None),
        (WordRules(bits=2), "65536", None),
    ],
)
def test_words(rules: WordRules, text: str, value: bool | None) -> None:
    if value is None:
        with pytest.raises(InstrumentError):
            rules.read(text)
    else:
        assert rules.read(text) is value
