"""Runs one walk: actions out of the state machine, events back into it.

Rules
-----
* One order.  An event is handled when it stands in the record.  The session hands an event to the keeper together with
  the number of the line that it thinks is the last; when the keeper has written one of its own meanwhile (a trip, off),
  it refuses, and the session handles that one first and thinks again.
* An action that is still running lapses as soon as the walk has moved on.
* Before an event is handed over, the walk is asked whether it would take it; one that it wouldn't never reaches the
  record.
* "Off now" never waits for anything in here: it goes straight to the keeper's urgent slot.
* Whatever goes wrong in here, `run` asks the keeper to switch off before it lets the error out.
"""

from __future__ import annotations

import asyncio
import contextlib
from collections import deque
from collections.abc import Callable
from dataclasses import replace
from typing import Any

from benchkit.errors import IllegalEvent, InstrumentError
from benchkit.events import (
    Closed,
    Event,
    Narrowed,
    Noted,
    OutputOff,
    StopAsked,
    SupplyState,
    Tripped,
)
from benchkit.keeper.client import KeeperClient
from benchkit.keeper.protocol import KeeperDied, Push
from benchkit.procedure.actions import (
    Action,
    Question,
)
from benchkit.procedure.hearing import never_on_by_hand
from benchkit.procedure.securing import MAKING_SURE
from benchkit.procedure.state import Phase, State
from benchkit.session import acting, asking, ending, powering
from benchkit.session.acting import lapse
from benchkit.session.aside import Aside
from benchkit.session.clock import Clock
from benchkit.session.front import Front, Reply
from benchkit.session.hands import Hands
from benchkit.session.job import Asked, Job, Stopped
from benchkit.session.views import Headings, Moment, Painter

HEARTBEAT_S = 0.2

SUSPECTS_S = 30.0
"""How long the end of a walk waits for suspects that are still being worked out; the supply is off by then (s)."""


class Session:
    """One run of one walk, serving one front end."""

    def __init__(self, job: Job, keeper: KeeperClient, front: Front, hands: Hands, clock: Clock) -> None:
        self.job = job
        self.keeper = keeper
        self.front = front
        self.hands = hands
        self.clock = clock
        self.state = State()
        self.moment = Moment()
        self.seq = 0
        self.pushed: deque[Push | KeeperDied | Asked | Noted | Tripped] = deque()
        self._woken = asyncio.Event()
        self._loop = asyncio.get_running_loop()
        self.noted_at_the_end: set[str] = set()
        self._death_told = False
        self._off_asked = False
        self._moved_on = False
        self.watch_since = 0.0
        self.last_off: OutputOff | None = None
        self.captured = 0
        self.placed_by_itself = ""
        self.rested: tuple[str, float] | None = None
        self._began_s = clock.now()
        self._painter = Painter(
            job.walk,
            Headings(
                record=str(job.record),
                design=f"{job.design.name} {job.design.revision}",
                procedure=job.procedure.head.name,
                purpose=job.procedure.head.purpose,
                target_time_s=job.procedure.head.target_time_s,
            ),
        )
        self._last_actions: tuple[Action, ...] = ()
        self._aside = Aside(job, self._woken.set)

    # -- what the outside calls --------------------------------------------------------------------------------

    def on_push(self, push: Push | KeeperDied) -> None:
        """Take what the keeper says by itself.  Called from the keeper client's thread."""
        with contextlib.suppress(RuntimeError):
            self._loop.call_soon_threadsafe(self._take_push, push)

    def note(self, noted: Noted) -> None:
        """Keep and show something that changes nothing; any thread may call."""
        with contextlib.suppress(RuntimeError):
            self._loop.call_soon_threadsafe(self._take_push, noted)

    def off_now(self, reason: str = "the operator asked for it") -> None:
        """Switch off at once, whatever is being done; any thread may call, and it returns at once.

        A supply that is known to be off is only made sure of, and the walk keeps its place.
        """
        if self.nothing_to_switch_off:
            reason = f"{MAKING_SURE}: {reason}"
        if not self.job.manual_supply:
            self.keeper.off(reason)
        if not self._off_asked:
            self._off_asked = True
            with contextlib.suppress(RuntimeError):
                self._loop.call_soon_threadsafe(self._take_push, Asked(reason))

    def trip(self, event: Tripped) -> None:
        """Switch off at once because of a reading, and have that written; on the event loop, and returns at once."""
        if not self.job.manual_supply:
            self.keeper.off(f"tripped: {event.reason}")
        self._take_push(event)

    def rang(self) -> None:
        """Count a value that was taken without a key, for the bell."""
        if self.job.bell:
            self.captured += 1
            if self.moment.live is not None:
                self.show_moment(live=replace(self.moment.live, captured=self.captured))

    @property
    def nothing_to_switch_off(self) -> bool:
        """Whether the supply is known to be off, or is a person's and was never asked to be on in this walk."""
        off = self.state.energised == "off" and self.state.phase != "setting"
        return off or never_on_by_hand(self.state)

    def heartbeat(self) -> None:
        """Tell the keeper that the event loop turns."""
        self.keeper.heartbeat()

    async def run(self, first: Event) -> Closed:
        """Run the walk to its end.

        Parameters
        ----------
        first : Event
            `WalkOpened`, which the keeper has written already as the first line, or `Resumed`, which is yet to be kept.

        Raises
        ------
        BenchkitError
            When the walk can't go on at all; the supply has been asked to switch off by then.
        """
        pulse = asyncio.create_task(self._pulse())
        try:
            self.keeper.arm()
            powering.stay_awake(self)
            return await self._run(first)
        except BaseException as error:
            if not self.job.manual_supply:
                await ending.secure(self, f"an error of the session: {type(error).__name__}")
            if isinstance(error, InstrumentError) and not self.keeper.alive and not self._death_told:
                raise await ending.keeper_died(self, self._death(error)) from None
            raise
        finally:
            pulse.cancel()

    # -- the loop ----------------------------------------------------------------------------------------------

    async def _pulse(self) -> None:
        while True:
            self.heartbeat()
            await asyncio.sleep(HEARTBEAT_S)

    async def _run(self, first: Event) -> Closed:
        action = await self._begin(first)
        running: asyncio.Task[Event | None] | None = None
        try:
            while self.state.closed is None:
                if running is None and action is not None:
                    running = asyncio.create_task(self._perform(action))
                    action = None
                woken = asyncio.create_task(self._woken.wait())
                waiting = {woken} if running is None else {woken, running}
                await asyncio.wait(waiting, return_when=asyncio.FIRST_COMPLETED)
                woken.cancel()
                before, heard = (self.state.phase, self.state.index), self.state.supply
                fresh: tuple[Action, ...] = ()
                if self.pushed:
                    self._woken.clear()
                    fresh = await self._take_pushed()
                    if running is None and not fresh and self._moved_on and self._stands(before):
                        fresh = self._again()  # its event was not kept, and what came instead changed nothing
                elif running is not None and running.done():
                    self._woken.clear()
                    event = await self._result_of(running)
                    running = None
                    if event is not None:
                        fresh = await self._keep(event)
                elif self._aside.ready:
                    self._woken.clear()
                    fresh = await self._keep_aside(self._aside.ready.popleft())
                else:
                    self._woken.clear()
                    continue
                if self.pushed or self._aside.ready:
                    self._woken.set()
                fresh = self._ask_aside(fresh)
                if fresh or not self._stands(before):
                    await lapse(running)
                    running = None
                    newest = self.moment.supply if self.state.supply is heard else None
                    self.moment = Moment(message=self.moment.message, supply=newest)
                    action = fresh[0] if fresh else None
                self.show()
        finally:
            self._aside.stop()
            await lapse(running)
        return self.state.closed

    async def _begin(self, first: Event) -> Action | None:
        if first.name == "walk opened":
            self.state, actions = self.job.walk.handle(self.state, first, self.clock.now())
            self.seq = self.state.count
        else:
            self.noted_at_the_end.add("time")  # what came before the break counts too, and nobody knows how long it was
            actions = await self._keep(first)
        self.show()
        return actions[0] if actions else None

    async def _keep(self, event: Event) -> tuple[Action, ...]:
        """Have an event written and handle it; () when the chain had moved on."""
        self._moved_on = False
        try:
            after, actions = self.job.walk.handle(self.state, event, self.clock.now())
        except IllegalEvent as error:
            self.moment.message = str(error)
            return self._again()
        kept = await asyncio.wrap_future(self.keeper.append(event, after=self.seq))
        self._moved_on = kept.moved_on
        if kept.moved_on:
            return ()
        self.seq = kept.seq
        self.state = after
        return actions

    async def _keep_aside(self, event: Event) -> tuple[Action, ...]:
        """Keep what the model says of this unit; what the walk no longer wants is dropped."""
        if self.state.phase == "closing" and isinstance(event, Narrowed):
            return ()
        try:
            after, actions = self.job.walk.handle(self.state, event, self.clock.now())
        except IllegalEvent:
            return ()
        kept = await asyncio.wrap_future(self.keeper.append(event, after=self.seq))
        if kept.moved_on:
            self._aside.ready.appendleft(event)  # what moved the record on comes first
            await asyncio.sleep(0.01)
            return ()
        self.seq, self.state = kept.seq, after
        return actions

    def _ask_aside(self, actions: tuple[Action, ...]) -> tuple[Action, ...]:
        """Ask the model what it is asked aside; returns what is left to be carried out."""
        for action in actions:
            if action.aside:
                self._aside.ask(action)
        return tuple(action for action in actions if not action.aside)

    def _stands(self, before: tuple[Phase, int]) -> bool:
        """Whether the walk is where it was."""
        return (self.state.phase, self.state.index) == before

    def _again(self) -> tuple[Action, ...]:
        """Carry the last action out once more: nothing has been entered, nothing has changed."""
        return self._last_actions

    async def _take_pushed(self) -> tuple[Action, ...]:
        fresh: tuple[Action, ...] = ()
        while self.pushed:
            push = self.pushed.popleft()
            if isinstance(push, KeeperDied):
                self._death_told = True
                raise await ending.keeper_died(self, push)
            if isinstance(push, (Asked, Noted, Tripped)):
                if self.state.phase in ("unopened", "closed"):
                    continue
                got = await self._keep(StopAsked(reason=push.reason) if isinstance(push, Asked) else push)
                if self._moved_on:
                    self.pushed.append(push)  # what moved the chain on comes first
                    await asyncio.sleep(0.01)
                    continue
                if isinstance(push, Noted):
                    self.moment.message = push.text
                elif isinstance(push, Asked) and not self.state.stopped:
                    self._off_asked = False  # the walk kept its place, because the supply was off anyway
                fresh = _newer(fresh, got)
                continue
            if push.seq is None:
                self.moment.message = f"{push.event.name} could not be kept: {push.problem}"
                raise InstrumentError(
                    "refused", self.moment.message, "a record that can be written", ending.resume_hint(self)
                )
            if push.seq <= self.seq:
                continue
            if isinstance(push.event, OutputOff):
                self.last_off = push.event
            if isinstance(push.event, Noted):
                self.moment.message = push.event.text
            self.state, actions = self.job.walk.handle(self.state, push.event, self.clock.now())
            self.seq = push.seq
            fresh = _newer(fresh, actions)
        return fresh

    def _death(self, error: InstrumentError) -> KeeperDied:
        """Return the news that the keeper has died, which a request that failed by that may have outrun."""
        told = [push for push in self.pushed if isinstance(push, KeeperDied)]
        return told[0] if told else KeeperDied(problem=error.came)

    def _take_push(self, push: Push | KeeperDied | Asked | Noted | Tripped) -> None:
        self.pushed.append(push)
        self._woken.set()

    async def _result_of(self, task: asyncio.Task[Event | None]) -> Event | None:
        try:
            return task.result()
        except Stopped as stopped:
            return StopAsked(reason=stopped.reason)
        except asyncio.CancelledError:
            return None

    # -- actions -----------------------------------------------------------------------------------------------

    async def _perform(self, action: Action) -> Event | None:
        self._last_actions = (action,)
        return await acting.perform(self, action)

    async def sample(self) -> None:
        """Take a sample of the watch where the keeper doesn't do so by itself, and show it."""
        if self.job.manual_supply or self.state.energised == "off":
            return
        try:
            state = await asyncio.wrap_future(self.keeper.sample(self.clock.now() - self.watch_since))
        except InstrumentError:
            return  # a supply that is lost while it is watched is the keeper's to tell; it switches off too
        self.note_supply(state)

    def expect_on(self) -> None:
        """Get ready to switch on, unless something has come that the walk has yet to handle.

        Raises
        ------
        InstrumentError
        """
        if any(not isinstance(push, Noted) for push in self.pushed):
            raise InstrumentError("refused", "Off or a trip came before the supply was set", "nothing after that")
        self.last_off = None

    def note_supply(self, state: SupplyState) -> None:
        """Show a newer state of the supply than the record has."""
        self.moment.supply = state
        self.show()

    async def ask_entry(self, question: Question, parse: Callable[[str], Any]) -> tuple[Reply, Any]:
        """Put a question that wants something typed, until it can be used."""
        return await asking.put_entry(self, question, parse)

    async def suspects_settled(self) -> None:
        """Give the model a while for suspects that are still being worked out."""
        self.busy("The model still works out what would explain the readings.")
        await self._aside.settled(SUSPECTS_S)
        await asyncio.sleep(0.05)  # an answer that is there by now makes the walk close anew

    # -- showing -----------------------------------------------------------------------------------------------

    def busy(self, words: str, share: float | None = None, remaining_s: float | None = None) -> None:
        """Say what is being waited for, "" when it is the person."""
        self.moment = replace(self.moment, busy=words, busy_share=share, remaining_s=remaining_s)
        self.show()

    @property
    def elapsed_s(self) -> float:
        """Time since this run of the walk began (s)."""
        return self.clock.now() - self._began_s

    def show(self) -> None:
        """Give the front end a new picture."""
        self.moment.narrowing = self._aside.narrowing
        self.front.show(self._painter.paint(self.state, self.moment, self.elapsed_s))

    def show_moment(self, **changes: Any) -> None:
        """Change what moves on the screen."""
        self.moment = replace(self.moment, **changes)
        self.show()


def _newer(before: tuple[Action, ...], after: tuple[Action, ...]) -> tuple[Action, ...]:
    """Join what two events ask for: of what is carried out the later, of what is asked aside both."""
    if not after:
        return before
    return (*(action for action in before if action.aside), *after)
