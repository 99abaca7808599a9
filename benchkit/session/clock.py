"""The session's time: the wall clock at a real bench, simulated time in a rehearsal.

Links, time-outs and heartbeats always live by the wall clock; this clock is only for what the unit lives by.
"""

from __future__ import annotations

import asyncio
import time
from collections.abc import Awaitable, Callable
from typing import Protocol


class Clock(Protocol):
    """A clock that can let time pass."""

    own_watch: bool
    """Whether the keeper watches by itself; otherwise it is asked for a sample after each slice."""

    def now(self) -> float:
        """Seconds since some fixed moment."""

    async def spend(self, seconds: float) -> None:
        """Let that much time pass."""


class WallClock:
    """The real time of a real bench."""

    own_watch = True

    def now(self) -> float:
        """Seconds of the system's monotonic clock."""
        return time.monotonic()

    async def spend(self, seconds: float) -> None:
        """Sleep."""
        await asyncio.sleep(seconds)


class SimulatedClock:
    """The time of a simulated bench, moved on by the session.

    Parameters
    ----------
    advance : callable
        Moves the bench on by so many seconds.
    pace : float or None
        Simulated seconds for each second that the person waits; None to wait not at all.
    """

    own_watch = False

    def __init__(self, advance: Callable[[float], Awaitable[None]], pace: float | None) -> None:
        self._advance = advance
        self._pace = pace
        self._now = 0.0

    def now(self) -> float:
        """Simulated seconds so far."""
        return self._now

    async def spend(self, seconds: float) -> None:
        """Move the bench on, and let the person see it happen."""
        if self._pace is not None:
            await asyncio.sleep(seconds / self._pace)
        await self._advance(seconds)
        self._now += seconds
