"""Reading a file of readings: CSV, one reading a line, each with the condition that it was taken under.

Columns ``point``, ``value``, ``unit``, and optionally ``positive``, ``negative``, ``limit``, ``trimmer``, ``when``,
``ambient``, ``uncertainty``, in any order, named in the first line. Rules:

- A quantity may carry its unit ("15 V", "12.3 mV"). A bare value or uncertainty is in the ``unit`` column's unit, any
  other bare number in V, A or degC.
- An empty cell of a condition is the design's: its rails and ambient temperature; no current limit, trimmer unknown,
  cold.
- ``uncertainty`` is a standard uncertainty; an empty one is worked out from the accuracy that the caller gives. Where
  that is only assumed, a count is the last digit written if that is finer than the assumed meter's step: a reading
  written to a microvolt did not come from a meter that shows tenths of a millivolt.
- ``OL`` is a meter's overload.

Every refusal names the file, the line, the column, what came and what was expected.
"""

from __future__ import annotations

import csv
import difflib
import io
import re
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path
from typing import Final, Literal, TypeVar

from benchkit.errors import EntryError, FileError
from benchkit.measure.accuracy import FINEST_STEP, Accuracy
from benchkit.measure.readings import Reading
from benchkit.measure.uncertainty import make_reading
from benchkit.quantities import Overload, last_digit, parse, parse_reading, printable, quoted
from benchkit.stage.conditions import Condition, Unpowered, parse_trimmer
from benchkit.stage.design import Design
from benchkit.stage.points import Point, find_point

COLUMNS: Final = ("point", "value", "unit")
STATED: Final = ("positive", "negative", "limit", "trimmer", "when", "ambient")
OPTIONAL: Final = (*STATED, "uncertainty")
MOST_LINES: Final = 10_000
LEAST_SENTINEL: Final = 1e30
"""From here on a bare number is what an instrument sends for "overload" or "no number", whatever the unit."""
STATED_METER: Final = "uncertainty as stated"

_BARE = re.compile(r"[+\-\N{MINUS SIGN}]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[eE][+-]?[0-9]+)?")
_Parsed = TypeVar("_Parsed")


@dataclass(frozen=True)
class Entry:
    """One line of a file of readings.

    Attributes
    ----------
    line : int
        In the file, the first being 1.
    point : Point
    reading : Reading
    condition : Condition or Unpowered
    """

    line: int
    point: Point
    reading: Reading
    condition: Condition | Unpowered


def read_text(path: str | Path) -> str:
    """Read a file of readings as text.

    Raises
    ------
    FileError
        When it can't be read, or is not UTF-8.
    """
    try:
        return Path(path).read_bytes().decode("utf-8-sig")
    except OSError as error:
        reason = error.strerror or type(error).__name__
        raise FileError(str(path), "", f"the file can't be read ({reason})", "a file of readings (CSV)") from None
    except UnicodeDecodeError as error:
        raise FileError(str(path), "", f"byte {error.start} is not UTF-8", "a text file in UTF-8") from None


def parse_entries(
    text: str, design: Design, accuracy: Accuracy, file_name: str = "readings", *, assumed: bool = False
) -> tuple[Entry, ...]:
    """Read the lines of a file of readings.

    Parameters
    ----------
    text : str
        CSV with a line of column names.
    design : Design
        Whose test points they are.
    accuracy : Accuracy
        For the readings without an uncertainty of their own.
    file_name : str
        For messages.
    assumed : bool
        Whether the accuracy is a mere assumption about a meter that nobody named.

    Returns
    -------
    tuple of Entry
        At least one, in the file's order.

    Raises
    ------
    FileError
        For the first thing that is wrong.
    """
    entries = []
    known: Known = {}
    for line, cells in _lines(text, file_name):
        entries.append(_Row(line, cells, file_name, known).entry(design, accuracy, assumed))
        if len(entries) > MOST_LINES:
            raise FileError(file_name, f"line {line}", f"more than {MOST_LINES} readings", "the readings of one unit")
    if not entries:
        raise FileError(file_name, "", "the file holds no reading", f"lines with {', '.join(COLUMNS)}")
    return tuple(entries)


def _lines(text: str, file_name: str) -> Iterator[tuple[int, dict[str, str]]]:
    """Give each line's number and its cells by column; empty lines are left out."""
    reader = csv.reader(io.StringIO(text.removeprefix("\N{ZERO WIDTH NO-BREAK SPACE}"), newline=""), strict=True)
    header: list[str] | None = None
    start = 1
    try:
        for cells in reader:
            line, start = start, reader.line_num + 1
            if not any(cell.strip() for cell in cells):
                continue
            if header is None:
                header = _header([cell.strip().lower() for cell in cells], line, file_name)
                continue
            if len(cells) > len(header) and any(cell.strip() for cell in cells[len(header) :]):
                hint = "A number with a decimal comma needs a point instead" if len(cells) == len(header) + 1 else ""
                raise FileError(
                    file_name, f"line {line}", f"{len(cells)} cells came", f"{len(header)}, as in the first line", hint
                )
            yield line, {name: cell.strip() for name, cell in zip(header, cells, strict=False)}
    except csv.Error as error:
        raise FileError(file_name, f"line {reader.line_num}", f"the line is not CSV: {error}", "CSV") from None
    if header is None:
        raise FileError(file_name, "", "the file is empty", f"a first line with {', '.join(COLUMNS)}")


def _header(names: list[str], line: int, file_name: str) -> list[str]:
    known = (*COLUMNS, *OPTIONAL)
    where = f"line {line}"
    if len(names) == 1 and re.search(r"[;\t]", names[0]):
        mark = "semicolons" if ";" in names[0] else "tabs"
        raise FileError(file_name, where, f"the columns are separated by {mark}", "commas")
    for name in names:
        if name not in known:
            near = difflib.get_close_matches(name, known, 1)
            hint = f"Perhaps {near[0]} was meant" if near else ""
            raise FileError(
                file_name, where, f"there is a column {quoted(name)}", f"columns out of {', '.join(known)}", hint
            )
        if names.count(name) > 1:
            raise FileError(file_name, where, f"the column {name} is there twice", "each column once")
    for name in COLUMNS:
        if name not in names:
            raise FileError(file_name, where, f"there is no column {name}", f"{', '.join(COLUMNS)}")
    return names


@lru_cache(maxsize=4096)
def _parsed(text: str, unit: str) -> float:
    """Read a quantity; conditions, units and uncertainties are the same on many lines."""
    return parse(text, unit)


Known = dict[tuple[str, ...], Condition | Unpowered]
"""Conditions that were met before in a file, by their cells (and the point, where that is part of it)."""


@dataclass(frozen=True)
class _Row:
    """One line's cells, with a place to complain from."""

    line: int
    cells: Mapping[str, str]
    file_name: str
    known: Known

    def entry(self, design: Design, accuracy: Accuracy, assumed: bool) -> Entry:
        point = self._do("point", lambda: find_point(design, self._cell("point", required=True)))
        measured = self._do("value", lambda: self._quantity("value", point))
        uncertainty = self._uncertainty(point)
        condition = self._condition(design, point)
        if uncertainty is not None or isinstance(measured, Overload):
            reading = Reading(
                point=point.name,
                value=None if isinstance(measured, Overload) else measured,
                unit=point.unit,
                overload=isinstance(measured, Overload),
                negative=isinstance(measured, Overload) and not measured.positive,
                standard_uncertainty=uncertainty,
                meter=accuracy.name if uncertainty is None else STATED_METER,
                function=point.function,
            )
        else:
            function = point.function
            if function == "ohms 4-wire" and function not in accuracy.rows:
                function = "ohms"
            value = measured
            step = max(FINEST_STEP, last_digit(self._with_unit("value", point), point.unit)) if assumed else None
            reading = self._do(
                "value",
                lambda: make_reading(point.name, value, point.unit, function=function, accuracy=accuracy, step=step),
            )
        return Entry(self.line, point, reading, condition)

    def _condition(self, design: Design, point: Point) -> Condition | Unpowered:
        key = ("" if point.powered else point.name, *(self._cell(column) for column in STATED))
        if key not in self.known:
            self.known[key] = self._new_condition(design, point)
        return self.known[key]

    def _new_condition(self, design: Design, point: Point) -> Condition | Unpowered:
        trimmer = self._do("trimmer", lambda: parse_trimmer(self._cell("trimmer") or "unknown"))
        ambient = self._optional("ambient", "degC")
        if not point.powered:
            return self._do("", lambda: Unpowered(point=point.name, trimmer=trimmer, ambient_c=ambient))
        positive = self._optional("positive", "V")
        negative = self._optional("negative", "V")
        if negative is not None and negative > 0:
            raise self._error(
                "negative", f"{quoted(self._cell('negative'))} came", "a voltage of 0 V or below, such as -15 V"
            )
        limit = self._optional("limit", "A")
        when = self._cell("when").lower() or "cold"
        if when not in ("cold", "warm"):
            raise self._error("when", f"{quoted(self._cell('when'))} came", "cold or warm")
        chosen: Literal["cold", "warm"] = "warm" if when == "warm" else "cold"
        return self._do(
            "",
            lambda: Condition(
                positive_v=design.rails.positive_v if positive is None else positive,
                negative_v=design.rails.negative_v if negative is None else negative,
                limit_a=limit,
                trimmer=trimmer,
                when=chosen,
                ambient_c=ambient,
            ),
        )

    def _uncertainty(self, point: Point) -> float | None:
        if not self._cell("uncertainty"):
            return None
        value = self._do("uncertainty", lambda: self._quantity("uncertainty", point))
        if isinstance(value, Overload) or value < 0:
            raise self._error(
                "uncertainty", f"{quoted(self._cell('uncertainty'))} came", "a standard uncertainty, zero or above"
            )
        return value

    def _quantity(self, column: str, point: Point) -> float | Overload:
        """Read a value or an uncertainty; a bare number is in the unit column's unit."""
        if self._cell("unit"):
            # The unit must be one of the point's kind, also where the value carries its own.
            self._do("unit", lambda: _parsed(f"1 {self._cell('unit')}", point.unit))
        return parse_reading(self._with_unit(column, point), point.unit)

    def _with_unit(self, column: str, point: Point) -> str:
        """Give a cell's text, a bare number together with the unit column's unit."""
        text, unit = self._cell(column, required=True), self._cell("unit")
        if unit and _BARE.fullmatch(text) and abs(float(text.replace("\N{MINUS SIGN}", "-"))) < LEAST_SENTINEL:
            return f"{text} {unit}"
        return text

    def _optional(self, column: str, unit: str) -> float | None:
        text = self._cell(column)
        return self._do(column, lambda: _parsed(text, unit)) if text else None

    def _cell(self, column: str, required: bool = False) -> str:
        text = self.cells.get(column, "")
        if required and not text:
            raise self._error(column, "the cell is empty", f"a {column}")
        return text

    def _do(self, column: str, action: Callable[[], _Parsed]) -> _Parsed:
        """Do something that may refuse what was entered, and say where it stands."""
        try:
            return action()
        except FileError:
            raise
        except EntryError as error:
            raise self._error(column, error.came, error.expected, error.next_step) from None

    def _error(self, column: str, came: str, expected: str, next_step: str = "") -> FileError:
        where = f"line {self.line}, {column}" if column else f"line {self.line}"
        return FileError(self.file_name, where, printable(came), expected, next_step)
