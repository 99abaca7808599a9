from __future__ import annotations

import csv
import io
import json
from dataclasses import replace
from pathlib import Path

import pytest

from benchkit.errors import FileError
from benchkit.events import ReadingTaken
from benchkit.record import table
from benchkit.record.summary import load_summary
from tests.record.walks import closed, good_events, opened, overridden_events, repair_events, suspicious_events, write


def read_back(text: str) -> list[dict[str, str]]:
    return list(csv.DictReader(io.StringIO(text)))


def test_one_row_a_reading_in_base_units_and_full_precision(tmp_path: Path) -> None:
    good = load_summary(write(tmp_path / "a.jsonl", closed(good_events())))
    other = load_summary(write(tmp_path / "b.jsonl", overridden_events()))
    text = table.csv_text([good, other])
    assert "\r" not in text
    rows = read_back(text)
    assert tuple(rows[0]) == table.COLUMNS
    assert [(row["record"], row["point"], row["value"], row["verdict"]) for row in rows] == [
        ("a.jsonl", "ohm.rails", "", "pass"),
        ("a.jsonl", "output", "0.0123", "pass"),
        ("b.jsonl", "ohm.rails", "", "pass"),
        ("b.jsonl", "output", "0.5", "fail"),
        ("b.jsonl", "output", "0.0199", "undecided"),
    ]
    assert [row["overload"] for row in rows] == ["True", "False", "True", "False", "False"]
    assert [row["replaced"] for row in rows] == ["False", "False", "False", "True", "False"]
    assert rows[4]["overridden"] == "the front end is not fitted"
    assert rows[1]["at"] == "2031-04-05T06:07:15.000000Z"
    assert rows[1]["condition"] == "'+12 V -12 V, trimmer least, cold"
    assert rows[1]["standard_uncertainty"] == "0.0004"
    assert (rows[3]["record_status"], rows[0]["record_status"]) == ("unfinished", "whole")


def test_no_reading_gives_the_line_of_names_alone(tmp_path: Path) -> None:
    summary = load_summary(write(tmp_path / "a.jsonl", good_events()[:2]))
    assert table.csv_text([summary]) == ",".join(table.COLUMNS) + "\n"
    assert table.csv_text([]) == ",".join(table.COLUMNS) + "\n"


def test_a_text_that_looks_like_a_formula_is_disarmed_and_a_negative_number_is_not(tmp_path: Path) -> None:
    events = good_events()
    events[0] = opened(unit='=HYPERLINK("x")', operator="@sum", design_name='a,b\n"c"')
    (_, row) = read_back(table.csv_text([load_summary(write(tmp_path / "a.jsonl", events))]))
    assert (row["unit"], row["operator"]) == ('\'=HYPERLINK("x")', "'@sum")
    assert row["design"] == 'a,b\n"c"'
    assert row["low"] == "-0.02"


def test_a_file_is_never_overwritten(tmp_path: Path) -> None:
    summary = load_summary(write(tmp_path / "a.jsonl", closed(good_events())))
    path = tmp_path / "out.csv"
    table.write_csv([summary], path)
    assert path.read_text(encoding="utf-8") == table.csv_text([summary])
    with pytest.raises(FileError, match="is there already"):
        table.write_csv([summary], path)
    with pytest.raises(FileError, match="can't be written"):
        table.write_csv([summary], tmp_path / "nowhere" / "out.csv")


def test_the_rows_for_programs_have_the_same_names(tmp_path: Path) -> None:
    summary = load_summary(write(tmp_path / "a.jsonl", closed(good_events())))
    rows = [json.loads(line) for line in table.json_lines([summary])]
    assert [tuple(row) for row in rows] == [table.COLUMNS, table.COLUMNS]
    assert rows[0]["value"] is None
    assert rows[1]["value"] == 0.0123


def test_the_frame_has_numbers_as_numbers_and_times_with_a_zone(tmp_path: Path) -> None:
    frame = table.frame([load_summary(write(tmp_path / "a.jsonl", closed(good_events())))])
    assert frame.shape == (2, len(table.COLUMNS))
    assert str(frame["value"].dtype) == "float64"
    assert str(frame["at"].dt.tz) == "UTC"
    assert frame["value"].isna().tolist() == [True, False]


def test_channel_part_and_what_took_a_reading_are_columns_at_the_end(tmp_path: Path) -> None:
    assert table.COLUMNS[-4:] == ("channel", "part", "driven", "how")
    events = repair_events(channel="L")
    taken = events[9]
    assert isinstance(taken, ReadingTaken)
    events[9] = replace(taken, how="by itself: at rest for 2.0 s")
    rows = read_back(table.csv_text([load_summary(write(tmp_path / "a.jsonl", events))]))
    assert {row["channel"] for row in rows} == {"L"}
    assert [row["part"] for row in rows] == ["found"] * 4 + ["left"] * 3
    assert [row["driven"] for row in rows] == ["False", "False", "False", "True", "False", "False", "False"]
    assert [row["how"] for row in rows if row["how"]] == ["by itself: at rest for 2.0 s"]


def test_this_units_limits_oddness_and_the_last_suspects_are_columns_at_the_end(tmp_path: Path) -> None:
    first = table.COLUMNS.index("unit_low")
    assert table.COLUMNS[first : first + 4] == ("unit_low", "unit_high", "odd", "suspects")
    found = [
        load_summary(write(tmp_path / "a.jsonl", closed(suspicious_events(), "undecided"))),
        load_summary(write(tmp_path / "b.jsonl", closed(good_events()))),
    ]
    rows = read_back(table.csv_text(found))
    output = next(row for row in rows if row["record"] == "a.jsonl" and row["point"] == "output")
    assert (output["low"], output["high"], output["unit_low"], output["unit_high"], output["odd"]) == (
        "-0.02", "0.02", "-0.001", "0.002", "True",
    )  # fmt: skip
    assert output["suspects"] == "feed.upper: stuck low 0.900; healthy 0.080"
    other = next(row for row in rows if row["record"] == "b.jsonl" and row["point"] == "output")
    assert (other["unit_low"], other["odd"], other["suspects"]) == ("", "False", "")
