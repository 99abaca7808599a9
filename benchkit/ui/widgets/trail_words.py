"""The way through the procedure as one line of beads, the section at hand spelled out in its place."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

from benchkit.events import Verdict
from benchkit.session.front import SectionView
from benchkit.ui.look import DOT, RULE, VERDICT_SHAPES, safe

Role = Literal["pass", "fail", "undecided", "here", "coming", "line"]


@dataclass(frozen=True)
class Piece:
    """Text and the part that it plays, from which its colour comes."""

    text: str
    role: Role


def trail(sections: Sequence[SectionView], width: int, *, spelled: bool = False) -> tuple[Piece, ...]:
    """Return the beads of a procedure.

    Parameters
    ----------
    sections : sequence of SectionView
        In their order.
    width : int
        Cells of a line; the section at hand is cut to fit when the beads are not spelled out.
    spelled : bool
        Every section with its title (several lines may be needed) instead of only the one at hand.
    """
    pieces: list[Piece] = []
    room = width - 4 * (len(sections) - 1) - 4
    for section in sections:
        if pieces:
            pieces.append(Piece(f" {RULE} " if spelled else RULE, "line"))
        role: Role = section.verdict or "coming"
        bead = VERDICT_SHAPES[section.verdict] if section.verdict else DOT
        title = safe(section.title)
        if section.current:
            count = f" {section.done}/{section.total}" if section.total else ""
            if not spelled and len(title) + len(count) > room:
                title = title[: max(4, room - len(count) - 2)] + ".."
            if section.verdict:
                pieces.append(Piece(f"{bead} ", role))
            pieces.append(Piece(f" {title}{count} ", "here"))
        elif spelled:
            pieces.append(Piece(f"{bead} {title}", role))
        else:
            pieces.append(Piece(bead, role))
    return tuple(pieces)


def count_by_verdict(verdicts: Sequence[Verdict]) -> str:
    """Return how many of each there are, in words.

    Examples
    --------
    >>> count_by_verdict(["pass", "fail", "pass"])
    '2 passed, 1 failed, 0 undecided'
    """
    return (
        f"{sum(verdict == 'pass' for verdict in verdicts)} passed, "
        f"{sum(verdict == 'fail' for verdict in verdicts)} failed, "
        f"{sum(verdict == 'undecided' for verdict in verdicts)} undecided"
    )
