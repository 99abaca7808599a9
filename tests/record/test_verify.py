from __future__ import annotations

from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from benchkit.errors import RecordError
from benchkit.events import to_payload
from benchkit.journal.writer import Writer
from benchkit.record import verify
from tests.record.walks import closed, good_events, opened, write


@pytest.fixture(name="whole")
def _whole(tmp_path: Path) -> Path:
    return write(tmp_path / "whole.jsonl", closed(good_events()))


def test_a_finished_walk_is_whole(whole: Path) -> None:
    record = verify.load(whole)
    assert (record.status, record.word, record.line) == (0, "whole", 12)
    assert [kept.event.name for kept in record.kept][:2] == ["walk opened", "bench found"]
    assert record.kept[0].event == opened()


def test_an_unfinished_walk_is_told_from_a_torn_and_a_broken_one(whole: Path) -> None:
    lines = whole.read_bytes().splitlines(keepends=True)
    whole.write_bytes(b"".join(lines[:-1]))
    record = verify.load(whole)
    assert (record.status, record.line, len(record.kept)) == (1, 11, 11)
    whole.write_bytes(b"".join(lines[:-1]) + lines[-1][:40])
    record = verify.load(whole)
    assert (record.status, record.line, len(record.kept)) == (1, 12, 11)
    assert record.torn == lines[-1][:40].decode()
    whole.write_bytes(b"".join(lines[:4] + lines[5:]))
    record = verify.load(whole)
    assert (record.status, record.line, len(record.kept)) == (2, 5, 4)
    assert "5" in record.message


@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(data=st.data())
def test_any_changed_byte_of_a_closed_record_is_found_and_its_line_named(whole: Path, data: st.DataObject) -> None:
    original = whole.read_bytes()
    place = data.draw(st.integers(0, len(original) - 1))
    other = data.draw(st.integers(0, 255).filter(lambda byte: byte != original[place]))
    changed = whole.with_name("changed.jsonl")
    changed.write_bytes(original[:place] + bytes([other]) + original[place + 1 :])
    record = verify.load(changed)
    line = original[:place].count(b"\n") + 1
    # the last byte is the last line feed: without it the last line is torn, unless something else stands there
    assert record.status in (1, 2)
    assert record.line == line or (original[place : place + 1] == b"\n" and record.line in (line, line + 1))
    assert len(record.kept) >= record.line - 1


def test_lines_in_a_right_chain_that_make_no_sense_are_found(tmp_path: Path) -> None:
    cases = {
        "no opening": ([("noted", {"text": "hello", "item": "", "figures": {}})], 1, "walk opened"),
        "two openings": ([("walk opened", to_payload(opened()))] * 2, 2, "second"),
        "unknown": ([("walk opened", to_payload(opened())), ("danced", {})], 2, "danced"),
        "bad field": ([("walk opened", to_payload(opened())), ("noted", {"txt": "a"})], 2, "noted"),
        "other format": ([("walk opened", to_payload(opened(format=2)))], 1, "format 2"),
        "other design": ([("walk opened", to_payload(opened(design_text="other")))], 1, "design"),
        "other procedure": ([("walk opened", to_payload(opened(procedure_text="other")))], 1, "procedure"),
        "other bench": ([("walk opened", to_payload(opened(bench_text="other")))], 1, "bench file"),
    }
    for name, (events, line, word) in cases.items():
        path = tmp_path / f"{name}.jsonl"
        with Writer.create(path) as writer:
            for event, payload in events:
                writer.append(event, payload, 0.0, "2031-04-05T06:07:08Z")
        record = verify.load(path)
        assert (record.status, record.line) == (2, line), name
        assert word in record.message, name
        assert len(record.kept) == line - 1


def test_an_impossible_reading_is_a_broken_record_and_no_crash(tmp_path: Path) -> None:
    """A reading that contradicts itself can't be made by this program; a made-up record may hold one."""
    path = tmp_path / "r.jsonl"
    reading = {"point": "output", "value": 1.0, "unit": "A", "overload": False, "standard_uncertainty": 0.1}
    reading |= {"meter": "m", "function": "dc volts"}
    with Writer.create(path) as writer:
        writer.append("walk opened", to_payload(opened()), 0.0, "2031-04-05T06:07:08Z")
        writer.append("reading taken", {"item": "a.b", "reading": reading}, 0.0, "2031-04-05T06:07:08Z")
    record = verify.load(path)
    assert (record.status, record.line) == (2, 2)


def test_an_empty_file_is_unfinished(tmp_path: Path) -> None:
    path = tmp_path / "empty.jsonl"
    path.write_bytes(b"")
    record = verify.load(path)
    assert record.status == 1
    assert "no whole line" in record.message


def test_what_is_no_record_is_broken_and_what_is_no_file_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "notes.txt"
    path.write_text("hello\nworld\n")
    assert verify.load(path).status == 2
    with pytest.raises(RecordError, match="can't be read"):
        verify.load(tmp_path / "missing.jsonl")
    with pytest.raises(RecordError, match="it is a folder"):
        verify.load(tmp_path)


def test_the_worst_of_several_counts(whole: Path, tmp_path: Path) -> None:
    unfinished = write(tmp_path / "u.jsonl", good_events())
    records = [verify.load(whole), verify.load(unfinished)]
    assert verify.worst(records) == 1
    assert verify.worst(records[:1]) == 0
    assert verify.worst([]) == 0


def test_the_finding_as_text_and_for_a_program(whole: Path) -> None:
    record = verify.load(whole)
    assert record.as_text() == f"{whole}: whole: The record is whole and closed: 12 lines."
    assert record.as_json() == {
        "file": str(whole),
        "status": 0,
        "word": "whole",
        "line": 12,
        "message": "The record is whole and closed: 12 lines.",
        "events": 12,
    }
