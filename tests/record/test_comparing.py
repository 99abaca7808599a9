"""Two records side by side, as found and as left, the last record of a unit, and the lines at the end of a walk."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from benchkit.errors import FileError
from benchkit.events import Answered
from benchkit.record import at_the_end, times
from benchkit.record.comparing import as_found_as_left, compare
from benchkit.record.earlier import last_before
from benchkit.record.facts import Took
from benchkit.record.names import record_name
from benchkit.record.show import as_text
from benchkit.record.show_json import as_json
from benchkit.record.summary import Summary, load_summary
from tests.record.walks import START, closed, good_events, opened, reading, repair_events, sha, write


def kept(folder: Path, name: str, days: float = 0.0, **changes: Any) -> Path:
    """A whole record of a repair, begun so many days after the first."""
    return write(folder / name, closed(repair_events(walk=name, **changes)), days=days)


def summary(folder: Path, name: str, days: float = 0.0, **changes: Any) -> Summary:
    return load_summary(kept(folder, name, days, **changes))


# -- as found, as left ----------------------------------------------------------------------------------------------


def test_as_found_and_as_left_stand_side_by_side(tmp_path: Path) -> None:
    found = summary(tmp_path, "a.jsonl")
    rows = {change.point: change for change in as_found_as_left(found)}
    assert list(rows) == ["emitter.upper.1", "output"]
    assert rows["emitter.upper.1"].amount == pytest.approx(0.02005 - 0.0312)
    assert rows["emitter.upper.1"].limits() == (0.018, 0.022)
    lines = as_text(found).splitlines()
    start = lines.index("As found, as left")
    assert lines[start + 2].split() == ["found", "left", "change", "lowest", "highest"]
    assert lines[start + 3].startswith("emitter.upper.1  31.20 mV  20.05 mV  -11.15 mV  -36 %  18.00 mV  22.00 mV")
    assert lines[start + 3].endswith("found: fail")
    assert lines[start + 4].split()[:5] == ["output", "3.10", "mV", "3.30", "mV"]
    assert "- AS FOUND, FAIL: Drops, emitter.upper.1" in lines
    assert "- Parts replaced: R21" in lines
    assert "Time         3 min 12 s, target 5 min 0 s" in lines
    soak = next(line for line in lines if line.startswith("- left.soak:"))
    assert soak == "- left.soak: 4 min 3 s, settled; emitter.upper.1 heading for 20.10 mV (95 %: 20.00 mV to 20.20 mV)"


def test_a_procedure_without_such_sections_has_no_such_table(tmp_path: Path) -> None:
    found = load_summary(write(tmp_path / "a.jsonl", closed(good_events())))
    assert as_found_as_left(found) == ()
    assert "As found" not in as_text(found)
    assert as_json(found)["as_found_as_left"] == []
    assert as_json(found)["took"] is None


def test_what_was_read_on_one_side_only_is_named_below_the_table(tmp_path: Path) -> None:
    events = repair_events()
    events.insert(2, reading("found.rails.ohm.rails", "ohm.rails", 4000.0, "ohms"))
    events.insert(-2, reading("left.ac.output.ac", "output.ac", 0.0003))
    lines = as_text(load_summary(write(tmp_path / "a.jsonl", events))).splitlines()
    assert "Read only as found: ohm.rails." in lines
    assert "Read only as left: output.ac." in lines
    assert not any(line.startswith("output.ac ") for line in lines)


def test_a_section_that_was_left_out_is_no_incident(tmp_path: Path) -> None:
    events = repair_events()
    events.insert(-2, Answered(item="soak.choose", choice="no"))
    found = load_summary(write(tmp_path / "a.jsonl", events))
    assert found.left_out == ("Power soak",)
    assert found.incidents == ()
    assert "- Left out, as the operator chose: Power soak" in as_text(found).splitlines()
    assert as_json(found)["left_out"] == ["Power soak"]
    events[-3] = Answered(item="soak.choose", choice="yes")
    assert load_summary(write(tmp_path / "b.jsonl", events)).left_out == ()
    events[-3] = Answered(item="left.choose", choice="no")
    assert len(load_summary(write(tmp_path / "c.jsonl", events)).incidents) == 1


def test_found_at_other_rails_is_said(tmp_path: Path) -> None:
    events = repair_events()
    left = next(n for n, event in enumerate(events) if getattr(event, "item", "") == "left.soak")
    (higher,) = (event for event in repair_events(rails_v=15.0) if event.name == "supply set")
    found = load_summary(write(tmp_path / "a.jsonl", [*events[:left], higher, *events[left:]]))
    assert "found at +35 V -35 V, left at +15 V -15 V" in as_text(found)


# -- two records ----------------------------------------------------------------------------------------------------


def test_two_records_are_compared_by_what_both_read(tmp_path: Path) -> None:
    comparison = compare(summary(tmp_path, "a.jsonl"), summary(tmp_path, "b.jsonl", 1, left_v=0.0215))
    assert [change.point for change in comparison.both] == ["emitter.upper.1", "output"]
    assert comparison.both[0].amount == pytest.approx(0.0215 - 0.02005)
    text = comparison.as_text()
    assert "Before  T40-0017: short repair, Tern 40; PASS" in text
    assert "3 min 12 s, target 5 min 0 s" in text
    assert "+1.45 mV  +7.2 %" in text
    assert "within the meters' uncertainty" in text
    program = json.loads(json.dumps(comparison.as_json(), allow_nan=False))
    assert program["changes"][0]["point"] == "emitter.upper.1"
    assert program["changes"][0]["beyond_uncertainty"] is True
    assert program["before"]["record"]["word"] == "whole"


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"unit": "T40-0018"}, "These are different units: T40-0017 and T40-0018."),
        ({"channel": "R"}, "These are different channels: the only one and R."),
        ({"kind": "rehearsal"}, "These are different kinds of walk: walk and rehearsal."),
        ({"design_text": "x = 1\n", "design_sha256": sha("x = 1\n")}, "The designs differ: two states of Tern 40."),
    ],
)
def test_what_makes_a_comparison_doubtful_is_said(tmp_path: Path, changes: dict[str, Any], words: str) -> None:
    comparison = compare(summary(tmp_path, "a.jsonl"), summary(tmp_path, "b.jsonl", 1, **changes))
    assert words in comparison.remarks
    assert words in comparison.as_text()


def test_the_wrong_order_is_said(tmp_path: Path) -> None:
    comparison = compare(summary(tmp_path, "b.jsonl", 1), summary(tmp_path, "a.jsonl"))
    assert "The record named second was begun first." in comparison.remarks


def test_unfinished_and_broken_records_are_compared_as_far_as_they_go(tmp_path: Path) -> None:
    whole = summary(tmp_path, "a.jsonl")
    unfinished = load_summary(write(tmp_path / "b.jsonl", repair_events(walk="b")[:-3], days=1))
    assert "b.jsonl is unfinished" in compare(whole, unfinished).as_text()
    path = kept(tmp_path, "c.jsonl", 2)
    lines = path.read_bytes().splitlines(keepends=True)
    path.write_bytes(b"".join([*lines[:3], *lines[4:]]))
    broken = compare(whole, load_summary(path))
    assert "c.jsonl is BROKEN: Line 4" in broken.as_text()
    assert len(broken.both) == 1
    nothing = compare(whole, load_summary(write(tmp_path / "d.jsonl", [opened()], days=3)))
    assert "No reading stands on both sides" in nothing.as_text()


# -- the last record of a unit --------------------------------------------------------------------------------------


def test_the_last_record_of_the_same_unit_and_channel_is_found(tmp_path: Path) -> None:
    kept(tmp_path, "first.jsonl", 0, channel="L")
    kept(tmp_path, "last.jsonl", 1, channel="L")
    kept(tmp_path, "other-channel.jsonl", 2, channel="R")
    kept(tmp_path, "other-unit.jsonl", 2, channel="L", unit="T40-0018")
    kept(tmp_path, "rehearsed.jsonl", 2, channel="L", kind="rehearsal")
    here = summary(tmp_path, "here.jsonl", 3, channel="L")
    kept(tmp_path, "later.jsonl", 4, channel="L")
    (tmp_path / "copy.jsonl").write_bytes((tmp_path / "here.jsonl").read_bytes())
    found = last_before(here, tmp_path)
    assert found.summary is not None
    assert found.summary.record.path.name == "last.jsonl"
    assert found.passed_over == ()


def test_what_will_not_do_is_passed_over_by_name(tmp_path: Path) -> None:
    kept(tmp_path, "good.jsonl", 0)
    write(tmp_path / "unfinished.jsonl", repair_events(walk="u"), days=1)
    path = kept(tmp_path, "broken.jsonl", 2)
    lines = path.read_bytes().splitlines(keepends=True)
    path.write_bytes(b"".join([*lines[:3], *lines[4:]]))
    empty = closed([opened(walk="e"), *good_events()[1:4]])
    write(tmp_path / "empty.jsonl", empty, days=3)
    (tmp_path / "no-record.jsonl").write_text("hello\n")
    (tmp_path / "folder.jsonl").mkdir()
    here = summary(tmp_path, "here.jsonl", 4)
    found = last_before(here, tmp_path)
    assert found.summary is not None
    assert found.summary.record.path.name == "good.jsonl"
    assert found.passed_over == (
        "empty.jsonl is passed over: it holds no drop, offset or current.",
        "broken.jsonl is passed over: it is broken.",
        "unfinished.jsonl is passed over: it is unfinished.",
    )
    text = as_text(here, found)
    assert "Against the last record of this unit" in text
    assert "- unfinished.jsonl is passed over: it is unfinished." in text
    assert as_json(here, found)["earlier"]["comparison"]["before"]["record"]["file"].endswith("good.jsonl")


def test_a_record_under_another_name_is_found_and_another_units_is_not_opened(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    kept(tmp_path, "old one.jsonl", 0)
    for number in range(3):
        kept(tmp_path, record_name(f"other-{number}", START), 1, unit=f"other-{number}")
    opened_names: list[str] = []
    plain = Path.open

    def watched(self: Path, *more: Any, **others: Any) -> Any:
        opened_names.append(self.name)
        return plain(self, *more, **others)

    here = summary(tmp_path, record_name("T40-0017", START), 2)
    monkeypatch.setattr(Path, "open", watched)
    found = last_before(here, tmp_path)
    assert found.summary is not None
    assert found.summary.record.path.name == "old one.jsonl"
    assert not [name for name in opened_names if name.startswith("other-")]


def test_no_earlier_record_is_a_plain_sentence_and_no_folder_an_error(tmp_path: Path) -> None:
    here = summary(tmp_path, "here.jsonl")
    assert "There is no earlier record of it" in as_text(here, last_before(here, tmp_path))
    with pytest.raises(FileError, match="a folder with records"):
        last_before(here, tmp_path / "nowhere")


def test_not_all_of_many_useless_records_are_read(tmp_path: Path) -> None:
    for number in range(12):
        write(tmp_path / f"u{number:02}.jsonl", [opened(walk=f"u{number}")], days=number)
    found = last_before(summary(tmp_path, "here.jsonl", 20), tmp_path)
    assert found.summary is None
    assert len(found.passed_over) == 11
    assert found.passed_over[-1] == "2 more before these were not looked at."


# -- the end of a walk ----------------------------------------------------------------------------------------------


def test_the_end_of_a_walk_says_time_and_what_changed(tmp_path: Path) -> None:
    kept(tmp_path, "a.jsonl", left_v=0.0195)
    lines = at_the_end.end_lines(kept(tmp_path, "b.jsonl", 1))
    assert lines == (
        "This channel took 3 min 12 s, target 5 min 0 s.",
        "Parts replaced: R21",
        "As found, as left:",
        "  emitter.upper.1  found 31.20 mV, left 20.05 mV (-36 %); found: fail",
        "  output  found 3.10 mV, left 3.30 mV; within the meters' uncertainty",
        "Against the last record of this unit (2031-04-05, short repair, PASS):",
        "  emitter.upper.1  before 19.50 mV, now 20.05 mV; within the meters' uncertainty",
        "  output  before 3.30 mV, now 3.30 mV; within the meters' uncertainty",
    )


def test_the_end_of_a_walk_without_a_record_says_nothing(tmp_path: Path) -> None:
    assert at_the_end.end_lines(tmp_path / "none.jsonl") == ()


# -- times ----------------------------------------------------------------------------------------------------------


def test_times_have_no_digits_that_nobody_measured(tmp_path: Path) -> None:
    one = summary(tmp_path, "a.jsonl")
    one = replace(one, took=Took(seconds=397.95000000000357, target_s=300.0))
    assert times.row(one)["seconds"] == 397.95


def test_times_are_one_row_a_record(tmp_path: Path) -> None:
    rows = [
        times.row(summary(tmp_path, "a.jsonl", channel="=L")),
        times.row(load_summary(write(tmp_path / "b.jsonl", good_events()))),
    ]
    assert [tuple(row) for row in rows] == [times.COLUMNS, times.COLUMNS]
    assert [(row["seconds"], row["target_seconds"], row["verdict"]) for row in rows] == [
        (192.0, 300.0, "pass"),
        (None, None, None),
    ]
    text = times.csv_text([load_summary(tmp_path / "a.jsonl"), load_summary(tmp_path / "b.jsonl")])
    assert text.splitlines()[0] == ",".join(times.COLUMNS)
    assert ",'=L," in text.splitlines()[1]
    assert text.splitlines()[2].endswith(",,,,")
