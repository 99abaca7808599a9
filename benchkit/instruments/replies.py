"""One value out of one reply: what stands around the number, its unit, and the words for on, off and overload.

Rules
-----
* The whole reply has to fit.  A profile may say what stands around the number: ``reply = "{any},{value}"``.
  ``{value}`` is the number with its unit, ``{any}`` anything without a comma, semicolon or blank; the rest is literal.
* A unit that is known is worth a quantity (``"mV" = "1 mV"``), and counts only where a reading is in that quantity: a
  meter that answers a question for volts with ohms stands on the wrong function, and that reply is no reading.
* Where nothing but silence ends a reply, a number has to show that it is whole: by its unit, or by the count of its
  digits.
* The threshold for overload counts for the number as it came, before its unit.
"""

from __future__ import annotations

import math
import re
from collections.abc import Collection, Mapping
from dataclasses import dataclass, field

from benchkit.errors import InstrumentError
from benchkit.instruments.numbers import NumberRules, garbled, parse_flags, parse_number
from benchkit.quantities import Overload

VALUE, ANY = "{value}", "{any}"


@dataclass(frozen=True, kw_only=True)
class ReplyRules:
    """How one instrument writes a value in one unit.

    Parameters
    ----------
    numbers : NumberRules
        Overload and bare numbers.
    unit : str
        The unit that is wanted, for messages.
    factors : mapping of str to float
        Each unit that may follow, and what the number is multiplied by.
    form : str
        What stands around the number; ``{value}`` alone is nothing.
    unit_needed : bool
        A number without its unit is none.
    digits_after_point : int or None
        A number with another count of digits after its point is none: it was cut short.
    overload_values : collection of float
        Numbers that mean overload although they are small.
    """

    numbers: NumberRules
    unit: str
    factors: Mapping[str, float] = field(default_factory=dict)
    form: str = VALUE
    unit_needed: bool = False
    digits_after_point: int | None = None
    overload_values: Collection[float] = ()

    def read(self, text: str) -> float | Overload:
        """Return what one reply says.

        Raises
        ------
        InstrumentError
            ``garbled`` if it doesn't fit as a whole.
        """
        wanted = f"one number in {self.unit}"
        plain = text.strip(" \r")
        if self.form != VALUE:
            match = form_pattern(self.form).fullmatch(plain)
            if match is None:
                raise garbled(text, f"{wanted}, in the form {self.form}")
            plain = match["value"].strip(" ")
        factor = 0.0 if self.unit_needed else 1.0
        for name in sorted(self.factors, key=len, reverse=True):
            if plain.endswith(name) and plain != name:
                plain, factor = plain[: -len(name)].rstrip(" "), self.factors[name]
                break
        try:
            value = parse_number(plain, self.numbers)
        except InstrumentError:
            raise garbled(text, wanted) from None
        if isinstance(value, Overload):
            return value
        digits = re.match(r"[+-]?[0-9]*\.?([0-9]*)", plain)
        if self.digits_after_point is not None and (digits is None or len(digits[1]) != self.digits_after_point):
            raise garbled(text, f"{wanted} with {self.digits_after_point} digits after its point")
        if factor == 0.0:
            raise garbled(text, f"{wanted} followed by its unit: {', '.join(self.factors)}")
        if any(math.isclose(abs(value), one, rel_tol=1e-9) for one in self.overload_values):
            return Overload(positive=value > 0)
        value *= factor
        if not math.isfinite(value):
            raise garbled(text, wanted)
        return value

    def number(self, text: str) -> float:
        """Return what one reply says; an overload is none.

        Raises
        ------
        InstrumentError
            ``garbled`` if it is no number.
        """
        value = self.read(text)
        if isinstance(value, Overload):
            raise garbled(text, f"one number in {self.unit}, not beyond the range")
        return value


def form_pattern(form: str) -> re.Pattern[str]:
    """Return the pattern of a reply's form: literal but for ``{value}`` and ``{any}``."""
    parts = re.split(r"(\{value\}|\{any\})", form)
    known = {VALUE: r"(?P<value>[^,;]+?)", ANY: r"[^,; ]*"}
    return re.compile("".join(known.get(part, re.escape(part)) for part in parts))


@dataclass(frozen=True, kw_only=True)
class WordRules:
    """The words of an answer with two meanings: on or off, in its limit or not, tripped or not.

    Parameters
    ----------
    yes, no : tuple of str
        In capitals.
    bits : int
        Above zero the answer is a status register instead, and any of these bits means yes.
    what : str
        What was asked for, for messages.
    """

    yes: tuple[str, ...] = ("1", "ON")
    no: tuple[str, ...] = ("0", "OFF")
    bits: int = 0
    what: str = "an output state"

    def read(self, text: str) -> bool:
        """Return what one answer says.

        Raises
        ------
        InstrumentError
            ``garbled`` if it is none of the words.
        """
        if self.bits:
            return bool(parse_flags(text, 1)[0] & self.bits)
        word = text.strip(" \r").strip('"').upper()
        if word in self.yes:
            return True
        if word in self.no:
            return False
        raise garbled(text, f"{self.what}: {' or '.join((*self.yes, *self.no))}")
