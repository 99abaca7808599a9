"""A production trim on a simulated bench over sockets, in which something goes wrong at a moment that is drawn.

What is real: the session, the walk, the keeper in its process with its stand-by, the links, the simulated instruments
in a process of their own.  Between keeper and instruments stand two `Tap`s, which note every line with its time, and
can fall silent or hang up like an instrument that is pulled out.

Two clocks: `BenchClock` lets simulated time pass quickly up to the trim and then, if the try lives by the wall clock,
goes on at its pace, with the unit dragged along.  From then on the session takes itself to be at a real bench: the
keeper watches by itself, and nobody but the hand knows how far the screw is turned.
"""

from __future__ import annotations

import asyncio
import contextlib
import math
import random
import re
import socket
import threading
import time
from collections.abc import Iterator
from dataclasses import dataclass, field
from functools import cache
from pathlib import Path
from typing import Any, Final, Literal

from benchkit.errors import BenchkitError
from benchkit.events import Event, ReadingTaken, Tripped, from_payload
from benchkit.instruments.bench import parse_bench
from benchkit.journal import read
from benchkit.procedure.actions import Question
from benchkit.rehearsal.bench_client import SideChannel, start_bench
from benchkit.rehearsal.standin import StandIn
from benchkit.rehearsal.turning import Turning
from benchkit.session.front import LiveView, Reply, View
from benchkit.session.hands import Hands
from benchkit.session.start import Runner, Setting
from benchkit.session.threads import in_thread
from benchkit.stage.design import Design
from benchkit.stage.draws import seeds
from tests.benchmarks.first_power_bench import LIMITS_SEED, procedure, share_the_model

POINT: Final = "emitter.upper.1"
WRONG_POINTS: Final = ("output", "output.upper.1.vbe", "spread")
LIMIT_UNITS: Final = 200
"""Units behind the limits: enough for a walk that is about something else."""

LIVE_FROM: Final = "bias.more-current"
TRIM: Final = "bias.pre-set"
SOAK: Final = "bias.soak"

STEP_TURNS: Final = 0.1
STEP_S: Final = 0.1
"""A hand turns a screw by one turn in a second."""

PUMP_S: Final = 0.05
GIVES_UP_S: Final = 4.0
"""So long does the hand look at words that say that it is no use (s)."""

GOES_ON_S: Final = 4.0
"""So long does a soak go on after it has been disturbed, to be seen doing so (s)."""

LONGEST_S: Final = 240.0


# -- between keeper and instrument ----------------------------------------------------------------------------------


@dataclass(frozen=True)
class Line:
    """One message on a link: when, in which connection, whether the instrument sent it, what."""

    wall_s: float
    link: int
    answer: bool
    text: str


class Tap:
    """Passes on what a keeper and an instrument say to each other, and notes it."""

    def __init__(self, address: str) -> None:
        match = re.fullmatch(r"TCPIP::([\d.]+)::(\d+)::SOCKET", address)
        assert match is not None, address
        self._to = match[1], int(match[2])
        self.lines: list[Line] = []
        self.mute = False
        self._sockets: list[socket.socket] = []
        self._lock = threading.Lock()
        self._server = socket.create_server(("127.0.0.1", 0))
        self.address = f"TCPIP::127.0.0.1::{self._server.getsockname()[1]}::SOCKET"
        threading.Thread(target=self._accept, daemon=True).start()

    def _accept(self) -> None:
        for link in range(1000):
            try:
                near, _ = self._server.accept()
                far = socket.create_connection(self._to, 5.0)
            except OSError:
                return
            for one in (near, far):
                one.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
                one.settimeout(None)
                self._sockets.append(one)
            for source, sink, answer in ((near, far, False), (far, near, True)):
                threading.Thread(target=self._pass_on, args=(link, source, sink, answer), daemon=True).start()

    def _pass_on(self, link: int, source: socket.socket, sink: socket.socket, answer: bool) -> None:
        rest = b""
        with contextlib.suppress(OSError):
            while chunk := source.recv(65536):
                *whole, rest = (rest + chunk).split(b"\n")
                now_s = time.monotonic()
                with self._lock:
                    self.lines += [Line(now_s, link, answer, one.decode("ascii", "replace")) for one in whole]
                if not (answer and self.mute):
                    sink.sendall(chunk)
        for one in (source, sink):
            with contextlib.suppress(OSError):
                one.shutdown(socket.SHUT_RDWR)

    def unplug(self) -> None:
        """Hang up, and be nowhere any more."""
        with contextlib.suppress(OSError):
            self._server.shutdown(socket.SHUT_RDWR)  # or else a waiting accept takes one more
        self._server.close()
        for one in self._sockets:
            with contextlib.suppress(OSError):
                one.shutdown(socket.SHUT_RDWR)

    def close(self) -> None:
        """End."""
        self.unplug()
        for one in self._sockets:
            one.close()

    def first(self, since_s: float, what: str, *, answer: bool = False) -> float | None:
        """Return when a line that holds some text was first seen since a moment."""
        return next(
            (one.wall_s for one in self.lines if one.wall_s >= since_s and one.answer == answer and what in one.text),
            None,
        )

    def last_answer(self, before_s: float) -> float | None:
        """Return when the instrument last answered before a moment."""
        return max((one.wall_s for one in self.lines if one.answer and one.wall_s < before_s), default=None)

    def first_in_limit(self, since_s: float) -> float | None:
        """Return when a supply first answered that an output is in its limit, since a moment."""
        asked: dict[int, int | None] = {}
        for line in self.lines:
            if not line.answer:
                places = [n for n, one in enumerate(line.text.split(";")) if "STAT:QUES:COND?" in one]
                asked[line.link] = places[0] if places else None
            elif (place := asked.get(line.link)) is not None and line.wall_s >= since_s:
                parts = line.text.split(";")
                if place < len(parts) and any(float(one) > 0 for one in parts[place].split(",")):
                    return line.wall_s
        return None


# -- what goes wrong ------------------------------------------------------------------------------------------------


@dataclass(frozen=True, kw_only=True)
class Deed:
    """What goes wrong, and when.

    Parameters
    ----------
    plant : str
        In the words of `benchkit.rehearsal.mishaps`, without any turns.
    do : str
        Or what happens to the probe or the meter; ``fault``: the planted one comes by itself.
    share : (float, float) or None
        It comes while the screw is turned and the reading is at such a share of the target,
    turns : (float, float) or None
        or after so many turns of the screw,
    moves : (int, int) or None
        or up to 3 s after so many moves,
    soak_s : (float, float) or None
        or so far into the soak.
    shows_s : float
        After that an instrument has shown it (s); a reading that was begun before the onset doesn't count anyway.
    into_the_soak : bool
        The try goes on into the soak after the trim, because it takes its time.
    live : bool
        By the wall clock from the trim on.
    """

    plant: str = ""
    do: Literal["", "slip", "elsewhere", "unplug", "mute", "fault"] = ""
    share: tuple[float, float] | None = None
    turns: tuple[float, float] | None = None
    moves: tuple[int, int] | None = None
    soak_s: tuple[float, float] | None = None
    shows_s: float = 0.0
    into_the_soak: bool = False
    live: bool = True


@dataclass(frozen=True, kw_only=True)
class Onset:
    """When it came, by both clocks, and when it was over again."""

    wall_s: float
    sim_s: float
    until_sim_s: float | None = None


@dataclass(frozen=True, kw_only=True)
class Seen:
    """A picture that differs from the one before."""

    wall_s: float
    sim_s: float
    item: str
    mood: str
    advice: str
    turns: float | None
    message: str
    results: tuple[str, ...]


@dataclass(frozen=True, kw_only=True)
class Kept:
    """An event of the record."""

    wall_s: float
    sim_s: float
    event: Event


@dataclass(kw_only=True)
class Tale:
    """All that is known of a try."""

    onset: Onset | None = None
    seen: list[Seen] = field(default_factory=list)
    more_while_wrong: list[Seen] = field(default_factory=list)
    events: list[Kept] = field(default_factory=list)
    shown_wall_s: float | None = None
    told_off_wall_s: float | None = None
    given_up_wall_s: float | None = None
    went_on: bool = False
    taken_off_by: float | None = None
    off_at_the_end: bool = False
    burnt: int = 0
    turned_since: float = 0.0
    closed: str = ""
    failed: str = ""


class BenchClock:
    """Simulated time, quick; then the wall clock's pace; see `benchkit.session.clock.Clock`."""

    def __init__(self, hand: Hand) -> None:
        self.own_watch = False
        self._hand = hand
        self._base_s = 0.0
        self._wall_s = 0.0
        self._stop = threading.Event()
        self._pump: threading.Thread | None = None

    def now(self) -> float:
        """Seconds so far."""
        return self._base_s + (time.monotonic() - self._wall_s if self.own_watch else 0.0)

    async def spend(self, seconds: float) -> None:
        """Let that much time pass."""
        if self.own_watch:
            await asyncio.sleep(seconds)
            return
        await in_thread(lambda: self._hand.advance(seconds), "hands")
        self._base_s += seconds

    def live(self) -> None:
        """Go on at the pace of the wall clock."""
        if self.own_watch or self._pump is not None:
            return
        self._wall_s, self.own_watch = time.monotonic(), True
        self._pump = threading.Thread(target=self._drag, daemon=True)
        self._pump.start()

    def quick(self) -> None:
        """Be quick again, for good."""
        if self.own_watch:
            self._base_s, self.own_watch = self.now(), False
            self._stop.set()

    def _drag(self) -> None:
        """Drag the unit along."""
        done_s = time.monotonic()
        while not self._stop.wait(PUMP_S):
            now_s = time.monotonic()
            with contextlib.suppress(BenchkitError):
                self._hand.advance(now_s - done_s)
            done_s = now_s


class Hand:
    """The side channel, and whatever happens to the bench besides."""

    def __init__(self, side: SideChannel, deed: Deed, rng: random.Random, meter: Tap) -> None:
        self._side, self._deed, self._meter = side, deed, meter
        self._lock = threading.RLock()
        self.clock: BenchClock | None = None
        self.onset: Onset | None = None
        self._turned = 0.0
        self.turned_since = 0.0
        self.share = 0.0
        self.trims = False
        self.moves = 0
        self.soaks_since_s: float | None = None
        self._moved_s = 0.0
        self._back_s: float | None = None
        self.after_turns = round(rng.uniform(*deed.turns), 2) if deed.turns else 0.0
        self._at_share = rng.uniform(*deed.share) if deed.share else math.inf
        self._after_moves = rng.randint(*deed.moves) if deed.moves else 0
        self._more_s = rng.uniform(0.0, 3.0) if deed.moves else rng.uniform(*deed.soak_s) if deed.soak_s else 0.0
        self._for_s = rng.uniform(2.0, 5.0)
        self._other = rng.choice(WRONG_POINTS)

    def __getattr__(self, name: str) -> Any:
        return getattr(self._side, name)

    def turn(self, turns: float) -> float:
        """Turn the screw."""
        with self._lock:
            travel = self._side.turn(turns)
            self._turned += abs(turns)
            if self.onset is not None:
                self.turned_since += turns
            elif self.share >= self._at_share:
                self._do()
            if self._deed.turns and self.onset is None and self._turned >= self.after_turns:
                self._came()
            return travel

    def moved(self) -> None:
        """Take note that a move is done."""
        with self._lock:
            self.moves += 1
            self._moved_s = self._now_s()

    def advance(self, seconds: float) -> float:
        """Let time pass, and what is due happen."""
        with self._lock:
            after = self._side.advance(seconds)
            now_s = self._now_s()
            if self._back_s is not None and now_s >= self._back_s:
                self._back_s = None
                self._side.probe(POINT)
            if self.onset is None and self._is_due(now_s):
                self._do()
            return after

    def _now_s(self) -> float:
        assert self.clock is not None
        return self.clock.now()

    def _is_due(self, now_s: float) -> bool:
        if self._deed.moves:
            return self.trims and self.moves >= self._after_moves and now_s >= self._moved_s + self._more_s
        return self.soaks_since_s is not None and bool(self._deed.soak_s) and now_s - self.soaks_since_s >= self._more_s

    def _came(self, for_s: float | None = None) -> None:
        now_s = self._now_s()
        until_s = None if for_s is None else now_s + for_s
        self.onset = Onset(wall_s=time.monotonic(), sim_s=now_s, until_sim_s=until_s)

    def _do(self) -> None:
        match self._deed.do:
            case "slip":
                self._side.slip(self._for_s)
                self._came(self._for_s)
            case "elsewhere":
                self._side.probe(self._other)
                self._came(self._for_s)
                self._back_s = self._now_s() + self._for_s
            case "unplug":
                self._came()
                self._meter.unplug()
            case "mute":
                self._came()
                self._meter.mute = True
            case "fault":
                self._side.fault(self._deed.plant)
                self._came()


class BenchHands(Hands):
    """At the wall clock the session takes itself to be at a real bench."""

    clock: BenchClock

    @property
    def simulated(self) -> bool:
        """Whether somebody tells the session how far the screw is turned."""
        return not self.clock.own_watch


class Watcher(StandIn):
    """The stand-in; it keeps what it is shown, and turns the screw by itself where the session can't know of it."""

    def __init__(self, hand: Hand, clock: BenchClock, design: Design, seed: int, deed: Deed) -> None:
        trimmer = design.spreader.trimmer
        assert trimmer is not None
        super().__init__(hand, turns=trimmer.turns, rng=seeds("stand-in", seed))
        self.tale, self.runner = Tale(), None
        self.ticks: list[tuple[float, float]] = []
        self.truth: dict[str, Any] = {}
        self._hand, self._clock, self._deed = hand, clock, deed
        self._live: LiveView | None = None
        self._fresh = 0
        self._item = ""
        self._mood: tuple[str, float] = ("", 0.0)
        self._over = False

    runner: Runner | None

    def show(self, view: View) -> None:
        """Keep what is new."""
        super().show(view)
        now_s, wall_s, live = self._clock.now(), time.monotonic(), view.live
        self.ticks.append((wall_s, now_s))
        if view.item.startswith(LIVE_FROM) and self._deed.live:
            self._clock.live()
        self._hand.trims = view.item.startswith(TRIM) and live is not None
        if view.item.startswith(SOAK) and self._hand.soaks_since_s is None:
            self._hand.soaks_since_s = now_s
        onset = self._hand.onset
        seen = Seen(
            wall_s=wall_s, sim_s=now_s, item=view.item, mood="" if live is None else live.mood,
            advice="" if live is None else live.advice, turns=None if live is None else live.advised_turns,
            message=view.message, results=tuple(f"{one.verdict}: {one.why}" for one in view.results[-1:]),
        )  # fmt: skip
        if live is not self._live:
            self._live = live
            if live is not None and live.value is not None and view.item.startswith(TRIM):
                self._hand.share = live.value / live.target
            if live is not None and live.mood != self._mood[0]:
                self._mood = live.mood, now_s
            self._fresh += onset is not None and live is not None
            wrong = onset is not None and (onset.until_sim_s is None or now_s < onset.until_sim_s)
            wrong = wrong and onset is not None and now_s - onset.sim_s > self._deed.shows_s
            if wrong and self._fresh > 1 and (seen.turns or 0.0) > 0.0 and view.item.startswith(TRIM):
                self.tale.more_while_wrong.append(seen)
        before = self.tale.seen[-1] if self.tale.seen else None
        if before is None or _what(before) != _what(seen):
            self.tale.seen.append(seen)
        self._look_whether_over(view)

    def _look_whether_over(self, view: View) -> None:
        """End the walk once the trim, or the soak, is behind it."""
        before, self._item = self._item, view.item
        if view.supply.energised == "off" and self._over:
            self._clock.quick()
        if view.stopped or view.item.startswith("made-safe"):
            self._over = True
        if self._over:
            return
        onset = self._hand.onset
        if self._deed.soak_s and onset is not None and onset.until_sim_s is not None:
            if view.item.startswith(SOAK) and self._clock.now() > onset.until_sim_s + GOES_ON_S:
                self._end()  # the soak has been seen to go on
            return
        if before == view.item:
            return
        place = SOAK if self._deed.soak_s or self._deed.into_the_soak else TRIM
        if before.startswith(place) and not view.item.startswith(place):
            with contextlib.suppress(BenchkitError):
                self.truth = self._hand.truth()
            self._end()

    def _end(self) -> None:
        assert self.runner is not None
        self._over, self.tale.went_on = True, self._hand.onset is not None
        self.runner.off_now("the try is over")

    async def ask(self, question: Question, refused: str = "") -> Reply:
        """Answer; once it has come, whatever failed is not tried again."""
        safe = any(choice.value == "make safe" for choice in question.choices)
        if question.kind == "decide" and safe and self._hand.onset is not None:
            self.tale.given_up_wall_s = time.monotonic()
            return Reply(choice="make safe")
        if question.kind == "decide" and self._deed.do in ("unplug", "mute") and self._over:
            return Reply(choice="go on", text="the meter is gone")  # asked again it would be silent again
        if question.kind == "trim" and self._clock.own_watch:
            return await self._turn_by_hand(question)
        if question.kind == "trim" and self._no_use():
            return self._given_up()
        reply = await super().ask(question, refused)
        if question.kind == "trim" and reply.choice == "turn" and reply.turns:
            self._hand.moved()
        return reply

    async def _turn_by_hand(self, question: Question) -> Reply:
        hand = self._trims.setdefault(question.item, Turning(self._turns, self._rng))
        while True:
            if self._no_use():
                return self._given_up()
            reply = hand.reply(self._view.live if self._view is not None else None)
            if reply.choice != "turn":
                return reply
            for turns in _steps(reply.turns):
                await in_thread(lambda turns=turns: self._hand.turn(turns), "hands")  # type: ignore[misc]
                await asyncio.sleep(STEP_S)
            if reply.turns:
                self._hand.moved()
            await asyncio.sleep(STEP_S)

    def _no_use(self) -> bool:
        onset, (mood, since_s) = self._hand.onset, self._mood
        if onset is None or onset.until_sim_s is not None or mood not in ("no response", "gone", "folded back"):
            return False
        return self._clock.now() - max(since_s, onset.sim_s) > GIVES_UP_S

    def _given_up(self) -> Reply:
        words = "" if self._live is None else self._live.advice
        return Reply(choice="end", text=f"The reading does not follow: {words}.")


def _what(seen: Seen) -> tuple[object, ...]:
    return seen.item, seen.mood, seen.advice, seen.message, seen.results


def _steps(turns: float) -> Iterator[float]:
    left = abs(turns)
    while left > 1e-9:
        step = min(left, STEP_TURNS)
        yield step if turns > 0.0 else -step
        left -= step


# -- one try --------------------------------------------------------------------------------------------------------


@cache
def _share() -> None:
    share_the_model(narrowing=False, suspects=False)


def run_try(design: Design, seed: int, deed: Deed, rng: random.Random, folder: Path) -> Tale:
    """Walk up to the trim, let it go wrong, and see the supply off."""
    _share()
    bench = start_bench(design.text, seed=seed)
    setup = parse_bench(bench.bench_text, "bench").setup
    meter, supply = Tap(setup["meter"]["address"]), Tap(setup["supply"]["address"])
    try:
        text = bench.bench_text
        for tap, name in ((meter, "meter"), (supply, "supply")):
            text = text.replace(setup[name]["address"], tap.address)
        hand = Hand(bench.hands, deed, rng, meter)
        if deed.turns:
            bench.hands.fault(f"{deed.plant}, after {hand.after_turns:g} turns")
        tale = asyncio.run(_walk(design, seed, deed, hand, text, folder))
        tale.onset, tale.turned_since = hand.onset, hand.turned_since
        truth = bench.hands.truth()
        tale.off_at_the_end = tale.off_at_the_end and not any(truth["output_on"])
        tale.burnt = truth["burnt_parts"]
        if tale.onset is not None:
            tale.shown_wall_s = _shown(tale, meter, supply, tale.onset.wall_s)
            tale.told_off_wall_s = supply.first(tale.onset.wall_s, "OUTP OFF")
        return tale
    finally:
        bench.stop()
        meter.close()
        supply.close()


async def _walk(design: Design, seed: int, deed: Deed, hand: Hand, text: str, folder: Path) -> Tale:
    file = parse_bench(text, "bench")
    hand.clock = clock = BenchClock(hand)
    hands = BenchHands(hand, own_screwdriver=True)
    hands.clock = clock
    setting = Setting(
        kind="rehearsal", design=design, procedure=procedure("production-trim"), setup=file.setup, bench_text=text,
        bench_sha256=file.sha256, accuracy=file.accuracy, supply_accuracy=file.supply_accuracy, hands=hands,
        clock=clock, records=folder, seed=LIMITS_SEED, units=LIMIT_UNITS, narrow_rarely=True, bell=False,
    )  # fmt: skip
    front, runner = Watcher(hand, clock, design, seed, deed), Runner(setting)
    front.runner, tale = runner, front.tale
    try:
        closed = await asyncio.wait_for(runner.begin(front, f"T{seed}", "hand"), LONGEST_S)
        tale.closed = closed.stopped or closed.verdict or ""
    except (BenchkitError, TimeoutError) as error:
        tale.failed = f"{type(error).__name__}: {error}"
    finally:
        clock.quick()
    tale.off_at_the_end = runner.known_off
    if runner.record is not None:
        ticks = front.ticks
        for line in read(runner.record).lines:
            wall_s, sim_s = next((tick for tick in reversed(ticks) if tick[0] <= line.monotonic_s), (0.0, 0.0))
            sim_s += line.monotonic_s - wall_s if deed.live else 0.0
            event = from_payload(line.event, line.payload)
            tale.events.append(Kept(wall_s=line.monotonic_s, sim_s=sim_s, event=event))
    taken = [
        one.event for one in tale.events if isinstance(one.event, ReadingTaken) and one.event.item.startswith(TRIM)
    ]
    if tale.went_on and front.truth and not deed.soak_s and taken:
        value, true_v = taken[-1].reading.value, float(front.truth["drops_v"][POINT])
        tale.taken_off_by = None if value is None else value / true_v - 1.0
    return tale


def _shown(tale: Tale, meter: Tap, supply: Tap, since_s: float) -> float | None:
    """Return when an instrument sent what tripped."""
    trips = [one.event for one in tale.events if isinstance(one.event, Tripped)]
    off_s = supply.first(since_s, "OUTP OFF")
    if not trips or off_s is None:
        return None
    if "limit" in trips[0].reason:
        return supply.first_in_limit(since_s)
    return (supply if trips[0].what.startswith("rail") else meter).last_answer(off_s)
