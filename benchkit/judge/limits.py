"""Limits: the lowest and the highest acceptable value of a reading, and where they come from."""

from __future__ import annotations

import math
from dataclasses import dataclass

from benchkit.quantities import show


@dataclass(frozen=True)
class Limits:
    """An interval that a value should lie in.

    Parameters
    ----------
    low, high : float or None
        In `unit`, both belonging to the interval; None where that side is open.
    nominal : float or None
        What a unit with every part at its nominal value reads; None where there is no such thing.
    unit : str
    source : str
        Where the limits come from, in words for the record: "the model", "stated in the procedure", a rule's name.

    Raises
    ------
    ValueError
        For limits that are not finite, or upside down.
    """

    low: float | None
    high: float | None
    nominal: float | None
    unit: str
    source: str

    def __post_init__(self) -> None:
        for figure in (self.low, self.high, self.nominal):
            if figure is not None and not math.isfinite(figure):
                raise ValueError(f"{figure} is no limit; an open side is None")
        if self.low is not None and self.high is not None and self.low > self.high:
            raise ValueError(f"limits upside down: {self.low} to {self.high}")

    @property
    def width(self) -> float:
        """Width of the interval in `unit`; infinite when a side is open."""
        return math.inf if self.low is None or self.high is None else self.high - self.low

    def hold(self, value: float) -> bool:
        """Whether a value lies inside, its uncertainty left aside."""
        return (self.low is None or value >= self.low) and (self.high is None or value <= self.high)

    def __str__(self) -> str:
        if self.low is None and self.high is None:
            return "no limits"
        if self.low is None:
            return f"at most {show(self.high, self.unit)}"
        if self.high is None:
            return f"at least {show(self.low, self.unit)}"
        return f"{show(self.low, self.unit)} to {show(self.high, self.unit)}"
