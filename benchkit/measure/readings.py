"""One reading of one meter at one test point.

A reading is either a number or an overload, never both and never "not a number". Its fields are plain values, so that
it can stand in a journal as it is.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import asdict, dataclass
from typing import Any, Final

from benchkit.errors import EntryError
from benchkit.quantities import Overload, quoted, show

FUNCTIONS: Final[Mapping[str, str]] = {
    "dc volts": "V",
    "ac volts": "V",
    "dc current": "A",
    "ohms": "ohm",
    "ohms 4-wire": "ohm",
    "diode": "V",
    "temperature": "degC",
}
"""What a meter can be set to, and the unit that it then reads in."""


@dataclass(frozen=True, kw_only=True)
class Reading:
    """What a meter said.

    Parameters
    ----------
    point : str
        The test point, such as "emitter.upper.1".
    value : float or None
        In `unit`; None if, and only if, the meter was over its range.
    unit : str
        "V", "A", "ohm" or "degC", as the function has it.
    overload : bool
        Whether the meter was over its range.
    negative : bool
        For an overload: whether at the negative end.
    standard_uncertainty : float or None
        In `unit`; None where nothing is known about the meter, and such a reading can decide nothing by itself.
    own_uncertainty : float or None
        The part of it that is this reading's own (range, counts, scatter) and stays in a ratio of two readings of the
        same meter on the same range; None where the parts are not known, and then nothing cancels.
    meter : str
        The meter's name in the bench file, or "entered by hand", "stated".
    function : str
        One of `FUNCTIONS`.
    range : float or None
        Full scale of the range it was taken on, in `unit`; None when not known.
    samples : int
        How many readings the value is the mean of.

    Raises
    ------
    ValueError
        When the fields contradict each other: a mistake of the caller.
    """

    point: str
    value: float | None
    unit: str
    overload: bool = False
    negative: bool = False
    standard_uncertainty: float | None
    meter: str
    function: str
    range: float | None = None
    samples: int = 1
    own_uncertainty: float | None = None

    def __post_init__(self) -> None:
        if self.function not in FUNCTIONS:
            raise ValueError(f"{self.function!r} is no function of a meter; known are {', '.join(FUNCTIONS)}")
        if FUNCTIONS[self.function] != self.unit:
            raise ValueError(f"{self.function} reads in {FUNCTIONS[self.function]}, not {self.unit}")
        if (self.value is None) != self.overload:
            raise ValueError(f"{self.point}: a reading is a number or an overload, not both and not neither")
        if self.negative and not self.overload:
            raise ValueError(f"{self.point}: only an overload has an end")
        if self.value is not None and not math.isfinite(self.value):
            raise ValueError(f"{self.point}: {self.value} is no reading")
        for u in (self.standard_uncertainty, self.own_uncertainty):
            if u is not None and not (math.isfinite(u) and u >= 0):
                raise ValueError(f"{self.point}: {u} is no standard uncertainty")
        if self.range is not None and not (math.isfinite(self.range) and self.range > 0):
            raise ValueError(f"{self.point}: {self.range} is no range")
        if self.samples < 1:
            raise ValueError(f"{self.point}: {self.samples} samples make no reading")

    @property
    def measured(self) -> float | Overload:
        """The value, or the overload as a type of its own."""
        return Overload(positive=not self.negative) if self.value is None else self.value

    def as_dict(self) -> dict[str, Any]:
        """Give the fields as plain values, for a journal."""
        return asdict(self)

    @classmethod
    def from_dict(cls, fields: Mapping[str, Any]) -> Reading:
        """Make a reading from `as_dict`'s fields.

        Raises
        ------
        EntryError
            When fields are missing, unknown or contradict each other.
        """
        try:
            return cls(**fields)
        except (TypeError, ValueError) as error:
            raise EntryError(f"A reading can't be made of {quoted(dict(fields))}", "the fields of a reading") from error

    def __str__(self) -> str:
        return f"{self.point} {show(self.measured, self.unit, 5)}"
