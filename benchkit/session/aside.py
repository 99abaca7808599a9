"""What the model is asked beside the walk: one thing of a kind at a time, the newest wins.

Rules
-----
* Nothing waits for an answer.  An answer goes into the queue `ready`, from which the session takes it when it may.
* A question that waits is superseded by a newer one of its kind; one that is being worked on is finished, because
  limits that leave out the newest readings are still right.
* The readings of the present section come first.  Those of later sections are worked on while nothing newer waits and
  no suspects are asked for.
* At the end nobody waits: the threads are daemons.
"""

from __future__ import annotations

import asyncio
from collections import deque
from collections.abc import Callable
from dataclasses import replace
from typing import Any

from benchkit.events import Event, Narrowed, Suspected
from benchkit.procedure.actions import Action, Narrow, Suspect, Target
from benchkit.session import this_unit
from benchkit.session.job import Job
from benchkit.session.threads import in_thread
from benchkit.stage.conditions import Unpowered
from benchkit.stage.observations import Conditions


class Aside:
    """Asks the model in threads of its own.

    Parameters
    ----------
    job : Job
    wake : callable
        Called on the event loop when an answer is ready.

    Attributes
    ----------
    ready : deque of Event
        Answers that nobody has taken yet.
    narrowing : bool
        Limits of readings of the present section are being worked out.
    """

    def __init__(self, job: Job, wake: Callable[[], object]) -> None:
        self._job = job
        self._wake = wake
        self._narrower = this_unit.Narrower(job.design, job.units, job.seed)
        self._narrow: Narrow | None = None
        self._suspect: Suspect | None = None
        self._narrowing: asyncio.Task[None] | None = None
        self._suspecting: asyncio.Task[None] | None = None
        self._sections: set[str] = set()
        self._conditions: set[Conditions] = set()
        self.narrowing = False
        self.ready: deque[Event] = deque()

    def ask(self, action: Action) -> None:
        """Ask the model something; returns at once."""
        if isinstance(action, Suspect):
            self._suspect = action
            if self._suspecting is None or self._suspecting.done():
                self._suspecting = asyncio.create_task(self._find_suspects(), name="suspects")
        elif isinstance(action, Narrow):
            if self._job.narrow_rarely:
                action = self._only_if_new(action)
            if not action.near and not action.later:
                return
            self._narrow = action
            self.narrowing = bool(action.near)
            if self._narrowing is None or self._narrowing.done():
                self._narrowing = asyncio.create_task(self._find_limits(), name="narrowing")

    def _only_if_new(self, action: Narrow) -> Narrow:
        """Leave of a question what is about to be read, if no limits were ever narrowed in its section.

        Readings under conditions that nothing was narrowed under are left out: each would cost ensembles of its own.
        """
        section, _, _ = action.item.partition(".")
        near: tuple[Target, ...] = ()
        if action.near and section not in self._sections:
            self._sections.add(section)
            near = tuple(target for target in action.near if target.key == action.near[0].key)
            self._conditions |= {target.conditions for target in near}
        known = tuple(
            one for one in action.known
            if isinstance(one.conditions[0], Unpowered) or one.conditions in self._conditions
        )  # fmt: skip
        return replace(action, known=known, near=near, later=())

    async def settled(self, timeout_s: float) -> None:
        """Wait until no suspects are being worked out, or until the time is over."""
        if self._suspecting is not None and not self._suspecting.done():
            await asyncio.wait({self._suspecting}, timeout=timeout_s)

    def stop(self) -> None:
        """Let everything lapse; threads that are at work end by themselves, and what they find is dropped."""
        for task in (self._narrowing, self._suspecting):
            if task is not None:
                task.cancel()

    async def _find_suspects(self) -> None:
        while self._suspect is not None:
            action, self._suspect = self._suspect, None
            design = self._job.design
            found: Suspected = await _in_thread(this_unit.suspect, design, action)
            if self._suspect is None:  # else a newer question has superseded it
                self._tell(found)

    async def _find_limits(self) -> None:
        while self._narrow is not None:
            action, self._narrow = self._narrow, None
            if action.near:
                await self._find_limits_of(action, action.near)
            for targets in _by_condition(action.later):
                await self.settled(timeout_s=60.0)
                if self._narrow is not None:
                    break
                await self._find_limits_of(action, targets)

    async def _find_limits_of(self, action: Narrow, targets: tuple[Target, ...]) -> None:
        found: Narrowed = await _in_thread(self._narrower.narrow, action, targets)
        self.narrowing = self._narrow is not None and bool(self._narrow.near)
        self._tell(found)

    def _tell(self, event: Event) -> None:
        self.ready.append(event)
        self._wake()


async def _in_thread(work: Callable[..., Any], *arguments: Any) -> Any:
    return await in_thread(lambda: work(*arguments), "benchkit-aside")


def _by_condition(targets: tuple[Target, ...]) -> list[tuple[Target, ...]]:
    found: dict[str, list[Target]] = {}
    for target in targets:
        found.setdefault(target.key, []).append(target)
    return [tuple(ones) for ones in found.values()]
