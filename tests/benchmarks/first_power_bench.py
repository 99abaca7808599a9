"""A rehearsal's bench without sockets and processes, for campaigns of hundreds of walks.

The walk, the session, the stand-in, the model and the simulated bench with its SCPI instruments are the real ones.  Not
the keeper: `MemoryKeeper` does what it does in the order of calls, with the keeper's own judgement of the watch, but
without a process, links, a journal on a disk, and heartbeats.  The instruments are still spoken to in SCPI, message by
message, only by a call instead of over a socket.

What a campaign shares between walks of one design: the plan, the limits of each condition and the ensembles behind
narrowed limits, all drawn from a seed of the campaign's own.  Units come from other seeds.  Questions about suspects
that the next reading supersedes at once aren't worked out: a person takes seconds for what takes no time here.
"""

from __future__ import annotations

import asyncio
import threading
from collections.abc import Callable, Mapping
from concurrent.futures import Future
from dataclasses import dataclass, replace
from functools import cache
from pathlib import Path
from typing import Any

from benchkit.errors import EntryError, InstrumentError
from benchkit.events import Closed, Event, OutputOff, SupplyState, Tripped, WalkOpened
from benchkit.instruments.bench import parse_bench
from benchkit.instruments.meter import RawReading
from benchkit.instruments.supply import Sample
from benchkit.keeper.protocol import KeeperDied, Kept, Push, WatchLines
from benchkit.keeper.watch import look
from benchkit.procedure.file import Procedure, load_procedure
from benchkit.procedure.plan import make_plan
from benchkit.procedure.walk import Walk
from benchkit.rehearsal.bench import RehearsalBench
from benchkit.rehearsal.bench_file import bench_text
from benchkit.rehearsal.standin import StandIn
from benchkit.session import predictions, this_unit
from benchkit.session.aside import Aside
from benchkit.session.clock import SimulatedClock
from benchkit.session.hands import Hands
from benchkit.session.job import Job
from benchkit.session.run import Session
from benchkit.shipped import find_procedure
from benchkit.stage.design import Design
from benchkit.stage.draws import seeds

FIRST_POWER = "first-power-on"
LIMITS_SEED = 77
OVERLOAD = 9e37
HEADERS = {"dc volts": "VOLT:DC", "ac volts": "VOLT:AC", "dc current": "CURR:DC", "ohms": "RES", "ohms 4-wire": "FRES",
           "diode": "DIOD", "temperature": "TEMP"}  # fmt: skip
ADDRESS = "TCPIP::127.0.0.1::1::SOCKET"


def done(value: Any) -> Future[Any]:
    """A future that has its result, or its error."""
    future: Future[Any] = Future()
    if isinstance(value, Exception):
        future.set_exception(value)
    else:
        future.set_result(value)
    return future


class MemoryHands:
    """The side channel's calls, straight to the bench."""

    def __init__(self, bench: RehearsalBench) -> None:
        self.bench = bench
        self.lock = threading.RLock()

    def __getattr__(self, name: str) -> Callable[..., Any]:
        keys = {"probe": "point", "turn": "turns", "trimmer_to": "travel", "connect": "connected", "short": "shorted",
                "advance": "seconds", "truth": "", "drive": "share", "slip": "seconds", "fault": "what",
                "repair": "", "clear_protection": ""}  # fmt: skip
        if name not in keys:
            raise AttributeError(name)

        def act(*arguments: Any) -> Any:
            with self.lock:
                request = dict(zip([keys[name]], arguments, strict=False))
                return self.bench.side({"do": name.replace("_", " "), **request})

        return act


class MemoryKeeper:
    """What a session asks of its keeper, answered at once."""

    alive = True

    def __init__(self, hands: MemoryHands, opened: WalkOpened) -> None:
        self.hands = hands
        self.kept: list[Event] = [opened]
        self.on_push: Callable[[Push | KeeperDied], None] = lambda push: None
        self._lines: WatchLines | None = None
        self._expected_on = False
        self._unknown_off = False

    # -- the record

    def append(self, event: Event, after: int) -> Future[Kept]:
        if after != len(self.kept):
            return done(Kept(seq=len(self.kept), moved_on=True))
        self.kept.append(event)
        self._unknown_off = False
        return done(Kept(seq=len(self.kept)))

    def _push(self, event: Event) -> None:
        self.kept.append(event)
        self.on_push(Push(event=event, seq=len(self.kept)))

    # -- the instruments

    def arm(self) -> Future[None]:
        return done(None)

    def disarm(self) -> Future[None]:
        return done(None)

    def heartbeat(self) -> None:
        """Nobody listens."""

    def connect(self, setup: dict[str, Any]) -> Future[dict[str, str | None]]:
        return done({"meter": self._meter("*IDN?"), "supply": self._supply("*IDN?")})

    def supply_state(self) -> Future[SupplyState]:
        return done(self._sample().state)

    def supply_set(
        self,
        positive_v: float,
        negative_v: float,
        limit_a: float,
        output_on: bool,
        protection_v: tuple[float, float] | None = None,
        *,
        over_current: bool = True,
    ) -> Future[SupplyState]:
        if output_on and self._unknown_off:
            return done(InstrumentError("refused", "The output was switched off meanwhile", "nothing after that"))
        if not output_on:
            self._tell("OUTP OFF,(@1,2)")
        self._tell(f"CURR {limit_a:.6g},(@1,2)")
        self._tell(f"CURR:PROT:STAT {'ON' if over_current else 'OFF'},(@1,2)")
        if protection_v is not None:
            self._tell(f"VOLT:PROT {protection_v[0]:.6g},(@1);:VOLT:PROT {protection_v[1]:.6g},(@2)")
        self._tell(f"VOLT {positive_v:.6g},(@1);:VOLT {-negative_v:.6g},(@2)")
        if output_on:
            self._tell("OUTP ON,(@1,2)")
        self._expected_on = output_on
        return done(self._sample().state)

    def mind_meter(self, age_limit_s: float | None) -> Future[None]:
        return done(None)  # it answers always

    def stay_awake(self) -> Future[str]:
        return done("")

    def watch(self, lines: WatchLines | None) -> Future[None]:
        self._lines = lines
        return done(None)

    def sample(self, elapsed_s: float) -> Future[SupplyState]:
        sample = self._sample()
        trip = None
        if self._lines is not None and self._expected_on:
            trip = look(sample, self._lines, elapsed_s)
        if trip is not None:
            self._push(
                Tripped(reason=trip.reason, what=trip.what, value=trip.value, limit=trip.limit, state=sample.state)
            )
            self.off(f"tripped: {trip.reason}")
        return done(sample.state)

    def off(self, reason: str) -> Future[OutputOff]:
        self._lines, self._expected_on, self._unknown_off = None, False, True
        self._tell("OUTP OFF,(@1,2)")
        sample = self._sample()
        amps = (sample.state.positive_a or 0.0, sample.state.negative_a or 0.0)
        confirmed = not any(sample.outputs) and max(amps) < 0.002
        event = OutputOff(reason=reason, confirmed=confirmed, how="read back as off", state=sample.state)
        self._push(event)
        return done(event)

    def after_death(self, setup: dict[str, Any] | None = None) -> Future[OutputOff]:
        return self.off("the keeper died")

    def read(self, function: str, range: float | None = None, samples: int = 1) -> Future[RawReading]:
        with_range = "" if range is None else f" {range:.9g}"
        reply = self._meter(f"CONF:{HEADERS[function]}{with_range};:SAMP:COUN {samples};:READ?")
        values = tuple(float(part) for part in reply.split(","))
        over = [value for value in values if abs(value) >= OVERLOAD]
        if over:
            return done(
                RawReading(value=None, overload=True, negative=over[0] < 0.0, function=function, meter="in memory")
            )
        mean = sum(values) / len(values)
        return done(RawReading(value=mean, function=function, range=range, meter="in memory", values=values))

    def _sample(self) -> Sample:
        both = "(@1,2)"
        parts = self._supply(
            f"OUTP? {both};:MEAS:VOLT? {both};:MEAS:CURR? {both};:VOLT? {both};:CURR? {both};:STAT:QUES:COND? {both};"
            f":VOLT:PROT:TRIP? {both};:CURR:PROT:TRIP? {both};:VOLT:PROT? {both}"
        ).split(";")
        outputs, volts, amps, set_volts, limits, held, over_v, over_a, levels = (
            [float(one) for one in part.split(",")] for part in parts
        )
        state = SupplyState(
            output_on=outputs[0] > 0 if outputs[0] == outputs[1] else None,
            positive_v=volts[0], negative_v=-volts[1], positive_a=amps[0], negative_a=amps[1],
            set_positive_v=set_volts[0], set_negative_v=-set_volts[1], limit_a=limits[0],
            positive_in_limit=held[0] > 0, negative_in_limit=held[1] > 0,
            positive_tripped=over_v[0] + over_a[0] > 0, negative_tripped=over_v[1] + over_a[1] > 0,
            protection_positive_v=levels[0], protection_negative_v=levels[1],
        )  # fmt: skip
        return Sample(state=state, outputs=(outputs[0] > 0, outputs[1] > 0))

    def _supply(self, question: str) -> str:
        with self.hands.lock:
            reply = self.hands.bench.supply.handle(question)
        assert reply is not None, question
        return reply

    def _tell(self, message: str) -> None:
        with self.hands.lock:
            self.hands.bench.supply.handle(message)
        error = self._supply("SYST:ERR?")
        assert error.startswith("0,"), f"{message}: {error}"

    def _meter(self, question: str) -> str:
        with self.hands.lock:
            reply = self.hands.bench.meter.handle(question)
        assert reply is not None, question
        return reply


@dataclass(frozen=True, kw_only=True)
class Outcome:
    """How one walk went.

    Parameters
    ----------
    events : tuple of Event
        The record.
    closed : Closed
    truth : dict
        What had really happened to the unit.
    full : bool
        The rails were at their full voltage at some time.
    noticed : str
        The first item that failed, or the trip, before that ("" for none).
    bench : RehearsalBench or None
        Where the unit still lies.
    began_s : float
        Its time when the walk began.
    """

    events: tuple[Event, ...]
    closed: Closed
    truth: dict[str, Any]
    full: bool
    noticed: str
    bench: RehearsalBench | None = None
    began_s: float = 0.0


@cache
def procedure(name: str = FIRST_POWER) -> Procedure:
    """A shipped procedure."""
    return load_procedure(find_procedure(name))


@cache
def walk_of(design: Design, name: str = FIRST_POWER) -> Walk:
    """The walk of a design; shared, because it holds no state."""
    return Walk(make_plan(procedure(name), design))


BREATH_S = 0.15
"""So long nothing is asked about suspects: in memory the next reading is there at once, and asks anew."""


async def _find_suspects_later(aside: Aside) -> None:
    """Ask for suspects once no newer question has come for a moment."""
    while aside._suspect is not None:
        wanted = None
        while wanted is not aside._suspect:
            wanted = aside._suspect
            await asyncio.sleep(BREATH_S)
        await _FIND_SUSPECTS(aside)


_FIND_SUSPECTS = Aside._find_suspects


def share_the_model(*, narrowing: bool = True, suspects: bool = True) -> None:
    """Let all walks of a design have their limits from one piece of work; switch off what is asked aside."""
    predict, check_warm, narrower = predictions.predict, predictions.check_warm, this_unit.Narrower
    limits: dict[Any, Event] = {}
    warm: dict[Any, Any] = {}

    def shared_predict(design: Design, action: Any, units: int | None, seed: int) -> Event:
        key = design, action.conditions, action.points, units, seed
        if key not in limits:
            limits[key] = predict(design, action, units, seed)
        return replace(limits[key], item=action.item, condition=action.key)  # type: ignore[call-arg]

    def shared_warm(design: Design, action: Any, seed: int) -> Any:
        key = design, action.conditions, seed
        if key not in warm:
            warm[key] = check_warm(design, action, seed)
        return replace(warm[key], item=action.item)

    predictions.predict = shared_predict
    predictions.check_warm = shared_warm
    Aside._find_suspects = _find_suspects_later  # type: ignore[method-assign, assignment]
    this_unit.Narrower = cache(narrower)  # type: ignore[misc, assignment]
    if not narrowing:
        this_unit.Narrower = _NoNarrower  # type: ignore[misc, assignment]
    if not suspects:
        this_unit.suspect = _no_suspects


class _NoNarrower:
    def __init__(self, *_: Any) -> None:
        """Nothing is narrowed."""

    def narrow(self, action: Any, targets: Any) -> Any:
        from benchkit.events import Narrowed

        return Narrowed(item=action.item, after=action.after, problem="left out in this campaign")


def _no_suspects(design: Design, action: Any) -> Any:
    from benchkit.events import Suspected

    return Suspected(item=action.item, after=action.after, problem="left out in this campaign")


def walk_once(
    design: Design,
    unit_seed: int,
    plant: str = "",
    *,
    wrong_end: bool = False,
    units: int | None = None,
    name: str = FIRST_POWER,
    limits_seed: int = LIMITS_SEED,
    bench: RehearsalBench | None = None,
    hand: Mapping[str, Any] | None = None,
) -> Outcome:
    """Walk through a procedure with one simulated unit and a stand-in.

    Parameters
    ----------
    design : Design
    unit_seed : int
    plant : str
        What goes wrong, as `benchkit rehearse --plant` takes it.
    wrong_end : bool
        The stand-in turns the trimmer to the wrong end at first.
    units : int or None
        Units behind the limits; None for the model's own choice.
    name : str
        Of the procedure.
    limits_seed : int
        Of the limits.
    bench : RehearsalBench, optional
        A unit that lies on a bench already, from a walk before; otherwise one is made.
    hand : mapping, optional
        What else the stand-in is told.
    """
    if bench is None:
        bench = RehearsalBench(design, unit_seed, plant)
        if procedure(name).head.unknown_trimmer:
            bench.table.set_travel(bench.found_travel())
    return asyncio.run(_walk_once(design, unit_seed, bench, wrong_end, units, name, limits_seed, dict(hand or {})))


async def _walk_once(
    design: Design,
    unit_seed: int,
    bench: RehearsalBench,
    wrong_end: bool,
    units: int | None,
    name: str,
    limits_seed: int,
    hand: dict[str, Any],
) -> Outcome:
    began_s, steps, plant = bench.table.sim_s, procedure(name), bench.plant
    hands = MemoryHands(bench)
    text = bench_text(ADDRESS, ADDRESS.replace("::1::", "::2::"))
    file = parse_bench(text, "the campaign's bench")
    job = Job(
        design=design, procedure=steps, walk=walk_of(design, name), record=Path("in memory"), setup=file.setup,
        accuracy=file.accuracy, supply_accuracy=file.supply_accuracy, units=units, seed=limits_seed,
        narrow_rarely=True,
    )  # fmt: skip
    opened = WalkOpened(
        version="", walk="", kind="rehearsal", unit=str(unit_seed), operator="stand-in", design_name=design.name,
        design_text=design.text, design_sha256=design.sha256, procedure_name=steps.head.name,
        procedure_text=steps.text, procedure_sha256=steps.sha256, bench_text=text, bench_sha256="",
        seed=limits_seed, plant=plant, supply="scpi", meter="scpi",
    )  # fmt: skip
    keeper = MemoryKeeper(hands, opened)
    trimmer = design.spreader.trimmer
    front = StandIn(
        hands, turns=0.0 if trimmer is None else trimmer.turns, rng=seeds("stand-in", unit_seed), wrong_end=wrong_end,
        **hand,
    )  # fmt: skip

    async def advance(seconds: float) -> None:
        hands.advance(seconds)

    session = Session(job, keeper, front, Hands(hands, own_screwdriver=True), SimulatedClock(advance, None))  # type: ignore[arg-type]
    keeper.on_push = session.on_push
    closed = await asyncio.wait_for(session.run(opened), 600.0)
    events = tuple(keeper.kept)
    full_v = 0.97 * design.rails.positive_v
    noticed, full = "", False
    for event in events:
        state = getattr(event, "state", None)
        if isinstance(state, SupplyState) and state.output_on and (state.positive_v or 0.0) >= full_v:
            full = True
            break
        if not noticed and event.name == "tripped":
            noticed = f"trip: {event.reason}"  # type: ignore[attr-defined]
        elif not noticed and event.name == "judged" and event.verdict == "fail":  # type: ignore[attr-defined]
            noticed = event.item  # type: ignore[attr-defined]
    truth = bench.truth()
    if not full and max(abs(volts) for volts in truth["highest_rail_v"]) >= full_v:
        full = True
    return Outcome(events=events, closed=closed, truth=truth, full=full, noticed=noticed, bench=bench, began_s=began_s)


__all__ = ["EntryError", "MemoryHands", "MemoryKeeper", "Outcome", "share_the_model", "walk_of", "walk_once"]
