"""The screen's side of the keeper: requests that return futures, pushes that go to a callback.

Rules
-----
* Nothing here blocks the caller: a thread writes, a thread reads, a thread minds the keeper.
* ``append`` answers and pushes are delivered by one thread in the order of the journal.  Futures are resolved and the
  callback is called on that thread: use ``loop.call_soon_threadsafe`` (`asyncio.wrap_future` does) and the order stays.
* A keeper whose process ends is noticed at once (its pipe ends).  One that stops answering heartbeats for
  `ANSWER_LIMIT_S` is ended.  Either way `KeeperDied` is pushed, open requests fail with ``link lost``, and if a supply
  had been connected a stand-by is started that can do nothing but switch it off.  Its `OutputOff` is pushed without a
  number: the dead keeper's journal has to be resumed by a new keeper before anything can be kept.
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
from benchkit.events import Event, OutputOff, SupplyState, from_payload, to_payload
from benchkit.instruments.meter import RawReading
from benchkit.keeper import platform
from benchkit.keeper.protocol import JournalHead, KeeperDied, Kept, Push, WatchLines, decode, encode, error_from_wire
from benchkit.keeper.spawning import spawn, switch_off_anew

T = TypeVar("T")

ANSWER_LIMIT_S = 1.5
"""So long may a heartbeat stay unanswered before the keeper counts as frozen, s."""

OnPush = Callable[[Push | KeeperDied], None]

__all__ = ["JournalHead", "KeeperClient", "KeeperDied", "Kept", "Push", "WatchLines"]


class KeeperClient:
    """A running keeper; made by `start`.

    Attributes
    ----------
    ready : Future of int
        Resolved with the keeper's process id when it has said hello.
    """

    def __init__(self, process: subprocess.Popen[bytes], on_push: OnPush) -> None:
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
        self._supply: Mapping[str, Any] | None = None
        self._after_death: Future[OutputOff] | None = None
        self._outbox: SimpleQueue[bytes | None] = SimpleQueue()
        for name, work in (("writer", self._write), ("reader", self._read), ("minder", self._mind)):
            threading.Thread(target=work, name=f"keeper client {name}", daemon=True).start()

    @classmethod
    def start(cls, log_dir: Path | None, on_push: OnPush) -> KeeperClient:
        """Start a keeper and return at once; `ready` tells when it is there.

        Parameters
        ----------
        log_dir : Path or None
            A folder for ``keeper.log`` and ``traffic.log``; None: no logs.
        on_push : callable
            Called on the reader's thread with a `Push` or `KeeperDied`; it must not block.
        """
        arguments = [] if log_dir is None else ["--logs", str(log_dir)]
        return cls(spawn(arguments, log_dir), on_push)

    @property
    def pid(self) -> int:
        """The keeper's process id."""
        return self._process.pid

    @property
    def alive(self) -> bool:
        """False once the keeper is gone."""
        return not self._dead

    # ---- minding -------------------------------------------------------------------------------------------------

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

    def arm(self) -> Future[None]:
        """From now on the keeper switches off when a second passes without a heartbeat."""
        return self._ask("arm", _nothing, on=True)

    def disarm(self) -> Future[None]:
        """The walk is over: heartbeats count no more.  The end of the pipe always does."""
        return self._ask("arm", _nothing, on=False)

    # ---- journal -------------------------------------------------------------------------------------------------

    def open_journal(self, path: Path, opened_event: Event) -> Future[JournalHead]:
        """Make a new journal that begins with this event."""
        return self._ask(
            "open journal",
            lambda wire: JournalHead(**wire),
            path=str(path),
            event=opened_event.name,
            payload=to_payload(opened_event),
        )

    def resume_journal(self, path: Path) -> Future[JournalHead]:
        """Go on with a journal that was cut off."""
        return self._ask("resume journal", lambda wire: JournalHead(**wire), path=str(path))

    def append(self, event: Event, after: int) -> Future[Kept]:
        """Keep an event, if the journal still stands at line `after`; otherwise `Kept.moved_on` is set."""
        return self._ask("append", lambda wire: Kept(**wire), event=event.name, payload=to_payload(event), after=after)

    # ---- instruments ---------------------------------------------------------------------------------------------

    def connect(self, bench: Mapping[str, Any]) -> Future[dict[str, str | None]]:
        """Own the bench's instruments; resolved with the names they gave (None for one that the bench has not).

        Parameters
        ----------
        bench : mapping
            ``{"meter": {"address": ..., "profile": ..., "serial": ...} | None, "supply": {...} | None}``, as
            `benchkit.instruments.bench.Bench.setup` makes it.
        """
        self._supply = bench.get("supply")
        return self._ask("connect", dict, bench=bench)

    def read(self, function: str, range: float | None = None, samples: int = 1) -> Future[RawReading]:
        """Take a reading of the meter; see `benchkit.instruments.meter.Meter.read`."""
        return self._ask("read", _raw_reading, function=function, range=range, samples=samples)

    def supply_set(self, positive_v: float, negative_v: float, limit_a: float, output_on: bool) -> Future[SupplyState]:
        """Set the supply and return what was read back; see `benchkit.instruments.supply.Supply.set`."""
        return self._ask(
            "set",
            _supply_state,
            positive_v=positive_v,
            negative_v=negative_v,
            limit_a=limit_a,
            output_on=output_on,
        )

    def supply_state(self) -> Future[SupplyState]:
        """Read the supply; no watch is judged by it."""
        return self._ask("state", _supply_state)

    def watch(self, lines: WatchLines | None) -> Future[None]:
        """Set what the supply is watched for, or end the watch.  Time for its grace begins now."""
        return self._ask("watch", _nothing, lines=None if lines is None else vars(lines))

    def sample(self, elapsed_s: float) -> Future[SupplyState]:
        """Look at the supply now and judge it by the watch; `elapsed_s` is the time since the watch was set, s."""
        return self._ask("sample", _supply_state, elapsed_s=elapsed_s)

    def off(self, reason: str) -> Future[OutputOff]:
        """Switch off at once, before anything that waits; also when the keeper is dead.

        The same event is pushed, with its number in the journal: handle it there, once.
        """
        if self._dead:
            return self._stand_by(reason)
        future: Future[OutputOff] = Future()

        def relay(done: Future[OutputOff]) -> None:
            error = done.exception()
            if error is None:
                future.set_result(done.result())
            elif self._dead and self._supply is not None:
                self._stand_by(reason).add_done_callback(lambda late: _pass_on(late, future))
            else:
                future.set_exception(error)

        self._ask("off", _output_off, reason=reason).add_done_callback(relay)
        return future

    def after_death(self, bench: Mapping[str, Any] | None = None) -> Future[OutputOff]:
        """Return what the stand-by did after the keeper's death; start one if there was none yet.

        Parameters
        ----------
        bench : mapping, optional
            As for `connect`, if none had been connected.
        """
        if bench is not None and self._supply is None:
            self._supply = bench.get("supply")
        return self._after_death or self._stand_by("the keeper died")

    def close(self, timeout_s: float = 6.0) -> OutputOff | None:
        """Let the keeper switch off, confirm it and end; wait for that.

        Returns
        -------
        OutputOff or None
            What became of the output; None if there was no supply or the keeper was dead already.
        """
        outcome: OutputOff | None = None
        if not self._dead:
            self._closing = True
            with suppress(BenchkitError, TimeoutError):
                outcome = self._ask("close", lambda wire: _output_off(wire) if wire else None).result(timeout_s)
        self._outbox.put(None)
        try:
            self._process.wait(timeout_s)
        except subprocess.TimeoutExpired:
            platform.kill_hard(self._process)
            self._process.wait()
        return outcome

    # ---- threads -------------------------------------------------------------------------------------------------

    def _ask(self, what: str, parse: Callable[[Any], T], **parts: Any) -> Future[T]:
        future: Future[T] = Future()
        future.set_running_or_notify_cancel()
        with self._lock:
            if self._dead:
                future.set_exception(_gone())
                return future
            self._last_id += 1
            number = self._last_id
            self._pending[number] = (future, parse)
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
        elif "hello" in message:
            self.ready.set_result(int(message["hello"]["pid"]))
        else:
            with self._lock:
                future, parse = self._pending.pop(message["id"])
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
            self.ready.set_exception(_gone())
        self._outbox.put(None)
        if not self._closing:
            if self._supply is not None:
                self._after_death = self._stand_by("the keeper died")
            self._on_push(KeeperDied(problem=self._how_it_died()))
            if self._after_death is not None:
                self._after_death.add_done_callback(
                    lambda done: self._on_push(Push(event=done.result(), seq=None, problem="the keeper died"))
                )
        for future, _ in pending.values():
            future.set_exception(_gone())

    def _how_it_died(self) -> str:
        if self._trouble:
            return self._trouble
        with suppress(subprocess.TimeoutExpired):
            status = self._process.wait(0.3)
            return f"the keeper ended by itself (status {status})"
        return "the keeper closed its pipe"

    def _stand_by(self, reason: str) -> Future[OutputOff]:
        """Start a process that can only switch off; the future never fails."""
        future: Future[OutputOff] = Future()
        future.set_running_or_notify_cancel()

        def work() -> None:
            platform.kill_hard(self._process)
            future.set_result(_output_off(switch_off_anew(self._supply, reason)))

        threading.Thread(target=work, name="stand-by", daemon=True).start()
        return future


def _nothing(_wire: object) -> None:
    return None


def _raw_reading(wire: Mapping[str, Any]) -> RawReading:
    return RawReading(**{**wire, "values": tuple(wire["values"])})


def _supply_state(wire: Mapping[str, Any]) -> SupplyState:
    return SupplyState(**wire)


def _output_off(wire: Mapping[str, Any]) -> OutputOff:
    state = wire.get("state")
    return OutputOff(
        reason=wire["reason"],
        confirmed=wire["confirmed"],
        how=wire["how"],
        state=None if state is None else SupplyState(**state),
    )


def _gone() -> InstrumentError:
    return InstrumentError("link lost", "The keeper of the instruments has gone")


def _pass_on(done: Future[T], future: Future[T]) -> None:
    future.set_result(done.result())
