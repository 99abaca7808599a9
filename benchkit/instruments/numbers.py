"""Numbers that instruments send: the whole reply fits one pattern, or it is no number.

An overload comes as a number too large to be one (SCPI-1999 volume 1, 7.2.1.4 and 7.2.1.5: 9.9E37 for infinity,
9.91E37 for "not a number") or as a word; it becomes `Overload`, a type of its own, so that it can be neither plotted
nor compared by mistake.
"""

from __future__ import annotations

import math
import re
from collections.abc import Collection
from dataclasses import dataclass

from benchkit.errors import InstrumentError
from benchkit.quantities import Overload

_NUMBER = re.compile(
    r"(?P<number>[+-]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[eE][+-]?[0-9]{1,4})?)(?:[ ]*(?P<unit>[^\s0-9+.,-][^\s,]*))?"
)
_SHOWN_LENGTH = 60


@dataclass(frozen=True, kw_only=True)
class NumberRules:
    """How one instrument writes numbers.

    Parameters
    ----------
    overload_from : float
        At and above this magnitude a number means overload.
    overload_words : collection of str
        Replies that mean overload, in capitals; a leading minus makes it a negative one.
    units : collection of str
        Units that may follow a number; they are dropped, so that only those of the base unit belong here.
    """

    overload_from: float = 9.0e37
    overload_words: Collection[str] = ("OL", "OVLD", "OVERLOAD", "INF", "INFINITY", "NAN")
    units: Collection[str] = ()


def parse_number(text: str, rules: NumberRules) -> float | Overload:
    """Return what one reply says.

    Raises
    ------
    InstrumentError
        ``garbled`` if it isn't exactly one number or one of the overload words.
    """
    plain = text.strip(" \r")
    word = plain[1:] if plain[:1] in {"+", "-"} else plain
    if word.isascii() and word.upper() in rules.overload_words:
        return Overload(positive=not plain.startswith("-"))
    match = _NUMBER.fullmatch(plain)
    if match is None or (match["unit"] is not None and match["unit"] not in rules.units):
        raise garbled(text, "one number")
    value = float(match["number"])
    if abs(value) >= rules.overload_from or not math.isfinite(value):
        return Overload(positive=value > 0)
    return value


def parse_numbers(text: str, count: int, rules: NumberRules) -> tuple[float, ...]:
    """Return exactly `count` numbers separated by commas; an overload is none.

    Raises
    ------
    InstrumentError
        ``garbled`` otherwise.
    """
    parts = text.strip(" \r").split(",")
    if len(parts) != count:
        raise garbled(text, f"{count} numbers with commas between")
    values: list[float] = []
    for part in parts:
        value = parse_number(part, rules)
        if isinstance(value, Overload) or "\r" in part:
            raise garbled(text, f"{count} numbers, none of them beyond the range")
        values.append(value)
    return tuple(values)


def parse_switches(text: str, count: int) -> tuple[bool, ...]:
    """Return exactly `count` on/off states: ``1``/``0`` or ``ON``/``OFF``.

    Raises
    ------
    InstrumentError
        ``garbled`` otherwise.
    """
    known = {"1": True, "0": False, "ON": True, "OFF": False}
    parts = [part.strip(" ").upper() for part in text.strip(" \r").split(",")]
    if len(parts) != count or not text.isascii() or any(part not in known for part in parts):
        raise garbled(text, f"{count} output states, each 1 or 0")
    return tuple(known[part] for part in parts)


def parse_flags(text: str, count: int) -> tuple[int, ...]:
    """Return exactly `count` status registers (whole numbers from 0 to 65535).

    Raises
    ------
    InstrumentError
        ``garbled`` otherwise.
    """
    parts = [part.strip(" ") for part in text.strip(" \r").split(",")]
    if len(parts) != count or not all(re.fullmatch(r"\+?[0-9]{1,5}", part) for part in parts):
        raise garbled(text, f"{count} status registers")
    values = tuple(int(part) for part in parts)
    if any(value > 65535 for value in values):
        raise garbled(text, f"{count} status registers from 0 to 65535")
    return values


def garbled(text: str, expected: str) -> InstrumentError:
    """Return the error for a reply that makes no sense, quoted so that it can be shown."""
    return InstrumentError(
        "garbled",
        f"The reply was {visible(text)}",
        expected,
        "Check the profile and whether another program talks to this instrument",
        partial=text.encode("latin-1", "replace"),
    )


def visible(text: str | bytes) -> str:
    """Return a reply in quotes, shortened, with control characters and bytes above 0x7E escaped."""
    if isinstance(text, bytes):
        text = text.decode("latin-1")
    shown = ascii(text[:_SHOWN_LENGTH])
    return shown if len(text) <= _SHOWN_LENGTH else f"{shown} and {len(text) - _SHOWN_LENGTH} more"
