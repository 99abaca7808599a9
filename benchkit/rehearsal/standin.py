"""The stand-in: a simulated technician who answers, moves probes and turns the trimmer.

It is careful and obedient, not clever: it does what the screen says, trims again where that is offered, tries once
more when another reading is no pass, notes a reason where a result stays undecided, and makes safe where one fails,
unless that only tells how the unit came in.  How it turns the screw says `benchkit.rehearsal.turning`.  Before it
places the probes it waits for narrowed limits that are being worked out, before it decides for the suspects; it takes
the extra readings that are offered.  When the trimmer's end is wrong, it turns the screw the other way and measures
again.  When a rail is still up, it waits.  Asked which parts were replaced, it looks into the unit for what is faulty.
"""

from __future__ import annotations

import asyncio
from collections import Counter
from collections.abc import Callable
from typing import Any, Protocol

import numpy as np

from benchkit.procedure.actions import Question
from benchkit.rehearsal.turning import Turning
from benchkit.session.front import Reply, SuspectsView, View
from benchkit.session.threads import in_thread

MOST_PATIENCE_S = 60.0
"""How long it waits for narrowed limits or suspects (s)."""

MOST_WAITS = 20
WAIT_S = 30.0

SLIP_S = 4.0
SLIPS_AFTER_MOVES = 2
"""How long its probe is off the point when it slips, and after how many moves of the screw that comes."""

BEFORE = ".before"
"""The item that asks what was replaced before the walk ends so."""

AS_FOUND = "found."
"""Items that tell how a unit came in begin so: what is wrong there is noted, and the walk goes on."""


class Screw(Protocol):
    """What the stand-in's hands move by themselves."""

    def trimmer_to(self, travel: Any) -> Any:
        """Turn the trimmer to an end."""

    def advance(self, seconds: float) -> Any:
        """Let time pass."""

    def slip(self, seconds: float) -> Any:
        """Let the clips slip off for some seconds."""

    def truth(self) -> Any:
        """What is really so."""


class StandIn:
    """A front end without a person.

    Parameters
    ----------
    hands : Screw
        Of the simulated bench.
    turns : float
        Turns of the trimmer from end to end; 0 without a trimmer.
    rng : numpy.random.Generator
        For how exactly a hand turns a screw.
    say : callable
        Takes a line about what is being done; None for silence.
    wrong_end : bool
        It turns the trimmer to the wrong end when told to turn it to the least-bias end.
    slips : int
        So often does its probe slip while it turns the screw.
    optional : bool
        It does sections that may be passed over, such as a power soak.
    replaced_before : (str, str), optional
        What it answers when it is first asked which parts were replaced: the choice, and the parts.
    """

    def __init__(
        self,
        hands: Screw,
        *,
        turns: float,
        rng: np.random.Generator,
        say: Callable[[str], None] | None = None,
        wrong_end: bool = False,
        slips: int = 0,
        optional: bool = False,
        replaced_before: tuple[str, str] | None = None,
    ) -> None:
        self._hands = hands
        self._turns = turns
        self._rng = rng
        self._say = say or (lambda line: None)
        self._wrong_end = wrong_end
        self._tries: Counter[str] = Counter()
        self._trims: dict[str, Turning] = {}
        self._slips_left = slips
        self._optional = optional
        self._replaced_before = replaced_before
        self._view: View | None = None
        self._told = 0
        self._message = ""
        self._suspects: SuspectsView | None = None

    def show(self, view: View) -> None:
        """Look at the picture; say each new result."""
        self._view = view
        suspects = view.suspects
        if suspects is not None and not suspects.working and suspects != self._suspects:
            self._suspects = suspects
            self._say(f"          {suspects.heading}")
        if view.message and view.message != self._message:
            self._say(f"!         {view.message}")
        self._message = view.message
        for result in view.results[self._told :] if len(view.results) > self._told else ():
            self._say(f"{result.verdict:9s} {result.title}  {result.value_text}")
        self._told = max(self._told, len(view.results))

    async def ask(self, question: Question, refused: str = "") -> Reply:
        """Answer as a careful technician would."""
        if refused:
            raise RuntimeError(f"the stand-in's answer to {question.title!r} was refused: {refused}")
        match question.kind:
            case "hold":
                return Reply(choice="yes", text="yes")
            case "confirm":
                await self._wait_while(lambda view: view.suspects is not None and view.suspects.working)
                return Reply(choice="yes")
            case "trim":
                return await self._trim(question)
            case "parts":
                return await self._parts(question)
            case "choose":
                return Reply(choice="yes" if self._optional else "no")
            case "decide":
                return await self._decide(question)
            case "probes":
                await self._wait_while(lambda view: view.narrowing)
                return Reply(choice="done")
            case "tell":
                if "least-bias end" in question.title:
                    await self._turn_to("most" if self._wrong_end else "least")
                return Reply(choice="done")
            case _:
                return Reply(choice="done", text="stand-in")

    async def _turn_to(self, end: str) -> None:
        if self._turns:
            await in_thread(lambda: self._hands.trimmer_to(end))

    async def _decide(self, question: Question) -> Reply:
        choices = {choice.value: choice for choice in question.choices}
        if "trim again" in choices:
            self._trims.clear()
            return Reply(choice="trim again")
        free = "go on" in choices and not choices["go on"].wants_reason
        again = "read again" if "read again" in choices else "again"
        if self._tries[question.item] or free or again not in choices:
            if "probe" in choices:
                self._say(f"          {choices['probe'].label}")
                return Reply(choice="probe")
            # The question is put anew when an extra reading is offered.
            await self._wait_while(lambda view: view.suspects is not None and view.suspects.working)
        if free:
            return Reply(choice="go on")
        self._tries[question.item] += 1
        tries = self._tries[question.item]
        if question.point in ("rail+", "rail-") and tries <= MOST_WAITS:
            await in_thread(lambda: self._hands.advance(WAIT_S))
            return Reply(choice=again)
        if tries == 1:
            if question.point.startswith("ohm.spreader"):
                await self._turn_to("least")
            return Reply(choice=again)
        if "make safe" not in choices:
            return Reply(choice="go on", text="the stand-in has tried again and leaves it as it is")
        if question.item.startswith(AS_FOUND) and "go on" in choices:
            return Reply(choice="go on", text="as it was found; noted by the stand-in")
        verdict = next(
            (result.verdict for result in self._view.results if result.item == question.item), "fail"
        ) if self._view is not None else "fail"  # fmt: skip
        if verdict == "undecided" and "go on" in choices:
            return Reply(choice="go on", text="undecided twice; noted by the stand-in")
        return Reply(choice="make safe")

    async def _wait_while(self, worked_on: Callable[[View], bool]) -> None:
        """Give the model the time that a person takes: whoever has simulated hands is quicker than any."""
        left_s = MOST_PATIENCE_S
        while left_s > 0 and self._view is not None and worked_on(self._view):
            await asyncio.sleep(0.02)
            left_s -= 0.02

    async def _trim(self, question: Question) -> Reply:
        """Turn the screw by the advice on the screen."""
        hand = self._trims.setdefault(question.item, Turning(self._turns, self._rng))
        live = self._view.live if self._view is not None else None
        if self._slips_left and len(hand.moves) >= SLIPS_AFTER_MOVES:
            self._slips_left -= 1
            self._say("          the probe slips")
            await in_thread(lambda: self._hands.slip(SLIP_S))
        return hand.reply(live)

    async def _parts(self, question: Question) -> Reply:
        """Name what has to be replaced: a technician goes by the suspects, the stand-in looks into the unit."""
        if question.item.endswith(BEFORE):
            kind, parts = self._replaced_before or ("no", "")
            return Reply(choice=kind, text=parts)
        await self._wait_while(lambda view: view.suspects is not None and view.suspects.working)
        truth = await in_thread(self._hands.truth)
        broken = [str(part) for part in truth.get("faulty", ())]
        if not broken:
            return Reply(choice="no")
        self._say(f"          replaced: {', '.join(broken)}")
        return Reply(choice="semiconductors" if truth.get("semiconductors") else "other parts", text=", ".join(broken))
