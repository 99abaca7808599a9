"""Killed, frozen, closed: whoever dies, the output goes off and what was acknowledged stays."""

from __future__ import annotations

import contextlib
import os
import random
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import pytest

from benchkit.events import ContactLost, Noted, OutputOff
from benchkit.journal import read, verify
from benchkit.keeper.client import KeeperClient, KeeperDied, Push, WatchLines
from tests.instruments.server import TestSupply
from tests.keeper.helpers import bench, gone, keeper_with, stand_by_of, wait_until

pytestmark = pytest.mark.skipif(sys.platform == "win32", reason="POSIX signals")

ROOT = Path(__file__).parents[2]


class Screen:
    """A screen in a process of its own, with the supply on."""

    def __init__(self, supply: TestSupply, record: Path, mode: str = "beating") -> None:
        self.process = subprocess.Popen(
            [sys.executable, "-m", "tests.keeper.screen", supply.address, str(record), mode],
            stdout=subprocess.PIPE,
            stderr=subprocess.DEVNULL,
            stdin=subprocess.DEVNULL,
            cwd=ROOT,
        )
        assert self.process.stdout is not None
        word, pid = self.process.stdout.readline().split()
        assert word == b"on"
        self.keeper = int(pid)

    def end(self) -> None:
        with contextlib.suppress(OSError):
            os.kill(self.process.pid, signal.SIGCONT)
        self.process.kill()
        self.process.wait()
        assert self.process.stdout is not None
        self.process.stdout.close()


@pytest.fixture
def supply() -> Iterator[TestSupply]:
    with TestSupply() as made:
        yield made


@pytest.mark.parametrize(
    ("number", "limit_s"),
    [(signal.SIGKILL, 1.0), (signal.SIGTERM, 1.0), (signal.SIGHUP, 1.0), (signal.SIGSEGV, 1.0), (signal.SIGSTOP, 3.0)],
)
def test_a_screen_that_dies_or_freezes(supply: TestSupply, tmp_path: Path, number: int, limit_s: float) -> None:
    record = tmp_path / "record.jsonl"
    screen = Screen(supply, record)
    try:
        time.sleep(0.3)
        assert supply.is_on
        began = time.monotonic()
        os.kill(screen.process.pid, number)
        assert supply.wait_off(limit_s)
        assert supply.off_time() - began < limit_s
        wait_until(lambda: gone(screen.keeper), 5)
        lines = read(record)
        assert lines.problem is None
        assert [line.event for line in lines.lines] == ["noted", "contact lost", "output off"]
        assert lines.lines[1].payload["who"] == "the screen"
        assert lines.lines[2].payload["confirmed"] is True
    finally:
        screen.end()


def test_a_screen_whose_event_loop_hangs(supply: TestSupply, tmp_path: Path) -> None:
    """The process lives and its pipe is open, but nobody beats."""
    screen = Screen(supply, tmp_path / "record.jsonl", "silent")
    try:
        began = time.monotonic()
        assert supply.wait_off(3.0)
        assert 0.8 < supply.off_time() - began < 1.5
        wait_until(lambda: gone(screen.keeper), 5)
    finally:
        screen.end()


def test_a_screen_that_dies_while_a_forked_child_holds_the_pipe(supply: TestSupply, tmp_path: Path) -> None:
    """The end of the pipe never comes, and unarmed there is no heartbeat either: the parent's death is seen."""
    code = (
        "import os, sys, time\n"
        "sys.argv[1:] = " + repr([supply.address, str(tmp_path / "r.jsonl"), "unarmed"]) + "\n"
        "from benchkit.keeper.client import KeeperClient\n"
        "start = KeeperClient.start.__func__\n"
        "def forking(cls, *a):\n"
        "    client = start(cls, *a)\n"
        "    if os.fork() == 0:\n"
        "        os.close(1); time.sleep(8); os._exit(0)\n"
        "    return client\n"
        "KeeperClient.start = classmethod(forking)\n"
        "from tests.keeper.screen import main; main()\n"
    )
    process = subprocess.Popen(
        [sys.executable, "-W", "ignore", "-c", code],
        stdout=subprocess.PIPE,
        stderr=subprocess.DEVNULL,
        cwd=ROOT,
        start_new_session=True,
    )
    try:
        assert process.stdout is not None
        assert process.stdout.readline().startswith(b"on")
        began = time.monotonic()
        process.kill()
        assert supply.wait_off(1.0)
        assert supply.off_time() - began < 1.0
    finally:
        process.stdout and process.stdout.close()
        os.killpg(process.pid, signal.SIGKILL)
        process.wait()


def test_a_keeper_that_is_killed_is_noticed_and_a_stand_by_switches_off(tmp_path: Path) -> None:
    with bench(tmp_path) as at:
        at.connect()
        at.client.open_journal(at.record, Noted(text="begin")).result(5)
        at.client.supply_set(5.0, -5.0, 0.05, True).result(5)
        at.meter.fault = lambda connection, message: True
        reading = at.client.read("ac volts")
        stand_by_of(at)
        began = time.monotonic()
        os.kill(at.client.pid, signal.SIGKILL)
        at.wait_for(KeeperDied, 1.0)
        assert time.monotonic() - began < 1.0
        assert not at.client.alive
        with pytest.raises(Exception, match="keeper of the instruments has gone"):
            reading.result(1)
        off = at.client.after_death().result(10)
        assert off.confirmed
        assert not at.supply.is_on
        assert at.supply.off_after(began) - began < 1.0
        wait_until(lambda: len(at.pushes) == 2)
        assert at.pushes[1] == Push(event=off, seq=None, problem="the keeper died")
        assert at.client.off("again").result(10).confirmed
        # Another keeper goes on with the record, in which the stand-by has written what happened.
        wait_until(lambda: at.kept() == ["noted", "contact lost", "output off"])
        other = KeeperClient.start(None, lambda push: None)
        assert other.resume_journal(at.record).result(5).seq == 3
        other.close()


def test_a_keeper_that_freezes_is_ended_and_a_stand_by_switches_off(tmp_path: Path) -> None:
    with bench(tmp_path) as at:
        at.connect()
        at.client.supply_set(5.0, -5.0, 0.05, True).result(5)
        at.client.arm().result(5)
        at.client.heartbeat()
        time.sleep(0.1)
        os.kill(at.client.pid, signal.SIGSTOP)
        began = time.monotonic()
        off = at.client.off("while frozen")
        while not any(isinstance(push, KeeperDied) for push in at.pushes):
            at.client.heartbeat()
            time.sleep(0.05)
            assert time.monotonic() - began < 4
        assert off.result(10).confirmed
        assert not at.supply.is_on
        assert at.supply.off_after(began) - began < 3.0


def test_a_stand_by_that_reaches_nothing_says_unknown(tmp_path: Path) -> None:
    with bench(tmp_path) as at:
        at.connect()
        at.supply.close()
        os.kill(at.client.pid, signal.SIGKILL)
        off = at.client.after_death(at.setup).result(12)
        assert not off.confirmed
        assert "switch it off by hand" in off.how


@pytest.mark.parametrize("seed", range(4))
def test_kill_9_of_the_keeper_at_any_moment_loses_no_acknowledged_event(tmp_path: Path, seed: int) -> None:
    with bench(tmp_path) as at:
        at.client.open_journal(at.record, Noted(text="begin")).result(5)
        moment = time.monotonic() + random.Random(seed).uniform(0.01, 0.15)
        futures = []
        seq = 1
        while time.monotonic() < moment:
            futures.append(at.client.append(Noted(text="x" * 2000), seq))
            seq += 1
        os.kill(at.client.pid, signal.SIGKILL)
        at.wait_for(KeeperDied, 5.0)
        told = [future.result().seq for future in futures if future.exception(5) is None]
        lines = read(at.record)
        assert lines.problem is None
        assert len(lines.lines) >= (told[-1] if told else 1)
        assert verify(at.record).status == 1
        other = KeeperClient.start(None, lambda push: None)
        head = other.resume_journal(at.record).result(5)
        assert (head.seq, head.torn) == (len(lines.lines), lines.torn or "")
        other.close()


def test_the_keeper_is_in_a_group_of_its_own(tmp_path: Path) -> None:
    with bench(tmp_path) as at:
        pid = at.client.ready.result(5)
        assert os.getpgid(pid) == pid != os.getpgid(0)


def test_a_full_disk_does_not_delay_off(tmp_path: Path) -> None:
    """The journal can't grow any more; off is confirmed at once and pushed with the reason why it is not kept."""
    import resource

    with bench(tmp_path) as at:
        at.connect()
        at.client.open_journal(at.record, Noted(text="begin")).result(5)
        at.client.supply_set(5.0, -5.0, 0.05, True).result(5)
        resource.prlimit(at.client.pid, resource.RLIMIT_FSIZE, (at.record.stat().st_size + 20, resource.RLIM_INFINITY))
        began = time.monotonic()
        off = at.client.off("now").result(5)
        assert time.monotonic() - began < 0.5
        assert off.confirmed
        at.wait_for(OutputOff)
        push = at.pushes[0]
        assert isinstance(push, Push)
        assert push.seq is None
        assert "could not be kept" in push.problem
        assert at.kept() == ["noted"]
        assert verify(at.record).line == 1


def test_a_computer_that_slept_wakes_to_an_output_that_goes_off(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The clock that counts suspended time is put forward, because a test can't suspend the computer."""
    flag = tmp_path / "slept"
    keeper_with(
        monkeypatch,
        "import os, benchkit.keeper.platform as platform\n"
        f"platform.slept_s = lambda: 3600.0 if os.path.exists({str(flag)!r}) else 0.0",
    )
    with bench(tmp_path) as at:
        at.connect()
        at.client.supply_set(5.0, -5.0, 0.05, True).result(5)
        at.client.arm().result(5)
        at.client.heartbeat()
        flag.touch()
        assert at.supply.wait_off(0.9)
        at.wait_for(OutputOff)
        lost, off = at.events()
        assert isinstance(lost, ContactLost)
        assert "slept for 3600 s" in lost.problem
        assert isinstance(off, OutputOff)
        assert off.confirmed
        assert at.client.alive


def test_an_error_of_the_keepers_own_switches_off_before_it_leaves(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    keeper_with(
        monkeypatch,
        "import benchkit.keeper.watch as watch\ndef look(*a): raise ZeroDivisionError('planted')\nwatch.look = look",
    )
    with bench(tmp_path) as at:
        at.connect()
        at.client.open_journal(at.record, Noted(text="begin")).result(5)
        at.client.supply_set(5.0, -5.0, 0.05, True).result(5)
        at.client.watch(WatchLines()).result(5)
        at.client.sample(0.0)
        assert at.supply.wait_off(1.0)
        at.wait_for(KeeperDied)
        assert at.kept() == ["noted", "contact lost", "output off"]
        lost = at.events()[0]
        assert isinstance(lost, ContactLost)
        assert (lost.who, "planted" in lost.problem) == ("the keeper", True)
