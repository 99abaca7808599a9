"""How well a meter reads: its specification, row by row, and the standard uncertainty that follows.

A specification ±(a % of reading + b % of range + n counts) is the half-width of a rectangular distribution, so its
standard uncertainty is the half-width divided by √3 (JCGM 100:2008, 4.3.7). The part that scales with the reading (the
gain) and the rest (range and counts) are kept apart, because in a ratio of two readings of one meter on one range the
first is common to both and the second is not.

A range is chosen as an autoranging meter does: the smallest whose full scale holds the reading.
"""

from __future__ import annotations

import difflib
import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from types import MappingProxyType
from typing import Any, Final

from benchkit.errors import EntryError
from benchkit.measure.readings import FUNCTIONS
from benchkit.quantities import parse, quoted, show


@dataclass(frozen=True)
class AccuracyRow:
    """One line of a meter's specification.

    Parameters
    ----------
    full_scale : float
        The largest reading on this range, in the function's unit.
    percent_of_reading, percent_of_range : float
        The specification's two parts, in per cent; the second is of `full_scale`.
    counts : float
        Steps of the last digit.
    resolution : float
        Size of a step, in the function's unit.
    floor : float
        A constant part in the function's unit, such as 0.2 ohm for the leads of a 2-wire measurement.
    """

    full_scale: float
    percent_of_reading: float
    percent_of_range: float = 0.0
    counts: float = 0.0
    resolution: float = 0.0
    floor: float = 0.0

    def __post_init__(self) -> None:
        figures = (self.percent_of_reading, self.percent_of_range, self.counts, self.resolution, self.floor)
        if not (math.isfinite(self.full_scale) and self.full_scale > 0):
            raise ValueError(f"{self.full_scale} is no full scale")
        if not all(math.isfinite(figure) and figure >= 0 for figure in figures):
            raise ValueError(f"an accuracy row holds a figure that is negative or not finite: {figures}")

    def gain_half_width(self, value: float) -> float:
        """Half-width of what scales with the reading, in the reading's unit."""
        return self.percent_of_reading / 100.0 * abs(value)

    def rest_half_width(self) -> float:
        """Half-width of the range, counts and constant parts, in the reading's unit."""
        return self.percent_of_range / 100.0 * self.full_scale + self.counts * self.resolution + self.floor

    def half_width(self, value: float) -> float:
        """Half-width of the whole specification at `value`, in its unit."""
        return self.gain_half_width(value) + self.rest_half_width()


@dataclass(frozen=True)
class Accuracy:
    """A meter's specification.

    Parameters
    ----------
    name : str
        Whose specification this is; shown wherever it is used.
    rows : mapping of str to tuple of AccuracyRow
        For each function (see `FUNCTIONS`) its ranges, from the smallest.
    source : str
        Where the figures come from.
    """

    name: str
    rows: Mapping[str, tuple[AccuracyRow, ...]] = field(default_factory=dict)
    source: str = ""

    def __post_init__(self) -> None:
        for function in self.rows:
            if function not in FUNCTIONS:
                raise ValueError(f"{function!r} is no function of a meter")
        ordered = {name: tuple(sorted(rows, key=lambda row: row.full_scale)) for name, rows in self.rows.items()}
        object.__setattr__(self, "rows", MappingProxyType(ordered))

    def __reduce__(self) -> tuple[Any, ...]:
        return (Accuracy, (self.name, dict(self.rows), self.source))

    def row(self, function: str, value: float, range: float | None = None) -> AccuracyRow:
        """Find the row that holds a reading.

        Parameters
        ----------
        function : str
            One of `FUNCTIONS`.
        value : float
            The reading, in the function's unit.
        range : float, optional
            Full scale of the range that the meter was on; otherwise the smallest that holds the reading.

        Raises
        ------
        EntryError
            When the specification has no such function or range, or the reading is beyond all of them.
        """
        rows = self.rows.get(function, ())
        if not rows:
            raise EntryError(
                f"The accuracy of {self.name} says nothing about {function}",
                f"rows for {function}",
                "Add them to the meter in the bench file, or give the reading's uncertainty",
            )
        unit = FUNCTIONS[function]
        if range is not None:
            for row in rows:
                if math.isclose(row.full_scale, range, rel_tol=1e-9):
                    return row
            known = ", ".join(show(row.full_scale, unit) for row in rows)
            raise EntryError(
                f"The accuracy of {self.name} has no {show(range, unit)} range for {function}", f"one of {known}"
            )
        for row in rows:
            if abs(value) <= row.full_scale:
                return row
        raise EntryError(
            f"{show(value, unit)} is beyond every {function} range of {self.name}",
            f"at most {show(rows[-1].full_scale, unit)}",
            "Check the reading's unit and decimal point",
        )

    def standard_uncertainty(self, function: str, value: float, range: float | None = None) -> float:
        """Give the standard uncertainty of one reading, in the function's unit (JCGM 100, 4.3.7).

        Parameters and errors are those of `row`.
        """
        return self.row(function, value, range).half_width(value) / math.sqrt(3.0)


def accuracy_from_rows(name: str, rows: Iterable[Mapping[str, Any]], source: str = "") -> Accuracy:
    """Build a specification from plain rows, as a bench file holds them.

    Parameters
    ----------
    name : str
        The meter.
    rows : iterable of mapping
        Keys: ``function`` and ``range`` (a quantity such as "10 V"), and any of ``percent_of_reading``,
        ``percent_of_range``, ``counts`` (numbers), ``resolution`` and ``floor`` (quantities).
    source : str
        Where the figures come from.

    Returns
    -------
    Accuracy

    Raises
    ------
    EntryError
        For a row with a missing, unknown or unusable entry; the message names the row (from 1) and the entry.
    """
    built: dict[str, list[AccuracyRow]] = {}
    for position, entry in enumerate(rows, start=1):
        where = f"Accuracy of {name}, row {position}"
        unknown = sorted(set(entry) - _ROW_KEYS, key=str)
        if unknown:
            meant = difflib.get_close_matches(str(unknown[0]), sorted(_ROW_KEYS), 1)
            perhaps = f"{meant[0]!r} perhaps; " if meant else ""
            raise EntryError(f"{where} has {quoted(unknown[0])}", f"{perhaps}only {', '.join(sorted(_ROW_KEYS))}")
        function = entry.get("function")
        if not isinstance(function, str) or function not in FUNCTIONS:
            came = f"{where} has {quoted(function)} as function" if "function" in entry else f"{where} has no function"
            raise EntryError(came, f"one of {', '.join(FUNCTIONS)}")
        unit = FUNCTIONS[function]
        if "range" not in entry:
            raise EntryError(f"{where} has no range", f"its full scale in {unit}")
        try:
            row = AccuracyRow(
                full_scale=_entry(entry, "range", unit, where),
                percent_of_reading=_entry(entry, "percent_of_reading", "%", where),
                percent_of_range=_entry(entry, "percent_of_range", "%", where),
                counts=_entry(entry, "counts", "", where),
                resolution=_entry(entry, "resolution", unit, where),
                floor=_entry(entry, "floor", unit, where),
            )
        except ValueError as error:
            raise EntryError(f"{where}: {error}", "a range above zero, and figures that are not negative") from error
        if row.counts and not row.resolution:
            raise EntryError(f"{where} has counts but no resolution", "the size of one step of the last digit")
        if row.half_width(row.full_scale) == 0:
            raise EntryError(f"{where} says that the meter has no error at all", "at least one figure above zero")
        built.setdefault(function, []).append(row)
    if not built:
        raise EntryError(f"The accuracy of {name} is empty", "at least one row")
    return Accuracy(name, {function: tuple(found) for function, found in built.items()}, source)


_ROW_KEYS = frozenset({"function", "range", "percent_of_reading", "percent_of_range", "counts", "resolution", "floor"})


def _entry(entry: Mapping[str, Any], key: str, unit: str, where: str) -> float:
    """One figure of a row: a number, or a quantity as text."""
    value = entry.get(key, 0.0)
    if isinstance(value, bool) or not isinstance(value, int | float | str):
        raise EntryError(f"{where}, {key}: {quoted(value)}", "a number or a quantity")
    try:
        if isinstance(value, str):
            return parse(value, unit or "%") if unit else float(parse(value.strip(), "%"))
        number = float(value)
    except EntryError as error:
        raise EntryError(f"{where}, {key}: {error.came}", error.expected, error.next_step) from None
    except OverflowError:
        raise EntryError(f"{where}, {key}: {quoted(value)}", "a number of a bench's size") from None
    if not math.isfinite(number):
        raise EntryError(f"{where}, {key}: {quoted(value)}", "a finite number")
    return number


def _rows(*figures: tuple[float, float, float]) -> tuple[AccuracyRow, ...]:
    """Rows from (full scale, % of reading, % of range)."""
    return tuple(AccuracyRow(full_scale, reading, rng) for full_scale, reading, rng in figures)


def _counted(
    percent: float, counts: float, steps: int, *full_scales: float, floor: float = 0.0
) -> tuple[AccuracyRow, ...]:
    """Rows of a meter with `steps` steps on each range."""
    return tuple(
        AccuracyRow(full_scale, percent, counts=counts, resolution=full_scale / steps, floor=floor)
        for full_scale in full_scales
    )


_BENCH_OHMS: Final = (
    (1e2, 0.008, 0.004),
    (1e3, 0.008, 0.001),
    (1e4, 0.008, 0.001),
    (1e5, 0.008, 0.001),
    (1e6, 0.008, 0.001),
    (1e7, 0.020, 0.001),
    (1e8, 0.800, 0.010),
)

BENCH_METER: Final = Accuracy(
    "bench meter, 6½ digits, 90 days after calibration",
    {
        "dc volts": _rows(
            (0.1, 0.0040, 0.0035),
            (1, 0.0030, 0.0007),
            (10, 0.0020, 0.0005),
            (100, 0.0035, 0.0006),
            (1000, 0.0035, 0.001),
        ),
        "ac volts": _rows((0.1, 0.05, 0.04), (1, 0.05, 0.03), (10, 0.05, 0.03), (100, 0.05, 0.03), (750, 0.05, 0.03)),
        "dc current": _rows((0.01, 0.030, 0.020), (0.1, 0.030, 0.005), (1, 0.080, 0.010), (3, 0.120, 0.020)),
        "ohms 4-wire": _rows(*_BENCH_OHMS),
        "ohms": tuple(AccuracyRow(*row, floor=0.2) for row in _BENCH_OHMS),
        "diode": (AccuracyRow(1.2, 0.010, floor=0.0002),),
        "temperature": (AccuracyRow(400, 0.0, floor=1.0),),
    },
    "the published 90-day specification of the 34401A: sums at full scale, and 0.2 ohm for 2-wire ohms without a null, "
    "as printed in its service guide's verification table; their split, ac volts and diode from memory; temperature "
    "(±1 degC, a thermocouple) is our assumption",
)
"""A good 6½-digit meter."""

HANDHELD: Final = Accuracy(
    "handheld meter, 0.5 % + 2 counts",
    {
        "dc volts": _counted(0.5, 2, 6000, 0.6, 6, 60, 600, 1000),
        "ac volts": _counted(1.0, 3, 6000, 0.6, 6, 60, 600),
        "dc current": _counted(1.0, 2, 6000, 0.006, 0.06, 0.6, 6, 10),
        "ohms": _counted(0.5, 2, 6000, 600, 6e3, 60e3, 600e3, 6e6, 60e6, floor=0.2),
        "diode": _counted(0.5, 2, 2000, 2),
        "temperature": (AccuracyRow(400, 1.0, floor=1.0),),
    },
    "common practice for a handheld meter; 6000 steps a range and 0.2 ohm allowed for the leads are our assumption",
)
"""What is assumed of a meter that nobody named."""

STATED_DEFAULT: Final = HANDHELD
"""The accuracy used where neither the reading nor a bench file gives one; its name is shown with every result."""

SUPPLY_READOUT: Final = Accuracy(
    "a supply's own readout, 1 % + 5 mA",
    {
        "dc volts": (AccuracyRow(1000, 1.0, floor=0.05),),
        "dc current": (AccuracyRow(100, 1.0, floor=0.005),),
    },
    "our assumption, no maker's figure: wide for a programmable bench supply that is not out of order",
)
"""What is assumed of a supply whose accuracy nobody stated."""

FINEST_STEP: Final = 1e-6
"""The finest step (V, A, ohm) that is believed of a meter that nobody named, however many digits were written."""
