"""Writing quantities, and quoting what came, for a person."""

from __future__ import annotations

import math

from benchkit.quantities.units import PLAIN, UNITS, Overload, quantity_type


def show(value: float | Overload | None, unit: str, digits: int = 4) -> str:
    """Write a quantity for a person.

    Parameters
    ----------
    value : float, Overload or None
        In `unit`. None, and what is not finite, is "no number".
    unit : str
        As for `parse`; another unit is shown as it is.
    digits : int
        Significant digits, at least 1.

    Returns
    -------
    str
        Such as "12.30 mV". Ohms get no milli ("0.2200 ohm"), so that nobody takes it for mega; temperatures, times,
        percentages and thermal figures get no prefix at all.
    """
    if isinstance(value, Overload):
        return "overload" if value.positive else "overload, negative"
    if value is None or not math.isfinite(value):
        return "no number"
    digits = max(1, digits)
    if unit in PLAIN or (unit == "ohm" and 1e-4 <= abs(float(f"{value:.{digits - 1}e}")) < 1.0) or value == 0:
        return f"{_fixed(value, digits)} {unit}"
    spec = UNITS.get(unit)
    shown = quantity_type("".join(p for p in spec.prefixes if unit != "ohm" or p != "m") if spec else "")
    return str(shown(value, unit).render(prec=digits - 1, strip_zeros=False))


def quoted(text: object, longest: int = 40) -> str:
    """Quote what came, fit for one line of a message: control characters escaped, the middle of a long text left out.

    Parameters
    ----------
    text : object
        What came; a string is quoted, anything else is named by its type and value.
    longest : int
        Characters that are kept.

    Returns
    -------
    str
        Printable, without line breaks.
    """
    if not isinstance(text, str):
        return f"{type(text).__name__} {quoted(repr(text), longest)}"
    safe = printable(text[: longest + 1])
    return f'"{safe}"' if len(text) <= longest else f'"{safe[:longest]}…"'


def printable(text: str) -> str:
    """Escape what can't be printed: control characters, line breaks, marks of direction.

    Parameters
    ----------
    text : str
        Any text.
    """
    return "".join(
        character if character.isprintable() else character.encode("unicode_escape").decode("ascii")
        for character in text
    )


def _fixed(value: float, digits: int) -> str:
    """Fixed-point text with `digits` significant digits, exponents only far from one."""
    if value == 0:
        return f"{0.0:.{digits - 1}f}"
    exponent = int(f"{value:.{digits - 1}e}".partition("e")[2])
    if not -6 <= exponent <= 12:
        return f"{value:.{digits - 1}e}"
    return f"{value:.{max(0, digits - 1 - exponent)}f}"
