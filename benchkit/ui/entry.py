"""What the start screen shows and what it takes, without a terminal."""

from __future__ import annotations

from collections.abc import Awaitable, Callable
from dataclasses import dataclass
from typing import Literal

from benchkit.events import Closed
from benchkit.session.front import Front


@dataclass(frozen=True, kw_only=True)
class Opening:
    """What is known before a walk begins.

    Parameters
    ----------
    kind : "walk" or "rehearsal"
        A rehearsal touches no real unit.
    design, procedure, purpose : str
        Name and revision of the design, title of the procedure, and in one sentence what it is for.
    meter, supply : str
        The instruments in words; ``by hand`` where there is none.
    record : str
        Where the record goes.
    unit, operator : str
        What the two entries begin with.
    resumed : bool
        A walk that was cut off goes on: the unit's serial number can't be changed.
    channel : str
        Which channel of the unit; "" for the only one.
    another_unit : bool
        The unit after another one: only its serial number is asked for.
    next_label : str
        What may come after this walk, "" for nothing.
    """

    kind: Literal["walk", "rehearsal"]
    design: str
    procedure: str
    purpose: str
    meter: str
    supply: str
    record: str = ""
    unit: str = ""
    operator: str = ""
    resumed: bool = False
    channel: str = ""
    another_unit: bool = False
    next_label: str = ""


@dataclass(frozen=True, kw_only=True)
class Identity:
    """Which unit is on the bench and who stands before it."""

    unit: str
    operator: str


Start = Callable[[Front, Identity], Awaitable[Closed]]
"""Runs a whole walk before a front end and returns the last event of its record."""

LONGEST_ENTRY = 40


def entry_problem(label: str, text: str) -> str:
    """Return what is wrong with an entry of the start screen, or "" when it can be used.

    Examples
    --------
    >>> entry_problem("serial number", "  ")
    'The serial number is still empty.'
    >>> entry_problem("operator", "R. Holm")
    ''
    """
    text = text.strip()
    if not text:
        return f"The {label} is still empty."
    if not text.isprintable():
        return f"The {label} holds a character that can't be printed."
    if len(text) > LONGEST_ENTRY:
        return f"The {label} has {len(text)} characters; at most {LONGEST_ENTRY} fit."
    return ""
