"""The keeper itself: one loop that never waits for a disk, an instrument or the screen.

Strategy
--------
Everything that happens is put into one inbox: messages of the screen (read by a thread), results of the instruments
(each has its owner thread), signals.  The loop takes them out one by one and starts what follows; it also looks at the
clock at least every `TICK_S`.  So that its state belongs to one thread and needs no locks.

What switches the supply off
----------------------------
* the screen asks for it (``off``);
* the end of the screen's pipe, a parent that is gone, a signal, ``close``;
* no heartbeat for `HEARTBEAT_LIMIT_S` once armed, `IDLE_HEARTBEAT_LIMIT_S` while the supply is known to be off.  A
  heartbeat counts from when it was *read*, by a thread that does nothing else, so that a keeper that was busy doesn't
  blame the screen;
* a watch that trips, a supply that can't be reached or is silent while it is watched, a meter that is silent while a
  watch depends on it;
* a computer that was suspended, or a loop that stood still, with the output on;
* a ramp that can't go on;
* an error of the keeper's own.

Each time the cause stands in the journal first (``tripped`` or ``contact lost``), then ``output off`` with what could
be confirmed.  The "off" itself is under way before either is written.  It has a bounded time (`benchkit.keeper.offs`);
after that the output's state is unknown and is called so.

After an "off" nothing is switched on before the screen has shown that it knows of it, by an event that was kept behind
it: a "set" that was already on its way when a watch tripped must not bring the rails back.

What happens when this process itself dies or freezes is `benchkit.keeper.stand_by`'s: it hears of it by the lifeline.
"""

from __future__ import annotations

import importlib
import os
import threading
import time
from collections.abc import Callable, Mapping
from concurrent.futures import Future
from contextlib import suppress
from pathlib import Path
from queue import Empty
from typing import Any

from benchkit.errors import BenchkitError, InstrumentError
from benchkit.keeper import platform
from benchkit.keeper.lifeline import Lifeline
from benchkit.keeper.minding import Screen
from benchkit.keeper.offs import NO_SUPPLY, OFF_LIMIT_S, UNKNOWN
from benchkit.keeper.pipes import LineReader
from benchkit.keeper.switching import Switching
from benchkit.keeper.wire import outcome_of

TICK_S = 0.05

_DISK_WAIT_S = 2.0
_PIPE_WAIT_S = 0.5


class Keeper(Switching):
    """The process's one object.

    Parameters
    ----------
    source, sink : int
        Descriptors of the screen's pipe: messages in, messages out.
    log_dir : Path or None
        Where the traffic log goes.
    lifeline : int or None
        Descriptor of the pipe by which the stand-by knows that this process lives.
    slept_s : callable
        How long the computer has been suspended so far, s.
    """

    def __init__(
        self,
        source: int,
        sink: int,
        log_dir: Path | None,
        lifeline: int | None = None,
        slept_s: Callable[[], float] | None = None,
    ) -> None:
        super().__init__(sink)
        self._log_dir = log_dir
        self._log: Any = None
        self._screen = Screen(time.monotonic(), slept_s or platform.slept_s, platform.parent_id)
        self._lifeline = Lifeline(lifeline)
        self._awake: platform.Awake | None = None
        self._warm = threading.Event()
        self._connects_later = False
        self._offs_later: list[Callable[[], None]] = []
        self._next_tick_s = 0.0
        self._leaving = False
        self._done = False
        self._source = source

    def run(self) -> int:
        """Serve the screen until it is gone; return the exit status."""
        platform.on_stop_signals(lambda name: self.inbox.put(lambda: self._lose_screen(f"signal {name}")))
        self.writer.send({"hello": {"pid": os.getpid()}})
        LineReader(self._source, self._receive)
        threading.Thread(target=self._warm_up, name="imports", daemon=True).start()
        status = 0
        try:
            while not self._done:
                act = None
                with suppress(Empty):
                    act = self.inbox.get(timeout=TICK_S)
                if act is not None:
                    act()
                if time.monotonic() >= self._next_tick_s:
                    self._look_at_clock()
        except BaseException as error:
            status = 5
            self._own_failure(error)
        self._lifeline.leave(in_order=status == 0 and (self.supply is None or self.offs.settled))
        self.journal.finish(_DISK_WAIT_S)
        if self._awake is not None:
            self._awake.end()
        if self._log is not None:
            self._log.close(_PIPE_WAIT_S)
        self.writer.finish(_PIPE_WAIT_S)
        return status

    # ---- the screen ----------------------------------------------------------------------------------------------

    def _receive(self, message: dict[str, Any] | None, read_s: float) -> None:
        """Note a heartbeat's time and put the message into the inbox; runs on the reader's thread."""
        if message is not None and message.get("do") == "beat":
            self._screen.beat(read_s)
        self.inbox.put(lambda: self._hear(message))

    def _hear(self, message: dict[str, Any] | None) -> None:
        if message is None:
            self._lose_screen("its end of the pipe is closed")
            return
        what = message.get("do")
        if what == "beat":
            self.writer.send({"beat": message.get("n")})
            return
        request = message.get("id")
        if not isinstance(request, int):
            return
        act = self._ACTS.get(str(what))
        if act is None:
            self.fail(request, BenchkitError(f"The keeper was asked to {what!r}", "one of " + ", ".join(self._ACTS)))
        else:
            self._try(lambda number, words: act(self, number, words), request, message)

    def _try(self, act: Callable[[int, Mapping[str, Any]], None], request: int, message: Mapping[str, Any]) -> None:
        """Do what was asked for, or answer with what went wrong."""
        try:
            if self._leaving:
                raise InstrumentError("link lost", "The keeper of the instruments is switching off and leaving")
            act(request, message)
        except Exception as error:
            self.fail(request, error)

    def _lose_screen(self, problem: str) -> None:
        if self._leaving:
            return
        self._leaving = True
        self.keep("contact lost", {"who": "the screen", "problem": problem})
        self.begin_off(f"contact with the screen was lost: {problem}")
        if self.supply is None:
            self._done = True

    def _do_arm(self, request: int, message: Mapping[str, Any]) -> None:
        self._screen.arm(time.monotonic(), on=bool(message["on"]))
        self.ok(request, {})

    def _do_stay_awake(self, request: int, message: Mapping[str, Any]) -> None:
        """Ask the system not to suspend the computer; answer with what has to be said, nothing if it agreed."""

        def work() -> None:
            awake = platform.Awake("the supply of a unit under test is on")
            self.inbox.put(lambda: awoken(awake))

        def awoken(awake: platform.Awake) -> None:
            self._awake = awake
            self.ok(request, {"caution": awake.caution})

        if self._awake is not None:
            self.ok(request, {"caution": self._awake.caution})
            return
        threading.Thread(target=work, name="stay awake", daemon=True).start()

    def _do_open(self, request: int, message: Mapping[str, Any]) -> None:
        self.journal.open(request, message["path"], message["event"], message["payload"])

    def _do_resume(self, request: int, message: Mapping[str, Any]) -> None:
        self.journal.resume(request, message["path"])

    def _do_append(self, request: int, message: Mapping[str, Any]) -> None:
        self.journal.append(request, message["event"], message["payload"], int(message["after"]))

    def _do_note(self, request: int, message: Mapping[str, Any]) -> None:
        """Keep what the client has to say of what stands by, where a record is open."""
        from benchkit.events import Noted, to_payload

        if self.journal.keeps:
            noted = Noted(text=str(message["text"]))
            self.keep(noted.name, to_payload(noted))
        self.ok(request, {})

    def _do_connect(self, request: int, message: Mapping[str, Any]) -> None:
        """Own what the bench names once everything is loaded; the loop goes on meanwhile."""

        def work() -> None:
            self._warm.wait()
            self.inbox.put(lambda: self._try(self._connect, request, message))

        if self._warm.is_set():
            self._connect(request, message)
        else:
            self._connects_later = True
            threading.Thread(target=work, name="connects later", daemon=True).start()

    def _connect(self, request: int, message: Mapping[str, Any]) -> None:
        """Let go of what there was, then own what the bench names; answer when each has said its name."""
        from benchkit.keeper.bench import open_bench

        self._connects_later = False
        self._let_go()
        opened = open_bench(message["bench"], self._traffic())
        self.supply, self.meter = opened.supply, opened.meter
        offs, self._offs_later = self._offs_later, []
        for off in offs:
            off()
        waiting = len(opened.asked)

        def named(_done: Future[str] | None) -> None:
            nonlocal waiting
            waiting -= 1
            if waiting > 0:
                return
            try:
                self.ok(request, opened.names())
            except Exception as error:
                self.fail(request, error)

        if not opened.asked:
            named(None)
        for _, _, future in opened.asked:
            self.when_done(future, named)

    def _do_off(self, request: int, message: Mapping[str, Any]) -> None:
        if self._connects_later:
            self._offs_later.append(lambda: self.begin_off(str(message["reason"]), request))
        else:
            self.begin_off(str(message["reason"]), request)

    def _do_close(self, request: int, message: Mapping[str, Any]) -> None:
        self._leaving = True
        if self.supply is None:
            self.ok(request, {})
            self._done = True
            return
        self.begin_off("the screen closed the bench", request)

    _ACTS: Mapping[str, Callable[[Keeper, int, Mapping[str, Any]], None]] = {
        "arm": _do_arm,
        "stay awake": _do_stay_awake,
        "open journal": _do_open,
        "resume journal": _do_resume,
        "append": _do_append,
        "note": _do_note,
        "connect": _do_connect,
        "read": Switching.do_read,
        "set": Switching.do_set,
        "ramp": Switching.do_ramp,
        "state": Switching.do_state,
        "watch": Switching.do_watch,
        "mind meter": Switching.do_mind_meter,
        "sample": Switching.do_sample,
        "off": _do_off,
        "close": _do_close,
    }

    # ---- the clock -----------------------------------------------------------------------------------------------

    def _look_at_clock(self) -> None:
        now_s = time.monotonic()
        self._next_tick_s = now_s + TICK_S
        may_be_on = self.offs.may_be_on and self.supply is not None
        self._lifeline.beat(now_s, output_on=may_be_on)
        if not self._leaving:
            loss = self._screen.look(now_s, output_on=may_be_on)
            if loss is not None and loss.leaving:
                self._lose_screen(loss.problem)
            elif loss is not None:
                self.lose(loss)
        self.look_after(now_s)

    def tell_may_be_on(self) -> None:
        """Say so on the lifeline."""
        self._lifeline.beat(time.monotonic(), output_on=True)

    def off_finished(self) -> None:
        """Leave, if that was what the "off" was for."""
        if self._leaving:
            self._done = True

    def _warm_up(self) -> None:
        """Import what the first "connect" and the first trip need, while the screen paints; on a thread of its own."""
        try:
            importlib.import_module("benchkit.keeper.watch")
            importlib.import_module("benchkit.keeper.bench")
            from benchkit.instruments.visa import resource_manager

            resource_manager()
        finally:
            self._warm.set()

    def _own_failure(self, error: BaseException) -> None:
        """Something in this file is wrong: off first, then say so."""
        import traceback

        outcome: dict[str, Any] = {"confirmed": False, "how": NO_SUPPLY, "state": None}
        if self.supply is not None:
            future = self.supply.supply.off()
            try:
                future.result(OFF_LIMIT_S)
                outcome = outcome_of(future)
            except Exception as problem:
                outcome["how"] = f"{UNKNOWN} ({problem})"
        traceback.print_exception(error)
        problem_text = f"the keeper failed: {type(error).__name__}: {error}"
        self.keep("contact lost", {"who": "the keeper", "problem": problem_text})
        if self.supply is not None:
            self.keep("output off", {"reason": problem_text, **outcome})

    def _traffic(self) -> Any:
        from benchkit.instruments.traffic import TrafficLog

        if self._log is None:
            self._log = TrafficLog(None if self._log_dir is None else self._log_dir / "traffic.log")
        return self._log

    def _let_go(self) -> None:
        if self.expected_on:
            raise InstrumentError("refused", "The output is on", "an output that is off", "Switch it off first")
        for owned in (self.meter, self.supply):
            if owned is not None:
                owned.close()
        self.meter = self.supply = None
