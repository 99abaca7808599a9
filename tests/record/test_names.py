from __future__ import annotations

import re
from datetime import UTC, datetime, timedelta, timezone
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchkit.errors import FileError
from benchkit.record import names

WHEN = datetime(2031, 4, 5, 6, 7, 8, tzinfo=UTC)

NASTY = [
    "../../etc/passwd",
    "/etc/passwd",
    "C:\\windows\\system32",
    "..",
    ".",
    "",
    "   ",
    "CON",
    "con.jsonl",
    "nul",
    "COM1",
    "LPT9.txt",
    "a" * 300,
    "é" * 300,
    "-rf",
    "~root",
    "$(reboot)",
    "a\x00b",
    "a\nb",
    "\x1b[2J",
    "\ud800",
    "序列号",
    "T40/0017",
    "unit.",
    "unit ",
    "a:b",
    "a*b?c|d",
    "\u202egnp.exe",
]

RESERVED = {"con", "prn", "aux", "nul", *(f"{port}{n}" for port in ("com", "lpt") for n in range(10))}


def check(name: str) -> None:
    assert re.fullmatch(r"[A-Za-z0-9][A-Za-z0-9-]*\.jsonl", name)
    assert len(name) <= names.LONGEST <= 120
    assert name.partition(".")[0].lower() not in RESERVED
    assert Path(name).name == name


@pytest.mark.parametrize("serial", NASTY)
def test_no_serial_number_becomes_a_path(serial: str, tmp_path: Path) -> None:
    path = names.free_path(tmp_path, serial, WHEN)
    check(path.name)
    path.write_bytes(b"")
    assert path.resolve().parent == tmp_path.resolve()


@given(st.text(max_size=400))
def test_no_text_at_all_becomes_a_path(serial: str) -> None:
    check(names.record_name(serial, WHEN))


def test_different_units_never_share_a_beginning_even_where_case_does_not_count() -> None:
    serials = ["A/1", "A-1", "A 1", "a/1", "A.1", "A1", "a1", "Ä1", "", "unit"]
    assert len({names.unit_prefix(serial).lower() for serial in serials}) == len(serials)


def test_the_same_unit_always_has_the_same_beginning_and_its_walks_sort_by_time() -> None:
    later = WHEN + timedelta(hours=20)
    first, second = names.record_name("T40-0017", WHEN), names.record_name("T40-0017", later)
    assert first == "T40-0017-3a8381f9-20310405T060708Z.jsonl"
    assert first.startswith(names.unit_prefix("T40-0017"))
    assert second.startswith(names.unit_prefix(" T40-0017\n"))
    assert sorted([second, first]) == [first, second]


def test_the_time_is_utc_wherever_the_computer_stands() -> None:
    there = WHEN.astimezone(timezone(timedelta(hours=9)))
    assert names.record_name("x", there) == names.record_name("x", WHEN)
    with pytest.raises(ValueError, match="time zone"):
        names.record_name("x", WHEN.replace(tzinfo=None))


def test_a_taken_name_is_not_offered_again(tmp_path: Path) -> None:
    taken = []
    for _ in range(3):
        path = names.free_path(tmp_path, "x", WHEN)
        path.write_bytes(b"")
        taken.append(path.name)
    assert len(set(taken)) == 3
    for name in taken:
        check(name)
    assert taken[1] == taken[0].replace(".jsonl", "-2.jsonl")


def test_a_link_that_leads_nowhere_is_a_taken_name(tmp_path: Path) -> None:
    first = names.free_path(tmp_path, "x", WHEN)
    first.symlink_to(tmp_path / "gone")
    assert names.free_path(tmp_path, "x", WHEN).name == first.name.replace(".jsonl", "-2.jsonl")


@pytest.mark.parametrize("channel", ["", "L", "2", "../rear", "6510"])
def test_walks_of_one_second_sort_by_their_number(tmp_path: Path, channel: str) -> None:
    taken = []
    for _ in range(11):
        taken.append(names.free_path(tmp_path, "x", WHEN, channel))
        taken[-1].write_bytes(b"")
    later = names.record_name("x", WHEN + timedelta(seconds=1), channel)
    assert sorted([later, *(path.name for path in taken[::-1])], key=names.in_order) == [
        *(path.name for path in taken), later,
    ]  # fmt: skip


def test_a_full_second_is_refused(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(names, "_MOST_IN_ONE_SECOND", 2)
    for _ in range(2):
        names.free_path(tmp_path, "x", WHEN).write_bytes(b"")
    with pytest.raises(FileError, match="2 records of the unit 'x'"):
        names.free_path(tmp_path, "x", WHEN)


def test_the_longest_name_is_as_long_as_stated(tmp_path: Path) -> None:
    longest = names.record_name("a" * 300, WHEN, "b" * 300).replace(names.SUFFIX, f"-999{names.SUFFIX}")
    assert len(longest) == names.LONGEST


@pytest.mark.parametrize("channel", [*NASTY, "L", "2", "left rear"])
def test_no_channel_becomes_a_path(channel: str, tmp_path: Path) -> None:
    path = names.free_path(tmp_path, "x", WHEN, channel)
    check(path.name)
    assert path.resolve().parent == tmp_path.resolve()
    assert ("-ch-" in path.name) == bool(channel.strip())


@given(st.text(max_size=100), st.text(max_size=100))
def test_no_text_at_all_becomes_a_path_by_way_of_a_channel(serial: str, channel: str) -> None:
    check(names.record_name(serial, WHEN, channel))


def test_channels_keep_their_names_and_the_time_stays_before_them() -> None:
    assert names.record_name("T40-0017", WHEN, "L") == "T40-0017-3a8381f9-20310405T060708Z-ch-L.jsonl"
    assert names.record_name("T40-0017", WHEN, " 2 ") == "T40-0017-3a8381f9-20310405T060708Z-ch-2.jsonl"
    alike = [names.channel_part(name) for name in ("a/b", "a.b", "a b", "a-b")]
    assert len(set(alike)) == len(alike)


def test_a_readable_part_stays_readable() -> None:
    assert names.slug("Küche 7/b") == "Kuche-7-b"
    assert names.slug("///") == "unit"
