"""How long each channel took, one row a record, for a spreadsheet or a program.

Columns are `COLUMNS`, always all of them; a new one is only ever added at the end.  A record whose walk noted no time
has none: the time between its first and its last line would count a night in which it lay half done.
"""

from __future__ import annotations

import csv
import io
from collections.abc import Iterable
from typing import Any

from benchkit.record.summary import Summary
from benchkit.record.table import no_formula

COLUMNS = (
    "record",
    "record_status",
    "kind",
    "unit",
    "channel",
    "operator",
    "design",
    "procedure",
    "begun",
    "verdict",
    "stopped",
    "seconds",
    "target_seconds",
)


def row(summary: Summary) -> dict[str, Any]:
    """Return one record's row, its keys `COLUMNS`; a value that is not there is None."""
    opened, closed, took = summary.opened, summary.closed, summary.took
    return {
        "record": summary.record.path.name,
        "record_status": summary.record.word,
        "kind": opened.kind,
        "unit": opened.unit,
        "channel": opened.channel,
        "operator": opened.operator,
        "design": opened.design_name,
        "procedure": opened.procedure_name,
        "begun": summary.begun,
        "verdict": summary.verdict if summary.record.status == 0 else None,
        "stopped": closed.stopped if closed is not None else "",
        "seconds": None if took is None else round(took.seconds, 3),
        "target_seconds": None if took is None else took.target_s,
    }


def csv_text(summaries: Iterable[Summary]) -> str:
    """Return the rows as CSV: a line of names, a comma between, line feeds, a full stop as decimal sign."""
    text = io.StringIO()
    writer = csv.DictWriter(text, COLUMNS, lineterminator="\n")
    writer.writeheader()
    writer.writerows({name: no_formula(value) for name, value in row(summary).items()} for summary in summaries)
    return text.getvalue()
