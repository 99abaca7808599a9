"""Reading quantities as a person writes them; the rules stand at the top of the package."""

from __future__ import annotations

import math
import re

from benchkit.errors import EntryError
from benchkit.quantities.showing import quoted
from benchkit.quantities.units import (
    SCPI_INFINITY,
    SCPI_NOT_A_NUMBER,
    UNITS,
    Overload,
    Tolerance,
    Unit,
    quantity_type,
    unit_called,
    wanted,
)

LONGEST_ENTRY = 60

_NUMBER = re.compile(r"([+-]?)((?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[eE][+-]?[0-9]{1,4})?) ?(.*)", re.DOTALL)
_RKM = re.compile(r"([+-]?)([0-9]*)([RrLkKMGT]|[munp])([0-9]*)")
_RKM_OHM = frozenset("RrLkKMGT")
_RKM_FARAD = frozenset("munpF")
_OVERLOAD = re.compile(r"([+-]?) ?(?:O\.?L\.?|0\.?L|OVLD|OVER ?LOAD|OVER ?RANGE|OVER)", re.IGNORECASE)
_TOLERANCE_TAIL = re.compile(r"(.*?) ?(?:±|\+/-|\+-)? ?([+-]?[^ ±]*?) ?%", re.DOTALL)
_TOLERANCE_LETTERS = {
    "B": "0.1",
    "C": "0.25",
    "D": "0.5",
    "F": "1",
    "G": "2",
    "J": "5",
    "K": "10",
    "M": "20",
}
_LOOKALIKES = {
    "\N{MINUS SIGN}": "-",
    "\N{MICRO SIGN}": "u",
    "\N{GREEK SMALL LETTER MU}": "u",
    "\N{OHM SIGN}": "Ω",
    "\N{DEGREE CELSIUS}": "°C",
    "\N{NO-BREAK SPACE}": " ",
    "\N{NARROW NO-BREAK SPACE}": " ",
    "\N{THIN SPACE}": " ",
    "\t": " ",
}


def parse(text: str, unit: str) -> float:
    """Read a quantity as a person writes it.

    Parameters
    ----------
    text : str
        Such as "12.3 mV", "15V", "-35 V", "4k7", "0R22", "1 kohm", "1e-3".
    unit : str
        The unit that is wanted: "V", "A", "ohm", "F", "degC", "K", "K/W", "J/K", "s", "W", "Hz" or "%".

    Returns
    -------
    float
        In `unit` ("5 %" as "%" is 5.0); always finite.

    Raises
    ------
    EntryError
        For anything that is not exactly one quantity in that unit.
    ValueError
        For a `unit` that is none of ours: a mistake of the caller.

    Notes
    -----
    RKM codes: IEC 60062:2016. The rules stand at the top of the package.
    """
    spec = unit_called(unit)
    plain = _tidy(text, unit)
    if "," in plain:
        raise EntryError(
            f"{quoted(text)} holds a comma, which can mean a decimal point or thousands",
            wanted(unit),
            "Write the number with a point and without separators",
        )
    if spec.rkm:
        code = _rkm(_without_unit(plain, spec), unit)
        if code is not None:
            return _believable(code, text, unit)
    match = _NUMBER.fullmatch(plain)
    if match is None:
        raise _no_quantity(text, plain, unit)
    sign, number, suffix = match.groups()
    return _believable(_scaled(sign + number, _prefix(suffix, text, unit)), text, unit)


def parse_reading(text: str, unit: str) -> float | Overload:
    """Read what a meter shows: a quantity, or its overload.

    Parameters
    ----------
    text : str
        As for `parse`, or "OL", "O.L", "0L", "-OL", "overload", "9.9E37" (an instrument's infinity).
    unit : str
        As for `parse`.

    Returns
    -------
    float or Overload
        The value in `unit`, or the overload with its sign.

    Raises
    ------
    EntryError
        As for `parse`; also for an instrument's "not a number".

    Notes
    -----
    Infinity 9.9E37 and not-a-number 9.91E37: SCPI-1999 volume 1, 7.2.1.
    """
    unit_called(unit)
    plain = _tidy(text, unit)
    match = _OVERLOAD.fullmatch(plain)
    if match is not None:
        return Overload(positive=match.group(1) != "-")
    number = _NUMBER.fullmatch(plain)
    if number is not None and not number.group(3):
        value = float(number.group(1) + number.group(2))
        if abs(value) == SCPI_INFINITY:
            return Overload(positive=value > 0)
        if abs(value) == SCPI_NOT_A_NUMBER:
            raise EntryError(
                f"{quoted(text)} is an instrument's way of saying that it has no number",
                wanted(unit),
                "Take the reading again",
            )
    return parse(text, unit)


def last_digit(text: str, unit: str) -> float:
    """Worth of the last digit of a quantity as it was written: what its meter resolved at best.

    Parameters
    ----------
    text, unit : str
        As for `parse`.

    Returns
    -------
    float
        In `unit`: 1e-5 for "12.34 mV", 100.0 for "4k7".

    Raises
    ------
    EntryError
        As for `parse`.
    """
    parse(text, unit)
    plain = _tidy(text, unit)
    # Everything but the last digit of the mantissa becomes nought, and that one becomes one.
    exponent = re.search(r"(?<=[0-9.])[eE](?=[+-]?[0-9])", plain)
    mantissa, rest = (plain, "") if exponent is None else (plain[: exponent.start()], plain[exponent.start() :])
    zeros = re.sub(r"[0-9]", "0", mantissa)
    at = zeros.rindex("0")
    return abs(parse(f"{zeros[:at]}1{zeros[at + 1 :]}{rest}".lstrip("+-"), unit))


def parse_tolerance(text: str, unit: str) -> Tolerance:
    """Read a marked value with its tolerance.

    Parameters
    ----------
    text : str
        Such as "1 kohm 1 %", "8 mA 5 %", "0R22 ±1 %", "4k7J"; without a tolerance the value is exact.
    unit : str
        As for `parse`, without "%".

    Returns
    -------
    Tolerance
        The value in `unit` and the tolerance as a fraction.

    Raises
    ------
    EntryError
        As for `parse`; also for a tolerance that is negative, or 100 % and more.

    Notes
    -----
    A letter after an RKM code of a resistor is its tolerance (IEC 60062: F 1 %, G 2 %, J 5 %, K 10 %, M 20 %,
    from memory).
    """
    spec = unit_called(unit)
    if unit == "%":
        raise ValueError("a percentage carries no tolerance in per cent")
    plain = _tidy(text, unit)
    value_text, percent_text = plain, "0"
    tail = _TOLERANCE_TAIL.fullmatch(plain)
    if tail is not None:
        value_text, percent_text = tail.groups()
    elif spec.rkm and unit == "ohm" and plain[-1:] in _TOLERANCE_LETTERS and _is_rkm(plain[:-1], unit):
        value_text, percent_text = plain[:-1], _TOLERANCE_LETTERS[plain[-1]]
    if not value_text or not percent_text:
        raise EntryError(f"{quoted(text)} is not a value with a tolerance", f'such as "{_example_value(unit)} 5 %"')
    value = parse(value_text, unit)
    percent = parse(percent_text, "%")
    if not 0 <= percent < 100:
        raise EntryError(
            f"{quoted(text)} has a tolerance of {percent:g} %", "a tolerance from 0 % to less than 100 %, either way"
        )
    return Tolerance(value, percent / 100.0)


def _example_value(unit: str) -> str:
    return {"ohm": "1 kohm", "A": "8 mA", "V": "10 V", "F": "10 uF"}.get(unit, f"10 {unit}")


def _tidy(text: object, unit: str) -> str:
    """Normalise the look-alikes; refuse what is too long, empty or not printable."""
    if not isinstance(text, str):
        raise EntryError(f"{quoted(text)} came instead of text", wanted(unit))
    if len(text) > LONGEST_ENTRY:
        raise EntryError(f"{quoted(text)} is {len(text)} characters long", wanted(unit))
    plain = "".join(_LOOKALIKES.get(character, character) for character in text.strip(" \t\r\n"))
    if not plain.isprintable():
        raise EntryError(f"{quoted(text)} holds a character that can't be printed", wanted(unit))
    plain = re.sub(" {2,}", " ", plain).strip()
    if not plain:
        raise EntryError("Nothing was entered", wanted(unit))
    return plain


def _no_quantity(text: str, plain: str, unit: str) -> EntryError:
    """Say why a text without a leading number is refused, in the words that help most."""
    if re.fullmatch(r"[+-]?(?:nan|inf|infinity).*", plain, re.IGNORECASE):
        return EntryError(f"{quoted(text)} is not a finite number", wanted(unit))
    if _OVERLOAD.fullmatch(plain):
        return EntryError(f"{quoted(text)} is an overload, not a number", wanted(unit))
    if any(character.isdigit() and character not in "0123456789" for character in plain):
        return EntryError(f"{quoted(text)} holds digits other than 0 to 9", wanted(unit))
    return EntryError(f"{quoted(text)} is not a quantity", wanted(unit))


def _prefix(suffix: str, text: str, unit: str) -> str:
    """Take apart what stands after the number; the SI prefix, or "" for none."""
    spec = UNITS[unit]
    if not suffix or suffix in spec.spellings:
        return ""
    for spelling in spec.spellings:
        if suffix.endswith(spelling):
            letters = _canonical_prefix(suffix[: -len(spelling)].rstrip(), unit)
            if letters and letters in spec.prefixes:
                return letters
            if letters == "M":
                raise EntryError(
                    f"{quoted(text)} says mega", wanted(unit), 'Write a small m for milli, as in "12.3 mV"'
                )
    letters = _canonical_prefix(suffix, unit)
    if letters and letters in spec.bare_prefixes:
        return letters
    if unit == "ohm" and letters == "m":
        raise EntryError(
            f"{quoted(text)} could be milliohms or megohms",
            wanted(unit),
            'Write the unit too: "100 mohm" is 0.1 ohm, "100 Mohm" a hundred million',
        )
    for other, other_spec in UNITS.items():
        if other != unit and _fits(suffix, other_spec, other):
            raise EntryError(f"{quoted(text)} is {other_spec.in_words}", wanted(unit))
    if unit != "ohm" and re.search(r"[0-9][RrkKMGT][0-9]", text):
        raise EntryError(
            f"{quoted(text)} is written like the code on a resistor",
            f"{wanted(unit)}; such codes are for resistors and capacitors only",
        )
    raise EntryError(f"{quoted(text)} has {quoted(suffix)} where a unit belongs", wanted(unit))


def _fits(suffix: str, spec: Unit, unit: str) -> bool:
    return any(
        suffix == spelling
        or (suffix.endswith(spelling) and _canonical_prefix(suffix[: -len(spelling)], unit) in set(spec.prefixes))
        for spelling in spec.spellings
    )


def _canonical_prefix(letters: str, unit: str) -> str:
    if unit == "ohm":
        if letters == "K":
            return "k"
        if letters.lower() == "meg":
            return "M"
    return letters if len(letters) == 1 else ""


def _rkm(plain: str, unit: str) -> float | None:
    """Value of an RKM code, or None when the text is none (a digit must stand after the letter)."""
    if not _is_rkm(plain, unit):
        return None
    from rkm_codes import rkm_codes

    sign, whole, letter, decimals = _RKM.fullmatch(plain).groups()  # type: ignore[union-attr]
    if not decimals:
        return None
    # The map of IEC 60062 is handed over letter by letter: the package keeps its choice of map in a global.
    prefix, _ = rkm_codes.IEC60062_MAPS[letter]
    return _scaled(f"{sign}{whole or '0'}.{decimals}", prefix)


def _without_unit(plain: str, spec: Unit) -> str:
    """Take the unit off "4k7 ohm" (but leave the R of "47R" alone: there it is the code)."""
    for spelling in sorted(spec.spellings, key=len, reverse=True):
        if plain.endswith(spelling if len(spelling) > 1 or not spelling.isascii() else f" {spelling}"):
            return plain.removesuffix(spelling).rstrip()
    return plain


def _is_rkm(plain: str, unit: str) -> bool:
    match = _RKM.fullmatch(plain)
    if match is None or not (match.group(2) or match.group(4)):
        return False
    return match.group(3) in (_RKM_OHM if unit == "ohm" else _RKM_FARAD)


def _scaled(number: str, prefix: str) -> float:
    """Give the number with its SI prefix, rounded once."""
    mantissa, _, exponent = number.lower().partition("e")
    if not exponent:
        return float(quantity_type("")(f"{mantissa}{prefix}", ""))
    one = float(quantity_type("")(f"1{prefix}", ""))
    return float(f"{mantissa}e{int(exponent) + round(math.log10(one))}")


def _believable(value: float, text: str, unit: str) -> float:
    spec = UNITS[unit]
    if not math.isfinite(value):
        raise EntryError(f"{quoted(text)} is not a finite number", wanted(unit))
    if not spec.low <= value <= spec.high:
        raise EntryError(
            f"{quoted(text)} is beyond anything on this bench",
            f"{spec.in_words} between {spec.low:g} and {spec.high:g} {unit}",
        )
    return value
