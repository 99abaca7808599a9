"""The screen's side of the keeper: requests that return futures, pushes that go to a callback.

Rules
-----
* Nothing here blocks the caller: a thread writes, a thread reads, a thread minds the keeper.
* ``append`` answers and pushes are delivered by one thread in the order of the journal.  Futures are resolved and the
  callback is called on that thread: use ``loop.call_soon_threadsafe`` (`asyncio.wrap_future` does) and the order stays.
* A keeper whose process ends is noticed at once (its pipe ends).  One that stops answering heartbeats for
  `ANSWER_LIMIT_S` is ended.  Either way `KeeperDied` is pushed, open requests fail with ``link lost``, and if a supply
  had been connected the stand-by, which was started then and hears of the keeper's death by itself, switches it off.
  Its `OutputOff` is pushed without a number: the dead keeper's journal has to be resumed by a new keeper before
  anything more can be kept.
"""

from __future__ import annotations

import os
import subprocess
from collections.abc import Mapping
from concurrent.futures import Future
from contextlib import suppress
from pathlib import Path
from typing import Any, TypeVar

from benchkit.errors import BenchkitError
from benchkit.events import Event, OutputOff, SupplyState, to_payload
from benchkit.instruments.meter import RawReading
from benchkit.keeper import platform
from benchkit.keeper.calls import Calls, OnPush, OnStep, off_of, state_of
from benchkit.keeper.protocol import JournalHead, KeeperDied, Kept, Push, WatchLines
from benchkit.keeper.spawning import spawn

T = TypeVar("T")

__all__ = ["JournalHead", "KeeperClient", "KeeperDied", "Kept", "Push", "WatchLines"]


class KeeperClient(Calls):
    """A running keeper; made by `start`.

    Attributes
    ----------
    ready : Future of int
        Resolved with the keeper's process id when it has said hello.
    """

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
        source, sink = platform.make_pipe() or (None, None)
        try:
            process = spawn(arguments, log_dir, sink)
        except BaseException:
            if source is not None:
                os.close(source)
            raise
        finally:
            if sink is not None:
                os.close(sink)
        return cls(process, on_push, source, log_dir)

    # ---- minding -------------------------------------------------------------------------------------------------

    def arm(self) -> Future[None]:
        """From now on the keeper switches off when a second passes without a heartbeat."""
        return self._ask("arm", _nothing, on=True)

    def disarm(self) -> Future[None]:
        """The walk is over: heartbeats count no more.  The end of the pipe always does."""
        return self._ask("arm", _nothing, on=False)

    def stay_awake(self) -> Future[str]:
        """Ask the system not to suspend the computer; resolved with what has to be said if it doesn't agree, or ""."""
        return self._ask("stay awake", lambda wire: str(wire["caution"]))

    # ---- journal -------------------------------------------------------------------------------------------------

    def open_journal(self, path: Path, opened_event: Event) -> Future[JournalHead]:
        """Make a new journal that begins with this event."""
        return self._ask(
            "open journal",
            lambda wire: self._opened(path, wire),
            path=str(path),
            event=opened_event.name,
            payload=to_payload(opened_event),
        )

    def resume_journal(self, path: Path) -> Future[JournalHead]:
        """Go on with a journal that was cut off."""
        return self._ask("resume journal", lambda wire: self._opened(path, wire), path=str(path))

    def append(self, event: Event, after: int) -> Future[Kept]:
        """Keep an event, if the journal still stands at line `after`; otherwise `Kept.moved_on` is set."""
        return self._ask("append", lambda wire: Kept(**wire), event=event.name, payload=to_payload(event), after=after)

    def _opened(self, path: Path, wire: Mapping[str, Any]) -> JournalHead:
        self._standing_by.know(journal=str(path.absolute()))
        return JournalHead(**wire)

    # ---- instruments ---------------------------------------------------------------------------------------------

    def connect(self, bench: Mapping[str, Any]) -> Future[dict[str, str | None]]:
        """Own the bench's instruments; resolved with the names they gave (None for one that the bench has not).

        Parameters
        ----------
        bench : mapping
            ``{"meter": {"address": ..., "profile": ..., "serial": ...} | None, "supply": {...} | None}``, as
            `benchkit.instruments.bench.Bench.setup` makes it.
        """
        self._standing_by.know(supply=bench.get("supply"))
        found = self._ask("connect", dict, bench=bench)
        if bench.get("supply") is not None:
            found.add_done_callback(lambda _done: self._standing_by.start())
        return found

    def read(self, function: str, range: float | None = None, samples: int = 1) -> Future[RawReading]:
        """Take a reading of the meter; see `benchkit.instruments.meter.Meter.read`."""
        return self._ask("read", _raw_reading, function=function, range=range, samples=samples)

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
        """Set the supply and return what was read back; see `benchkit.instruments.supply.Supply.set`."""
        return self._ask(
            "set",
            state_of,
            positive_v=positive_v,
            negative_v=negative_v,
            limit_a=limit_a,
            output_on=output_on,
            protection_v=protection_v,
            over_current=over_current,
        )

    def supply_ramp(
        self,
        positive_v: float,
        negative_v: float,
        limit_a: float,
        ramp_s: float,
        protection_v: tuple[float, float] | None = None,
        lines: WatchLines | None = None,
        on_step: OnStep | None = None,
        *,
        over_current: bool = True,
    ) -> Future[SupplyState]:
        """Bring both rails together from where they are (0 V if off) to where they shall be, under watch.

        Parameters
        ----------
        positive_v, negative_v : float
            Where the rails go, V; `negative_v` is zero or negative.
        limit_a : float
            For each rail, A.
        ramp_s : float
            How long the way takes at least, s.
        protection_v : (float, float), optional
            For the supply's own over-voltage protection, V, magnitudes; without it the usual.
        lines : WatchLines, optional
            What is watched for from the moment on at which the outputs are on; it stays when the ramp is over.
        on_step : callable, optional
            Called on the reader's thread with the share of the way and the supply's state.
        over_current : bool
            Whether the supply's over-current protection is on at the end of the way; a limit that is checked into a
            short would trip it.

        Raises
        ------
        InstrumentError
            From the future; the outputs have been told to go off by then.
        """
        return self._ask(
            "ramp",
            state_of,
            on_step,
            positive_v=positive_v,
            negative_v=negative_v,
            limit_a=limit_a,
            ramp_s=ramp_s,
            protection_v=protection_v,
            over_current=over_current,
            lines=None if lines is None else vars(lines),
        )

    def supply_state(self) -> Future[SupplyState]:
        """Read the supply; no watch is judged by it."""
        return self._ask("state", state_of)

    def watch(self, lines: WatchLines | None) -> Future[None]:
        """Set what the supply is watched for, or end the watch.  Time for its grace begins now."""
        return self._ask("watch", _nothing, lines=None if lines is None else vars(lines))

    def mind_meter(self, age_limit_s: float | None) -> Future[None]:
        """From now on the watch depends on the meter: a reading older than this means off.  None: no more."""
        return self._ask("mind meter", _nothing, age_limit_s=age_limit_s)

    def sample(self, elapsed_s: float) -> Future[SupplyState]:
        """Look at the supply now and judge it by the watch; `elapsed_s` is the simulated time since that was set, s."""
        return self._ask("sample", state_of, elapsed_s=elapsed_s)

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
            elif self._dead and self._standing_by.supply is not None:
                self._stand_by(reason).add_done_callback(lambda late: _pass_on(late, future))
            else:
                future.set_exception(error)

        self._ask("off", off_of, reason=reason).add_done_callback(relay)
        return future

    def after_death(self, bench: Mapping[str, Any] | None = None) -> Future[OutputOff]:
        """Return what the stand-by did after the keeper's death; start one if there was none yet.

        Parameters
        ----------
        bench : mapping, optional
            As for `connect`, if none had been connected.
        """
        if bench is not None and self._standing_by.supply is None:
            self._standing_by.know(supply=bench.get("supply"))
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
                outcome = self._ask("close", lambda wire: off_of(wire) if wire else None).result(timeout_s)
        self._outbox.put(None)
        try:
            self._process.wait(timeout_s)
        except subprocess.TimeoutExpired:
            platform.kill_hard(self._process)
            self._process.wait()
        self._standing_by.close()
        return outcome


def _nothing(_wire: object) -> None:
    return None


def _raw_reading(wire: Mapping[str, Any]) -> RawReading:
    return RawReading(**{**wire, "values": tuple(wire["values"])})


def _pass_on(done: Future[T], future: Future[T]) -> None:
    future.set_result(done.result())
