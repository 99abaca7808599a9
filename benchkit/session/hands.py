"""What hands do at the bench.  At a real bench the operator's own do it; in a rehearsal they are simulated."""

from __future__ import annotations

import re
from collections.abc import Callable
from typing import Any, Protocol

from benchkit.events import Noted
from benchkit.procedure.items import CLEARS_PROTECTION, DRIVE_SHARES
from benchkit.session.job import figures_of
from benchkit.session.threads import in_thread


class SimulatedHands(Protocol):
    """Blocking calls that move the simulated bench."""

    def probe(self, point: str | None) -> Any:
        """Put the probes on a test point."""

    def turn(self, turns: float) -> Any:
        """Turn the trimmer's screw, positive for more bias."""

    def trimmer_to(self, travel: Any) -> Any:
        """Turn the trimmer to an end or a travel."""

    def connect(self, connected: bool) -> Any:
        """Plug the unit to the supply or pull it."""

    def short(self, shorted: bool) -> Any:
        """Short the supply's leads or open the short."""

    def drive(self, share: float) -> Any:
        """Drive the stage to a share of full power into the dummy load; 0 ends it."""

    def repair(self) -> Any:
        """Put new parts in for what is faulty or burnt."""

    def clear_protection(self) -> Any:
        """Clear the supply's tripped protection at its own keys."""

    def advance(self, seconds: float) -> Any:
        """Let simulated time pass."""

    def truth(self) -> dict[str, Any]:
        """What really is, for the end of a rehearsal."""


class Hands:
    """Does nothing at a real bench, and moves the simulated one in a rehearsal.

    Parameters
    ----------
    simulated : SimulatedHands, optional
        The simulated bench; none at a real one.
    own_screwdriver : bool
        Whoever answers turns the trimmer to its end themselves (the stand-in does, and may err).
    """

    def __init__(self, simulated: SimulatedHands | None = None, *, own_screwdriver: bool = False) -> None:
        self._simulated = simulated
        self._own_screwdriver = own_screwdriver

    @property
    def simulated(self) -> bool:
        """True in a rehearsal."""
        return self._simulated is not None

    async def act(self, act: str) -> None:
        """Do what a told item says: with the leads, the unit, its trimmer, the dummy load and the generator."""
        bench = self._simulated
        if bench is None:
            return
        if act == "short the leads":
            await self._do(lambda: bench.connect(False))
            await self._do(lambda: bench.short(True))
        elif act == "connect the unit":
            await self._do(lambda: bench.short(False))
            await self._do(lambda: bench.connect(True))
        elif act == "trimmer to least" and not self._own_screwdriver:
            await self._do(lambda: bench.trimmer_to("least"))
        elif act in DRIVE_SHARES:
            await self._do(lambda: bench.drive(DRIVE_SHARES[act]))
        elif act == CLEARS_PROTECTION:
            await self._do(bench.clear_protection)
        elif act == "take the dummy load off":
            await self._do(lambda: bench.drive(0.0))

    async def repair(self, named: str) -> None:
        """Put new parts in where some were said to be replaced, in this walk so far.

        The simulated unit is well again once everything that is faulty has been named; whatever else was replaced
        changes nothing.
        """
        bench = self._simulated
        if bench is None:
            return
        faulty = (await self._do(bench.truth)).get("faulty", ())
        words = set(re.findall(r"[a-z0-9]+(?:\.[a-z0-9]+)*", named.lower()))
        if words.issuperset(faulty):
            await self._do(bench.repair)

    async def probe(self, point: str | None) -> None:
        """Put the probes on a test point."""
        bench = self._simulated
        if bench is not None:
            await self._do(lambda: bench.probe(point))

    async def turn(self, turns: float) -> None:
        """Turn the screw."""
        bench = self._simulated
        if bench is not None:
            await self._do(lambda: bench.turn(turns))

    async def advance(self, seconds: float) -> None:
        """Let simulated time pass."""
        bench = self._simulated
        if bench is not None:
            await self._do(lambda: bench.advance(seconds))

    async def truth(self) -> dict[str, Any]:
        """What really is; empty at a real bench."""
        bench = self._simulated
        return {} if bench is None else await self._do(bench.truth)

    async def _do(self, call: Callable[[], Any]) -> Any:
        return await in_thread(call, "benchkit-hands")


def end_note(truth: dict[str, Any]) -> Noted:
    """Put what really became of a rehearsal's unit into a note: words, figures, parts that have failed."""
    burnt = truth.get("burnt")
    return Noted(
        text=str(truth.get("words") or "The simulated unit at the end of the walk."),
        figures=figures_of(truth),
        broken=None if burnt is None else tuple(str(part) for part in burnt),
    )
