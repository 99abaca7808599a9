"""The facts of a record for a program; `benchkit.record.show` says the same to a person."""

from __future__ import annotations

from typing import Any

from benchkit.events import Noted, to_payload
from benchkit.record.comparing import as_found_as_left, compare
from benchkit.record.earlier import Earlier
from benchkit.record.show import DEFERENCE
from benchkit.record.summary import Result, Summary, Suspicion

JSON_FORMAT = 1
"""The number of the form that `as_json` returns."""


def as_json(summary: Summary, earlier: Earlier | None = None) -> dict[str, Any]:
    """Return the facts for a program; every value is plain JSON, a number that is not there is None."""
    opened, closed = summary.opened, summary.closed
    return {
        "format": JSON_FORMAT,
        "record": summary.record.as_json(),
        "kind": opened.kind,
        "unit": opened.unit,
        "channel": opened.channel,
        "operator": opened.operator,
        "design": {"name": opened.design_name, "sha256": opened.design_sha256},
        "procedure": {"name": opened.procedure_name, "sha256": opened.procedure_sha256},
        "instruments": {"meter": summary.meter, "supply": summary.supply},
        "version": opened.version,
        "seed": opened.seed,
        "plant": opened.plant,
        "begun": summary.begun,
        "last_line": summary.ended,
        "verdict": summary.verdict if summary.record.status == 0 else None,
        "stopped": closed.stopped if closed is not None else "",
        "exit_status": closed.exit_status if closed is not None else None,
        "supply_at_end": {"state": summary.ending.state, "words": summary.ending.words},
        "highest_rails_v": list(summary.highest_v) if summary.highest_v is not None else None,
        "results": [_result_json(result) for result in summary.results],
        "incidents": [
            {"line": incident.seq, "at": incident.at, "where": incident.where, "what": incident.what}
            for incident in summary.incidents
        ],
        "suspicions": [_suspicion_json(suspicion) for suspicion in summary.suspicions],
        "cautions": list(summary.cautions),
        "verdict_why": closed.why if closed is not None else "",
        "notes": [_note_json(note) for note in summary.notes],
        "took": None
        if summary.took is None
        else {"seconds": summary.took.seconds, "target_seconds": summary.took.target_s},
        "parts_replaced": [{"parts": one.parts, "semiconductors": one.semiconductors} for one in summary.replaced],
        "left_out": list(summary.left_out),
        "soaks": [{"where": where, **to_payload(waited)} for where, waited in summary.soaks],
        "as_found_as_left": [change.as_json() for change in as_found_as_left(summary)],
        "earlier": None if earlier is None else _earlier_json(summary, earlier),
        "deference": DEFERENCE,
    }


def _earlier_json(summary: Summary, earlier: Earlier) -> dict[str, Any]:
    found = None if earlier.summary is None else compare(earlier.summary, summary).as_json()
    return {"passed_over": list(earlier.passed_over), "comparison": found}


def _result_json(result: Result) -> dict[str, Any]:
    reading, judged = result.reading, result.judged
    return {
        "line": result.seq,
        "at": result.at,
        "section": result.section,
        "step": result.step,
        "title": result.title,
        "subject": result.subject,
        "kind": "missed" if result.missed else ("reading" if reading is not None else "rule"),
        "value": reading.value if reading is not None else (judged.value if judged is not None else None),
        "overload": reading.overload if reading is not None else False,
        "unit": reading.unit if reading is not None else (judged.unit if judged is not None else ""),
        "low": judged.low if judged is not None else None,
        "high": judged.high if judged is not None else None,
        "unit_low": judged.unit_low if judged is not None else None,
        "unit_high": judged.unit_high if judged is not None else None,
        "odd": result.odd,
        "standard_uncertainty": result.standard_uncertainty,
        "probability": judged.probability if judged is not None else None,
        "verdict": result.verdict,
        "why": result.missed or (judged.why if judged is not None else ""),
        "condition": result.condition,
        "from_before": result.from_before,
        "replaced": result.replaced,
        "overridden": result.overridden,
        "part": result.part,
        "driven": result.driven,
        "how": result.how,
    }


def _note_json(note: Noted) -> dict[str, Any]:
    plain: dict[str, Any] = {"text": note.text, "figures": dict(note.figures)}
    return plain if note.broken is None else plain | {"broken": list(note.broken)}


def _suspicion_json(suspicion: Suspicion) -> dict[str, Any]:
    return {"line": suspicion.seq, "at": suspicion.at, **to_payload(suspicion.answer)}
