"""The keeper's hand on the supply: settings, ramps, the watch, and off.

Rules
-----
* Nothing is switched on while "off" is under way, nor before the screen knows of the last one.
* A ramp goes in steps; each is read back and judged by the watch before the next.  Whatever stops it, nothing of it is
  done afterwards.
* A watch that trips, a supply that says nothing while it is watched, a meter that is silent while a watch depends on
  it: "off" first, then the cause is written.
"""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Mapping
from concurrent.futures import Future
from dataclasses import replace
from typing import TYPE_CHECKING, Any

from benchkit.errors import InstrumentError
from benchkit.keeper.desk import Desk
from benchkit.keeper.minding import Freshness, Loss
from benchkit.keeper.offs import NO_SUPPLY, OFF_LIMIT_S, UNKNOWN, Offs
from benchkit.keeper.protocol import WatchLines
from benchkit.keeper.ramp import Ramp
from benchkit.keeper.wire import outcome_of, pair, set_v

if TYPE_CHECKING:
    from benchkit.instruments.supply import OffOutcome, Sample
    from benchkit.keeper.bench import OwnedMeter, OwnedSupply


class Switching(Desk):
    """A supply with its watch; the loop calls `look_after` again and again."""

    def __init__(self, sink: int) -> None:
        super().__init__(sink)
        self.supply: OwnedSupply | None = None
        self.meter: OwnedMeter | None = None
        self.offs = Offs()
        self.fresh = Freshness()
        self.expected_on = False
        self._watch: WatchLines | None = None
        self._watch_set_s = 0.0
        self._next_look_s = math.inf
        self._looking = False
        self._ramp: Ramp | None = None

    # ---- settings ------------------------------------------------------------------------------------------------

    def do_set(self, request: int, message: Mapping[str, Any]) -> None:
        """Set both rails, the limit and the outputs."""
        output_on = bool(message["output_on"])
        supply = self._demand_free(output_on=output_on)
        if not output_on:
            self.expected_on = False
        volts = (float(message["positive_v"]), float(message["negative_v"]))
        protection_v = pair(message.get("protection_v"))
        over_current = bool(message.get("over_current", True))

        def begin() -> Future[Sample]:
            return supply.supply.set(
                *volts, float(message["limit_a"]), output_on, protection_v=protection_v, over_current=over_current
            )

        future = self._switch_on(begin) if output_on else begin()
        self.fresh.setting_begun(time.monotonic())

        def done(ready: Future[Sample]) -> None:
            self.fresh.setting_done(time.monotonic())
            if ready.exception() is None:
                self.expected_on = output_on
            if output_on:
                self._switched_on(supply, ready)
            elif ready.exception() is None and not supply.supply.looks_on(ready.result()):
                self.offs.set_off_done()
            self.relay(request, ready, lambda sample: sample.state)

        self.when_done(future, done)

    def do_state(self, request: int, message: Mapping[str, Any]) -> None:
        """Read the supply; no watch is judged by it."""
        future = self.demand_supply().supply.sample()
        self.when_done(future, lambda done: self.relay(request, done, lambda sample: sample.state))

    def _switch_on(self, begin: Callable[[], Future[Sample]]) -> Future[Sample]:
        """Begin a setting to "on"; whoever minds this process hears of it before the supply does."""
        self.tell_may_be_on()
        future = begin()
        self.offs.switching_on()
        return future

    def _switched_on(self, supply: OwnedSupply, ready: Future[Sample]) -> None:
        """Note that it is over."""
        self.offs.set_on_done(off_confirmed=ready.exception() is not None and supply.supply.off_confirmed)

    def tell_may_be_on(self) -> None:
        """Say that the output may be on from now on; called before "on" is sent."""
        raise NotImplementedError

    # ---- ramps ---------------------------------------------------------------------------------------------------

    def do_ramp(self, request: int, message: Mapping[str, Any]) -> None:
        """Bring both rails from where they are to where they shall be."""
        supply = self._demand_free(output_on=True)
        lines = message.get("lines")
        ramp = Ramp(
            request,
            float(message["positive_v"]),
            float(message["negative_v"]),
            float(message["limit_a"]),
            float(message["ramp_s"]),
            pair(message.get("protection_v")),
            over_current=bool(message.get("over_current", True)),
        )
        watch = None if lines is None else WatchLines(**lines)
        self._ramp = ramp

        def found(ready: Future[Sample]) -> None:
            if ramp is not self._ramp:
                return
            if (error := ready.exception()) is not None:
                self._end_ramp(error)
                return
            sample = ready.result()
            if sample.outputs[0] != sample.outputs[1]:
                self._end_ramp(
                    InstrumentError("refused", "Only one of the supply's outputs is on", "both or none", "Off first")
                )
                return
            if sample.outputs[0]:
                self._start_ramp(ramp, watch, set_v(sample))
                return
            self.when_done(self._switch_on(lambda: self._set_for(ramp, supply, (0.0, -0.0))), on)

        def on(ready: Future[Sample]) -> None:
            self._switched_on(supply, ready)
            if ramp is not self._ramp:
                return
            if (error := ready.exception()) is not None:
                self._end_ramp(error)
                return
            self._start_ramp(ramp, watch, (0.0, 0.0))

        self.when_done(supply.supply.sample(), found)

    def _start_ramp(self, ramp: Ramp, watch: WatchLines | None, from_v: tuple[float, float]) -> None:
        self.expected_on = self.offs.may_be_on = True
        if watch is not None:
            self._set_watch(watch)
        ramp.begin(from_v, time.monotonic())

    def _step(self, ramp: Ramp) -> None:
        assert self.supply is not None
        ramp.busy = True
        future = self._set_for(ramp, self.supply, ramp.next_v())
        self.fresh.setting_begun(time.monotonic())

        def done(ready: Future[Sample]) -> None:
            self.fresh.setting_done(time.monotonic())
            if ramp is not self._ramp:
                return
            if (error := ready.exception()) is not None:
                self._end_ramp(error)
                return
            now_s = time.monotonic()
            sample = ready.result()
            if self._watch is not None:
                self._judge(sample, self._watch, now_s - self._watch_set_s)
            if ramp is not self._ramp:
                return
            ramp.step_done(now_s)
            if ramp.finished:
                self._ramp = None
                self.ok(ramp.request, vars(sample.state))
            else:
                self.writer.send({"step": ramp.request, "share": ramp.share, "state": vars(sample.state)})

        self.when_done(future, done)

    def _set_for(self, ramp: Ramp, supply: OwnedSupply, volts: tuple[float, float]) -> Future[Sample]:
        """Set a step: the over-voltage protection stands at the same level all the way, over-current at its end."""
        from benchkit.instruments.supply import usual_protection_v

        if ramp.protection_v is None:
            usual_v = usual_protection_v(*ramp.farthest_v())
            ramp.protection_v = (usual_v, usual_v)
        return supply.supply.set(
            *volts,
            ramp.limit_a,
            True,
            protection_v=ramp.protection_v,
            over_current=ramp.over_current and volts == ramp.to_v,
        )

    def _end_ramp(self, error: BaseException) -> None:
        """Let a ramp go; what it had begun can't be trusted, so that the outputs go off."""
        ramp, self._ramp = self._ramp, None
        if ramp is None:
            return
        self.begin_off(f"the rails could not be set: {error}")
        self.fail(ramp.request, error)

    # ---- the watch -----------------------------------------------------------------------------------------------

    def do_sample(self, request: int, message: Mapping[str, Any]) -> None:
        """Look at the supply now and judge it by the watch; where the keeper looks by itself, it has its own time."""
        own = self._watch is not None and self._watch.own_interval_s is not None
        elapsed_s = time.monotonic() - self._watch_set_s if own else float(message["elapsed_s"])
        self._look(elapsed_s, request)

    def do_watch(self, request: int, message: Mapping[str, Any]) -> None:
        """Set what is watched for, or end the watch."""
        lines = message["lines"]
        self._set_watch(None if lines is None else WatchLines(**lines))
        self.ok(request, {})

    def do_mind_meter(self, request: int, message: Mapping[str, Any]) -> None:
        """From now on the watch depends on the meter, or no more; its grace goes on as it was."""
        limit_s = message["age_limit_s"]
        self.fresh.meter_from(time.monotonic(), None if limit_s is None else float(limit_s))
        if self._watch is not None:
            self._watch = replace(self._watch, age_limit_s=limit_s)
        self.ok(request, {})

    def _set_watch(self, watch: WatchLines | None) -> None:
        now_s = time.monotonic()
        self._watch = watch
        self._watch_set_s = now_s
        interval_s = None if watch is None else watch.own_interval_s
        self._next_look_s = math.inf if interval_s is None else now_s + interval_s
        self._looking = False
        self.fresh.supply_from(None if interval_s is None else now_s)
        self.fresh.meter_from(now_s, None if watch is None else watch.age_limit_s)

    def look_after(self, now_s: float) -> None:
        """Do what is due: give up an "off" that takes too long, take the ramp's next step, look at the supply."""
        self._note_seen()
        if self.offs.late(now_s):
            self._finish_off(None)
        if self._ramp is not None and self._ramp.due(now_s):
            self._step(self._ramp)
        if self.expected_on and not self.offs.under_way:
            lost = self.fresh.overdue(now_s)
            if lost is not None:
                self.lose(lost)
                return
        if now_s >= self._next_look_s and not self._looking and self._watch is not None:
            self._next_look_s = now_s + (self._watch.own_interval_s or 0.0)
            self._look(now_s - self._watch_set_s, None)

    def _look(self, elapsed_s: float, request: int | None) -> None:
        """Look at the supply and judge what is seen by the watch that is set now."""
        if self.supply is None:
            if request is not None:
                self.demand_supply()
            return
        since_s = self._watch_set_s
        self._looking = request is None

        def done(ready: Future[Sample]) -> None:
            if request is None:
                self._looking = False
            else:
                self.relay(request, ready, lambda sample: sample.state)
            if ready.exception() is None:
                self.fresh.supply_heard(time.monotonic())
            watch = self._watch
            if watch is None or since_s != self._watch_set_s or not self.expected_on:
                return
            if ready.exception() is None:
                self._judge(ready.result(), watch, elapsed_s)
            elif not self.offs.under_way:
                self.lose(Loss(who="the supply", problem=str(ready.exception())))

        self.when_done(self.supply.supply.sample(), done)

    def _judge(self, sample: Sample, watch: WatchLines, elapsed_s: float) -> None:
        from benchkit.events import Tripped, to_payload
        from benchkit.keeper.watch import look

        trip = look(sample, watch, elapsed_s)
        if trip is None or self.offs.under_way:
            return
        self.begin_off(f"tripped: {trip.reason}")
        event = Tripped(reason=trip.reason, what=trip.what, value=trip.value, limit=trip.limit, state=sample.state)
        self.keep(event.name, to_payload(event))

    def lose(self, loss: Loss) -> None:
        """Switch off because an instrument, the computer or the keeper itself has failed the watch."""
        reason = loss.problem if loss.who in ("the screen", "the keeper") else f"contact with {loss.who} was lost"
        self.begin_off(reason)
        self.keep("contact lost", {"who": loss.who, "problem": loss.problem})

    # ---- the meter -----------------------------------------------------------------------------------------------

    def do_read(self, request: int, message: Mapping[str, Any]) -> None:
        """Take a reading; one that fails while a watch depends on the meter may mean off."""
        if self.meter is None:
            raise InstrumentError("refused", "No meter is connected", "one", "Connect it or enter the reading by hand")
        samples = int(message.get("samples", 1))
        future = self.meter.meter.read(message["function"], message.get("range"), samples)
        self.fresh.reading_begun(time.monotonic(), samples)

        def done(ready: Future[Any]) -> None:
            error = ready.exception()
            self.fresh.reading_done(time.monotonic(), good=error is None)
            lost = isinstance(error, InstrumentError) and error.kind == "link lost"
            if lost and self.fresh.meter_counts and self.expected_on and not self.offs.under_way:
                self.lose(Loss(who="the meter", problem=str(error)))
            self.relay(request, ready)

        self.when_done(future, done)

    # ---- off -----------------------------------------------------------------------------------------------------

    def begin_off(self, reason: str, request: int | None = None) -> None:
        """Switch off, unless that is under way already; whoever asks gets the same answer."""
        self._set_watch(None)
        if not self.offs.begin(reason, time.monotonic(), request):
            return
        if self.supply is not None:
            self.when_done(self.supply.supply.off(), self._finish_off)
        elif request is not None:
            self.inbox.put(lambda: self._finish_off(None))
        else:
            self.offs.finish({"confirmed": False, "how": NO_SUPPLY, "state": None})
            self.offs.known = self.offs.count
        ramp, self._ramp = self._ramp, None
        if ramp is not None:
            dropped = InstrumentError("refused", "The rails were on their way when the output was switched off")
            self.fail(ramp.request, dropped)

    def _finish_off(self, ready: Future[OffOutcome] | None) -> None:
        """Say what became of "off"; None when there is no supply or its answer took too long."""
        outcome: dict[str, Any] = {"confirmed": False, "how": NO_SUPPLY, "state": None}
        if ready is not None:
            outcome = outcome_of(ready)
        elif self.supply is not None:
            outcome["how"] = f"{UNKNOWN} (no answer within {OFF_LIMIT_S:.0f} s)"
        self._note_seen()
        finished = self.offs.finish(outcome)
        if finished is None:
            return
        payload, requests = finished
        self.expected_on = False
        if not self.journal.keeps:
            self.offs.known = self.offs.count  # there is no record in which anybody could have missed it
        self.journal.keep_own("output off", payload, self.offs.count)
        for request in requests:
            self.ok(request, payload)
        self.off_finished()

    def _note_seen(self) -> None:
        """Let a supply that has said "on" since its last confirmed "off" take back what was proved."""
        if self.supply is not None:
            self.offs.seen(on=self.supply.supply.seen_on)

    def off_finished(self) -> None:
        """Do what waits for an "off" to be over."""
        raise NotImplementedError

    def acknowledged(self, off: int) -> None:
        """Note that the screen knows of an "off"."""
        self.offs.known = max(self.offs.known, off)

    # ---- small things --------------------------------------------------------------------------------------------

    def demand_supply(self) -> OwnedSupply:
        """Return the supply.

        Raises
        ------
        InstrumentError
            ``refused`` if there is none.
        """
        if self.supply is None:
            raise InstrumentError("refused", "No supply is connected", "one", "Connect it or set the supply by hand")
        return self.supply

    def _demand_free(self, *, output_on: bool) -> OwnedSupply:
        supply = self.demand_supply()
        if self.offs.under_way:
            raise InstrumentError("refused", "The output is being switched off", "nothing else at that time")
        if self._ramp is not None:
            raise InstrumentError("refused", "The rails are on their way", "nothing else at that time", "Wait, or off")
        if output_on and self.offs.known < self.offs.count:
            raise InstrumentError(
                "refused",
                "The output was switched off, and this was asked for without knowing that",
                "an event kept behind that off first",
                "Find out why it went off",
            )
        return supply
