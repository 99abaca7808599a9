"""Requests over the pipe to the keeper: three threads, futures, and what happens when the keeper dies.

`benchkit.keeper.client` says what can be asked; this module how it is carried.
"""

from __future__ import annotations

import subprocess
import threading
import time
from collections.abc import Callable, Mapping
from concurrent.futures import Future
from contextlib import suppress
from pathlib import Path
from queue import SimpleQueue
from typing import Any, TypeVar

from benchkit.errors import BenchkitError, InstrumentError
from benchkit.events import OutputOff, SupplyState, from_payload
from benchkit.keeper import platform
from benchkit.keeper.protocol import KeeperDied, Push, decode, encode, error_from_wire
from benchkit.keeper.standing_by import StandingBy

T = TypeVar("T")

ANSWER_LIMIT_S = 1.5
"""So long may a heartbeat stay unanswered before the keeper counts as frozen, s."""

OnPush = Callable[[Push | KeeperDied], None]
OnStep = Callable[[float, SupplyState], None]


class Calls:
    """A keeper's process and the way to it.

    Parameters
    ----------
    process : Popen
        The keeper.
    on_push : callable
        Called on the reader's thread with a `Push` or `KeeperDied`; it must not block.
    lifeline : int or None
        The reading end of the keeper's lifeline.
    log_dir : Path or None
        For what the stand-by has to complain of.

    Attributes
    ----------
    ready : Future of int
        Resolved with the keeper's process id when it has said hello.
    """

    def __init__(
        self,
        process: subprocess.Popen[bytes],
        on_push: OnPush,
        lifeline: int | None = None,
        log_dir: Path | None = None,
    ) -> None:
        self.ready: Future[int] = Future()
        self._process = process
        self._on_push = on_push
        self._lock = threading.Lock()
        self._pending: dict[int, tuple[Future[Any], Callable[[Any], Any]]] = {}
        self._last_id = 0
        self._beats = 0
        self._oldest_beat_s: float | None = None
        self._unanswered = 0
        self._closing = False
        self._dead = False
        self._trouble = ""
        self._standing_by = StandingBy(
            lifeline, process.pid, log_dir, lambda: not self._dead and process.poll() is None, self._note_trouble
        )
        self._steps: dict[int, OnStep] = {}
        self._after_death: Future[OutputOff] | None = None
        self._outbox: SimpleQueue[bytes | None] = SimpleQueue()
        for name, work in (("writer", self._write), ("reader", self._read), ("minder", self._mind)):
            threading.Thread(target=work, name=f"keeper client {name}", daemon=True).start()

    @property
    def pid(self) -> int:
        """The keeper's process id."""
        return self._process.pid

    @property
    def stand_by_pid(self) -> int | None:
        """The process id of what stands by; None as long as there is no supply to switch off."""
        return self._standing_by.pid

    @property
    def alive(self) -> bool:
        """False once the keeper is gone."""
        return not self._dead

    def heartbeat(self) -> None:
        """Say that the screen's event loop runs; to be called by it at least four times a second.  Never blocks."""
        with self._lock:
            if self._dead or self._unanswered > 20:
                return
            self._beats += 1
            self._unanswered += 1
            if self._oldest_beat_s is None:
                self._oldest_beat_s = time.monotonic()
            number = self._beats
        self._outbox.put(encode({"do": "beat", "n": number}))

    def _note_trouble(self, text: str) -> None:
        """Let the keeper write a caution into the record, from where it comes to the screen like the keeper's own."""
        self._ask("note", lambda wire: None, text=f"CAUTION: {text}")

    def _ask(self, what: str, parse: Callable[[Any], T], on_step: OnStep | None = None, **parts: Any) -> Future[T]:
        future: Future[T] = Future()
        future.set_running_or_notify_cancel()
        with self._lock:
            if self._dead:
                future.set_exception(gone())
                return future
            self._last_id += 1
            number = self._last_id
            self._pending[number] = (future, parse)
            if on_step is not None:
                self._steps[number] = on_step
        try:
            line = encode({"id": number, "do": what, **parts})
        except (TypeError, ValueError) as error:
            with self._lock:
                self._pending.pop(number, None)
            future.set_exception(BenchkitError(f"The keeper can't be asked to {what}: {error}", "plain, finite values"))
            return future
        self._outbox.put(line)
        return future

    def _write(self) -> None:
        pipe = self._process.stdin
        assert pipe is not None
        with suppress(OSError, ValueError):
            while (line := self._outbox.get()) is not None:
                pipe.write(line)
                pipe.flush()
        with suppress(OSError):
            pipe.close()

    def _read(self) -> None:
        pipe = self._process.stdout
        assert pipe is not None
        try:
            for line in pipe:
                self._hear(decode(line))
        except Exception as error:
            self._trouble = f"the keeper said something that can't be understood ({type(error).__name__}: {error})"
            platform.kill_hard(self._process)
        finally:
            self._die()
            with suppress(OSError):
                pipe.close()

    def _hear(self, message: Mapping[str, Any]) -> None:
        if "beat" in message:
            with self._lock:
                self._unanswered = max(0, self._unanswered - 1)
                self._oldest_beat_s = time.monotonic() if self._unanswered else None
        elif "push" in message:
            push = message["push"]
            event = from_payload(push["event"], push["payload"])
            self._on_push(Push(event=event, seq=push["seq"], problem=push["problem"]))
        elif "step" in message:
            on_step = self._steps.get(message["step"])
            if on_step is not None:
                on_step(float(message["share"]), state_of(message["state"]))
        elif "hello" in message:
            self.ready.set_result(int(message["hello"]["pid"]))
        else:
            with self._lock:
                future, parse = self._pending.pop(message["id"])
                self._steps.pop(message["id"], None)
            if "error" in message:
                future.set_exception(error_from_wire(message["error"]))
                return
            try:
                result = parse(message["ok"])
            except Exception as error:
                future.set_exception(error)
            else:
                future.set_result(result)

    def _mind(self) -> None:
        """End a keeper that has stopped answering.

        If this process itself stood still, the heartbeats' age says nothing about the keeper: it begins anew.
        """
        last_s = time.monotonic()
        while not self._dead:
            time.sleep(0.1)
            now_s = time.monotonic()
            with self._lock:
                if now_s - last_s > 0.5 and self._oldest_beat_s is not None:
                    self._oldest_beat_s = now_s
                waiting_s = 0.0 if self._oldest_beat_s is None else now_s - self._oldest_beat_s
            last_s = now_s
            if waiting_s > ANSWER_LIMIT_S:
                self._trouble = f"the keeper had not answered for {ANSWER_LIMIT_S} s and was ended"
                platform.kill_hard(self._process)
                return

    def _die(self) -> None:
        with self._lock:
            self._dead = True
            pending, self._pending = self._pending, {}
        if not self.ready.done():
            self.ready.set_exception(gone())
        self._outbox.put(None)
        if not self._closing:
            if self._standing_by.supply is not None:
                self._after_death = self._stand_by("the keeper died")
            self._on_push(KeeperDied(problem=self._how_it_died()))
            if self._after_death is not None:
                self._after_death.add_done_callback(
                    lambda done: self._on_push(Push(event=done.result(), seq=None, problem="the keeper died"))
                )
        for future, _ in pending.values():
            future.set_exception(gone())

    def _how_it_died(self) -> str:
        if self._trouble:
            return self._trouble
        with suppress(subprocess.TimeoutExpired):
            status = self._process.wait(0.3)
            return f"the keeper ended by itself (status {status})"
        return "the keeper closed its pipe"

    def _stand_by(self, reason: str) -> Future[OutputOff]:
        """Let the stand-by switch off; the future never fails."""
        future: Future[OutputOff] = Future()
        future.set_running_or_notify_cancel()

        def work() -> None:
            platform.kill_hard(self._process)
            future.set_result(off_of(self._standing_by.off(reason)))

        threading.Thread(target=work, name="off by the stand-by", daemon=True).start()
        return future


def state_of(wire: Mapping[str, Any]) -> SupplyState:
    """Return the state that came over the pipe."""
    return SupplyState(**wire)


def off_of(wire: Mapping[str, Any]) -> OutputOff:
    """Return the event that came over the pipe."""
    state = wire.get("state")
    return OutputOff(
        reason=wire["reason"],
        confirmed=wire["confirmed"],
        how=wire["how"],
        state=None if state is None else SupplyState(**state),
    )


def gone() -> InstrumentError:
    """Return what everybody is told who asks a keeper that has gone."""
    return InstrumentError("link lost", "The keeper of the instruments has gone")
