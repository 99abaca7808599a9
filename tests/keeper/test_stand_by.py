"""What stands by: woken by a death, by silence or by word; what it writes; that it goes when nobody is left."""

from __future__ import annotations

import os
import signal
import sys
import time
from pathlib import Path

import pytest

from benchkit.events import Noted
from benchkit.journal import read
from benchkit.keeper.client import KeeperDied
from benchkit.keeper.lifeline import SILENCE_S
from tests.keeper.helpers import Bench, bench, gone, stand_by_of, wait_until

pytestmark = pytest.mark.skipif(sys.platform == "win32", reason="POSIX signals")


def rails_up(at: Bench) -> None:
    at.connect()
    at.client.open_journal(at.record, Noted(text="begin")).result(5)
    at.client.supply_set(5.0, -5.0, 0.05, True).result(5)


def test_a_killed_keeper_means_off_well_within_a_second_and_the_record_says_so(tmp_path: Path) -> None:
    with bench(tmp_path) as at:
        rails_up(at)
        stand_by_of(at)
        began = time.monotonic()
        os.kill(at.client.pid, signal.SIGKILL)
        assert at.supply.wait_off(1.0)
        assert at.supply.off_time() - began < 0.6
        at.wait_for(KeeperDied, 1.0)
        off = at.client.after_death().result(10)
        assert off.confirmed
        wait_until(lambda: at.kept() == ["noted", "contact lost", "output off"])
        lost, kept_off = read(at.record).lines[1:]
        assert lost.payload["who"] == "the keeper"
        assert kept_off.payload["confirmed"] is True
        assert "by hand" not in off.how


def test_a_frozen_keeper_is_ended_with_reserve(tmp_path: Path) -> None:
    with bench(tmp_path) as at:
        rails_up(at)
        stand_by_of(at)
        at.client.heartbeat()
        time.sleep(0.1)
        os.kill(at.client.pid, signal.SIGSTOP)
        began = time.monotonic()
        while at.supply.is_on and time.monotonic() - began < 5:
            at.client.heartbeat()
            time.sleep(0.05)
        assert not at.supply.is_on
        assert at.supply.off_time() - began < 2.7


def test_a_keeper_that_is_frozen_together_with_its_client(tmp_path: Path) -> None:
    """Nobody sends heartbeats that could stay unanswered: the silence of the lifeline says it."""
    with bench(tmp_path) as at:
        rails_up(at)
        stand_by_of(at)
        os.kill(at.client.pid, signal.SIGSTOP)
        began = time.monotonic()
        assert at.supply.wait_off(5.0)
        assert SILENCE_S - 0.5 < at.supply.off_time() - began < 3.0
        at.wait_for(KeeperDied, 2.0)


def test_a_frozen_keeper_whose_output_is_off_is_left_alone(tmp_path: Path) -> None:
    with bench(tmp_path) as at:
        at.connect()
        stand_by_of(at)
        os.kill(at.client.pid, signal.SIGSTOP)
        time.sleep(SILENCE_S + 0.5)
        assert not gone(at.client.pid)
        os.kill(at.client.pid, signal.SIGCONT)
        assert at.client.supply_state().result(5).output_on is False


def test_it_comes_and_goes_with_the_supply(tmp_path: Path) -> None:
    with bench(tmp_path) as at:
        assert at.client.stand_by_pid is None
        at.client.connect({"meter": at.setup["meter"], "supply": None}).result(10)
        time.sleep(0.2)
        assert at.client.stand_by_pid is None, "where nothing can be switched, nobody has to stand by"
        at.connect()
        pid = stand_by_of(at)
        off = at.client.close()
        assert off is not None
        assert gone(pid)
        before = [message for message in at.supply.messages() if message.startswith("OUTP OFF")]
        time.sleep(0.3)
        assert [message for message in at.supply.messages() if message.startswith("OUTP OFF")] == before


def test_a_torn_line_is_told_of(tmp_path: Path) -> None:
    """What the keeper was writing when it died is cut off, and that is not kept quiet."""
    with bench(tmp_path) as at:
        rails_up(at)
        stand_by_of(at)
        os.kill(at.client.pid, signal.SIGSTOP)
        with at.record.open("ab") as record:
            record.write(b'{"seq":2,"half of a li')
        os.kill(at.client.pid, signal.SIGKILL)
        wait_until(lambda: at.kept() == ["noted", "contact lost", "output off"])
        assert "cut off after 22 characters" in read(at.record).lines[1].payload["problem"]


def test_a_stand_by_that_was_killed_itself_is_replaced(tmp_path: Path) -> None:
    with bench(tmp_path) as at:
        rails_up(at)
        os.kill(stand_by_of(at), signal.SIGKILL)
        time.sleep(0.1)
        os.kill(at.client.pid, signal.SIGKILL)
        assert at.client.after_death().result(15).confirmed
        assert not at.supply.is_on
