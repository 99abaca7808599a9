"""What stands by: woken by a death, by silence or by word; what it writes; that it goes when nobody is left."""

from __future__ import annotations

import os
import signal
import socket
import sys
import time
from pathlib import Path

import pytest

from benchkit.errors import InstrumentError
from benchkit.events import Noted
from benchkit.journal import read
from benchkit.keeper.client import KeeperDied, Push
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


@pytest.mark.parametrize("way", ["set", "ramp"])
def test_a_keeper_that_is_frozen_with_its_client_right_behind_switching_on(tmp_path: Path, way: str) -> None:
    """Nothing has been read back yet, and the output is on already."""
    with bench(tmp_path) as at:
        at.connect()
        at.client.open_journal(at.record, Noted(text="begin")).result(5)
        stand_by_of(at)

        def freeze(connection: socket.socket, message: str) -> bool:
            if "OUTP ON" in message:
                os.kill(at.client.pid, signal.SIGSTOP)
            return False

        at.supply.fault = freeze
        if way == "set":
            at.client.supply_set(5.0, -5.0, 0.05, True)
        else:
            at.client.supply_ramp(5.0, -5.0, 0.05, 1.0)
        wait_until(lambda: at.supply.is_on)
        began = time.monotonic()
        assert at.supply.wait_off(6.0)
        assert at.supply.off_time() - began < SILENCE_S + 1.5
        wait_until(lambda: at.kept() == ["noted", "contact lost", "output off"])


def test_a_switching_on_that_failed_and_ended_off_is_no_reason_to_end_a_frozen_keeper(tmp_path: Path) -> None:
    with bench(tmp_path) as at:
        at.connect()
        stand_by_of(at)
        at.supply.fault = lambda connection, message: message.startswith("VOLT 5")
        with pytest.raises(InstrumentError):
            at.client.supply_set(5.0, -5.0, 0.05, True).result(10)
        time.sleep(0.2)
        os.kill(at.client.pid, signal.SIGSTOP)
        time.sleep(SILENCE_S + 0.5)
        assert not gone(at.client.pid)
        os.kill(at.client.pid, signal.SIGCONT)


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
    """The new one hears of the keeper's death by itself: nobody asks it to do anything."""
    with bench(tmp_path) as at:
        rails_up(at)
        first = stand_by_of(at)
        os.kill(first, signal.SIGKILL)
        wait_until(lambda: at.client.stand_by_pid not in (None, first), 3.0)
        second = stand_by_of(at)
        assert at.supply.is_on
        at.client._closing = True  # as if the screen had gone too: it asks for nothing
        os.kill(at.client.pid, signal.SIGKILL)
        assert at.supply.wait_off(3.0)
        wait_until(lambda: at.kept() == ["noted", "contact lost", "output off"])
        assert at.client.stand_by_pid == second


def test_a_stand_by_that_can_not_be_replaced_is_told_of(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def fails(*given: object) -> None:
        raise OSError("planted")

    with bench(tmp_path) as at:
        rails_up(at)
        first = stand_by_of(at)
        monkeypatch.setattr("benchkit.keeper.standing_by.spawn", fails)
        os.kill(first, signal.SIGKILL)
        at.wait_for(Noted)
        (push,) = at.pushes
        assert isinstance(push, Push)
        assert isinstance(push.event, Noted)
        assert push.seq == 2
        assert push.event.text.startswith("CAUTION: What stands by for the keeper of the instruments has ended")
        assert at.kept() == ["noted", "noted"]
        assert at.supply.is_on


def test_a_frozen_stand_by_is_replaced_when_it_is_needed(tmp_path: Path) -> None:
    with bench(tmp_path) as at:
        rails_up(at)
        first = stand_by_of(at)
        os.kill(first, signal.SIGSTOP)
        began = time.monotonic()
        os.kill(at.client.pid, signal.SIGKILL)
        assert at.supply.wait_off(8.0)
        assert at.supply.off_time() - began < 5.0
        assert at.client.after_death().result(10).confirmed
        wait_until(lambda: at.kept() == ["noted", "contact lost", "output off"])
        assert gone(first)
