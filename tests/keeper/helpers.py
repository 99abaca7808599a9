"""What the keeper's tests share: a bench of test servers with a keeper, and ways to wait."""

from __future__ import annotations

import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

import pytest

from benchkit.errors import FileError
from benchkit.events import Closed, Event
from benchkit.journal import read
from benchkit.keeper.client import KeeperClient, KeeperDied, Push
from tests.instruments.server import TestMeter, TestSupply

ROOT = Path(__file__).parents[2]


class Shared:
    """A keeper, and everything that it pushed; starting one takes longer than most tests."""

    def __init__(self, logs: Path | None) -> None:
        self.pushes: list[Push | KeeperDied] = []
        self.client = KeeperClient.start(logs, self.pushes.append)

    def tidy(self) -> None:
        """Make it as if new for the next test."""
        self.client.disarm().result(5)
        self.client.watch(None).result(5)
        self.client.off("the test is over").result(10)
        seq = 0
        with suppress(FileError):
            while (
                kept := self.client.append(Closed(count=seq, verdict="pass", exit_status=0), seq).result(5)
            ).moved_on:
                seq = kept.seq
        self.client.connect({"meter": None, "supply": None}).result(5)
        self.pushes.clear()


class Bench:
    """A test supply, a test meter, a keeper, and everything that it pushed."""

    def __init__(self, tmp_path: Path, shared: Shared | None = None) -> None:
        self.supply = TestSupply()
        self.meter = TestMeter()
        self.record = tmp_path / "record.jsonl"
        shared = shared or Shared(tmp_path / "logs")
        self.pushes = shared.pushes
        self.client = shared.client

    @property
    def setup(self) -> dict[str, object]:
        return {
            "meter": {"address": self.meter.address, "profile": "scpi-meter"},
            "supply": {"address": self.supply.address, "profile": "scpi-supply"},
        }

    def connect(self) -> None:
        self.client.connect(self.setup).result(10)

    def events(self) -> list[Event]:
        return [push.event for push in self.pushes if isinstance(push, Push)]

    def wait_for(self, kind: type, timeout_s: float = 5.0) -> None:
        wait_until(lambda: any(isinstance(event, kind) for event in [*self.events(), *self.pushes]), timeout_s)

    def kept(self) -> list[str]:
        return [line.event for line in read(self.record).lines]


@contextmanager
def bench(tmp_path: Path) -> Iterator[Bench]:
    made = Bench(tmp_path)
    try:
        yield made
    finally:
        made.client.close()
        made.supply.close()
        made.meter.close()


@contextmanager
def beats(client: KeeperClient) -> Iterator[None]:
    """Arm the keeper and beat, as an event loop does, for the time of a block."""
    stop = threading.Event()

    def beat() -> None:
        while not stop.wait(0.1):
            client.heartbeat()

    client.heartbeat()
    client.arm().result(5)
    thread = threading.Thread(target=beat, daemon=True)
    thread.start()
    try:
        yield
    finally:
        client.disarm().result(5)
        stop.set()
        thread.join()


def keeper_with(monkeypatch: pytest.MonkeyPatch, change: str) -> None:
    """Let the next keeper start with something in it changed."""

    def spawn(arguments: list[str], log_dir: Path | None, lifeline: int | None = None) -> subprocess.Popen[bytes]:
        line = [] if lifeline is None else ["--lifeline", str(lifeline)]
        code = f"import sys\n{change}\nsys.argv[1:] = {[*arguments, *line]!r}\n"
        code += "from benchkit.keeper.__main__ import main\nmain()"
        return subprocess.Popen(
            [sys.executable, "-c", code],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=subprocess.DEVNULL,
            cwd=ROOT,
            start_new_session=True,
            pass_fds=() if lifeline is None else (lifeline,),
        )

    monkeypatch.setattr("benchkit.keeper.client.spawn", spawn)


def gone(pid: int) -> bool:
    """True when a process that is not our child has ended."""
    try:
        return Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()[0] == "Z"
    except (FileNotFoundError, ProcessLookupError):
        return True


def wait_until(true: Callable[[], bool], timeout_s: float = 5.0) -> None:
    end = time.monotonic() + timeout_s
    while not true():
        assert time.monotonic() < end, "it did not come about in time"
        time.sleep(0.005)


def stand_by_of(at: Bench) -> int:
    """Wait until it has loaded what it needs: then it answers a question within a moment, here by using no time."""
    wait_until(lambda: at.client.stand_by_pid is not None, 10)
    pid = at.client.stand_by_pid
    assert pid is not None
    wait_until(lambda: idle(pid), 20)
    return pid


def idle(pid: int) -> bool:
    """Whether a process that has begun uses hardly any time."""

    def used_ticks() -> int:
        fields = Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()
        return int(fields[11]) + int(fields[12])

    before = used_ticks()
    time.sleep(0.4)
    return before > 10 and used_ticks() - before <= 1
