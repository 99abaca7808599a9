"""What our layer costs a reading, and that a slow meter never delays "off".

Run as ``python -m tests.benchmarks.link_overhead [TIMES]`` (1000 readings of each kind without a number).  The
instruments are those of the fault bench, each in a process of its own.

* Overhead: the same question to the same instrument through a bare PyVISA query, through `Link`, and through `Meter`,
  in ten turns, so that a disturbance meets all alike.  The medians of `Meter` and of the bare query may differ by less
  than 1 ms on a socket and on a serial line (a pseudo-terminal); the other links are shown beside them.
* Off: while a meter takes 7 s for a reading, "off" goes to a supply, and the reading is given up for an urgent job of
  the meter itself.  The time is taken until the supply's outputs read back as off and no current flows.

It ends with status 1 when a bound is broken.
"""

from __future__ import annotations

import contextlib
import statistics
import subprocess
import sys
import time
from collections.abc import Callable, Iterator

import pyvisa
from pyvisa.resources import MessageBasedResource

from benchkit.errors import InstrumentError
from tests.instruments.fault_bench.bench import MeterBench, SupplyBench

MOST_OVERHEAD_S = 0.001
MOST_GIVEN_UP_S = 0.1
MOST_OFF_S = 0.5
SLOW_S = 7.0
BOUND = ("socket", "serial")
KINDS = ("socket", "serial", "vxi-11", "hislip")
QUESTION = "MEAS:VOLT:DC? 17"
ROUNDS = 10
OFF_TIMES = 5

Timings = dict[str, list[float]]


@contextlib.contextmanager
def instrument(kind: str, what: str, seconds: float = 0.0) -> Iterator[str]:
    """An instrument in a process of its own; yields its address."""
    command = [sys.executable, "-m", "tests.instruments.fault_bench", kind, what, str(seconds)]
    with subprocess.Popen(command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True) as process:
        assert process.stdout is not None
        assert process.stdin is not None
        yield process.stdout.readline().strip()
        process.stdin.close()


def bare(address: str, times: int) -> Timings:
    """Ask through PyVISA alone."""
    resource = pyvisa.ResourceManager("@py").open_resource(
        address, open_timeout=3000, timeout=3000, read_termination="\n", write_termination="\n"
    )
    assert isinstance(resource, MessageBasedResource)
    took = {"bare PyVISA": timed(lambda: float(resource.query(QUESTION)), times)}
    resource.close()
    return took


def ours(address: str, times: int) -> Timings:
    """Ask through our layer, its link open and proven."""
    with MeterBench(address) as bench:
        bench.meter.identify().result(20)
        return {
            "Link": timed(lambda: bench.start(17.0, 3.0, repeats=True).result(20), times),
            "Meter": timed(lambda: bench.read(17.0), times),
        }


def timed(read: Callable[[], object], times: int) -> list[float]:
    """Return how long each reading took, s; the first isn't counted."""
    read()
    took = []
    for _ in range(times):
        began = time.perf_counter()
        value = read()
        took.append(time.perf_counter() - began)
        if value != 17.0:
            raise SystemExit(f"{value!r} was read instead of 17")
    return took


def overhead(kind: str, times: int) -> Timings:
    """Return the times of single readings on one link, s, by way; all to one instrument, in turns."""
    took: Timings = {}
    with instrument(kind, "meter") as address:
        for _ in range(ROUNDS):
            for way, more in {**bare(address, times // ROUNDS), **ours(address, times // ROUNDS)}.items():
                took.setdefault(way, []).extend(more)
    return took


def off_beside_a_slow_meter(kind: str, times: int) -> tuple[list[float], list[float]]:
    """Return how long a confirmed "off" took, and an urgent message to the meter that reads, s."""
    off_s, given_up_s = [], []
    with (
        instrument(kind, "meter", SLOW_S) as meter_address,
        instrument(kind, "supply") as supply_address,
        SupplyBench(supply_address) as bench,
    ):
        for _ in range(times):
            with MeterBench(meter_address, {"open_timeout_s": 10.0}) as slow:
                slow.meter.identify().result(30)
                bench.supply.set(5.0, -5.0, 0.05, True).result(30)
                reading = slow.start(17.0, 10.0, repeats=True)
                time.sleep(0.05)
                began = time.perf_counter()
                outcome = bench.supply.off().result(30)
                off_s.append(time.perf_counter() - began)
                if not outcome.confirmed:
                    raise SystemExit(outcome.how)
                if reading.done():
                    raise SystemExit("the reading had ended before")
                began = time.perf_counter()
                slow.link.submit_urgent(lambda talk: None).result(30)
                given_up_s.append(time.perf_counter() - began)
                with contextlib.suppress(InstrumentError):
                    reading.result(30)
    return off_s, given_up_s


def main() -> int:
    times = int(sys.argv[1]) if len(sys.argv) > 1 else 1000
    broken = False
    for kind in KINDS:
        took = overhead(kind, times)
        medians = {way: statistics.median(values) for way, values in took.items()}
        for way, values in took.items():
            late = sorted(values)[int(len(values) * 0.99)]
            print(f"{kind:7} {way:12} median {medians[way] * 1e6:7.0f} us, 99 % below {late * 1e6:7.0f} us")
        more_s = medians["Meter"] - medians["bare PyVISA"]
        bound = f" (less than {MOST_OVERHEAD_S * 1e6:.0f} us is wanted)" if kind in BOUND else ""
        print(f"{kind:7} overhead     {more_s * 1e6:+.0f} us{bound}")
        broken |= kind in BOUND and more_s >= MOST_OVERHEAD_S
    for kind in KINDS:
        off_s, given_up_s = off_beside_a_slow_meter(kind, OFF_TIMES)
        middle_ms, longest_ms = statistics.median(off_s) * 1e3, max(off_s) * 1e3
        print(f"{kind:7} off, confirmed, beside a reading of {SLOW_S:.0f} s: median {middle_ms:.1f} ms, ", end="")
        print(
            f"longest {longest_ms:.1f} ms; that reading given up in {max(given_up_s) * 1e3:.0f} ms at most", flush=True
        )
        broken |= max(off_s) >= MOST_OFF_S or max(given_up_s) >= MOST_GIVEN_UP_S
    print("a bound is broken" if broken else "all within bounds")
    return 1 if broken else 0


if __name__ == "__main__":
    sys.exit(main())
