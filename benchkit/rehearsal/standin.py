"""The stand-in: a simulated technician who answers, moves probes and turns the trimmer.

It is careful and obedient, not clever: it does what the screen says, tries once more when a reading is no pass, notes a
reason where a result stays undecided, and makes safe where one fails.  Before it places the
probes it waits for narrowed limits that are being worked out, before it decides for the suspects; it takes the extra
readings that are offered.  When the trimmer's end is wrong, it turns the
screw the other way and measures again.  When a rail is still up, it waits.
"""

from __future__ import annotations

import asyncio
import itertools
import math
from collections import Counter
from collections.abc import Callable
from typing import Any, Protocol

import numpy as np

from benchkit.procedure.actions import Question
from benchkit.session.front import Reply, SuspectsView, View
from benchkit.session.threads import in_thread

MOST_PATIENCE_S = 60.0
"""How long it waits for narrowed limits or suspects (s)."""

MOST_WAITS = 20
WAIT_S = 30.0


class Screw(Protocol):
    """What the stand-in's hands move by themselves."""

    def trimmer_to(self, travel: Any) -> Any:
        """Turn the trimmer to an end."""

    def advance(self, seconds: float) -> Any:
        """Let time pass."""


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
    """

    def __init__(
        self,
        hands: Screw,
        *,
        turns: float,
        rng: np.random.Generator,
        say: Callable[[str], None] | None = None,
        wrong_end: bool = False,
    ) -> None:
        self._hands = hands
        self._turns = turns
        self._rng = rng
        self._say = say or (lambda line: None)
        self._wrong_end = wrong_end
        self._tries: Counter[str] = Counter()
        self._moves: dict[str, list[tuple[float, float]]] = {}
        self._position: Counter[str] = Counter()
        self._view: View | None = None
        self._told = 0
        self._suspects: SuspectsView | None = None

    def show(self, view: View) -> None:
        """Look at the picture; say each new result."""
        self._view = view
        suspects = view.suspects
        if suspects is not None and not suspects.working and suspects != self._suspects:
            self._suspects = suspects
            self._say(f"          {suspects.heading}")
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
                return self._trim(question)
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
        free = "go on" in choices and not choices["go on"].wants_reason
        if self._tries[question.item] or free or "again" not in choices:
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
            return Reply(choice="again")
        if tries == 1:
            if question.point.startswith("ohm.spreader"):
                await self._turn_to("least")
            return Reply(choice="again")
        if "make safe" not in choices:
            return Reply(choice="go on", text="the stand-in has tried again and leaves it as it is")
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

    def _trim(self, question: Question) -> Reply:
        live = self._view.live if self._view is not None else None
        if live is None or live.value is None:
            return Reply(choice="end", text="There is no reading.")
        middle, half = (live.low + live.high) / 2.0, (live.high - live.low) / 2.0
        if abs(live.value - middle) < 0.3 * half:
            return Reply(choice="take")
        moves = self._moves.setdefault(question.item, [])
        here = sum(turns for turns, _ in moves)
        wanted = math.log(live.target / max(live.value, 1e-6))
        if abs(here) > 1.3 * self._turns or len(moves) > 200:
            return Reply(choice="end", text="The screw is at its end and the target is not reached.")
        if wanted < 0.0 and _at_least_end(moves, live.value):
            if live.low <= live.value <= live.high:
                return Reply(choice="take")
            return Reply(choice="end", text="The screw is at its least-bias end and the reading is still above.")
        step = math.copysign(0.25, wanted)
        if moves:
            turned, before = moves[-1]
            slope = math.log(max(live.value, 1e-6) / max(before, 1e-6)) / turned
            if slope > 0.05:
                step = wanted / slope
        most = 0.5 if live.value < 0.1 * live.target else 0.35
        step = max(-most, min(most, step)) * (1.0 + 0.1 * float(self._rng.standard_normal()))
        if abs(step) < 0.004:
            step = math.copysign(0.004, step)
        moves.append((step, live.value))
        return Reply(choice="turn", turns=step)


_SAME_SHARE = 0.03
_SAME_MOVES = 3


def _at_least_end(moves: list[tuple[float, float]], value: float) -> bool:
    """Whether the screw has been turned for less bias again and again, and the reading hardly followed."""
    last = moves[-_SAME_MOVES:]
    if len(last) < _SAME_MOVES or any(turns >= 0.0 for turns, _ in last):
        return False
    readings = [before for _, before in last] + [value]
    return all(abs(after - before) <= _SAME_SHARE * abs(before) for before, after in itertools.pairwise(readings))
