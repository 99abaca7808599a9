"""Files of readings: what is taken, and where every refusal points."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchkit.errors import FileError
from benchkit.judge.entries import Entry, parse_entries, read_text
from benchkit.measure.accuracy import BENCH_METER, HANDHELD
from benchkit.stage.conditions import Condition, Unpowered
from tests.judge.designs import tern

TERN_AT_15 = Condition(positive_v=15.0, negative_v=-15.0, trimmer="least", when="cold")
HEADER = "point,value,unit,positive,negative,limit,trimmer,when,ambient,uncertainty"


def _entries(text: str) -> tuple[Entry, ...]:
    return parse_entries(text, tern(), BENCH_METER, "unit-7.csv")


def _one(line: str, header: str = HEADER) -> Entry:
    (entry,) = _entries(f"{header}\n{line}\n")
    return entry


def test_a_plain_reading_has_the_design_s_condition() -> None:
    entry = _one("spread,2.43,V", "point,value,unit")
    assert entry.reading.value == 2.43
    assert entry.reading.meter == BENCH_METER.name
    assert entry.reading.standard_uncertainty == pytest.approx(BENCH_METER.standard_uncertainty("dc volts", 2.43))
    assert entry.condition == Condition(positive_v=35.0, negative_v=-35.0, trimmer="unknown", when="cold")


def test_a_whole_line() -> None:
    entry = _one("emitter.upper.1,21.9,mV,15 V,-15,50 mA,0.25,Warm,22 degC,0.1")
    assert entry.reading.value == pytest.approx(0.0219)
    assert entry.reading.standard_uncertainty == pytest.approx(1e-4)
    assert entry.reading.own_uncertainty is None
    assert entry.condition == Condition(
        positive_v=15.0, negative_v=-15.0, limit_a=0.05, trimmer=0.25, when="warm", ambient_c=22.0
    )


@pytest.mark.parametrize(
    ("value", "unit", "point", "found"),
    [
        ("21.9", "mV", "emitter.upper.1", 0.0219),
        ("21.9 mV", "V", "emitter.upper.1", 0.0219),
        ("0.0219", "", "emitter.upper.1", 0.0219),
        ("2.19e-2", "V", "emitter.upper.1", 0.0219),
        ("\N{MINUS SIGN}35", "V", "rail-", -35.0),
        ("19.4", "mA", "rail+.current", 0.0194),
        ("4k7", "ohm", "ohm.rails", 4700.0),
        ("4.7", "kohm", "ohm.rails", 4700.0),
        ("0R22", "Ω", "ohm.emitter.upper.1", 0.22),
        ("23.5", "°C", "heatsink", 23.5),
    ],
)
def test_units(value: str, unit: str, point: str, found: float) -> None:
    assert _one(f"{point},{value},{unit}", "point,value,unit").reading.value == pytest.approx(found, rel=1e-12)


@pytest.mark.parametrize("text", ["OL", "overload", "9.9E37", "9.90000000E+37"])
def test_overload(text: str) -> None:
    entry = _one(f"ohm.rails,{text},kohm", "point,value,unit")
    assert entry.reading.overload
    assert entry.reading.value is None
    assert isinstance(entry.condition, Unpowered)


def test_lines_of_the_same_cells_have_the_same_condition_and_others_their_own() -> None:
    lines = (
        "rail+,15,V,15 V,-15 V,50 mA,least,cold,,", "output,1,mV,15 V,-15 V,50 mA,least,cold,,",
        "output,1,mV,15 V,-15 V,60 mA,least,cold,,", "ohm.rails,1,kohm,15 V,-15 V,50 mA,least,cold,,",
        "ohm.output,1,kohm,15 V,-15 V,50 mA,least,cold,,", "rail+,15,V,15 V,-15 V,50 mA,least,cold,,",
    )  # fmt: skip
    found = [entry.condition for entry in _entries("\n".join((HEADER, *lines)))]
    assert found[0] == found[1] == found[5] == replace(TERN_AT_15, limit_a=0.05)
    assert found[2] == replace(TERN_AT_15, limit_a=0.06)
    assert found[3:5] == [Unpowered(point=point, trimmer="least") for point in ("ohm.rails", "ohm.output")]
    with pytest.raises(FileError, match="line 4, limit"):
        _entries("\n".join((HEADER, *lines[:2], lines[2].replace("60 mA", "60 mV"))))


def test_columns_in_any_order_with_spaces_quotes_and_a_mark_at_the_start() -> None:
    text = '\ufeff Unit , POINT,value\r\n\r\nV, spread ,"2.43"\r\n'
    (entry,) = _entries(text)
    assert (entry.line, entry.point.name, entry.reading.value) == (3, "spread", 2.43)


def test_an_assumed_meter_shows_as_many_digits_as_were_written() -> None:
    text = "point,value,unit\nemitter.upper.1,0.0148,mV\nemitter.upper.1,22.1,mV\nspread,2.4,V\n"
    fine, coarse, rounded = parse_entries(text, tern(), HANDHELD, assumed=True)
    assert fine.reading.own_uncertainty == pytest.approx(2e-6 / 3**0.5)
    assert coarse.reading.own_uncertainty == pytest.approx(2e-4 / 3**0.5)
    assert rounded.reading.own_uncertainty == pytest.approx(2e-3 / 3**0.5)
    stated = parse_entries(text, tern(), HANDHELD)
    assert stated[0].reading.own_uncertainty == pytest.approx(2e-4 / 3**0.5)


@pytest.mark.parametrize(
    ("line", "where", "words"),
    [
        ("spred,2.4,V", "line 2, point", "perhaps spread"),
        (",2.4,V", "line 2, point", "is empty"),
        ("spread,,V", "line 2, value", "is empty"),
        ("spread,two,V", "line 2, value", "is not a quantity"),
        ("spread,nan,V", "line 2, value", "not a finite number"),
        ("spread,9.91E37,V", "line 2, value", "no number"),
        ("spread,5000,V", "line 2, value", "beyond every dc volts range"),
        ("spread,2.4,mA", "line 2, unit", "is a current"),
        ("spread,2.4 mA,V", "line 2, value", "is a current"),
        ("spread,2.4,V,15 A", "line 2, positive", "is a current"),
        ("spread,2.4,V,15,15", "line 2, negative", "0 V or below"),
        ("spread,2.4,V,-15,-15", "line 2", "positive"),
        ("spread,2.4,V,15,-15,-1", "line 2", "limit"),
        ("spread,2.4,V,15,-15,0.05,middle", "line 2, trimmer", "least, most"),
        ("spread,2.4,V,15,-15,0.05,1.5", "line 2, trimmer", "least, most"),
        ("spread,2.4,V,15,-15,0.05,least,hot", "line 2, when", "cold or warm"),
        ("spread,2.4,V,15,-15,0.05,least,cold,25,-1", "line 2, uncertainty", "zero or above"),
        ("spread,2.4,V,15,-15,0.05,least,cold,25,1 %", "line 2, uncertainty", "is a percentage"),
        ("spread,2,4,V,15,-15,0.05,least,cold,25,0.001", "line 2", "decimal comma"),
        ('spread,"2.4,V', "line 2", "not CSV"),
    ],
)
def test_refusals_name_the_place(line: str, where: str, words: str) -> None:
    with pytest.raises(FileError) as caught:
        _one(line)
    assert caught.value.message.startswith(f"unit-7.csv, {where}")
    assert words in caught.value.message
    assert caught.value.exit_status == 2


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("", "is empty"),
        ("\n\n", "is empty"),
        ("point,value,unit\n", "holds no reading"),
        ("point;value;unit\nspread;2,4;V\n", "separated by semicolons"),
        ("point\tvalue\tunit\n", "separated by tabs"),
        ("point,value\nspread,2.4\n", "no column unit"),
        ("point,value,units\nspread,2.4,V\n", "Perhaps unit was meant"),
        ("point,value,unit,value\nspread,2.4,V,2\n", "there twice"),
        ("spread,2.4,V\n", 'a column "spread"'),
    ],
)
def test_headers_refused(text: str, words: str) -> None:
    with pytest.raises(FileError) as caught:
        _entries(text)
    assert words in caught.value.message


def test_the_line_is_counted_over_quoted_line_breaks() -> None:
    with pytest.raises(FileError, match="line 4, value"):
        _entries('point,value,unit\n"spread","2.4","V\n"\nspread,x,V\n')


def test_reading_the_file(tmp_path: Path) -> None:
    path = tmp_path / "unit.csv"
    path.write_bytes(b"\xef\xbb\xbfpoint,value,unit\n")
    assert read_text(path) == "point,value,unit\n"
    path.write_bytes(b"point,value,unit\nspread,2.4,\xff\n")
    with pytest.raises(FileError, match="not UTF-8"):
        read_text(path)
    with pytest.raises(FileError, match="can't be read"):
        read_text(tmp_path / "missing.csv")


cells = st.lists(
    st.one_of(
        st.text(max_size=8),
        st.sampled_from(
            [
                "point",
                "value",
                "unit",
                "spread",
                "2.4",
                "V",
                "OL",
                "mV",
                "least",
                "",
                '"',
                "1e999",
                "9.91E37",
                "-",
                "\x00",
            ]
        ),
    ),
    max_size=11,
)


@given(st.lists(cells, max_size=4), st.booleans())
def test_any_text_is_read_or_refused_in_our_words(lines: list[list[str]], headed: bool) -> None:
    text = "\n".join(([HEADER] if headed else []) + [",".join(line) for line in lines])
    try:
        entries = _entries(text)
    except FileError as error:
        message = error.message
    else:
        assert entries
        message = "taken"
    assert message.isprintable()
