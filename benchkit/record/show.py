"""A record as plain text, and the same facts for a program.

The text leads with what must not be overlooked: whether the record is whole, that a rehearsal measured no real unit,
the verdict, what failed, what was overridden, and what the supply was at the end.  The readings follow, section by
section.  Everything that came from outside (serial numbers, typed text, what instruments said) is shown with its
control characters escaped, so that a record can't move the cursor of the terminal that it is read on.
"""

from __future__ import annotations

import textwrap
from collections.abc import Iterable, Iterator
from typing import Any

from benchkit.events import Answered, Noted, to_payload
from benchkit.measure.readings import Reading
from benchkit.procedure import suspect_words
from benchkit.quantities import Overload, show, show_within
from benchkit.record.summary import Result, Summary, Suspicion

DEFERENCE = (
    "Benchkit helps a qualified person; it is not a safety device, it certifies nothing, and it defers to local codes, "
    "the maker's service data and licensed practice. Where they differ from the screen, they win."
)
"""The sentence that stands on each report."""

WIDTH = 100
"""The most characters that a line of prose has; a table's line may be longer where a name is."""

JSON_FORMAT = 1
"""The number of the form that `as_json` returns."""


def as_text(summary: Summary) -> str:
    """Return the whole summary as text, without a line feed at the end."""
    return "\n".join(line.rstrip() for line in _lines(summary))


def _lines(summary: Summary) -> Iterator[str]:
    opened = summary.opened
    title = "RECORD OF A REHEARSAL" if opened.kind == "rehearsal" else "RECORD OF A WALK"
    yield title
    yield "=" * len(title)
    if summary.record.status == 2:
        yield from _wrapped(f"BROKEN RECORD. {clean(summary.record.message)} Nothing from that line on is shown.")
    if opened.kind == "rehearsal":
        plant = f", with this fault in it: {clean(opened.plant)}" if opened.plant else ""
        yield from _wrapped(f"The unit was simulated (seed {opened.seed}{plant}). No real unit was measured.")
    yield ""
    yield from _fields(_head(summary))
    yield ""
    yield from _heading("What to know first")
    yield from _first_things(summary)
    for name, heading in _sections(summary):
        results = [result for result in summary.results if result.section == name]
        if results:
            yield ""
            yield from _heading(clean(heading))
            yield from _table(results)
    if summary.suspicions:
        yield ""
        yield from _heading("Suspects")
        for suspicion in summary.suspicions:
            yield from _suspicion(suspicion)
    if summary.notes:
        yield ""
        yield from _heading("Notes")
        for note in summary.notes:
            figures = ", ".join(f"{clean(key)} {value:.6g}" for key, value in note.figures.items())
            text = clean(note.text)
            yield from _wrapped(f"{text.rstrip('.')}: {figures}" if figures else text, "- ")
    typed = [(where, answer) for where, answer in summary.answers if _says_something(answer, opened.operator)]
    if typed:
        yield ""
        yield from _heading("Typed in")
        for where, answer in typed:
            yield from _wrapped(f"{clean(where)}: {clean(answer.text)}", "- ")
    yield ""
    yield from _wrapped(DEFERENCE)


def _head(summary: Summary) -> Iterator[tuple[str, str]]:
    opened, closed = summary.opened, summary.closed
    yield "Verdict", verdict_words(summary)
    yield "Unit", opened.unit
    yield "Design", f"{opened.design_name} (SHA-256 {opened.design_sha256[:16]})"
    yield "Procedure", f"{opened.procedure_name} (SHA-256 {opened.procedure_sha256[:16]})"
    yield "Operator", opened.operator
    yield "Meter", summary.meter or "none was found"
    yield "Supply", summary.supply or "none was found"
    yield "Begun", summary.begun
    yield "Last line", summary.ended
    yield "Made by", f"benchkit {opened.version}"
    yield "Record", f"{summary.record.path.name}: {summary.record.word}. {summary.record.message}"
    if closed is not None:
        yield "Exit status", str(closed.exit_status)


def verdict_words(summary: Summary) -> str:
    """Return the verdict in words, or why there is none."""
    if summary.record.status == 2:
        return "NONE: the record is broken"
    if summary.closed is None:
        return "NONE: the walk was not finished"
    stopped = f", stopped: {summary.closed.stopped}" if summary.closed.stopped else ""
    return summary.closed.verdict.upper() + stopped


def _first_things(summary: Summary) -> Iterator[str]:
    yield from _wrapped(f"Supply at the end: {clean(summary.ending.words)}", "- ")
    if summary.opened.supply == "manual":
        yield "- The supply was set and switched by hand: what it showed is what the operator said, and nothing else."
    for caution in summary.cautions:
        yield from _wrapped(f"CAUTION: {clean(caution)}", "- ")
    for note in summary.notes:
        if note.broken:
            yield from _wrapped(f"Burnt in the simulated unit: {clean('; '.join(note.broken))}", "- ")
    if summary.highest_v is not None:
        positive, negative = summary.highest_v
        yield from _wrapped(
            f"Highest rails seen at the supply: {show(positive, 'V')} and {show(-negative if negative else 0.0, 'V')}",
            "- ",
        )
    against = [result for result in summary.results if result.counts_against]
    for result in against:
        yield from _wrapped(_against(result), "- ")
    for incident in summary.incidents:
        where = f" (at: {clean(incident.where)})" if incident.where else ""
        yield from _wrapped(f"{incident.at}: {clean(incident.what)}{where}", "- ")
    odd = [result for result in summary.results if not result.replaced and result.odd]
    for result in odd:
        yield from _wrapped(f"ODD FOR THIS UNIT: {clean(result.title)}, {clean(result.subject)}: {_why(result)}", "- ")
    if summary.closed is not None and summary.closed.why:
        yield from _wrapped(f"The verdict: {clean(summary.closed.why)}", "- ")
    before = sum(result.from_before for result in summary.results)
    if before:
        yield from _wrapped(
            f"{before} results are from before the walk was resumed; the trimmer and the unit's warmth may have "
            "changed since.",
            "- ",
        )
    if not against and not odd and not summary.incidents:
        yield "- Nothing failed, nothing was undecided, missed, overridden or interrupted."


def _why(result: Result) -> str:
    return clean(result.judged.why) if result.judged is not None else ""


def _suspicion(suspicion: Suspicion) -> Iterator[str]:
    answer = suspicion.answer
    heading = suspect_words.heading_words(answer)
    yield from _wrapped(f"Line {suspicion.seq}, {clean(suspicion.where)}: {clean(heading)}", "- ")
    for one in suspect_words.shown_suspects(answer):
        name = clean(suspect_words.fault_words(one.fault))
        yield from _wrapped(f"{suspect_words.chance_words(one.probability)}  {name}", "    ")
        for line in (suspect_words.alike_words(one, answer.suspects), *suspect_words.evidence_for(one)):
            if line:
                yield from _wrapped(clean(line), "        ")
    unseen = suspect_words.unseen_words(answer, names=6)
    if unseen:
        yield from _wrapped(clean(unseen), "    ")


def _says_something(answer: Answered, operator: str) -> bool:
    """Tell whether more was typed than that a step is done."""
    return answer.text.strip().casefold() not in ("", "yes", answer.choice, operator.strip().casefold())


def _against(result: Result) -> str:
    what = "no reading" if result.missed else (result.verdict or "")
    line = f"{what.upper()}: {clean(result.title)}, {clean(result.subject)}"
    reason = result.missed or (result.judged.why if result.judged is not None else "")
    if reason:
        line += f": {clean(reason).rstrip('.')}"
    if result.overridden is not None:
        line += f". OVERRIDDEN, reason: {clean(result.overridden) or 'none was given'}"
    return line


def _sections(summary: Summary) -> Iterator[tuple[str, str]]:
    """Yield name and heading of every section that holds results: the procedure's first, in its order."""
    seen = dict(summary.sections)
    yield from summary.sections
    for result in summary.results:
        if result.section not in seen:
            seen[result.section] = result.section or "Without a section"
            yield result.section, seen[result.section]


_COLUMNS = ("", "value", "lowest", "highest", "this unit", "std. unc.", "verdict", "")


def _table(results: Iterable[Result]) -> Iterator[str]:
    """Yield a table: the title of each step on a line of its own, its points below it.

    Lowest and highest are the design's limits; those of this very unit stand beside them where there are any.
    """
    results = list(results)
    own = any(_unit_limits(result) for result in results)
    rows: list[tuple[str, ...]] = [_COLUMNS]
    title = ""
    for result in results:
        alone = clean(result.subject) in ("", clean(result.title))
        if not alone and result.title != title:
            rows.append((clean(result.title),))
        title = "" if alone else result.title
        rows.append(_row(result, clean(result.title) if alone else f"  {clean(result.subject)}"))
    whole = [row for row in rows if len(row) > 1]
    widths = [max(len(row[column]) for row in whole) for column in range(len(_COLUMNS))]
    for row in rows:
        cells = [row[0].ljust(widths[0])]
        cells += [cell.rjust(width) for cell, width in zip(row[1:6], widths[1:6], strict=False)]
        cells += [cell.ljust(width) for cell, width in zip(row[6:], widths[6:], strict=False)]
        if len(row) > 1 and not own:
            del cells[4]
        yield "  ".join(cells).rstrip()


def _unit_limits(result: Result) -> str:
    """Return the limits of this very unit in words, "" where there are none."""
    judged = result.judged
    if judged is None or (judged.unit_low is None and judged.unit_high is None):
        return ""
    low, high = _quantity(judged.unit_low, judged.unit), _quantity(judged.unit_high, judged.unit)
    if judged.unit_low is None:
        return f"at most {high}"
    return f"at least {low}" if judged.unit_high is None else f"{low} to {high}"


def _row(result: Result, name: str) -> tuple[str, ...]:
    judged = result.judged
    unit = judged.unit if judged is not None else (result.reading.unit if result.reading is not None else "")
    flags = (
        ("from before", result.from_before),
        ("measured again later", result.replaced),
        ("overridden", result.overridden is not None),
        ("odd for this unit", result.odd),
    )
    return (
        name,
        "no reading" if result.missed else _quantity(_measured(result), unit, uncertainty=_uncertainty(result)),
        _quantity(judged.low, unit) if judged is not None else "",
        _quantity(judged.high, unit) if judged is not None else "",
        _unit_limits(result),
        _quantity(_uncertainty(result), unit, digits=2),
        result.verdict or ("missed" if result.missed else "not judged"),
        "; ".join(words for words, true in flags if true),
    )


def _measured(result: Result) -> float | Overload | None:
    if result.reading is not None:
        return result.reading.measured
    return result.judged.value if result.judged is not None else None


def _uncertainty(result: Result) -> float | None:
    if result.judged is not None and result.judged.uncertainty is not None:
        return result.judged.uncertainty
    reading: Reading | None = result.reading
    return reading.standard_uncertainty if reading is not None else None


def _quantity(value: float | Overload | None, unit: str, digits: int = 4, uncertainty: float | None = None) -> str:
    if value is None:
        return "-"
    try:
        return show_within(value, unit, uncertainty, digits)
    except ValueError:  # a rule's number may have a unit of its own, or none
        return f"{value:.{digits}g} {unit}".strip() if isinstance(value, float) else "overload"


def as_json(summary: Summary) -> dict[str, Any]:
    """Return the facts for a program; every value is plain JSON, a number that is not there is None."""
    opened, closed = summary.opened, summary.closed
    return {
        "format": JSON_FORMAT,
        "record": summary.record.as_json(),
        "kind": opened.kind,
        "unit": opened.unit,
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
        "deference": DEFERENCE,
    }


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
        "standard_uncertainty": _uncertainty(result),
        "probability": judged.probability if judged is not None else None,
        "verdict": result.verdict,
        "why": result.missed or (judged.why if judged is not None else ""),
        "condition": result.condition,
        "from_before": result.from_before,
        "replaced": result.replaced,
        "overridden": result.overridden,
    }


def _note_json(note: Noted) -> dict[str, Any]:
    plain: dict[str, Any] = {"text": note.text, "figures": dict(note.figures)}
    return plain if note.broken is None else plain | {"broken": list(note.broken)}


def _suspicion_json(suspicion: Suspicion) -> dict[str, Any]:
    return {"line": suspicion.seq, "at": suspicion.at, **to_payload(suspicion.answer)}


def clean(text: str) -> str:
    """Return `text` with everything that is no printable character escaped."""
    return "".join(
        letter if letter.isprintable() else letter.encode("unicode_escape").decode("ascii") for letter in text
    )


def _fields(pairs: Iterable[tuple[str, str]]) -> Iterator[str]:
    for name, value in pairs:
        yield from textwrap.wrap(
            clean(value) or "-",
            WIDTH,
            initial_indent=f"{name:<13}",
            subsequent_indent=" " * 13,
            break_on_hyphens=False,
        )


def _heading(text: str) -> Iterator[str]:
    yield text
    yield "-" * len(text)


def _wrapped(text: str, bullet: str = "") -> Iterator[str]:
    yield from textwrap.wrap(
        text, WIDTH, initial_indent=bullet, subsequent_indent=" " * len(bullet), break_on_hyphens=False
    )
