"""How a walk ends: its last lines, and the ends that nobody wished for, an error of the session or a keeper's death."""

from __future__ import annotations

import asyncio
import contextlib
from collections.abc import Callable
from concurrent.futures import Future
from typing import TYPE_CHECKING

from benchkit.errors import BenchkitError, InstrumentError
from benchkit.events import Closed, Event, Noted, OutputOff
from benchkit.keeper.protocol import KeeperDied, Push
from benchkit.procedure.actions import Write
from benchkit.session.creeping import left_words
from benchkit.session.hands import end_note

if TYPE_CHECKING:
    from benchkit.session.run import Session

OFF_S = 6.0
"""How long "off" may take altogether before the words are that nothing is known (s)."""


def resume_hint(session: Session) -> str:
    """Say how a walk that was cut off is gone on with."""
    opened = session.state.opened
    command = "rehearse" if opened is not None and opened.kind == "rehearsal" else "walk"
    return f"Go on later with benchkit {command} --resume and the record's name"


def time_note(seconds: float, target_s: float | None) -> Noted | None:
    """Say how long a channel took; None where its procedure has no time for that."""
    if target_s is None:
        return None
    return Noted(
        text=f"This channel took {left_words(seconds, exact=True)}; the target is {left_words(target_s)}.",
        figures={"seconds": seconds, "target_seconds": target_s},
    )


async def last_look(session: Session, action: Write) -> Event | None:
    """Return what is to be written; before the last line comes what the model and a rehearsal's unit still say."""
    if not isinstance(action.event, Closed):
        return action.event
    if session.state.suspecting:
        await session.suspects_settled()
    noted = session.noted_at_the_end
    if "time" not in noted:
        noted.add("time")
        told = time_note(session.elapsed_s, session.job.procedure.head.target_time_s)
        if told is not None:
            return told
    if session.hands.simulated and "truth" not in noted:
        noted.add("truth")
        return end_note(await session.hands.truth())
    return action.event


async def secure(session: Session, reason: str) -> None:
    """Switch off on the way out of an error, by the keeper or, if that has gone, by a second one."""
    asks: tuple[Callable[[], Future[OutputOff]], ...] = (
        lambda: session.keeper.off(reason),
        lambda: session.keeper.after_death(session.job.setup),
    )
    for ask in asks:
        if session.state.energised == "off" and session.keeper.alive:
            return
        with contextlib.suppress(Exception):
            off: asyncio.Future[OutputOff] = asyncio.wrap_future(ask())
            session.last_off = await asyncio.wait_for(off, OFF_S)
        for push in session.pushed:
            if isinstance(push, Push) and isinstance(push.event, OutputOff):
                session.last_off = push.event
        if session.last_off is not None and session.last_off.confirmed:
            return


async def keeper_died(session: Session, push: KeeperDied) -> BenchkitError:
    """Say that the keeper has died, and what the one that stood by found of the supply."""
    if session.job.manual_supply:
        return InstrumentError(
            "link lost", f"The keeper of the record has ended: {push.problem}", "", resume_hint(session)
        )
    off = session.last_off = await asyncio.wrap_future(session.keeper.after_death(session.job.setup))
    words = (
        "A second keeper switched the supply off and read it back as off."
        if off.confirmed
        else "OUTPUT STATE UNKNOWN: switch the supply off by hand."
    )
    return InstrumentError(
        "link lost", f"The keeper of the instruments has ended: {push.problem}. {words}", "", resume_hint(session)
    )
