"""Writing quantities, and quoting what came, for a person."""

from __future__ import annotations

import math
import re

from benchkit.quantities.units import PLAIN, UNITS, Overload, quantity_type

_FIXED = re.compile(r"[0-9]+(\.[0-9]+)?")


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


def show_within(value: float | Overload | None, unit: str, uncertainty: float | None, digits: int = 4) -> str:
    """Write a quantity without digits that its uncertainty leaves no meaning.

    Parameters
    ----------
    value, unit
        As for `show`.
    uncertainty : float or None
        In `unit`; the second significant digit of it is the last place that is shown.  None, zero and what is not
        finite leave the value as `show` writes it.
    digits : int
        Significant digits at most.

    Returns
    -------
    str
        Such as "12.3 mV"; a value below its uncertainty is written to the same prefix and place as that.

    Examples
    --------
    >>> show_within(610e-9, "V", 4e-6)
    '0.6 uV'
    """
    size = None if isinstance(value, Overload) or value is None or not math.isfinite(value) else abs(value)
    if size is None or uncertainty is None or not math.isfinite(uncertainty) or uncertainty <= 0.0:
        return show(value, unit, digits)
    assert isinstance(value, (int, float))
    if size >= uncertainty:
        places = math.floor(math.log10(size)) - math.floor(math.log10(uncertainty))
        return show(value, unit, min(digits, places + 2))
    number, _, rest = show(uncertainty, unit, 2).partition(" ")
    if not _FIXED.fullmatch(number):
        return show(value, unit, 1)
    place = 10.0 ** (math.floor(math.log10(uncertainty)) - 1)
    per_prefix = 10.0 ** round(math.log10(float(number) / uncertainty))
    text = f"{round(value / place) * place * per_prefix:.{len(number.partition('.')[2])}f}"
    return f"{text.lstrip('-') if float(text) == 0.0 else text} {rest}"


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
