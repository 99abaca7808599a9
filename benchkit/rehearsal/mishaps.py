"""What goes wrong in a rehearsal, in words: a fault of the table, or something about stage, heat or supply.

A mishap is there from the beginning, or comes while the screw is turned::

    emitter.upper.1: open
    spreader.trimmer: wiper open, after 3 turns
    stage: oscillation
    heat: runaway, after 2 turns
    supply: folds back, after 0.5 turns

Turns are those of the hand, either way, since the unit got its power.  The words behind ``stage``, ``heat`` and
``supply`` are `TROUBLES`; all others are rows of the fault table (`benchkit.stage.faults`).
"""

from __future__ import annotations

import re
from dataclasses import dataclass, replace
from typing import Final, Literal

import numpy as np

from benchkit.errors import EntryError
from benchkit.stage.design import Design
from benchkit.stage.faults import Fault, parse_fault
from benchkit.stage.heat import HeatNodes

Trouble = Literal["", "oscillation", "ripple", "runaway", "folds back"]

TROUBLES: Final[dict[tuple[str, str], Trouble]] = {
    ("stage", "oscillation"): "oscillation",
    ("stage", "ripple"): "ripple",
    ("heat", "runaway"): "runaway",
    ("supply", "folds back"): "folds back",
}
"""What is no fault of a part: the stage swings by itself, or lets the rails' ripple through; the spreader has come off
the heat sink and the sink is covered; the supply's limit has sunk."""

OSCILLATION_A: Final = 0.06
"""What an oscillation draws from each rail, beyond the idle current (our own figure)."""
STRAY_V: Final = {"oscillation": 0.15, "ripple": 0.025}
"""What a meter's a.c. range shows of it at the output: of an oscillation in the megahertz, a small part (our own)."""
FOLDED_SHARE: Final = 0.25
"""The supply's sunken limit, as a share of what it is set to."""
RUNAWAY_SINK: Final = 6.0
RUNAWAY_CAPACITY: Final = 0.1
"""A covered sink: so many times its thermal resistance, and so much of its capacity (our own figures)."""

_AFTER = re.compile(r"^(?P<what>.*?),?\s+after\s+(?P<turns>\d+(?:\.\d*)?|\.\d+)\s+turns?\s*$")


@dataclass(frozen=True, kw_only=True)
class Mishap:
    """What goes wrong, and when.

    Parameters
    ----------
    fault : Fault or None
        A row of the fault table.
    trouble : str
        One of `TROUBLES`' words; "" where it is a fault.
    after_turns : float
        How far the screw is turned under power before it comes; 0 from the beginning.
    """

    fault: Fault | None = None
    trouble: Trouble = ""
    after_turns: float = 0.0

    def __str__(self) -> str:
        where = next((f"{place}: {word}" for (place, word) in TROUBLES if word == self.trouble), str(self.fault))
        return where + (f", after {self.after_turns:g} turns" if self.after_turns else "")


def parse_mishap(text: str, design: Design) -> Mishap:
    """Read a mishap.

    Raises
    ------
    EntryError
        When it names no part or fault of the design and none of `TROUBLES`.
    """
    match = _AFTER.match(text)
    what, turns = (match["what"], float(match["turns"])) if match else (text, 0.0)
    place, _, word = (piece.strip().lower() for piece in what.partition(":"))
    trouble = TROUBLES.get((place, " ".join(word.split())))
    if trouble is not None:
        return Mishap(trouble=trouble, after_turns=turns)
    if place in {place for place, _ in TROUBLES}:
        known = ", ".join(f'"{there}: {word}"' for there, word in TROUBLES)
        raise EntryError(f'"{what}" is nothing that can go wrong', f"one of {known}, or a part and a fault of it")
    if turns and design.spreader.trimmer is None:
        raise EntryError(f'"{text}" waits for turns of a screw', f"no turns: {design.name} has no trimmer")
    return Mishap(fault=parse_fault(what, design), after_turns=turns)


def covered(nodes: HeatNodes) -> HeatNodes:
    """The same heat nodes with the sink covered and the spreader in the air: what a runaway is made of."""
    sink, spreader = len(nodes.names) - 1, nodes.names.index("spreader.transistor")
    per_watt, lag_s = nodes.per_watt.copy(), nodes.lag_s.copy()
    coupling, shows = nodes.coupling.copy(), nodes.shows.copy()
    per_watt[sink] *= RUNAWAY_SINK
    lag_s[sink] *= RUNAWAY_SINK * RUNAWAY_CAPACITY
    coupling[spreader, sink] = shows[spreader, sink] = 0.0
    rest = shows @ np.linalg.inv(np.eye(len(nodes.names)) - coupling) @ per_watt
    return replace(nodes, per_watt=per_watt, lag_s=lag_s, coupling=coupling, shows=shows, rest=rest)
