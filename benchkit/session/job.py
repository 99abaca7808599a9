"""What a session is given, and small things that it makes of what comes back."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

from benchkit.measure.accuracy import Accuracy
from benchkit.procedure.actions import Question
from benchkit.procedure.file import Procedure
from benchkit.procedure.walk import Walk
from benchkit.session.front import Reply
from benchkit.stage.design import Design


@dataclass(kw_only=True)
class Job:
    """What a walk needs, put together once.

    Parameters
    ----------
    design, procedure : Design, Procedure
    walk : Walk
    record : Path
        The journal's file.
    setup : dict
        Addresses and profiles for the keeper; an entry is None where a person reads or switches.
    accuracy : Accuracy
        Of the meter.
    supply_accuracy : Accuracy
        Of the supply's own current readings.
    units : int or None
        Units drawn for the limits.
    seed : int
    narrow_rarely : bool
        Limits are narrowed once for each section, after its first reading, for what is read under the condition that
        comes next, instead of after each reading: for whoever reads faster than the model thinks.
    hands_free : bool
        A reading that is at rest on its point is taken without a key.
    bell : bool
        Each value that was taken so is counted for the screen to ring a bell.
    """

    design: Design
    procedure: Procedure
    walk: Walk
    record: Path
    setup: dict[str, Any]
    accuracy: Accuracy
    supply_accuracy: Accuracy
    units: int | None = None
    seed: int = 0
    narrow_rarely: bool = False
    hands_free: bool = True
    bell: bool = True

    @property
    def manual_meter(self) -> bool:
        """A person reads the meter."""
        return self.setup.get("meter") is None

    @property
    def manual_supply(self) -> bool:
        """A person sets the supply."""
        return self.setup.get("supply") is None


class Asked:
    """The operator's wish for off, in the queue of what has come."""

    def __init__(self, reason: str) -> None:
        self.reason = reason


class Stopped(Exception):  # noqa: N818 (no error: the person chose it)
    """The operator chose to make safe and stop; turned into an event where it is caught."""

    def __init__(self, reason: str) -> None:
        self.reason = reason
        super().__init__(reason)


def figures_of(truth: dict[str, Any]) -> dict[str, float]:
    """Keep the plain numbers of a rehearsal's truth; a pair of rails becomes two."""
    figures: dict[str, float] = {}
    for key, value in truth.items():
        if isinstance(value, bool):
            continue
        if isinstance(value, (int, float)):
            figures[key] = float(value)
        elif isinstance(value, (list, tuple)) and len(value) == 2 and key.endswith("_v"):
            stem = key.removesuffix("_v")
            figures[f"{stem}_positive_v"], figures[f"{stem}_negative_v"] = float(value[0]), float(value[1])
    return figures


def refusal(question: Question, reply: Reply) -> str:
    """Say why a reply is no answer to a question, "" when it is one."""
    choices = {choice.value: choice for choice in question.choices}
    chosen = choices.get(reply.choice)
    if chosen is None:
        return f"{reply.choice!r} is no answer here. Answer {' or '.join(choices)}."
    if chosen.wants_reason and not reply.text.strip():
        return (
            f"What is needed, in words: {chosen.wanted}." if chosen.wanted else "A reason in words is needed to go on."
        )
    if question.kind == "hold" and reply.choice == "yes" and reply.text.strip().lower() != "yes":
        return "This is a hold point: type the word yes."
    typed = reply.text.strip()
    if only_done(question) and typed.lower() not in ("", "done", "off", "yes"):
        return f'"{typed}" came, and nothing is typed here. Enter alone says that it is done.'
    return ""


def only_done(question: Question) -> bool:
    """Whether a person only says that something was done by hand, such as a supply switched off."""
    return question.kind == "by hand" and not question.point and len(question.choices) == 1
