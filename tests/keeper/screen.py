"""A screen for the tests: it switches the supply on through a keeper and beats until something happens to it."""

from __future__ import annotations

import sys
import time
from pathlib import Path

from benchkit.events import Noted
from benchkit.keeper.client import KeeperClient, WatchLines


def main() -> None:
    supply, record, mode = sys.argv[1:4]
    client = KeeperClient.start(None, lambda push: print(push, file=sys.stderr))
    client.connect({"meter": None, "supply": {"address": supply, "profile": "scpi-supply"}}).result(10)
    client.open_journal(Path(record), Noted(text="begin")).result(10)
    client.supply_set(5.0, -5.0, 0.05, True).result(10)
    client.watch(WatchLines(own_interval_s=0.1)).result(10)
    if mode != "unarmed":
        client.arm().result(10)
    client.heartbeat()
    print(f"on {client.pid}", flush=True)
    while mode != "silent":
        client.heartbeat()
        time.sleep(0.1)
    time.sleep(60)


if __name__ == "__main__":
    main()
