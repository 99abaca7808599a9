"""A record as plain text.

The text leads with what must not be overlooked: whether the record is whole, that a rehearsal measured no real unit,
the verdict, what failed, what was overridden, and what the supply was at the end.  The readings follow, section by
section.  Everything that came from outside (serial numbers, typed text, what instruments said) is shown with its
control characters escaped, so that a record can't move the cursor of the terminal that it is read on.
"""

from __future__ import annotations

import textwrap
from collections.abc import Iterable, Iterator

from benchkit.events import Answered
from benchkit.procedure import suspect_words
from benchkit.quantities import Overload, show
from benchkit.record.change_table import side_by_side
from benchkit.record.comparing import FOUND_LEFT, as_found_as_left, compare
from benchkit.record.earlier import Earlier
from benchkit.record.summary import Result, Summary, Suspicion
from benchkit.record.words import (
    WIDTH,
    clean,
    heading,
    quantity,
    replaced_words,
    soak_words,
    took_words,
    verdict_words,
    wrapped,
)

DEFERENCE = (
    "Benchkit helps a qualified person; it is not a safety device, it certifies nothing, and it defers to local codes, "
    "the maker's service data and licensed practice. Where they differ from the screen, they win."
)
"""The sentence that stands on each report."""


def as_text(summary: Summary, earlier: Earlier | None = None) -> str:
    """Return the whole summary as text, without a line feed at the end.

    Parameters
    ----------
    summary : Summary
    earlier : Earlier, optional
        The last record of this unit and channel before it, where somebody has looked for one.
    """
    return "\n".join(line.rstrip() for line in _lines(summary, earlier))


def _lines(summary: Summary, earlier: Earlier | None) -> Iterator[str]:
    opened = summary.opened
    title = "RECORD OF A REHEARSAL" if opened.kind == "rehearsal" else "RECORD OF A WALK"
    yield title
    yield "=" * len(title)
    if summary.record.status == 2:
        yield from wrapped(f"BROKEN RECORD. {clean(summary.record.message)} Nothing from that line on is shown.")
    if opened.kind == "rehearsal":
        plant = f", with this fault in it: {clean(opened.plant)}" if opened.plant else ""
        yield from wrapped(f"The unit was simulated (seed {opened.seed}{plant}). No real unit was measured.")
    yield ""
    yield from _fields(_head(summary))
    yield ""
    yield from heading("What to know first")
    yield from _first_things(summary)
    if found_and_left := as_found_as_left(summary):
        yield ""
        yield from heading("As found, as left")
        yield from side_by_side(found_and_left, FOUND_LEFT)
    if earlier is not None:
        yield ""
        yield from heading("Against the last record of this unit")
        yield from _against_earlier(summary, earlier)
    for name, title in _sections(summary):
        results = [result for result in summary.results if result.section == name]
        if results:
            yield ""
            yield from heading(clean(title))
            yield from _table(results)
    if summary.soaks:
        yield ""
        yield from heading("Soaks")
        for where, waited in summary.soaks:
            yield from wrapped(f"{clean(where)}: {soak_words(waited)}", "- ")
    if summary.suspicions:
        yield ""
        yield from heading("Suspects")
        for suspicion in summary.suspicions:
            yield from _suspicion(suspicion)
    if summary.notes:
        yield ""
        yield from heading("Notes")
        for note in summary.notes:
            figures = ", ".join(f"{clean(key)} {value:.6g}" for key, value in note.figures.items())
            text = clean(note.text)
            yield from wrapped(f"{text.rstrip('.')}: {figures}" if figures else text, "- ")
    typed = [(where, answer) for where, answer in summary.answers if _says_something(answer, opened.operator)]
    if typed:
        yield ""
        yield from heading("Typed in")
        for where, answer in typed:
            yield from wrapped(f"{clean(where)}: {clean(answer.text)}", "- ")
    yield ""
    yield from wrapped(DEFERENCE)


def _head(summary: Summary) -> Iterator[tuple[str, str]]:
    opened, closed = summary.opened, summary.closed
    yield "Verdict", verdict_words(summary)
    yield "Unit", opened.unit
    if opened.channel:
        yield "Channel", opened.channel
    yield "Design", f"{opened.design_name} (SHA-256 {opened.design_sha256[:16]})"
    yield "Procedure", f"{opened.procedure_name} (SHA-256 {opened.procedure_sha256[:16]})"
    yield "Operator", opened.operator
    yield "Meter", summary.meter or "none was found"
    yield "Supply", summary.supply or "none was found"
    yield "Begun", summary.begun
    yield "Last line", summary.ended
    if summary.took is not None:
        yield "Time", took_words(summary.took)
    yield "Made by", f"benchkit {opened.version}"
    yield "Record", f"{summary.record.path.name}: {summary.record.word}. {summary.record.message}"
    if closed is not None:
        yield "Exit status", str(closed.exit_status)


def _first_things(summary: Summary) -> Iterator[str]:
    yield from wrapped(f"Supply at the end: {clean(summary.ending.words)}", "- ")
    if summary.opened.supply == "manual":
        yield "- The supply was set and switched by hand: what it showed is what the operator said, and nothing else."
    for caution in summary.cautions:
        yield from wrapped(f"CAUTION: {clean(caution)}", "- ")
    for title in summary.left_out:
        yield from wrapped(f"Left out, as the operator chose: {clean(title)}", "- ")
    if words := replaced_words(summary):
        yield from wrapped(f"Parts replaced: {clean(words)}", "- ")
    for note in summary.notes:
        if note.broken:
            yield from wrapped(f"Burnt in the simulated unit: {clean('; '.join(note.broken))}", "- ")
    if summary.highest_v is not None:
        positive, negative = summary.highest_v
        yield from wrapped(
            f"Highest rails seen at the supply: {show(positive, 'V')} and {show(-negative if negative else 0.0, 'V')}",
            "- ",
        )
    against = [result for result in summary.results if result.counts_against]
    for result in against:
        yield from wrapped(_against(result), "- ")
    for incident in summary.incidents:
        where = f" (at: {clean(incident.where)})" if incident.where else ""
        yield from wrapped(f"{incident.at}: {clean(incident.what)}{where}", "- ")
    odd = [result for result in summary.results if not result.replaced and result.odd]
    for result in odd:
        yield from wrapped(f"ODD FOR THIS UNIT: {clean(result.title)}, {clean(result.subject)}: {_why(result)}", "- ")
    if summary.closed is not None and summary.closed.why:
        yield from wrapped(f"The verdict: {clean(summary.closed.why)}", "- ")
    before = sum(result.from_before for result in summary.results)
    if before:
        yield from wrapped(
            f"{before} results are from before the walk was resumed; the trimmer and the unit's warmth may have "
            "changed since.",
            "- ",
        )
    first = sum(result.replaced and result.fell_short for result in summary.results)
    if first:
        one = "1 reading did" if first == 1 else f"{first} readings did"
        yield from wrapped(f"{one} not pass at first; taken again, they stand below with what came before.", "- ")
    if not against and not odd and not summary.incidents and not first:
        yield "- Nothing failed, nothing was undecided, missed, overridden or interrupted."


def _against_earlier(summary: Summary, earlier: Earlier) -> Iterator[str]:
    for sentence in earlier.passed_over:
        yield from wrapped(clean(sentence), "- ")
    if earlier.summary is None:
        yield "There is no earlier record of it that could be compared with."
        return
    other = earlier.summary
    words = f"{other.record.path.name}: {other.begun}, {other.opened.operator}, {verdict_words(other)}"
    yield from wrapped(clean(words), "- ")
    comparison = compare(other, summary)
    if not comparison.remarks:
        yield ""
    yield from comparison.body()


def _why(result: Result) -> str:
    return clean(result.judged.why) if result.judged is not None else ""


def _suspicion(suspicion: Suspicion) -> Iterator[str]:
    answer = suspicion.answer
    heading = suspect_words.heading_words(answer)
    yield from wrapped(f"Line {suspicion.seq}, {clean(suspicion.where)}: {clean(heading)}", "- ")
    for one in suspect_words.shown_suspects(answer):
        name = clean(suspect_words.fault_words(one.fault))
        yield from wrapped(f"{suspect_words.chance_words(one.probability)}  {name}", "    ")
        for line in (suspect_words.alike_words(one, answer.suspects), *suspect_words.evidence_for(one)):
            if line:
                yield from wrapped(clean(line), "        ")
    unseen = suspect_words.unseen_words(answer, names=6)
    if unseen:
        yield from wrapped(clean(unseen), "    ")


def _says_something(answer: Answered, operator: str) -> bool:
    """Tell whether more was typed than that a step is done."""
    return answer.text.strip().casefold() not in ("", "yes", answer.choice, operator.strip().casefold())


def _against(result: Result) -> str:
    what = "no reading" if result.missed else (result.verdict or "")
    found = "AS FOUND, " if result.part == "found" else ""
    line = f"{found}{what.upper()}: {clean(result.title)}, {clean(result.subject)}"
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
    low, high = quantity(judged.unit_low, judged.unit), quantity(judged.unit_high, judged.unit)
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
        "no reading" if result.missed else quantity(_measured(result), unit, uncertainty=result.standard_uncertainty),
        quantity(judged.low, unit) if judged is not None else "",
        quantity(judged.high, unit) if judged is not None else "",
        _unit_limits(result),
        quantity(result.standard_uncertainty, unit, digits=2),
        result.verdict or ("missed" if result.missed else "not judged"),
        "; ".join(words for words, true in flags if true),
    )


def _measured(result: Result) -> float | Overload | None:
    if result.reading is not None:
        return result.reading.measured
    return result.judged.value if result.judged is not None else None


def _fields(pairs: Iterable[tuple[str, str]]) -> Iterator[str]:
    for name, value in pairs:
        yield from textwrap.wrap(
            clean(value) or "-",
            WIDTH,
            initial_indent=f"{name:<13}",
            subsequent_indent=" " * 13,
            break_on_hyphens=False,
        )
