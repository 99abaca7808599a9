"""The ends that nobody wished for: an error of the session, and a keeper that has died."""

from __future__ import annotations

import asyncio
import contextlib
from collections.abc import Callable
from concurrent.futures import Future
from typing import TYPE_CHECKING

from benchkit.errors import BenchkitError, InstrumentError
from benchkit.events import OutputOff
from benchkit.keeper.protocol import KeeperDied, Push

if TYPE_CHECKING:
    from benchkit.session.run import Session

OFF_S = 6.0
"""How long "off" may take altogether before the words are that nothing is known (s)."""

RESUME_HINT = "Go on later with benchkit walk --resume and the record's name"


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
        return InstrumentError("link lost", f"The keeper of the record has ended: {push.problem}", "", RESUME_HINT)
    off = session.last_off = await asyncio.wrap_future(session.keeper.after_death(session.job.setup))
    words = (
        "A second keeper switched the supply off and read it back as off."
        if off.confirmed
        else "OUTPUT STATE UNKNOWN: switch the supply off by hand."
    )
    return InstrumentError(
        "link lost", f"The keeper of the instruments has ended: {push.problem}. {words}", "", RESUME_HINT
    )
