"""The readings of one or more records as a table: one row a reading, for a spreadsheet or a program.

Rules
-----
* Columns are `COLUMNS`, always all of them, in this order; a new one is only ever added at the end.
* Values stand in base units (V, A, ohm, degC), in full precision; an overload has no value and ``overload`` true.
* A reading that was measured again later is in the table too, with ``replaced`` true.
* ``low`` and ``high`` are the design's limits, ``unit_low`` and ``unit_high`` this unit's inside them; ``suspects`` is
  the last answer about suspects in the whole walk, the same in each of its rows.
* ``part`` is ``found`` or ``left`` where the procedure marks a section so; ``driven`` is true for a reading that was
  taken while the stage had a signal.
* A text that a spreadsheet would take for a formula (it begins with ``= + - @``, a tab or a carriage return) gets an
  apostrophe in front.
"""

from __future__ import annotations

import io
import json
from collections.abc import Iterable, Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Any

from benchkit.errors import FileError
from benchkit.record.summary import Summary

if TYPE_CHECKING:
    import pandas as pd

COLUMNS = (
    "record",
    "record_status",
    "kind",
    "unit",
    "operator",
    "design",
    "design_sha256",
    "procedure",
    "line",
    "at",
    "section",
    "step",
    "point",
    "value",
    "value_unit",
    "overload",
    "standard_uncertainty",
    "low",
    "high",
    "verdict",
    "probability",
    "why",
    "condition",
    "meter",
    "function",
    "samples",
    "from_before",
    "replaced",
    "overridden",
    "unit_low",
    "unit_high",
    "odd",
    "suspects",
    "channel",
    "part",
    "driven",
    "how",
)

_FORMULA = ("=", "+", "-", "@", "\t", "\r")
_NUMBERS = ("value", "standard_uncertainty", "low", "high", "probability", "unit_low", "unit_high")


def rows(summary: Summary) -> Iterator[dict[str, Any]]:
    """Yield one mapping a reading, its keys `COLUMNS`; a value that is not there is None."""
    opened, record = summary.opened, summary.record
    suspects = _suspects(summary)
    for result in summary.results:
        reading, judged = result.reading, result.judged
        if reading is None:
            continue
        yield {
            "record": record.path.name,
            "record_status": record.word,
            "kind": opened.kind,
            "unit": opened.unit,
            "operator": opened.operator,
            "design": opened.design_name,
            "design_sha256": opened.design_sha256,
            "procedure": opened.procedure_name,
            "line": result.seq,
            "at": result.at,
            "section": result.section,
            "step": result.step,
            "point": reading.point,
            "value": reading.value,
            "value_unit": reading.unit,
            "overload": reading.overload,
            "standard_uncertainty": reading.standard_uncertainty,
            "low": judged.low if judged is not None else None,
            "high": judged.high if judged is not None else None,
            "verdict": result.verdict,
            "probability": judged.probability if judged is not None else None,
            "why": judged.why if judged is not None else "",
            "condition": result.condition,
            "meter": reading.meter,
            "function": reading.function,
            "samples": reading.samples,
            "from_before": result.from_before,
            "replaced": result.replaced,
            "overridden": result.overridden,
            "unit_low": judged.unit_low if judged is not None else None,
            "unit_high": judged.unit_high if judged is not None else None,
            "odd": result.odd,
            "suspects": suspects,
            "channel": opened.channel,
            "part": result.part,
            "driven": result.driven,
            "how": result.how,
        }


def _suspects(summary: Summary) -> str:
    """Return the last answer about suspects in one line, likeliest first; "" where nobody asked."""
    if not summary.suspicions:
        return ""
    answer = summary.suspicions[-1].answer
    if answer.problem:
        return f"no answer: {answer.problem}"
    return "; ".join(f"{one.fault} {one.probability:.3f}" for one in answer.suspects)


def frame(summaries: Iterable[Summary]) -> pd.DataFrame:
    """Return the readings of several records as one data frame, columns `COLUMNS`, shape (readings, 37).

    Numbers are floats with NaN where there is none; ``at`` is a time with its zone.
    """
    import pandas as pd

    table = pd.DataFrame([row for summary in summaries for row in rows(summary)], columns=list(COLUMNS))
    for name in _NUMBERS:
        table[name] = table[name].astype(float)
    table["at"] = pd.to_datetime(table["at"], utc=True, format="ISO8601")
    return table


def csv_text(summaries: Iterable[Summary]) -> str:
    """Return the readings as CSV: a line of names, a comma between, line feeds, a full stop as decimal sign."""
    table = frame(summaries)
    for name in COLUMNS:
        if name not in (*_NUMBERS, "at", "line", "overload", "samples", "from_before", "replaced", "odd", "driven"):
            table[name] = table[name].map(no_formula)
    table["at"] = table["at"].dt.strftime("%Y-%m-%dT%H:%M:%S.%fZ")
    text = io.StringIO()
    table.to_csv(text, index=False, lineterminator="\n")
    return text.getvalue()


def write_csv(summaries: Iterable[Summary], path: Path) -> None:
    """Write `csv_text` to a new file.

    Raises
    ------
    FileError
        If there is a file of that name already, or it can't be written.
    """
    text = csv_text(summaries)
    try:
        with path.open("x", encoding="utf-8", errors="backslashreplace", newline="") as file:
            file.write(text)
    except FileExistsError:
        raise FileError(str(path), "", "is there already", "a name that is free", "Name another file") from None
    except OSError as error:
        raise FileError(
            str(path), "", f"can't be written: {error.strerror}", "a place that can be written to", "Name another file"
        ) from None


def json_lines(summaries: Iterable[Summary]) -> Iterator[str]:
    """Yield the rows as one JSON object each; None where there is no value."""
    for summary in summaries:
        for row in rows(summary):
            yield json.dumps(row, ensure_ascii=False, allow_nan=False)


def no_formula(value: object) -> object:
    """Return a value with an apostrophe in front where a spreadsheet would take it for a formula."""
    return f"'{value}" if isinstance(value, str) and value.startswith(_FORMULA) else value
