"""Profiles: what an instrument calls things, so that a new dialect needs no code.

A profile is a TOML file; the shipped ones stand in ``profiles/`` beside this module.  One beside the bench file may say
``based_on = "scpi-meter"`` and name only what differs.

Rules
-----
* A command or question is one message, or a list of messages that are sent one after the other; the last of a list is
  the question.
* ``{output}`` stands for the name that ``[outputs]`` gives to an output.  What holds it is sent once for each output,
  the positive rail's first, and answered by one value; what doesn't, is sent once and answered by two.
* ``{value}`` stands for the number to be set; ``{volts}`` and ``{amps}`` for an output's voltage and limit, for a
  supply that takes both in one message.
* What an instrument hasn't is left out or "".  `SupplyProfile.cautions` says what that costs.
"""

from __future__ import annotations

import importlib.resources
import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Any, Literal, Self, TypeVar

from pydantic import model_validator

from benchkit.errors import FileError
from benchkit.instruments.mistakes import checked, near, one_of, read_toml
from benchkit.instruments.profile_parts import (
    Format,
    LinkPart,
    NeededSeries,
    NumbersPart,
    Part,
    Series,
    Text,
    TimingPart,
    demand_ends,
    mistake,
)
from benchkit.instruments.profile_supply import SupplyProfile
from benchkit.instruments.replies import ReplyRules
from benchkit.measure.readings import FUNCTIONS

__all__ = [
    "MeterProfile",
    "SupplyProfile",
    "meter_profile",
    "profile_table",
    "shipped",
    "shipped_names",
    "supply_profile",
]

P = TypeVar("P", "MeterProfile", "SupplyProfile")

KINDS = ("meter", "supply")


class MeterProfile(Part):
    """A meter's dialect.

    ``[functions]`` holds a series for each function of `FUNCTIONS` that it has; ``[ranged]`` the same with ``{range}``
    in it, for a reading on a stated range.  With ``function_question`` the meter is asked which function it stands on
    before a reading is believed, and ``[function_answers]`` holds what it says for each.
    """

    format: Format
    kind: Literal["meter"]
    title: Text = ""
    link: LinkPart = LinkPart()
    numbers: NumbersPart = NumbersPart()
    timing: TimingPart = TimingPart()
    functions: Mapping[str, NeededSeries]
    ranged: Mapping[str, NeededSeries] = {}
    function_question: Series = ()
    function_answers: Mapping[str, Text] = {}

    @model_validator(mode="after")
    def _consistent(self) -> Self:
        tables: dict[str, Mapping[str, Any]] = {
            "functions": self.functions,
            "ranged": self.ranged,
            "function_answers": self.function_answers,
            "timing.cycles": self.timing.cycles,
            "timing.settling": self.timing.settling,
        }
        for name, table in tables.items():
            for function in table:
                if function not in FUNCTIONS:
                    words = tuple(FUNCTIONS)
                    raise mistake(f"{name}.{function}", function, one_of(words, near(function, words)))
        for function, messages in self.ranged.items():
            if not any("{range}" in message for message in messages):
                raise mistake(f"ranged.{function}", messages[-1], "{range} in it")
        for function, messages in self.functions.items():
            if any("{range}" in message for message in messages):
                raise mistake(f"functions.{function}", messages[-1], "no {range}; that belongs into [ranged]")
        demand_ends(self.link, self.numbers)
        if self.function_question:
            for function in (*self.functions, *self.ranged):
                if function not in self.function_answers:
                    raise mistake(f"function_answers.{function}", "nothing", "the answer to function_question")
        return self

    def rules(self, function: str) -> ReplyRules:
        """How a reading of `function` is written."""
        return self.numbers.rules(FUNCTIONS[function])

    def expected_s(self, function: str, range: float | None = None, samples: int = 1) -> float:
        """Return how long such a reading is likely to take, s: for a countdown, not a promise."""
        return self.timing.expected_s(function, ranged=range is not None, samples=samples)


def shipped(name: str) -> dict[str, Any] | None:
    """Return a shipped profile as a plain table, or None if there is none of that name."""
    folder = importlib.resources.files("benchkit.instruments") / "profiles"
    if not name.replace("-", "").isalnum():
        return None
    file = folder / f"{name}.toml"
    return tomllib.loads(file.read_text("utf-8")) if file.is_file() else None


def shipped_names() -> tuple[str, ...]:
    """Return the names of the shipped profiles."""
    folder = importlib.resources.files("benchkit.instruments") / "profiles"
    return tuple(sorted(file.name[:-5] for file in folder.iterdir() if file.name.endswith(".toml")))


def profile_table(name: str, folder: Path) -> dict[str, Any]:
    """Return the table of a profile that a bench file names: a shipped one, or a file relative to `folder`.

    Raises
    ------
    FileError
        If there is none, or it is no TOML.
    """
    found = shipped(name)
    if found is not None:
        return found
    path = folder / name
    try:
        text = path.read_text("utf-8")
    except (OSError, UnicodeDecodeError, ValueError) as error:
        reason = error.strerror if isinstance(error, OSError) else "it is no UTF-8 text"
        raise FileError(
            str(path),
            "",
            f"this profile can't be read ({reason})",
            one_of(shipped_names(), near(name, shipped_names())) + ", or a file beside the bench file",
            "Correct the profile in the bench file",
        ) from None
    table = read_toml(text, str(path), "a profile")
    base = table.pop("based_on", None)
    if base is None:
        return table
    below = shipped(base) if isinstance(base, str) else None
    if below is None:
        names = shipped_names()
        raise FileError(str(path), "based_on", f"found {base!r}", one_of(names, near(str(base), names)))
    return _over(below, table)


def meter_profile(table: str | Mapping[str, Any], where: str = "the profile") -> MeterProfile:
    """Check a meter's profile: a table, or the name of a shipped one.

    Raises
    ------
    FileError
        With the dotted key, what was found and what was expected.
    """
    return _checked(MeterProfile, "meter", table, where)


def supply_profile(table: str | Mapping[str, Any], where: str = "the profile") -> SupplyProfile:
    """Check a supply's profile: a table, or the name of a shipped one.

    Raises
    ------
    FileError
        With the dotted key, what was found and what was expected.
    """
    return _checked(SupplyProfile, "supply", table, where)


def _checked(model: type[P], kind: str, table: str | Mapping[str, Any], where: str) -> P:
    if isinstance(table, str):
        found = shipped(table)
        if found is None:
            names = shipped_names()
            raise FileError(where, "", f"there is no profile {table!r}", one_of(names, near(table, names)))
        table = found
    other = table.get("kind")
    if other in KINDS and other != kind:
        raise FileError(
            where,
            "kind",
            f"this is the profile of a {other}",
            f"that of a {kind}",
            "Name another profile in the bench file",
        )
    return checked(model, table, where, "Correct the profile")


def _over(below: Mapping[str, Any], above: Mapping[str, Any]) -> dict[str, Any]:
    """Return `below` with what `above` says in its place, table by table."""
    merged = dict(below)
    for key, value in above.items():
        old = merged.get(key)
        merged[key] = _over(old, value) if isinstance(old, dict) and isinstance(value, dict) else value
    return merged
