"""Two records, or the two halves of a re-bias, side by side, and what to know before differences mean anything."""

from __future__ import annotations

import textwrap
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

from benchkit.record.change_table import side_by_side
from benchkit.record.facts import Result, Summary
from benchkit.record.pairing import KEY_POINTS, Change, changes
from benchkit.record.words import WIDTH, clean, replaced_words, took_words, verdict_words, wrapped

FOUND_LEFT = ("found", "left")
"""What the two sides of a re-bias are called."""

JSON_FORMAT = 1
"""The number of the form that `Comparison.as_json` returns."""


@dataclass(frozen=True, kw_only=True)
class Comparison:
    """What changed between two records.

    Parameters
    ----------
    before, after : Summary
        In the order in which they were named; "change" is always after less before.
    changes : tuple of Change
        Of the points in `benchkit.record.pairing.KEY_POINTS`.
    remarks : tuple of str
        What has to be known before the differences mean anything: another unit, another design, a broken record.
    """

    before: Summary
    after: Summary
    changes: tuple[Change, ...]
    remarks: tuple[str, ...]

    @property
    def both(self) -> tuple[Change, ...]:
        """Those that both records have."""
        return tuple(change for change in self.changes if change.before is not None and change.after is not None)

    def as_json(self) -> dict[str, Any]:
        """Return the comparison for a program."""
        return {
            "format": JSON_FORMAT,
            "before": _who(self.before),
            "after": _who(self.after),
            "remarks": list(self.remarks),
            "changes": [change.as_json() for change in self.changes],
        }

    def as_text(self) -> str:
        """Return the whole comparison as text, without a line feed at the end."""
        return "\n".join(line.rstrip() for line in self._lines())

    def _lines(self) -> Iterator[str]:
        yield "TWO RECORDS COMPARED"
        yield "===================="
        for name, summary in (("Before", self.before), ("After", self.after)):
            yield ""
            yield from _about(name, summary)
        yield ""
        yield from self.body()

    def body(self) -> Iterator[str]:
        """Yield the lines from the remarks on."""
        for remark in self.remarks:
            yield from wrapped(clean(remark), "- ")
        if self.remarks:
            yield ""
        yield from side_by_side(self.changes, ("before", "after"))


def as_found_as_left(summary: Summary) -> tuple[Change, ...]:
    """Return what the unit read as it was found and as it is left; () where the procedure marks no such sections."""
    found = [result for result in summary.results if result.part == "found"]
    left = [result for result in summary.results if result.part == "left"]
    return changes(found, left) if found else ()


def compare(before: Summary, after: Summary) -> Comparison:
    """Put two records side by side."""
    return Comparison(
        before=before,
        after=after,
        changes=changes(_key(before), _key(after)),
        remarks=tuple(_remarks(before, after)),
    )


def _key(summary: Summary) -> list[Result]:
    return [result for result in summary.results if KEY_POINTS.fullmatch(result.subject)]


def _remarks(before: Summary, after: Summary) -> Iterator[str]:
    for summary in (before, after):
        if summary.record.status == 2:
            yield f"{summary.record.path.name} is BROKEN: {summary.record.message} Nothing from that line on counts."
        elif summary.closed is None:
            yield f"{summary.record.path.name} is unfinished: what was still to be read is missing."
    one, other = before.opened, after.opened
    for what, first, second in (
        ("units", one.unit.strip(), other.unit.strip()),
        ("channels", one.channel.strip() or "the only one", other.channel.strip() or "the only one"),
        ("kinds of walk", one.kind, other.kind),
        ("procedures", one.procedure_name, other.procedure_name),
    ):
        if first != second:
            yield f"These are different {what}: {first} and {second}."
    if one.design_sha256 != other.design_sha256:
        names = (
            f"{one.design_name} and {other.design_name}"
            if one.design_name != other.design_name
            else f"two states of {one.design_name}"
        )
        yield f"The designs differ: {names}."
    if after.begun < before.begun:
        yield "The record named second was begun first."
    if words := replaced_words(after):
        yield f"Parts replaced in {after.record.path.name}: {words}"


def _about(name: str, summary: Summary) -> Iterator[str]:
    opened = summary.opened
    channel = f", channel {opened.channel}" if opened.channel else ""
    kind = ", a rehearsal" if opened.kind == "rehearsal" else ""
    words = f"{opened.unit}{channel}: {opened.procedure_name}, {opened.design_name}{kind}; {verdict_words(summary)}"
    yield from textwrap.wrap(
        clean(words), WIDTH, initial_indent=f"{name:<8}", subsequent_indent=" " * 8, break_on_hyphens=False
    )
    took = f", {took_words(summary.took)}" if summary.took is not None else ""
    for line in (f"{summary.begun}, {opened.operator}{took}", summary.record.path.name):
        yield f"{'':<8}{clean(line)}"


def _who(summary: Summary) -> dict[str, Any]:
    opened = summary.opened
    return {
        "record": summary.record.as_json(),
        "kind": opened.kind,
        "unit": opened.unit,
        "channel": opened.channel,
        "operator": opened.operator,
        "design": {"name": opened.design_name, "sha256": opened.design_sha256},
        "procedure": {"name": opened.procedure_name, "sha256": opened.procedure_sha256},
        "begun": summary.begun,
        "verdict": summary.verdict if summary.record.status == 0 else None,
    }
