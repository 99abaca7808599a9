"""Put an instrument of the fault bench on a link, say its address, and stay until the standard input ends.

``python -m tests.instruments.fault_bench {socket,serial,vxi-11,hislip} {meter,supply} [SECONDS]``; with SECONDS each
reading of the meter takes so long.
"""

from __future__ import annotations

import argparse
import sys

from tests.instruments.fault_bench import KINDS, FaultMeter, FaultSupply, Say, Wait


def arguments(given: list[str] | None = None) -> tuple[str, str, float]:
    """Return link, instrument and seconds; wrong ones end the program with its usage and status 2."""
    parser = argparse.ArgumentParser(
        prog="python -m tests.instruments.fault_bench",
        description="An instrument on a loopback link, to try benchkit's commands for instruments with. "
        "It prints its address, and stays until its standard input ends (Ctrl+D).",
    )
    parser.add_argument("kind", choices=sorted(KINDS), help="the link")
    parser.add_argument("what", choices=["meter", "supply"])
    parser.add_argument("seconds", type=float, nargs="?", default=0.0, help="how long a reading of d.c. volts takes")
    found = parser.parse_args(given)
    return found.kind, found.what, found.seconds


def main() -> int:
    kind, what, seconds = arguments(sys.argv[1:])
    instrument = FaultMeter() if what == "meter" else FaultSupply()
    if seconds:
        instrument.fails_always("MEAS:VOLT:DC?", Wait(seconds), Say(b"+1.0E+00\n"))
    with KINDS[kind](instrument) as server:
        print(server.address, flush=True)
        sys.stdin.read()
    return 0


if __name__ == "__main__":
    sys.exit(main())
