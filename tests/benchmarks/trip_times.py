"""How long a unit that runs away stays on after the first reading that shows it.

Run as ``python -m tests.benchmarks.trip_times [TIMES]``.  A supply whose current rises by itself, faster and faster, is
watched by a real keeper, as at a bench, every 0.2 s.  Each answer of the supply takes its own time, different ones in
turn.  Half of the tries trip on a line for the current, half on the limit; the over-current protection of the supply
itself, which would be quicker still, is left off.  Timed is, on the side of the supply, from the moment at which it
*sent* the first reading above the limit to the moment at which its outputs were off, less its own time for taking the
message.  That has to be 0.3 s at most.
"""

from __future__ import annotations

import math
import socket
import statistics
import sys
import threading
import time
from dataclasses import dataclass

from benchkit.keeper.client import KeeperClient, WatchLines
from tests.instruments.server import TestSupply

OWN_S = (0.0, 0.01, 0.03, 0.08)
MOST_S = 0.3
LINE_A = 0.03
LIMIT_A = 0.05
BEGIN_A = 0.012


class Runaway(TestSupply):
    """Its load draws more and more once it is let go."""

    def __init__(self) -> None:
        self.own_s = 0.0
        self.let_go_s = math.inf
        self.doubles_s = 0.1
        self.line_a = LINE_A
        self.above_s: float | None = None
        self._seen_above = False
        super().__init__()
        self.fault = self._take_time

    def begin(self, own_s: float, line_a: float, doubles_s: float) -> None:
        self.own_s, self.line_a, self.doubles_s = own_s, line_a, doubles_s
        self.let_go_s, self.above_s = math.inf, None

    def _take_time(self, connection: socket.socket, message: str) -> bool:
        """Answer after its own time, and note when a reading above the line was sent."""
        time.sleep(self.own_s)
        with self.lock:
            self._seen_above = False
            reply = self.reply(message)
        if reply is not None:
            connection.sendall((reply + "\n").encode())
            if "MEAS:CURR?" in message and self._seen_above and self.above_s is None:
                self.above_s = time.monotonic()
        return True

    def _amps(self, channel: int) -> tuple[float, bool]:
        if not self.on[channel]:
            return 0.0, False
        since_s = max(0.0, time.monotonic() - self.let_go_s)
        amps = BEGIN_A * 2.0 ** min(since_s / self.doubles_s, 30.0)
        self.load_ohm = self.volts[channel] / amps
        self._seen_above = self._seen_above or amps >= min(self.line_a, self.limit[channel])
        return (self.limit[channel], True) if amps >= self.limit[channel] else (amps, False)


@dataclass(frozen=True)
class Trip:
    """One try."""

    own_s: float
    seconds: float


def once(number: int, client: KeeperClient, supply: Runaway) -> Trip:
    """Let the load go at a moment that the watch can't know, and time the trip."""
    own_s = OWN_S[number % len(OWN_S)]
    line_a = LINE_A if number % 2 else math.inf
    supply.begin(own_s, line_a, 0.05 + 0.01 * (number % 11))
    lines = WatchLines(
        positive_a=LINE_A if number % 2 else None, negative_a=LINE_A if number % 2 else None, own_interval_s=0.2
    )
    client.supply_ramp(10.0, -10.0, LIMIT_A, 0.0, None, lines, over_current=False).result(30)
    time.sleep(0.3 + 0.017 * (number % 13))
    assert supply.is_on, "it tripped before anything was wrong"
    supply.let_go_s = time.monotonic()
    if not supply.wait_off(10.0):
        raise SystemExit(f"try {number}: it never went off")
    assert supply.above_s is not None
    off = client.off("the try is over").result(10)
    if not off.confirmed:
        raise SystemExit(f"try {number}: {off.how}")
    first_off_s = next(at for at, on in supply.on_at if not on and at > supply.let_go_s)
    return Trip(own_s, first_off_s - supply.above_s - own_s)


def run(times: int) -> list[Trip]:
    """Do it so many times."""
    supply = Runaway()
    client = KeeperClient.start(None, lambda push: None)
    beating = threading.Event()

    def beat() -> None:
        while not beating.wait(0.2):
            client.heartbeat()

    threading.Thread(target=beat, daemon=True).start()
    try:
        table = {"address": supply.address, "profile": "scpi-supply"}
        client.connect({"meter": None, "supply": table}).result(20)
        client.arm().result(5)
        return [once(number, client, supply) for number in range(times)]
    finally:
        beating.set()
        client.close()
        supply.close()


def main() -> None:
    """Print the distribution."""
    times = int(sys.argv[1]) if len(sys.argv) > 1 else 100
    trips = run(times)
    for own_s in OWN_S:
        of_these = sorted(trip.seconds for trip in trips if trip.own_s == own_s)
        if of_these:
            print(
                f"answers take {own_s * 1e3:3.0f} ms: {len(of_these):3d} tries, median "
                f"{statistics.median(of_these) * 1e3:6.1f} ms, longest {of_these[-1] * 1e3:6.1f} ms"
            )
    seconds = sorted(trip.seconds for trip in trips)
    within = sum(one <= MOST_S for one in seconds)
    most_of_them = seconds[int(0.95 * (len(seconds) - 1))]
    print(
        f"all: median {statistics.median(seconds) * 1e3:.1f} ms, 95 % {most_of_them * 1e3:.1f} ms, "
        f"longest {seconds[-1] * 1e3:.1f} ms; {within} of {times} within {MOST_S * 1e3:.0f} ms"
    )
    sys.exit(0 if within == times else 1)


if __name__ == "__main__":
    main()
