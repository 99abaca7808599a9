"""A second, strict reading of replies: character by character, and values by decimal arithmetic.

Written without regular expressions and without the link layer's parsers, from IEEE 488.2 (numeric response data NR1,
NR2 and NR3; from memory) and the project's own rules: blanks and a carriage return may stand around a reply,
blanks around each part between commas, and nothing else.
"""

from __future__ import annotations

from collections.abc import Collection, Sequence
from decimal import Decimal

DIGITS = "0123456789"
EDGES = " \r"
WORDS = ("OL", "OVLD", "OVERLOAD", "INF", "INFINITY", "NAN")
OVERLOAD_FROM = Decimal("9.0e37")

Reading = float | str
"""A number, or ``"overload"`` or ``"-overload"``."""


def number(text: str, units: Collection[str] = (), edges: str = EDGES) -> Reading | None:
    """Return what one reply says, or None if it says nothing for certain."""
    text = _trim(text, edges)
    sign = text[:1] if text[:1] in {"+", "-"} else ""
    rest = text[len(sign) :]
    if rest.isascii() and rest.upper() in WORDS:
        return "-overload" if sign == "-" else "overload"
    whole, rest = _digits(rest)
    fraction = ""
    point = rest[:1] == "."
    if point:
        fraction, rest = _digits(rest[1:])
    if not whole and not fraction:
        return None
    exponent = "0"
    if rest[:1] in {"e", "E"}:
        exponent_sign = rest[1:2] if rest[1:2] in {"+", "-"} else ""
        exponent, after = _digits(rest[1 + len(exponent_sign) :])
        if 1 <= len(exponent) <= 4:
            rest = after
            exponent = exponent_sign + exponent
        else:
            return None
    if rest:
        unit = rest.lstrip(" ")
        if unit not in units:
            return None
    value = Decimal(f"{sign}{whole or '0'}.{fraction or '0'}E{exponent}")
    if abs(value) >= OVERLOAD_FROM:
        return "-overload" if value < 0 else "overload"
    return float(value)


def numbers(text: str, count: int) -> tuple[float, ...] | None:
    """Return exactly `count` numbers, none beyond the range, or None."""
    parts = _trim(text, EDGES).split(",")
    read = [number(part, edges=" ") for part in parts]
    values = tuple(value for value in read if isinstance(value, float))
    return values if len(parts) == count == len(values) else None


def switches(text: str, count: int) -> tuple[bool, ...] | None:
    """Return exactly `count` states, or None."""
    known = {"1": True, "0": False}
    for word, state in (("ON", True), ("OFF", False)):
        for spelt in _cases(word):
            known[spelt] = state
    parts = [_trim(part, " ") for part in _trim(text, EDGES).split(",")]
    if len(parts) != count or any(part not in known for part in parts):
        return None
    return tuple(known[part] for part in parts)


def flags(text: str, count: int) -> tuple[int, ...] | None:
    """Return exactly `count` registers of 16 bits, or None."""
    parts = [_trim(part, " ") for part in _trim(text, EDGES).split(",")]
    values = []
    for part in parts:
        digits = part[1:] if part[:1] == "+" else part
        if not 1 <= len(digits) <= 5 or any(character not in DIGITS for character in digits):
            return None
        value = 0
        for character in digits:
            value = 10 * value + DIGITS.index(character)
        if value > 65535:
            return None
        values.append(value)
    return tuple(values) if len(values) == count else None


def _trim(text: str, edges: str) -> str:
    begin, end = 0, len(text)
    while begin < end and text[begin] in edges:
        begin += 1
    while end > begin and text[end - 1] in edges:
        end -= 1
    return text[begin:end]


def _digits(text: str) -> tuple[str, str]:
    length = 0
    while length < len(text) and text[length] in DIGITS:
        length += 1
    return text[:length], text[length:]


def _cases(word: str) -> Sequence[str]:
    spelt = [""]
    for letter in word:
        spelt = [done + case for done in spelt for case in (letter.lower(), letter.upper())]
    return spelt
