"""Which part of the session carries out which action of the walk; the event that comes of it goes back to the loop."""

from __future__ import annotations

from typing import TYPE_CHECKING

from benchkit.errors import BenchkitError
from benchkit.events import Event, Waited
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
from benchkit.session import asking, falling, measuring, powering, predictions
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
            async with powering.minding_the_meter(session):
                return await measuring.trim(session, action)
        case Fall():
            return await falling.watch(session, action)
        case SetSupply():
            return await powering.set_supply(session, action)
        case SwitchOff():
            return await powering.switch_off(session, action)
        case Wait():
            await asking.wait(session, action)
            return Waited(item=action.item, seconds=action.seconds)
        case Write():
            return await session.last_look(action)
    raise BenchkitError(f"There is no way to carry out {type(action).__name__}")
