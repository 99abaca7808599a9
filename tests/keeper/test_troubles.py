"""A full disk, a folder that can't be written to, a clock set back, two copies: a clear sentence, and nothing lost."""

from __future__ import annotations

import errno
import json
import os
import resource
import sys
import time
from pathlib import Path

import pytest

from benchkit.errors import FileError, InstrumentError, RecordError
from benchkit.events import Noted, OutputOff
from benchkit.journal import read, verify
from benchkit.keeper.client import KeeperClient, Push
from benchkit.record.names import free_path
from tests.keeper.helpers import Bench, beats, bench, keeper_with, wait_until

pytestmark = pytest.mark.skipif(sys.platform == "win32", reason="POSIX limits and rights")

ROOT = Path(__file__).parents[2]


def full_disk(monkeypatch: pytest.MonkeyPatch, flag: Path) -> None:
    """Let the disk be full as long as a flag is there: half of a line still fits."""
    keeper_with(
        monkeypatch,
        "import os, benchkit.journal.disk as disk\n"
        "write = disk.write_all\n"
        "def write_all(descriptor, data):\n"
        f"    if os.path.exists({str(flag)!r}):\n"
        "        os.write(descriptor, data[:len(data) // 2])\n"
        f"        raise OSError({errno.ENOSPC}, os.strerror({errno.ENOSPC}))\n"
        "    write(descriptor, data)\n"
        "disk.write_all = write_all",
    )


def rails_up(at: Bench) -> None:
    at.connect()
    at.client.open_journal(at.record, Noted(text="begin")).result(5)
    at.client.supply_set(5.0, -5.0, 0.05, True).result(5)


def test_a_full_disk_is_said_in_words_and_loses_nothing(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    flag = tmp_path / "full"
    full_disk(monkeypatch, flag)
    with bench(tmp_path) as at:
        rails_up(at)
        at.client.append(Noted(text="fits"), 1).result(5)
        flag.touch()
        with pytest.raises(FileError) as caught:
            at.client.append(Noted(text="does not fit"), 2).result(5)
        assert "'noted' could not be kept (No space left on device)" in str(caught.value)
        assert "Free the disk; the 2 events before it are safe" in str(caught.value)
        assert str(at.record) in str(caught.value)
        began = time.monotonic()
        off = at.client.off("the disk is full").result(5)
        assert off.confirmed
        assert at.supply.off_time() - began < 0.5
        at.wait_for(OutputOff)
        (push,) = at.pushes
        assert isinstance(push, Push)
        assert push.seq is None
        assert "No space left" in push.problem
        assert at.kept() == ["noted", "noted"]
        assert read(at.record).torn is None, "half a line was cut off again"
        flag.unlink()
        assert at.client.append(Noted(text="there is room again"), 2).result(5).seq == 3
    assert verify(at.record).status == 1, "whole, and not closed"


def test_a_disk_that_is_full_from_the_beginning(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    flag = tmp_path / "full"
    full_disk(monkeypatch, flag)
    flag.touch()
    with bench(tmp_path) as at:
        with pytest.raises(FileError, match="could not be kept"):
            at.client.open_journal(at.record, Noted(text="begin")).result(5)
        assert not at.record.exists(), "no empty record is left behind"
        flag.unlink()
        assert at.client.open_journal(at.record, Noted(text="begin")).result(5).seq == 1


def test_a_record_that_is_taken_away_is_said_in_words_and_nothing_of_it_is_kept(tmp_path: Path) -> None:
    with bench(tmp_path) as at:
        rails_up(at)
        at.record.unlink()
        with pytest.raises(FileError) as caught:
            at.client.append(Noted(text="into nowhere"), 1).result(5)
        assert "the record was lost or damaged while it was written: it was removed" in str(caught.value)
        assert at.client.off("the record is lost").result(5).confirmed
        at.wait_for(OutputOff)
        (push,) = at.pushes
        assert isinstance(push, Push)
        assert push.seq is None
        assert "lost or damaged" in push.problem


def test_a_log_that_can_not_grow_stops_nobody(tmp_path: Path) -> None:
    with bench(tmp_path) as at:
        at.connect()
        resource.prlimit(at.client.pid, resource.RLIMIT_FSIZE, (0, resource.RLIM_INFINITY))
        assert at.client.supply_set(5.0, -5.0, 0.05, True).result(5).output_on
        assert at.client.off("x").result(5).confirmed


@pytest.mark.skipif(hasattr(os, "geteuid") and os.geteuid() == 0, reason="nothing is read-only for root")
def test_a_folder_that_is_read_only(tmp_path: Path) -> None:
    folder = tmp_path / "records"
    folder.mkdir(mode=0o500)
    with bench(tmp_path) as at, pytest.raises(FileError, match="Permission denied"):
        at.client.open_journal(folder / "r.jsonl", Noted(text="begin")).result(5)


@pytest.mark.parametrize("what", ["a file in the place of the folder", "no such folder"])
def test_a_folder_that_can_not_be_written_to(tmp_path: Path, what: str) -> None:
    """The same words as for one that is read-only, which nothing is for an administrator."""
    folder = tmp_path / "records"
    if what.startswith("a file"):
        folder.write_text("x")
    with bench(tmp_path) as at:
        with pytest.raises(FileError) as caught:
            at.client.open_journal(folder / "r.jsonl", Noted(text="begin")).result(5)
        assert f"{folder / 'r.jsonl'}: it can't be used (" in str(caught.value)


def test_logs_that_can_not_be_made(tmp_path: Path) -> None:
    (tmp_path / "records").write_text("x")
    with pytest.raises(FileError, match="a folder for records"):
        KeeperClient.start(tmp_path / "records" / "logs", print)


def test_a_clock_that_was_set_back(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The time of day is noted and decides nothing: order is the number of the line."""
    flag = tmp_path / "back"
    keeper_with(
        monkeypatch,
        "import os, datetime, benchkit.keeper.journaling as journaling\n"
        "class Clock(datetime.datetime):\n"
        "    @classmethod\n"
        "    def now(cls, zone=None):\n"
        f"        year = 2001 if os.path.exists({str(flag)!r}) else 2031\n"
        "        return super().now(zone).replace(year=year, month=1, day=1)\n"
        "journaling.datetime = Clock",
    )
    with bench(tmp_path) as at:
        rails_up(at)
        with beats(at.client):
            flag.touch()
            assert at.client.append(Noted(text="an age before"), 1).result(5).seq == 2
            time.sleep(1.2)
            assert at.supply.is_on, f"nobody slept, and every heartbeat came: {at.pushes}"
    years = [json.loads(line)["at"][:4] for line in at.record.read_text().splitlines()]
    assert years == ["2031", "2001", "2001"]
    assert verify(at.record).status == 1
    other = KeeperClient.start(None, lambda push: None)
    assert other.resume_journal(at.record).result(5).seq == 3
    other.close()


def test_a_name_of_the_same_second_is_never_taken_twice(tmp_path: Path) -> None:
    """A clock that was set back gives the same name again."""
    from datetime import UTC, datetime

    at = datetime(2031, 1, 1, tzinfo=UTC)
    first = free_path(tmp_path, "17", at)
    first.write_text("x")
    assert free_path(tmp_path, "17", at) != first


def test_two_copies_on_one_bench(tmp_path: Path) -> None:
    with bench(tmp_path) as at:
        rails_up(at)
        other = KeeperClient.start(None, lambda push: None)
        try:
            with pytest.raises(InstrumentError) as caught:
                other.connect(at.setup).result(10)
            assert f"(process {at.client.pid}) is using {at.supply.address}" in str(caught.value)
            assert "End that one first" in str(caught.value)
            assert caught.value.exit_status == 3
        finally:
            other.close()
        assert at.supply.is_on, "the second copy has touched nothing"
        assert at.client.supply_state().result(5).output_on
    third = KeeperClient.start(None, lambda push: None)
    at_again = Bench(tmp_path)
    try:
        at_again.connect()
    finally:
        third.close()
        at_again.client.close()
        at_again.supply.close()
        at_again.meter.close()


def test_two_copies_on_one_record(tmp_path: Path) -> None:
    with bench(tmp_path) as at:
        rails_up(at)
        other = KeeperClient.start(None, lambda push: None)
        try:
            with pytest.raises(RecordError) as caught:
                other.resume_journal(at.record).result(5)
            assert "another process is writing this record" in str(caught.value)
            with pytest.raises(FileError, match="already"):
                other.open_journal(at.record, Noted(text="mine")).result(5)
        finally:
            other.close()
        assert at.client.append(Noted(text="goes on"), 1).result(5).seq == 2
        wait_until(lambda: at.kept() == ["noted", "noted"])
