"""What the keeper's tests share: a bench of test servers with a keeper, and ways to wait."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

from benchkit.errors import FileError
from benchkit.events import Closed, Event
from benchkit.journal import read
from benchkit.keeper.client import KeeperClient, KeeperDied, Push
from tests.instruments.server import TestMeter, TestSupply


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


def wait_until(true: Callable[[], bool], timeout_s: float = 5.0) -> None:
    end = time.monotonic() + timeout_s
    while not true():
        assert time.monotonic() < end, "it did not come about in time"
        time.sleep(0.005)
