"""The process of a rehearsal: a simulated unit, two instruments on sockets, and a side channel for the hands.

Started as ``python -m benchkit.rehearsal.bench --design FILE --seed N``, it prints one line of JSON with its addresses
and serves until its standard input ends.  Everything runs on one event loop, so that the order in which messages
arrive is the only order there is: the same seed and the same sequence of messages give the same replies.

Side channel: JSON lines over a loopback socket.  A request is ``{"do": NAME, ...}``, a reply ``{"ok": VALUE}`` or
``{"error": TEXT}``.  See `SIDE_REQUESTS`.

Clocks: ``manual`` time passes only on request; ``follow`` adds the wall clock to it.
"""

from __future__ import annotations

import argparse
import asyncio
import json
import math
import sys
import threading
import time
from collections.abc import Callable, Mapping, Sequence
from typing import Any, Final

import numpy as np

from benchkit.errors import BenchkitError, EntryError
from benchkit.rehearsal.as_found import found_travel
from benchkit.rehearsal.driving import LOAD_OHM
from benchkit.rehearsal.meter import Meter
from benchkit.rehearsal.mishaps import Mishap, parse_mishap
from benchkit.rehearsal.servers import LOOPBACK, serve
from benchkit.rehearsal.supply import Supply
from benchkit.rehearsal.unit import SimulatedUnit
from benchkit.rehearsal.wiring import Table
from benchkit.stage.design import Design, load_design, parse_design
from benchkit.stage.draws import seeds
from benchkit.stage.points import parts_of

LEAVE: Final = b"leave"
"""The line on standard input that ends a bench at once."""
OUTLAST_S: Final = 4.0
READ_BACK_S: Final = 1.0
FOLLOW_EVERY_S: Final = 0.1
LONGEST_CATCH_UP_S: Final = 1.0


class RehearsalBench:
    """The bench in one object, without sockets.

    Parameters
    ----------
    design : Design
    seed : int
        Its ``unit`` child draws the unit, its ``noise`` child the instruments' errors and noise.
    plant : str
        What goes wrong, in the words of `benchkit.rehearsal.mishaps`, such as ``"PART: FAULT"``; or empty.
    follow : bool
        Whether simulated time follows the wall clock.

    Raises
    ------
    EntryError
        When the planted part or fault doesn't exist.
    """

    def __init__(self, design: Design, seed: int, plant: str = "", follow: bool = False) -> None:
        mishap = parse_mishap(plant, design) if plant else Mishap()
        self.plant = "" if not plant else str(mishap)
        self.unit = SimulatedUnit(design, seed, None if mishap.after_turns else mishap.fault)
        self.table = Table(self.unit)
        if mishap.after_turns or mishap.trouble:
            self.table.befall(mishap)
        noise = seeds("noise", seed)
        meter_seed, supply_seed = noise.integers(0, 2**63, 2)
        self.meter = Meter(self.table, np.random.default_rng(int(meter_seed)))
        self.supply = Supply(self.table, np.random.default_rng(int(supply_seed)))
        self.table.minder = self.supply
        self.follow = follow
        self._seed = seed
        self._wall_s = time.monotonic()

    def catch_up(self) -> None:
        """Let simulated time follow the wall clock, when it does."""
        if self.follow:
            now_s = time.monotonic()
            passed_s, self._wall_s = now_s - self._wall_s, now_s
            self.table.advance(min(passed_s, LONGEST_CATCH_UP_S))

    def found_travel(self) -> float:
        """Return where the trimmer of this unit stands when it comes to a repair shop."""
        return found_travel(self.unit.design, self.unit.parameters, self._seed)

    def truth(self) -> dict[str, Any]:
        """Return what is really so, for tests and for whoever judges a rehearsal afterwards."""
        table, unit = self.table, self.unit
        solved = table.now()
        return {
            "sim_s": table.sim_s,
            "output_on": [channel.on for channel in table.channels],
            "rails_v": [table.unfed_v()[0], -table.unfed_v()[1]],
            "highest_rail_v": [table.rails.highest_v[0], -table.rails.highest_v[1]],
            "energy_j": table.energy_j,
            "drops_v": {name: float(value[0]) for name, value in solved.points.items() if name.startswith("emitter.")},
            "output_v": float(solved.points["output"][0]),
            "quiescent_a": unit.quiescent_a(solved),
            "highest_quiescent_a": unit.highest_quiescent_a,
            "travel": unit.travel,
            "temperatures_c": unit.warmth.temperatures_c(),
            "highest_heatsink_c": unit.warmth.highest_sink_c,
            "broken": list(unit.broken),
            "burnt_parts": len(unit.burnt),
            "burnt": [str(burnt) for burnt in unit.burnt],
            "overloaded": dict(unit.strain.overloaded),
            "words": burnt_words(unit),
            "plant": self.plant,
            "faulty": list(unit.faulty),
            "semiconductors": semiconductors(self.unit.design, unit.faulty),
            "replaced": list(unit.repaired),
            "unsolved": unit.unsolved,
            "connected": table.connected,
            "shorted": table.shorted,
            "probe": None if table.point is None else table.point.name,
        }

    def side(self, request: Mapping[str, Any]) -> Any:
        """Carry out one request of the side channel and return what it says.

        Raises
        ------
        EntryError
            For a request that can't be understood.
        """
        name = request.get("do")
        handler = SIDE_REQUESTS.get(name) if isinstance(name, str) else None
        if handler is None:
            raise EntryError(f"The hands were told to do {name!r}", f"one of {', '.join(SIDE_REQUESTS)}")
        return handler(self, request)


def burnt_words(unit: SimulatedUnit) -> str:
    """Say what has happened to the simulated unit, for the end of a rehearsal."""
    words = "The simulated unit at the end of the walk."
    if unit.burnt:
        words += f" Burnt on the way: {'; '.join(str(burnt) for burnt in unit.burnt)}."
    else:
        words += " No part of it was burnt."
    over = [part for part in unit.strain.overloaded if part not in unit.broken]
    if over:
        words += f" Overloaded, but not burnt: {', '.join(sorted(over))}."
    return words


def _probe(bench: RehearsalBench, request: Mapping[str, Any]) -> None:
    point = request.get("point")
    if point is not None and not isinstance(point, str):
        raise EntryError(f"{point!r} came as a place for the probe", "a test point's name, or null")
    bench.table.probe(point)


def _turn(bench: RehearsalBench, request: Mapping[str, Any]) -> float:
    return bench.table.turn(_number(request, "turns"))


def _trimmer_to(bench: RehearsalBench, request: Mapping[str, Any]) -> float:
    where = request.get("travel")
    if where == "as found":
        return bench.table.set_travel(bench.found_travel())
    if where in ("least", "most"):
        return bench.table.set_travel(0.0 if where == "least" else 1.0)
    return bench.table.set_travel(_number(request, "travel"))


def _drive(bench: RehearsalBench, request: Mapping[str, Any]) -> None:
    bench.table.drive(_number(request, "share"), _number({"load_ohm": LOAD_OHM, **request}, "load_ohm"))


def _slip(bench: RehearsalBench, request: Mapping[str, Any]) -> None:
    bench.table.slip(_number(request, "seconds"))


def _fault(bench: RehearsalBench, request: Mapping[str, Any]) -> None:
    what = request.get("what")
    if not isinstance(what, str):
        raise EntryError(f"{what!r} came as what goes wrong", 'words such as "spreader.trimmer: wiper open"')
    mishap = parse_mishap(what, bench.unit.design)
    bench.table.befall(mishap)
    bench.plant = bench.plant or str(mishap)


def _repair(bench: RehearsalBench, _: Mapping[str, Any]) -> dict[str, Any]:
    parts = bench.table.repair()
    return {"parts": list(parts), "semiconductors": semiconductors(bench.unit.design, parts)}


def _clear_protection(bench: RehearsalBench, _: Mapping[str, Any]) -> None:
    bench.supply.clear_protection()


def semiconductors(design: Design, parts: Sequence[str]) -> bool:
    """Whether there is a transistor, or a feed made of some, among the parts."""
    kinds = {part.name: part.kind for part in parts_of(design)}
    return any(kinds[name] in ("transistor", "source", "servo") for name in parts)


def _connect(bench: RehearsalBench, request: Mapping[str, Any]) -> None:
    bench.table.connect(_flag(request, "connected"))


def _short(bench: RehearsalBench, request: Mapping[str, Any]) -> None:
    bench.table.short(_flag(request, "shorted"))


def _advance(bench: RehearsalBench, request: Mapping[str, Any]) -> float:
    bench.table.advance(_number(request, "seconds"))
    return bench.table.sim_s


SIDE_REQUESTS: Final[Mapping[str, Callable[[RehearsalBench, Mapping[str, Any]], Any]]] = {
    "probe": _probe,
    "turn": _turn,
    "trimmer to": _trimmer_to,
    "connect": _connect,
    "short": _short,
    "drive": _drive,
    "slip": _slip,
    "fault": _fault,
    "repair": _repair,
    "clear protection": _clear_protection,
    "advance": _advance,
    "truth": lambda bench, _: bench.truth(),
}
"""What the hands can do: name to function of the bench and the request."""


def _number(request: Mapping[str, Any], key: str) -> float:
    value = request.get(key)
    if isinstance(value, bool) or not isinstance(value, int | float) or not math.isfinite(value):
        raise EntryError(f"{value!r} came as {key}", "a finite number")
    return float(value)


def _flag(request: Mapping[str, Any], key: str) -> bool:
    value = request.get(key)
    if not isinstance(value, bool):
        raise EntryError(f"{value!r} came as {key}", "true or false")
    return value


class SideTalker:
    """The side channel as something that answers lines."""

    def __init__(self, bench: RehearsalBench) -> None:
        self._bench = bench

    def handle(self, message: str) -> str:
        """Carry out one request; return its reply as a line of JSON."""
        try:
            request = json.loads(message)
            if not isinstance(request, dict):
                raise EntryError(f"{message!r} came", "a JSON object")
            return json.dumps({"ok": self._bench.side(request)}, allow_nan=False)
        except BenchkitError as error:
            return json.dumps({"error": str(error)})
        except ValueError as error:
            return json.dumps({"error": f"The request is no JSON, or its answer has no number: {error}"})

    def complain(self, code: int) -> None:
        """Take note of a line that was too long; nothing is kept."""


class Ending:
    """When a bench ends, and whether it was told to (`hurried`) or whoever started it has just gone."""

    def __init__(self) -> None:
        self.reached = asyncio.Event()
        self.hurried = False


async def run(bench: RehearsalBench, announce: Callable[[dict[str, Any]], None], ending: Ending) -> None:
    """Serve `bench` until `ending` is reached; `announce` gets the addresses once everything listens."""
    meter, meter_port = await serve(bench.meter, bench.catch_up)
    supply, supply_port = await serve(bench.supply, bench.catch_up)
    side, side_port = await serve(SideTalker(bench), bench.catch_up)
    announce(
        {
            "meter": f"TCPIP::{LOOPBACK}::{meter_port}::SOCKET",
            "supply": f"TCPIP::{LOOPBACK}::{supply_port}::SOCKET",
            "side": side_port,
        }
    )
    while not ending.reached.is_set():
        try:
            await asyncio.wait_for(ending.reached.wait(), FOLLOW_EVERY_S if bench.follow else None)
        except TimeoutError:
            bench.catch_up()
    if not ending.hurried:
        await _outlast(bench)
    for server in (meter, supply, side):
        server.close()


async def _outlast(bench: RehearsalBench) -> None:
    """Stay for a while, as a real supply would, when whoever started the bench has gone without a word."""
    left_s = OUTLAST_S
    while left_s > 0.0 and _output_on(bench):
        await asyncio.sleep(0.05)
        left_s -= 0.05
    await asyncio.sleep(READ_BACK_S)


def _output_on(bench: RehearsalBench) -> bool:
    return any(channel.on for channel in bench.table.channels)


def _watch_input(loop: asyncio.AbstractEventLoop, ending: Ending) -> None:
    """Read standard input to its end, or to the word that ends it, on a thread of its own; then let the bench end."""

    def read() -> None:
        for line in sys.stdin.buffer:
            if line.strip() == LEAVE:
                ending.hurried = True
                break
        loop.call_soon_threadsafe(ending.reached.set)

    threading.Thread(target=read, name="standard input", daemon=True).start()


async def _main(bench: RehearsalBench) -> None:
    ending = Ending()
    _watch_input(asyncio.get_running_loop(), ending)
    await run(bench, lambda addresses: print(json.dumps(addresses), flush=True), ending)


def read_design(name: str) -> Design:
    """Read a design file; ``-`` takes one line of JSON with its text from standard input.

    Raises
    ------
    FileError
        When it can't be read or used.
    """
    if name != "-":
        return load_design(name)
    head = json.loads(sys.stdin.buffer.readline().decode("utf-8"))
    return parse_design(head["design"], head.get("file", "design"))


def main() -> int:
    """Run the process; return its exit status."""
    parser = argparse.ArgumentParser(prog="python -m benchkit.rehearsal.bench", description=__doc__.split("\n")[0])
    parser.add_argument("--design", required=True, help="a design file, or - for a line of JSON on standard input")
    parser.add_argument("--seed", type=int, default=0)
    parser.add_argument("--plant", default="", help='"PART: FAULT"')
    parser.add_argument("--clock", choices=("manual", "follow"), default="manual")
    arguments = parser.parse_args()
    try:
        design = read_design(arguments.design)
        bench = RehearsalBench(design, arguments.seed, arguments.plant, arguments.clock == "follow")
    except BenchkitError as error:
        print(json.dumps({"error": str(error)}), flush=True)
        return error.exit_status
    asyncio.run(_main(bench))
    return 0


if __name__ == "__main__":
    raise SystemExit(main())
