"""The units, how each is written, and what is believable in it; overload and tolerance."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from typing import Any, NamedTuple

SCPI_INFINITY = 9.9e37
"""What an instrument sends for +infinity, its overload (SCPI-1999 volume 1, 7.2.1.4)."""
SCPI_NOT_A_NUMBER = 9.91e37
"""What an instrument sends for "not a number" (SCPI-1999 volume 1, 7.2.1.5)."""


@dataclass(frozen=True)
class Overload:
    """A meter's overload: beyond its range, and no number.

    Parameters
    ----------
    positive : bool
        Whether the meter went over at its positive end (the only end that ohms and diode ranges have).
    """

    positive: bool = True


class Tolerance(NamedTuple):
    """A marked value and how far a part may be from it.

    Attributes
    ----------
    value : float
        In the base unit.
    fraction : float
        Half-width relative to the value, 0.05 for "5 %"; 0.0 where nothing is marked.
    """

    value: float
    fraction: float


@dataclass(frozen=True)
class Unit:
    """How one unit is written, and what is believable in it."""

    spellings: tuple[str, ...]
    prefixes: str
    bare_prefixes: str
    low: float
    high: float
    in_words: str
    rkm: bool = False


UNITS: dict[str, Unit] = {
    "V": Unit(("V", "volt", "volts", "v"), "numk", "um", -1e6, 1e6, "a voltage"),
    "A": Unit(("A", "amp", "amps", "ampere", "amperes", "a"), "pnumk", "um", -1e6, 1e6, "a current"),
    "ohm": Unit(
        ("ohm", "Ohm", "OHM", "ohms", "Ohms", "OHMS", "Ω", "R", "r"),
        "numkMGT",
        "kMGT",
        -1e15,
        1e15,
        "a resistance",
        rkm=True,
    ),
    "F": Unit(("F", "farad", "farads"), "pnum", "pnum", -1e6, 1e6, "a capacitance", rkm=True),
    "degC": Unit(("degC", "°C", "deg C", "degc", "C", "celsius", "Celsius"), "", "", -273.15, 1e4, "a temperature"),
    "K": Unit(("K", "kelvin"), "m", "", 0.0, 1e4, "a temperature in kelvin"),
    "K/W": Unit(("K/W", "degC/W", "°C/W", "C/W"), "m", "", -1e9, 1e9, "a thermal resistance"),
    "J/K": Unit(("J/K", "J/degC", "J/°C", "Ws/K"), "mk", "", -1e9, 1e9, "a heat capacity"),
    "s": Unit(("s", "sec", "second", "seconds"), "pnum", "", -1e9, 1e9, "a time"),
    "W": Unit(("W", "watt", "watts"), "numk", "", -1e9, 1e9, "a power"),
    "Hz": Unit(("Hz", "hz", "HZ"), "mkMG", "", -1e12, 1e12, "a frequency"),
    "%": Unit(("%", "percent", "per cent"), "", "", -1e6, 1e6, "a percentage"),
}

EXAMPLES = {
    "V": '"12.3 mV" or "0.0123 V"',
    "A": '"50 mA" or "0.05 A"',
    "ohm": '"4k7", "0R22" or "4.7 kohm"',
    "F": '"100 uF" or "4n7"',
    "degC": '"25 degC"',
    "K": '"40 K"',
    "K/W": '"1.2 K/W"',
    "J/K": '"400 J/K"',
    "s": '"3 s"',
    "W": '"3 W"',
    "Hz": '"1 kHz"',
    "%": '"5 %"',
}

PLAIN = frozenset({"degC", "K", "K/W", "J/K", "s", "%"})


def unit_called(unit: str) -> Unit:
    """Look up a unit of ours; a ValueError for any other is the caller's mistake."""
    try:
        return UNITS[unit]
    except KeyError:
        raise ValueError(f"{unit!r} is no unit of ours; known are {', '.join(UNITS)}") from None


def wanted(unit: str) -> str:
    """Say in words what is wanted in a unit, with examples, for a refusal."""
    return f"{UNITS[unit].in_words}, such as {EXAMPLES[unit]}"


@cache
def quantity_type(prefixes: str) -> Any:
    """Make a QuantiPhy type of our own, so that preferences set by anybody else don't reach us."""
    from quantiphy import Quantity

    kind = type("BenchQuantity", (Quantity,), {})
    kind.set_prefs(  # type: ignore[attr-defined]
        output_sf=prefixes,
        input_sf="TGMkmunp",
        map_sf={},
        spacer=" ",
        number_fmt=None,
        show_label=False,
        strip_radix=True,
        known_units=[],
        unity_sf="",
        comma=",",
        radix=".",
        minus="-",
        plus="+",
        form="si",
        inf="inf",
        nan="nan",
        keep_components=False,
        ignore_sf=False,
    )
    return kind
