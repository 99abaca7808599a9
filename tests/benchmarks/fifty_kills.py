"""End a walk in every way that nobody wishes for, many times, and see that the supply goes off and the record says why.

Run as ``python -m tests.benchmarks.fifty_kills [TIMES] [WAY ...]``.  Each time a walk with real screen, session,
keeper and stand-by is brought to where its rails are up and its meter is read again and again; then it is ended
(`tests.keeper.killing`).  Four walks run at a time: most of a walk's time is spent on ramps.  What has to hold each
time:

* the supply's output is off within 1 s, 3 s where something was frozen (a mute meter: 1.5 s), and stays off;
* the record is whole, every "off" in it is confirmed, and it says who was lost, as far as that could be written;
* whoever can still speak says that the supply is off.

On a machine that has far too much to do a walk may be stopped before that, by time-outs that are right; it is counted
and begun anew.
"""

from __future__ import annotations

import statistics
import sys
import time
from concurrent.futures import ThreadPoolExecutor
from queue import SimpleQueue

from tests.keeper.killing import WAYS, Forge, Outcome, end

AT_A_TIME = 4


def longest(outcomes: list[Outcome]) -> str:
    """Say how long the slowest walk that ended by itself took for that."""
    ends_s = [outcome.end_s for outcome in outcomes if outcome.end_s is not None]
    return f"{max(ends_s):.1f} s (longest)" if ends_s else "-"


def main() -> None:
    """Do it as often as asked, and print a line for each way."""
    times = int(sys.argv[1]) if len(sys.argv) > 1 else 50
    bad = 0
    forges: SimpleQueue[Forge] = SimpleQueue()
    for _ in range(AT_A_TIME):
        forges.put(Forge())

    never_there: list[str] = []

    def once(way: str) -> Outcome:
        forge = forges.get()
        try:
            return end(forge, way, never_there.append)
        finally:
            forges.put(forge)

    pool = ThreadPoolExecutor(AT_A_TIME)
    for way in sys.argv[2:] or list(WAYS):
        began_s = time.monotonic()
        outcomes = list(pool.map(once, [way] * times))
        for outcome in outcomes:
            for problem in outcome.problems:
                print(f"  {way}: {problem}", flush=True)
        well = sum(not outcome.problems for outcome in outcomes)
        bad += times - well
        off_s = sorted(outcome.off_s for outcome in outcomes)
        print(
            f"{way:<24} {well} of {times} well; off after {statistics.median(off_s):.3f} s (median), "
            f"{off_s[-1]:.3f} s (longest), {WAYS[way].within_s:.1f} s allowed; "
            f"{(time.monotonic() - began_s) / times:.1f} s a try; at its end after {longest(outcomes)}",
            flush=True,
        )
    print(f"{len(never_there)} walks were stopped before anything was done to them, and were begun anew")
    for _ in range(AT_A_TIME):
        forges.get().close()
    sys.exit(1 if bad else 0)


if __name__ == "__main__":
    main()
