"""The few lines that stand at the end of a walk: how long it took, and what is different from before."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from pathlib import Path

from benchkit.errors import BenchkitError
from benchkit.record.change_table import change_line
from benchkit.record.comparing import FOUND_LEFT, as_found_as_left, compare
from benchkit.record.earlier import last_before
from benchkit.record.facts import Summary
from benchkit.record.pairing import KEY_POINTS, Change
from benchkit.record.summary import load_summary
from benchkit.record.words import clean, replaced_words, took_words, verdict_words

MOST_LINES = 5
"""So many test points are named at most; `benchkit record show` has all of them."""

_FIRST = ("emitter.upper.1", "emitter.lower.1", "emitter.pair.1", "output", "rail+.current", "rail-.current")


def end_lines(record: Path) -> tuple[str, ...]:
    """Return the lines for the end of the walk that `record` is of; none for a record that can't be read."""
    try:
        return tuple(_lines(load_summary(record), record.parent))
    except BenchkitError:
        return ()


def _lines(summary: Summary, folder: Path) -> Iterator[str]:
    if summary.took is not None:
        yield f"This channel took {took_words(summary.took)}."
    if words := replaced_words(summary):
        yield f"Parts replaced: {clean(words)}"
    changed = _few(as_found_as_left(summary))
    if changed:
        yield "As found, as left:"
        yield from (f"  {change_line(change, FOUND_LEFT)}" for change in changed)
    earlier = last_before(summary, folder)
    if earlier.summary is not None:
        comparison = compare(earlier.summary, summary)
        differences = _few(comparison.changes)
        if differences:
            last = earlier.summary
            said = f"{last.begun[:10]}, {last.opened.procedure_name}, {verdict_words(last)}"
            yield f"Against the last record of this unit ({clean(said)}):"
            yield from (f"  {change_line(change, ('before', 'now'))}" for change in differences)
            if last.opened.design_sha256 != summary.opened.design_sha256:
                yield "  The design is not the same as it was then."
    for sentence in earlier.passed_over:
        yield clean(sentence)


def _few(changes: Sequence[Change]) -> list[Change]:
    """Return the most telling of those that were read both times."""
    both = [
        change
        for change in changes
        if change.before is not None and change.after is not None and KEY_POINTS.fullmatch(change.point)
    ]
    rank = {point: number for number, point in enumerate(_FIRST)}
    return sorted(both, key=lambda change: rank.get(change.point, len(rank)))[:MOST_LINES]
