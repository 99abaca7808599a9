"""Reading and showing quantities: "12.3 mV", "4k7", "0R22", "8 mA 5 %", "OL".

Rules of the entry line, in the order in which they are applied:

1. At most 60 printable characters; typographic spaces, the minus sign (U+2212), both micro signs and both ohm signs
   are taken as what they look like. Only the digits 0-9 are digits.
2. A comma is refused: "1,234" is either one and a bit or more than a thousand, and the difference burns parts.
3. A number, then at most one SI prefix and at most one unit. A bare number is in the base unit. The unit, when there
   is one, must be the one that was asked for.
4. ``m`` is milli and ``M`` is mega, always. Mega is taken for ohms (and Hz) only: "12 MV" is a slip of the shift key,
   and is refused rather than believed. A bare ``m`` after ohms ("100m") is refused for the same reason.
5. RKM codes (IEC 60062: the letter stands where the point would be) are taken for ohms and farads only: "4k7" is
   4700 ohm, and "4k7" volts is refused.
6. Not-a-number, infinities and values beyond anything on a bench are refused. A meter's overload is no number either:
   `parse_reading` gives it a type of its own.

The grammar is held here; what the parts of a quantity are worth is left to QuantiPhy and rkm_codes, which are imported
at first use because a command's ``--help`` doesn't need them.
"""

from __future__ import annotations

from benchkit.quantities.parsing import last_digit, parse, parse_reading, parse_tolerance
from benchkit.quantities.showing import printable, quoted, show, show_within
from benchkit.quantities.units import SCPI_INFINITY, SCPI_NOT_A_NUMBER, Overload, Tolerance

__all__ = [
    "SCPI_INFINITY",
    "SCPI_NOT_A_NUMBER",
    "Overload",
    "Tolerance",
    "last_digit",
    "parse",
    "parse_reading",
    "parse_tolerance",
    "printable",
    "quoted",
    "show",
    "show_within",
]
