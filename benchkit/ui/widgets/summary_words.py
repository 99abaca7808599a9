"""How the end of a walk is put into words, without a terminal."""

from __future__ import annotations

from collections.abc import Sequence

from benchkit.procedure.securing import NOTHING_BROKEN
from benchkit.session.front import ResultView, View
from benchkit.ui.look import safe

__all__ = ["NOTHING_BROKEN", "broken_words", "closing_sentence", "still_open"]


def closing_sentence(view: View) -> str:
    """Return one plain sentence about how the walk ended."""
    where = "The simulated unit" if view.kind == "rehearsal" else f"Unit {view.unit}"
    if view.stopped:
        return f"The walk was stopped before its end: {view.stopped.rstrip('.')}. {where} is not proven."
    if view.verdict == "pass":
        return f"{where} passed {view.procedure}: every reading that was asked for lies inside its limits."
    if view.verdict == "fail":
        return f"{where} failed {view.procedure}. Do not put it into use; see below what was wrong."
    if view.why:
        return f"{where} is undecided. {view.why}"
    return f"{where} is undecided: at least one reading is too close to its limit for this meter to say."


def still_open(results: Sequence[ResultView]) -> tuple[ResultView, ...]:
    """Return the results that did not pass, each item's newest only: what failed first, and else in their order."""
    newest = {result.item: result for result in results}
    still = (result for result in newest.values() if result.verdict != "pass")
    return tuple(sorted(still, key=lambda result: result.verdict != "fail"))


def broken_words(broken: str) -> str:
    """Return what became of a rehearsal's unit, from the names of the parts that have failed, or that none has.

    Examples
    --------
    >>> broken_words("none")
    'No part of the simulated unit was burnt.'
    """
    if broken == NOTHING_BROKEN:
        return "No part of the simulated unit was burnt."
    return f"BURNT in the simulated unit: {safe(broken)}."
