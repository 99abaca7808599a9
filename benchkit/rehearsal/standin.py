"""The stand-in: a simulated technician who answers, moves probes and turns the trimmer.

It is careful and obedient, not clever: it does what the screen says, tries once more when a reading is no pass, notes a
reason where a result stays undecided, and makes safe where one fails.  When the trimmer's end is wrong, it turns the
screw the other way and measures again.  When a rail is still up, it waits.
"""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Callable
from typing import Any, Protocol

import numpy as np

from benchkit.procedure.actions import Question
from benchkit.session.front import Reply, View
from benchkit.session.threads import in_thread

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

    def show(self, view: View) -> None:
        """Look at the picture; say each new result."""
        self._view = view
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
                return Reply(choice="yes")
            case "trim":
                return self._trim(question)
            case "decide":
                return await self._decide(question)
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
        self._tries[question.item] += 1
        tries = self._tries[question.item]
        choices = {choice.value for choice in question.choices}
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
