from __future__ import annotations

from pathlib import Path

import pytest

from benchkit.errors import FileError
from benchkit.record.folder import entries, records_of
from tests.record.walks import closed, good_events, opened, write


def test_everything_that_could_be_a_record_is_listed_the_unusable_with_the_reason(tmp_path: Path) -> None:
    write(tmp_path / "a.jsonl", closed(good_events()))
    write(tmp_path / "b.jsonl", good_events())
    (tmp_path / "c.jsonl").write_text("hello\n")
    (tmp_path / "d.jsonl").mkdir()
    (tmp_path / "notes.txt").write_text("not one")
    found = list(entries(tmp_path))
    assert [entry.path.name for entry in found] == ["a.jsonl", "b.jsonl", "c.jsonl", "d.jsonl"]
    assert [entry.as_json()["word"] for entry in found] == ["whole", "unfinished", "no record", "no record"]
    assert [entry.resumable for entry in found] == [False, True, False, False]
    assert found[0].as_text() == "a.jsonl  T40-0017  Tern 40  short walk  PASS"
    assert found[1].as_text().endswith("NONE: the walk was not finished")
    assert "Line 1" in found[2].problem
    assert "folder" in found[3].as_text()
    assert found[0].as_json()["verdict"] == "pass"
    assert found[1].as_json()["verdict"] is None


def test_a_units_records_are_told_by_what_they_say(tmp_path: Path) -> None:
    events = good_events()
    events[0] = opened(unit="other", kind="rehearsal")
    write(tmp_path / "T40-0017-renamed.jsonl", events)
    write(tmp_path / "x.jsonl", good_events())
    assert [entry.path.name for entry in records_of(tmp_path, " T40-0017 ")] == ["x.jsonl"]
    (entry,) = records_of(tmp_path, "other")
    assert entry.as_text().endswith("(rehearsal)")


def test_a_units_walks_come_in_their_order_even_those_of_one_second(tmp_path: Path) -> None:
    stem = "T40-0017-3a8381f9-20310405T060708Z"
    expected = [f"{stem}{end}.jsonl" for end in ("", "-2", "-10")]
    for name in expected[::-1]:
        write(tmp_path / name, good_events())
    assert [entry.path.name for entry in entries(tmp_path)] == expected


def test_a_missing_folder_is_refused_with_a_sentence(tmp_path: Path) -> None:
    with pytest.raises(FileError, match=r"nowhere.*can't be read"):
        list(entries(tmp_path / "nowhere"))
