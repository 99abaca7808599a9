"""Conditions: what a reading is taken under."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal, NoReturn

from benchkit.errors import EntryError
from benchkit.quantities import parse, show

TrimmerPosition = Literal["least", "most", "target", "unknown"] | float
NO_LIMIT_A = 1e3
"""Current limit (A) of a supply without one: far above what any stage draws."""


@dataclass(frozen=True, kw_only=True)
class Condition:
    """A powered condition.

    Parameters
    ----------
    positive_v, negative_v : float
        Set voltages of the rails (V); the negative one is negative.
    limit_a : float or None
        The supply's current limit per rail (A); None for no limit.
    trimmer : "least", "most", "target", "unknown" or a number 0..1
        Travel from the least-bias end; "target" sets each unit's own trimmer so that the emitter drop of pair 1 (half
        of what lies across both its resistors) is the target's.
    target_share : float
        With "target": share of the target drop that is set, such as 0.25 for a first step.
    when : "cold" or "warm"
        Every junction at the ambient temperature, or in thermal balance.
    ambient_c : float or None
        Ambient temperature (degC); None for the design's.
    fuse_ohm : float or None
        A resistor in each fuse's place (ohm), between supply and rail; None for none.

    Raises
    ------
    EntryError
        For numbers that can't be a condition.
    """

    positive_v: float
    negative_v: float
    limit_a: float | None = None
    trimmer: TrimmerPosition = "unknown"
    target_share: float = 1.0
    when: Literal["cold", "warm"] = "cold"
    ambient_c: float | None = None
    fuse_ohm: float | None = None

    def __post_init__(self) -> None:
        if not 0.0 <= self.positive_v <= 1000.0:
            _refuse("positive", show(self.positive_v, "V"), "0 V to 1 kV")
        if not -1000.0 <= self.negative_v <= 0.0:
            _refuse("negative", show(self.negative_v, "V"), "-1 kV to 0 V")
        if self.limit_a is not None and not 0.0 < self.limit_a < math.inf:
            _refuse("limit", show(self.limit_a, "A"), "a current above zero")
        _check_trimmer(self.trimmer)
        _require(
            0.0 < self.target_share <= 10.0, "target share", f"{self.target_share:g}", "a number above 0, at most 10"
        )
        _require(self.when in ("cold", "warm"), "when", f'"{self.when}"', '"cold" or "warm"')
        if self.ambient_c is not None:
            _require(-55.0 <= self.ambient_c <= 200.0, "ambient", show(self.ambient_c, "degC"), "-55 degC to 200 degC")
        if self.fuse_ohm is not None:
            _require(0.0 < self.fuse_ohm < 1e6, "fuse resistor", show(self.fuse_ohm, "ohm"), "a resistance above zero")


@dataclass(frozen=True, kw_only=True)
class Unpowered:
    """An unpowered reading: supplies disconnected, capacitors settled, a meter's test current at one point.

    Parameters
    ----------
    point : str
        An ``ohm.`` or ``diode.`` point.
    trimmer : "least", "most", "target", "unknown" or a number 0..1
        As for `Condition`; "target" is taken as "unknown", because nothing unpowered shows the target.
    """

    point: str
    trimmer: TrimmerPosition = "unknown"
    ambient_c: float | None = None

    def __post_init__(self) -> None:
        known = self.point.startswith(("ohm.", "diode."))
        _require(known, "point", f'"{self.point}"', "an unpowered test point (ohm. or diode.)")
        _check_trimmer(self.trimmer)


def parse_trimmer(text: str) -> TrimmerPosition:
    """Read a trimmer position: "least", "most", "target", "unknown", or a travel from 0 (least bias) to 1.

    Raises
    ------
    EntryError
    """
    word = text.strip().lower()
    for known in ("least", "most", "target", "unknown"):
        if word == known:
            return known
    try:
        position = parse(word, "%") / 100.0 if "%" in word else float(word)
    except (EntryError, ValueError):
        position = math.nan
    if not 0.0 <= position <= 1.0:
        raise EntryError(
            f'"{text}" is no trimmer position', "least, most, target, unknown, or a travel from 0 (least bias) to 1"
        )
    return position


def _check_trimmer(trimmer: object) -> None:
    good = (
        trimmer in ("least", "most", "target", "unknown")
        if isinstance(trimmer, str)
        else (isinstance(trimmer, (int, float)) and not isinstance(trimmer, bool) and 0.0 <= trimmer <= 1.0)
    )
    _require(good, "trimmer", f'"{trimmer}"', "least, most, target, unknown, or a travel from 0 (least bias) to 1")


def _require(good: bool, name: str, came: str, expected: str) -> None:
    if not good:
        _refuse(name, came, expected)


def _refuse(name: str, came: str, expected: str) -> NoReturn:
    raise EntryError(f"{name}: {came} came", expected)
