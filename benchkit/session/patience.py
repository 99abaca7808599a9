"""Readings that take long: a countdown while the meter works, and a way to let it be.

The meter's profile says how long a reading is likely to take; the countdown is made of that, not promised by it.  A
reading that was let go may still be going on in the meter: what is asked of it next waits there, "off" never does.
"""

from __future__ import annotations

import asyncio
import time
from collections.abc import Coroutine
from typing import TYPE_CHECKING, Any, Final

from benchkit.errors import BenchkitError, InstrumentError
from benchkit.measure.readings import Reading
from benchkit.procedure.actions import Choice, Question, Read
from benchkit.procedure.questions import STOP
from benchkit.session.job import Job, Stopped

if TYPE_CHECKING:
    from benchkit.session.run import Session

LONG_S: Final = 2.0
"""A reading that is likely to take longer than this is counted down from its beginning; any other from then on (s)."""

FIRST_S: Final = 0.3
TICK_S: Final = 0.2

WAIT = Choice(value="done", label="Go on waiting")
CANCEL = Choice(value="cancel", label="Cancel this reading")


def expected_s(job: Job, function: str, samples: int) -> float | None:
    """How long the meter is likely to take for a reading (s), by its profile; None where that can't be said."""
    table = job.setup.get("meter")
    if table is None:
        return None
    from benchkit.instruments.profile import meter_profile

    try:
        return meter_profile(table.get("profile", "scpi-meter"), "the meter's profile").expected_s(
            function, None, samples
        )
    except BenchkitError:
        return None  # the keeper says what is wrong with it


async def patiently(session: Session, action: Read, taking: Coroutine[Any, Any, Reading]) -> Reading:
    """Wait for a reading, with a countdown and the offer to cancel it where it takes long.

    Raises
    ------
    InstrumentError
        What the reading raised, or ``timeout`` when the operator has let it go.
    Stopped
        When the operator chose to make safe instead.
    """
    task = asyncio.ensure_future(taking)
    asking: asyncio.Task[Any] | None = None
    whole_s = expected_s(session.job, action.function, action.samples)
    long = whole_s is not None and whole_s > LONG_S
    began_s = time.monotonic()
    refused = ""
    try:
        await asyncio.wait({task}, timeout=FIRST_S if long else LONG_S)
        while not task.done():
            if asking is None:
                asking = asyncio.create_task(session.front.ask(_question(session, action), refused))
            _tell(session, action, time.monotonic() - began_s, whole_s)
            await asyncio.wait({task, asking}, timeout=TICK_S, return_when=asyncio.FIRST_COMPLETED)
            if task.done() or not asking.done():
                continue
            reply = asking.result()
            asking, refused = None, ""
            if reply.choice == "cancel":
                raise InstrumentError("timeout", "The operator cancelled the reading", "a reading", "Take it again")
            if reply.choice == "make safe":
                raise Stopped(f"the operator chose it while {action.point} was being read")
            if reply.choice != "done":
                refused = f"{reply.choice!r} is no answer here. It ends by itself, or cancel it."
            await asyncio.wait({task}, timeout=TICK_S)
        return task.result()
    finally:
        for one in (task, asking):
            if one is not None and not one.done():
                one.cancel()


def _tell(session: Session, action: Read, gone_s: float, whole_s: float | None) -> None:
    words = f"The meter reads {action.point} ({action.function})"
    if whole_s is None or gone_s > whole_s:
        session.busy(f"{words}, longer than expected.")
    else:
        session.busy(f"{words}.", share=gone_s / whole_s, remaining_s=whole_s - gone_s)


def _question(session: Session, action: Read) -> Question:
    item = session.job.walk.item(session.state)
    return Question(
        item=action.item,
        kind="watch",
        title=f"{item.title}: being read",
        do="The meter needs its time for this reading. Keep the probes where they are.",
        point=action.point,
        choices=(WAIT, CANCEL, STOP),
    )
