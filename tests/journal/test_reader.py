"""Whole, unfinished, torn, broken: every byte and every line of a closed record matters."""

from __future__ import annotations

import itertools
from collections.abc import Mapping
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from benchkit.errors import RecordError
from benchkit.journal import Writer, read, verify
from benchkit.journal.line import FIRST_PREV, make_line
from benchkit.journal.reader import Journal, judge, scan

AT = "2031-04-05T06:07:08Z"


def chain(*events: tuple[str, Mapping[str, object]], prev: str = FIRST_PREV, first: int = 1) -> bytes:
    data = b""
    for seq, (name, payload) in enumerate(events, start=first):
        line = make_line(seq, AT, float(seq), name, payload, prev=prev)
        prev = line.digest
        data += line.raw
    return data


OPENED = ("walk opened", {"unit": "7", "text": "a\nb\u2028c 4.7 Ω"})
NOTED = ("noted", {"text": "x", "figures": {"a": 1.5}})
CLOSED = chain(OPENED, NOTED, NOTED, ("closed", {"count": 3, "verdict": "pass"}))
STARTS = [0, *(index + 1 for index, byte in enumerate(CLOSED) if byte == 10)]


def line_of(offset: int) -> int:
    return sum(1 for start in STARTS if start <= offset)


def status(data: bytes) -> int:
    return judge(scan(data)).status


def test_whole_and_closed() -> None:
    outcome = judge(scan(CLOSED))
    assert (outcome.status, outcome.line) == (0, 4)
    assert "4 lines" in outcome.message


def test_each_byte_changed_is_found_and_its_line_named() -> None:
    for offset in range(len(CLOSED)):
        for flip in (0x01, 0x20, 0x80):
            data = bytearray(CLOSED)
            data[offset] ^= flip
            outcome = judge(scan(bytes(data)))
            assert outcome.status == 2, (offset, flip)
            assert outcome.line == line_of(offset), (offset, flip)
            assert f"Line {outcome.line}" in outcome.message


@given(offset=st.integers(0, len(CLOSED) - 1), byte=st.integers(0, 255))
@settings(max_examples=400)
def test_any_byte_put_in_the_place_of_another(offset: int, byte: int) -> None:
    data = bytearray(CLOSED)
    data[offset] = byte
    outcome = judge(scan(bytes(data)))
    assert (outcome.status, outcome.line) == ((0, 4) if bytes(data) == CLOSED else (2, line_of(offset)))


def test_each_byte_removed_is_found() -> None:
    for offset in range(len(CLOSED) - 1):
        outcome = judge(scan(CLOSED[:offset] + CLOSED[offset + 1 :]))
        assert (outcome.status, outcome.line) == (2, line_of(offset)), offset
    # Without the last line feed the file is exactly what a torn write leaves: not whole, but nothing is broken.
    outcome = judge(scan(CLOSED[:-1]))
    assert (outcome.status, outcome.line) == (1, 4)


@given(offset=st.integers(0, len(CLOSED)), extra=st.binary(min_size=1, max_size=3))
@settings(max_examples=400)
def test_any_bytes_put_in_are_found(offset: int, extra: bytes) -> None:
    outcome = judge(scan(CLOSED[:offset] + extra + CLOSED[offset:]))
    assert outcome.status == 2
    # What is put in right before a line feed, or looks like what stands there, may show a line early or late.
    assert abs(outcome.line - line_of(min(offset, len(CLOSED) - 1))) <= 1


@pytest.mark.parametrize("extra", [b"\n", b" ", b"\0", b"x", b"\r\n", CLOSED[STARTS[1] : STARTS[2]], CLOSED])
def test_nothing_may_follow_the_closed_line(extra: bytes) -> None:
    outcome = judge(scan(CLOSED + extra))
    assert (outcome.status, outcome.line) == (2, 5)
    assert "behind the closed line" in outcome.message


def test_a_right_line_behind_the_closed_line_is_found() -> None:
    digest = scan(CLOSED).last_digest
    outcome = judge(scan(CLOSED + chain(NOTED, prev=digest, first=5)))
    assert (outcome.status, outcome.line) == (2, 5)


def test_each_line_dropped_is_found_the_last_included() -> None:
    lines = CLOSED.splitlines(keepends=True)
    assert len(lines) == 4
    for index in range(4):
        outcome = judge(scan(b"".join(lines[:index] + lines[index + 1 :])))
        assert outcome.status == (1 if index == 3 else 2), index
        assert outcome.line == (3 if index == 3 else index + 1)


def test_lines_swapped_or_doubled_are_found() -> None:
    lines = [CLOSED[a:b] for a, b in itertools.pairwise(STARTS)]
    assert judge(scan(lines[0] + lines[2] + lines[1] + lines[3])).line == 2
    assert judge(scan(lines[0] + lines[1] + lines[1] + lines[2] + lines[3])).line == 3


def test_a_line_of_another_record_is_found() -> None:
    other = chain(OPENED, ("noted", {"text": "y"}), NOTED)
    lines = other.splitlines(keepends=True)
    mine = CLOSED.splitlines(keepends=True)
    outcome = judge(scan(mine[0] + mine[1] + lines[2] + mine[3]))
    assert (outcome.status, outcome.line) == (2, 3)
    assert "does not follow" in outcome.message


@pytest.mark.parametrize("count", [2, 4, None, "3"])
def test_a_closed_line_with_a_wrong_count_is_found(count: object) -> None:
    outcome = judge(scan(chain(OPENED, NOTED, NOTED, ("closed", {"count": count}))))
    assert (outcome.status, outcome.line) == (2, 4)


def test_every_cut_of_an_unfinished_record_is_torn_or_unfinished_and_loses_nothing() -> None:
    data = chain(OPENED, NOTED, NOTED)
    for length in range(len(data) + 1):
        journal = scan(data[:length])
        whole = data[:length].count(b"\n")
        assert len(journal.lines) == whole
        torn = data[:length].rpartition(b"\n")[2]
        assert (journal.torn is not None) == bool(torn)
        assert journal.kept_bytes == length - len(torn)
        outcome = judge(journal)
        assert outcome.status == 1
        assert outcome.line == (whole + 1 if torn else whole)


def test_a_power_cut_may_leave_zeros() -> None:
    journal = scan(chain(OPENED) + b"\0" * 512)
    assert journal.torn is not None
    assert judge(journal).status == 1


def test_a_payload_that_looks_like_a_lines_end_is_still_a_torn_line() -> None:
    data = chain(OPENED, ("noted", {"a": 1, "digest": "0" * 64}))
    assert status(data) == 1
    assert status(data[:-10]) == 1


@pytest.mark.parametrize(
    "data", [b"hello", b"hello\n", b"\xff\xfe{", b"\xef\xbb\xbf" + CLOSED, CLOSED.replace(b"\n", b"\r\n")]
)
def test_what_is_no_journal_is_broken_at_line_1(data: bytes) -> None:
    outcome = judge(scan(data))
    assert (outcome.status, outcome.line) == (2, 1)


def test_an_empty_file_is_unfinished() -> None:
    assert scan(b"") == Journal(lines=())
    assert status(b"") == 1


@given(data=st.binary(max_size=400))
def test_other_bytes_never_crash_the_reader(data: bytes) -> None:
    assert judge(scan(data)).status in {1, 2}


def test_files(tmp_path: Path) -> None:
    path = tmp_path / "a.jsonl"
    with Writer.create(path) as writer:
        writer.append("walk opened", {"unit": "7"}, 0.0, AT)
        assert verify(path).status == 1
        writer.append("closed", {"count": 1}, 0.5, AT)
    assert verify(path).status == 0
    assert [line.event for line in read(path).lines] == ["walk opened", "closed"]
    assert read(path).closed


@pytest.mark.parametrize("name", ["missing.jsonl", "."])
def test_a_file_that_cannot_be_read(tmp_path: Path, name: str) -> None:
    with pytest.raises(RecordError, match="can't be read"):
        verify(tmp_path / name)
