"""What would explain the readings, as coloured lines: without a terminal."""

from __future__ import annotations

import textwrap
from typing import Final

from rich.text import Text

from benchkit.session.front import SuspectsView, SuspectView
from benchkit.ui.look import BLOCK, CARE, INK, LIGHT_SHADE, QUIET, STRONG, safe

BAR: Final = 8
"""Cells of the bar that draws a suspect's share."""

INDENT: Final = BAR + 2


def suspects_text(suspects: SuspectsView, width: int) -> Text:
    """Return the suspects for a column of `width` cells.

    The answer in a sentence; for each suspect a bar with its share in words, its name, and below it what speaks for it;
    then what could not have shown, and which reading would tell most.
    """
    text = Text()
    _add(text, suspects.heading, width, QUIET if suspects.working else f"bold {INK}")
    for suspect in suspects.suspects:
        _suspect(text, suspect, width)
    if suspects.unseen:
        _add(text, suspects.unseen, width, QUIET)
    if suspects.next_step:
        _add(text, suspects.next_step, width, f"bold {CARE}")
    return text


def share_bar(share: float, width: int = BAR) -> str:
    """Return a bar; even the smallest share has one cell, and only what is nearly certain fills it.

    Examples
    --------
    >>> share_bar(0.63), share_bar(0.001)
    ('█████░░░', '█░░░░░░░')
    """
    full = min(width, max(1, int(share * width + 0.5)))
    return BLOCK * full + LIGHT_SHADE * (width - full)


def _suspect(text: Text, suspect: SuspectView, width: int) -> None:
    if text:
        text.append("\n")
    text.append(f"{share_bar(suspect.share)}  ", style=INK)
    text.append(f"{suspect.share_text}  ", style=INK)
    text.append(safe(suspect.title), style=f"bold {STRONG}")
    for line in (suspect.alike, *suspect.evidence):
        if line:
            _add(text, line, width, QUIET if line == suspect.alike else INK, INDENT)


def _add(text: Text, words: str, width: int, style: str, indent: int = 0) -> None:
    for line in textwrap.wrap(safe(words), max(20, width - indent), break_on_hyphens=False):
        if text:
            text.append("\n")
        text.append(" " * indent + line, style=style)
