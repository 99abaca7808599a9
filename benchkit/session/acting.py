"""Which part of the session carries out which action of the walk; the event that comes of it goes back to the loop."""

from __future__ import annotations

import asyncio
import contextlib
from typing import TYPE_CHECKING

from benchkit.errors import BenchkitError
from benchkit.events import Event
from benchkit.procedure.actions import (
    Action,
    Ask,
    CheckWarm,
    Connect,
    Evaluate,
    Fall,
    Predict,
    Read,
    SetSupply,
    SwitchOff,
    Trim,
    Wait,
    Write,
)
from benchkit.session import asking, ending, falling, measuring, powering, predictions, soaking, trimming
from benchkit.session.job import Stopped
from benchkit.session.threads import in_thread

if TYPE_CHECKING:
    from benchkit.session.run import Session


async def perform(session: Session, action: Action) -> Event | None:
    """Carry out an action; None when what comes of it arrives by itself, as the keeper's own event.

    Raises
    ------
    BenchkitError
        When it can't be carried out in a way that the walk knows of.
    """
    job = session.job
    match action:
        case Connect():
            return await asking.connect(session)
        case Ask():
            return await asking.ask(session, action)
        case Predict():
            session.busy("The model works out what this unit should read.")
            return await in_thread(
                lambda: predictions.predict(job.design, action, job.units, job.seed), "benchkit-model"
            )
        case CheckWarm():
            session.busy("The model works out whether this design comes to rest when it warms up.")
            return await in_thread(lambda: predictions.check_warm(job.design, action, job.seed), "benchkit-model")
        case Evaluate():
            state = session.state
            return await in_thread(
                lambda: predictions.evaluate_rule(job.design, job.walk, state, action), "benchkit-model"
            )
        case Read():
            return await measuring.read(session, action)
        case Trim():
            return await trimming.trim(session, action)
        case Fall():
            return await falling.watch(session, action)
        case SetSupply():
            return await powering.set_supply(session, action)
        case SwitchOff():
            return await powering.switch_off(session, action)
        case Wait():
            return await soaking.wait(session, action)
        case Write():
            return await ending.last_look(session, action)
    raise BenchkitError(f"There is no way to carry out {type(action).__name__}")


async def lapse(task: asyncio.Task[Event | None] | None) -> None:
    """Let an action go that nobody waits for any more, whatever came or would have come of it."""
    if task is None:
        return
    if not task.done():
        task.cancel()
    with contextlib.suppress(asyncio.CancelledError, Stopped, BenchkitError):
        await task
