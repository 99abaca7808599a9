"""Put an instrument of the fault bench on a link, say its address, and stay until the standard input ends.

``python -m tests.instruments.fault_bench {socket,serial,vxi-11,hislip} {meter,supply} [SECONDS]``; with SECONDS each
reading of the meter takes so long.
"""

from __future__ import annotations

import sys

from tests.instruments.fault_bench import KINDS, FaultMeter, FaultSupply, Say, Wait


def main() -> int:
    kind, what = sys.argv[1:3]
    seconds = float(sys.argv[3]) if len(sys.argv) > 3 else 0.0
    instrument = FaultMeter() if what == "meter" else FaultSupply()
    if seconds:
        instrument.fails_always("MEAS:VOLT:DC?", Wait(seconds), Say(b"+1.0E+00\n"))
    with KINDS[kind](instrument) as server:
        print(server.address, flush=True)
        sys.stdin.read()
    return 0


if __name__ == "__main__":
    sys.exit(main())
