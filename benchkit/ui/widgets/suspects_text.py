"""What would explain the readings, as coloured lines: without a terminal."""

from __future__ import annotations

from typing import Final

from rich.console import Group
from rich.padding import Padding
from rich.text import Text

from benchkit.session.front import SuspectsView, SuspectView
from benchkit.ui.look import BLOCK, CARE, INK, LIGHT_SHADE, QUIET, STRONG, safe

BAR: Final = 8
"""Cells of the bar that draws a suspect's share."""

INDENT: Final = BAR + 2


def suspects_drawn(suspects: SuspectsView) -> Group:
    """Return the suspects as lines that wrap to the room that they get.

    The answer in a sentence; for each suspect a bar with its share in words, its name, and below it what speaks for it,
    most for the first; then which reading would tell most, and what could not have shown.
    """
    rows: list[Text | Padding] = [Text(safe(suspects.heading), style=QUIET if suspects.working else INK)]
    for number, suspect in enumerate(suspects.suspects):
        rows += _suspect(suspect, evidence=1 if number else 2)
    if suspects.next_step:
        rows.append(Text(safe(suspects.next_step), style=f"bold {CARE}"))
    if suspects.unseen:
        rows.append(Text(safe(suspects.unseen), style=QUIET))
    return Group(*rows)


def share_bar(share: float, width: int = BAR) -> str:
    """Return a bar; even the smallest share has one cell.

    Examples
    --------
    >>> share_bar(0.63), share_bar(0.001)
    ('█████░░░', '█░░░░░░░')
    """
    full = min(width, max(1, int(share * width + 0.5)))
    return BLOCK * full + LIGHT_SHADE * (width - full)


def _suspect(suspect: SuspectView, evidence: int) -> list[Text | Padding]:
    share = f"{share_bar(suspect.share)}  {suspect.share_text}  " if suspect.share_text else " " * INDENT
    title = Text.assemble((share, INK), (safe(suspect.title), f"bold {STRONG}"))
    if suspect.alike:
        title.append(f", {safe(suspect.alike)}", style=QUIET)
    below = [Padding(Text(safe(line), style=INK), (0, 0, 0, INDENT)) for line in suspect.evidence[:evidence]]
    return [title, *below]
