"""The keeper itself: one loop that never waits for a disk, an instrument or the screen.

Strategy
--------
Everything that happens is put into one inbox: messages of the screen (read by a thread), results of the instruments
(each has its owner thread), signals.  The loop takes them out one by one and starts what follows; it also looks at the
clock at least every `TICK_S`.  So that the state below belongs to one thread and needs no locks.

What switches the supply off
----------------------------
* the screen asks for it (``off``);
* the end of the screen's pipe, a parent that is gone, a signal, ``close``;
* no heartbeat for `HEARTBEAT_LIMIT_S` once armed.  A heartbeat counts from when it was *read*, by a thread that does
  nothing else, so that a keeper that was busy doesn't blame the screen;
* a watch that trips, a supply that can't be reached while it is watched;
* a computer that was suspended while armed;
* an error of the keeper's own.

Each time the cause stands in the journal first (``tripped`` or ``contact lost``), then ``output off`` with what could
be confirmed.  The "off" itself is under way before either is written.  It is given `OFF_LIMIT_S`; after that the
output's state is unknown and is called so.

After an "off" nothing is switched on before the screen has shown that it knows of it, by an event that was kept behind
it: a "set" that was already on its way when a watch tripped must not bring the rails back.
"""

from __future__ import annotations

import importlib
import math
import os
import threading
import time
from collections.abc import Callable, Mapping
from concurrent.futures import Future
from contextlib import suppress
from pathlib import Path
from queue import Empty, SimpleQueue
from typing import TYPE_CHECKING, Any

from benchkit.errors import BenchkitError, InstrumentError
from benchkit.keeper import platform
from benchkit.keeper.journaling import JournalThread
from benchkit.keeper.pipes import LineReader, LineWriter
from benchkit.keeper.protocol import HEARTBEAT_LIMIT_S, WatchLines, error_to_wire

if TYPE_CHECKING:
    from benchkit.instruments.supply import OffOutcome, Sample
    from benchkit.keeper.bench import OwnedMeter, OwnedSupply

TICK_S = 0.05
OFF_LIMIT_S = 4.0
SLEEP_JUMP_S = 1.0
NO_SUPPLY = "benchkit has no supply that it could switch: switch it off by hand"

_DISK_WAIT_S = 2.0
_PIPE_WAIT_S = 0.5


class Keeper:
    """The process's one object.

    Parameters
    ----------
    source, sink : int
        Descriptors of the screen's pipe: messages in, messages out.
    log_dir : Path or None
        Where the traffic log goes.
    """

    def __init__(self, source: int, sink: int, log_dir: Path | None) -> None:
        self._inbox: SimpleQueue[Callable[[], None]] = SimpleQueue()
        self._writer = LineWriter(sink)
        self._journal = JournalThread(self._writer.send, self._acknowledge)
        self._log_dir = log_dir
        self._log: Any = None
        self._meter: OwnedMeter | None = None
        self._supply: OwnedSupply | None = None
        self._armed = False
        self._next_tick_s = 0.0
        self._beat_s = 0.0
        self._slept_s = platform.slept_s()
        self._parent = platform.parent_id()
        self._watch: WatchLines | None = None
        self._watch_set_s = 0.0
        self._next_look_s = math.inf
        self._looking = False
        self._expected_on = False
        self._off_deadline_s = math.inf
        self._off_reason = ""
        self._off_requests: list[int] = []
        self._offs = 0
        self._known_offs = 0
        self._leaving = False
        self._done = False
        self._source = source

    def run(self) -> int:
        """Serve the screen until it is gone; return the exit status."""
        platform.on_stop_signals(lambda name: self._inbox.put(lambda: self._lose_screen(f"signal {name}")))
        self._writer.send({"hello": {"pid": os.getpid()}})
        LineReader(self._source, self._receive)
        threading.Thread(target=_warm_up, name="imports", daemon=True).start()
        status = 0
        try:
            while not self._done:
                act = None
                with suppress(Empty):
                    act = self._inbox.get(timeout=TICK_S)
                if act is not None:
                    act()
                if time.monotonic() >= self._next_tick_s:
                    self._look_at_clock()
        except BaseException as error:
            status = 5
            self._own_failure(error)
        self._journal.finish(_DISK_WAIT_S)
        if self._log is not None:
            self._log.close(_PIPE_WAIT_S)
        self._writer.finish(_PIPE_WAIT_S)
        return status

    # ---- the screen ----------------------------------------------------------------------------------------------

    def _receive(self, message: dict[str, Any] | None, read_s: float) -> None:
        """Note a heartbeat's time and put the message into the inbox; runs on the reader's thread."""
        if message is not None and message.get("do") == "beat":
            self._beat_s = read_s
        self._inbox.put(lambda: self._hear(message))

    def _hear(self, message: dict[str, Any] | None) -> None:
        if message is None:
            self._lose_screen("its end of the pipe is closed")
            return
        what = message.get("do")
        if what == "beat":
            self._writer.send({"beat": message.get("n")})
            return
        request = message.get("id")
        if not isinstance(request, int):
            return
        act = self._ACTS.get(str(what))
        try:
            if self._leaving:
                raise InstrumentError("link lost", "The keeper of the instruments is switching off and leaving")
            if act is None:
                raise BenchkitError(f"The keeper was asked to {what!r}", "one of " + ", ".join(self._ACTS))
            act(self, request, message)
        except Exception as error:
            self._fail(request, error)

    def _lose_screen(self, problem: str) -> None:
        if self._leaving:
            return
        self._leaving = True
        self._keep("contact lost", {"who": "the screen", "problem": problem})
        self._begin_off(f"contact with the screen was lost: {problem}")
        if self._supply is None:
            self._done = True

    def _do_arm(self, request: int, message: Mapping[str, Any]) -> None:
        self._armed = bool(message["on"])
        self._beat_s = time.monotonic()
        self._slept_s = platform.slept_s()
        self._ok(request, {})

    def _do_open(self, request: int, message: Mapping[str, Any]) -> None:
        self._journal.open(request, message["path"], message["event"], message["payload"])

    def _do_resume(self, request: int, message: Mapping[str, Any]) -> None:
        self._journal.resume(request, message["path"])

    def _do_append(self, request: int, message: Mapping[str, Any]) -> None:
        self._journal.append(request, message["event"], message["payload"], int(message["after"]))

    def _do_connect(self, request: int, message: Mapping[str, Any]) -> None:
        """Let go of what there was, then own what the bench names; answer when each has said its name."""
        from benchkit.keeper.bench import open_bench

        self._let_go()
        opened = open_bench(message["bench"], self._traffic())
        self._supply, self._meter = opened.supply, opened.meter
        waiting = len(opened.asked)

        def named(_done: Future[str] | None) -> None:
            nonlocal waiting
            waiting -= 1
            if waiting > 0:
                return
            try:
                self._ok(request, opened.names())
            except Exception as error:
                self._fail(request, error)

        if not opened.asked:
            named(None)
        for _, _, future in opened.asked:
            self._when_done(future, named)

    def _do_read(self, request: int, message: Mapping[str, Any]) -> None:
        if self._meter is None:
            raise InstrumentError("refused", "No meter is connected", "one", "Connect it or enter the reading by hand")
        future = self._meter.meter.read(message["function"], message.get("range"), int(message.get("samples", 1)))
        self._when_done(future, lambda done: self._relay(request, done))

    def _do_set(self, request: int, message: Mapping[str, Any]) -> None:
        supply = self._demand_supply()
        if self._off_deadline_s < math.inf:
            raise InstrumentError("refused", "The output is being switched off", "nothing else at that time")
        output_on = bool(message["output_on"])
        if output_on and self._known_offs < self._offs:
            raise InstrumentError(
                "refused",
                "The output was switched off, and this was asked for without knowing that",
                "an event kept behind that off first",
                "Find out why it went off",
            )
        future = supply.supply.set(
            float(message["positive_v"]), float(message["negative_v"]), float(message["limit_a"]), output_on
        )
        if not output_on:
            self._expected_on = False

        def done(ready: Future[Sample]) -> None:
            if ready.exception() is None:
                self._expected_on = output_on
            self._relay(request, ready, lambda sample: sample.state)

        self._when_done(future, done)

    def _do_state(self, request: int, message: Mapping[str, Any]) -> None:
        future = self._demand_supply().supply.sample()
        self._when_done(future, lambda done: self._relay(request, done, lambda sample: sample.state))

    def _do_sample(self, request: int, message: Mapping[str, Any]) -> None:
        elapsed_s = float(message["elapsed_s"])
        self._look(elapsed_s, request)

    def _do_watch(self, request: int, message: Mapping[str, Any]) -> None:
        lines = message["lines"]
        self._watch = None if lines is None else WatchLines(**lines)
        self._watch_set_s = time.monotonic()
        interval_s = None if self._watch is None else self._watch.own_interval_s
        self._next_look_s = math.inf if interval_s is None else self._watch_set_s + interval_s
        self._looking = False
        self._ok(request, {})

    def _do_off(self, request: int, message: Mapping[str, Any]) -> None:
        self._begin_off(str(message["reason"]), request)

    def _do_close(self, request: int, message: Mapping[str, Any]) -> None:
        self._leaving = True
        if self._supply is None:
            self._ok(request, {})
            self._done = True
            return
        self._off_requests.append(request)
        self._begin_off("the screen closed the bench")

    _ACTS: Mapping[str, Callable[[Keeper, int, Mapping[str, Any]], None]] = {
        "arm": _do_arm,
        "open journal": _do_open,
        "resume journal": _do_resume,
        "append": _do_append,
        "connect": _do_connect,
        "read": _do_read,
        "set": _do_set,
        "state": _do_state,
        "sample": _do_sample,
        "watch": _do_watch,
        "off": _do_off,
        "close": _do_close,
    }

    # ---- the clock -----------------------------------------------------------------------------------------------

    def _look_at_clock(self) -> None:
        now_s = time.monotonic()
        self._next_tick_s = now_s + TICK_S
        if now_s > self._off_deadline_s:
            self._finish_off(None)
        if self._leaving:
            return
        if self._parent is not None and platform.parent_id() != self._parent:
            self._lose_screen("its process is gone")
            return
        if not self._armed:
            return
        slept_s = platform.slept_s() - self._slept_s
        if slept_s > SLEEP_JUMP_S:
            self._slept_s += slept_s
            self._beat_s = now_s
            self._keep("contact lost", {"who": "the screen", "problem": f"the computer slept for {slept_s:.0f} s"})
            self._begin_off(f"the computer slept for {slept_s:.0f} s")
        elif now_s - self._beat_s > HEARTBEAT_LIMIT_S:
            self._lose_screen(f"no heartbeat for {now_s - self._beat_s:.1f} s")
        elif now_s >= self._next_look_s and not self._looking:
            assert self._watch is not None
            assert self._watch.own_interval_s is not None
            self._next_look_s = now_s + self._watch.own_interval_s
            self._look(now_s - self._watch_set_s, None)

    # ---- the watch -----------------------------------------------------------------------------------------------

    def _look(self, elapsed_s: float, request: int | None) -> None:
        """Look at the supply and judge what is seen by the watch that is set now."""
        if self._supply is None:
            if request is not None:
                self._demand_supply()
            return
        watch = self._watch
        self._looking = request is None

        def done(ready: Future[Sample]) -> None:
            if request is None:
                self._looking = False
            else:
                self._relay(request, ready, lambda sample: sample.state)
            if watch is None or watch is not self._watch or not self._expected_on:
                return
            if ready.exception() is None:
                self._judge(ready.result(), watch, elapsed_s)
            elif self._off_deadline_s == math.inf:
                self._lose_supply(ready.exception())

        self._when_done(self._supply.supply.sample(), done)

    def _judge(self, sample: Sample, watch: WatchLines, elapsed_s: float) -> None:
        from benchkit.events import Tripped, to_payload
        from benchkit.keeper.watch import look

        trip = look(sample, watch, elapsed_s)
        if trip is None:
            return
        self._begin_off(f"tripped: {trip.reason}")
        event = Tripped(reason=trip.reason, what=trip.what, value=trip.value, limit=trip.limit, state=sample.state)
        self._keep(event.name, to_payload(event))

    def _lose_supply(self, error: BaseException | None) -> None:
        self._begin_off("contact with the supply was lost")
        self._keep("contact lost", {"who": "the supply", "problem": str(error)})

    # ---- off -----------------------------------------------------------------------------------------------------

    def _begin_off(self, reason: str, request: int | None = None) -> None:
        """Switch off, unless that is under way already; whoever asks gets the same answer."""
        if request is not None:
            self._off_requests.append(request)
        self._watch = None
        self._next_look_s = math.inf
        if self._off_deadline_s < math.inf:
            return
        self._offs += 1
        self._off_reason = reason
        self._off_deadline_s = time.monotonic() + OFF_LIMIT_S
        if self._supply is None:
            if request is not None:
                self._inbox.put(lambda: self._finish_off(None))
            else:
                self._off_deadline_s = math.inf
                self._known_offs = self._offs
            return
        self._when_done(self._supply.supply.off(), self._finish_off)

    def _finish_off(self, ready: Future[OffOutcome] | None) -> None:
        """Say what became of "off"; None when there is no supply or its answer took too long."""
        if self._off_deadline_s == math.inf:
            return
        self._off_deadline_s = math.inf
        payload: dict[str, Any] = {"reason": self._off_reason, "confirmed": False, "how": NO_SUPPLY, "state": None}
        if ready is None and self._supply is not None:
            payload["how"] = f"output state unknown: switch it off by hand (no answer within {OFF_LIMIT_S:.0f} s)"
        elif ready is not None:
            payload |= _outcome(ready)
        self._expected_on = False
        if not self._journal.keeps:
            self._known_offs = self._offs  # there is no record in which anybody could have missed it
        self._journal.keep_own("output off", payload, self._offs)
        requests, self._off_requests = self._off_requests, []
        for request in requests:
            self._ok(request, payload)
        if self._leaving:
            self._done = True

    def _acknowledge(self, off: int) -> None:
        """Note that the screen knows of an "off"; called on the journal's thread."""

        def know() -> None:
            self._known_offs = max(self._known_offs, off)

        self._inbox.put(know)

    def _own_failure(self, error: BaseException) -> None:
        """Something in this file is wrong: off first, then say so."""
        import traceback

        outcome: dict[str, Any] = {"confirmed": False, "how": NO_SUPPLY, "state": None}
        if self._supply is not None:
            future = self._supply.supply.off()
            try:
                future.result(OFF_LIMIT_S)
                outcome = _outcome(future)
            except Exception as problem:
                outcome["how"] = f"output state unknown: switch it off by hand ({problem})"
        traceback.print_exception(error)
        problem_text = f"the keeper failed: {type(error).__name__}: {error}"
        self._keep("contact lost", {"who": "the keeper", "problem": problem_text})
        if self._supply is not None:
            self._keep("output off", {"reason": problem_text, **outcome})

    # ---- small things --------------------------------------------------------------------------------------------

    def _when_done(self, future: Future[Any], act: Callable[[Future[Any]], None]) -> None:
        """Call `act` in the loop when the future is done."""
        future.add_done_callback(lambda done: self._inbox.put(lambda: act(done)))

    def _relay(self, request: int, ready: Future[Any], pick: Callable[[Any], Any] | None = None) -> None:
        error = ready.exception()
        if error is not None:
            self._fail(request, error)
            return
        result = ready.result() if pick is None else pick(ready.result())
        self._ok(request, vars(result))

    def _ok(self, request: int, result: Mapping[str, Any]) -> None:
        self._writer.send({"id": request, "ok": result})

    def _fail(self, request: int, error: BaseException) -> None:
        self._writer.send({"id": request, "error": error_to_wire(error)})

    def _keep(self, name: str, payload: Mapping[str, Any]) -> None:
        self._journal.keep_own(name, payload)

    def _demand_supply(self) -> OwnedSupply:
        if self._supply is None:
            raise InstrumentError("refused", "No supply is connected", "one", "Connect it or set the supply by hand")
        return self._supply

    def _traffic(self) -> Any:
        from benchkit.instruments.traffic import TrafficLog

        if self._log is None:
            self._log = TrafficLog(None if self._log_dir is None else self._log_dir / "traffic.log")
        return self._log

    def _let_go(self) -> None:
        if self._expected_on:
            raise InstrumentError("refused", "The output is on", "an output that is off", "Switch it off first")
        for owned in (self._meter, self._supply):
            if owned is not None:
                owned.close()
        self._meter = self._supply = None


def _outcome(ready: Future[OffOutcome]) -> dict[str, Any]:
    error = ready.exception()
    if error is not None:
        return {"confirmed": False, "how": f"output state unknown: switch it off by hand ({error})", "state": None}
    outcome = ready.result()
    state = None if outcome.state is None else vars(outcome.state)
    return {"confirmed": outcome.confirmed, "how": outcome.how, "state": state}


def _warm_up() -> None:
    """Import what the first "connect" and the first trip need, while the screen paints."""
    importlib.import_module("benchkit.keeper.watch")
    importlib.import_module("benchkit.keeper.bench")
    from benchkit.instruments.visa import resource_manager

    resource_manager()
