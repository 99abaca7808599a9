"""What changed, as lines of text: the whole table, and the few lines that stand at the end of a walk."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

from benchkit.quantities import Overload
from benchkit.record.facts import Result
from benchkit.record.pairing import Change, rails_words
from benchkit.record.words import clean, quantity, wrapped


def changes_table(changes: Sequence[Change], names: tuple[str, str]) -> Iterator[str]:
    """Yield a table, one row a test point: before, after, change, limits, and what must be said of them.

    Parameters
    ----------
    changes : sequence of Change
    names : tuple of str
        What before and after are called, such as "found" and "left".
    """
    rows: list[tuple[str, ...]] = [("", *names, "change", "", "lowest", "highest", "")]
    rows += [_row(change, names) for change in changes]
    widths = [max(len(row[column]) for row in rows) for column in range(len(rows[0]))]
    for row in rows:
        cells = [
            row[0].ljust(widths[0]),
            *(cell.rjust(width) for cell, width in zip(row[1:7], widths[1:7], strict=True)),
        ]
        yield "  ".join(cell for cell, width in zip((*cells, row[7]), widths, strict=True) if width).rstrip()


def side_by_side(changes: Sequence[Change], names: tuple[str, str]) -> Iterator[str]:
    """Yield the table of what was read both times, and the names of what was read only once."""
    both = [change for change in changes if change.before is not None and change.after is not None]
    if both:
        yield from changes_table(both, names)
    else:
        yield "No reading stands on both sides: there is nothing to compare."
    for name, alone in (
        (names[0], [change.point for change in changes if change.after is None]),
        (names[1], [change.point for change in changes if change.before is None]),
    ):
        if alone:
            as_ = "as " if name in ("found", "left") else ""
            yield from wrapped(f"Read only {as_}{name}: {clean(', '.join(alone))}.")


def change_line(change: Change, names: tuple[str, str]) -> str:
    """Return one change in one line, such as ``emitter.upper.1  found 31.20 mV, left 20.05 mV (-36 %)``."""
    words = (
        f"{clean(change.point)}  {names[0]} {reading_words(change.before)}, {names[1]} {reading_words(change.after)}"
    )
    if share := share_words(change):
        words += f" ({share})"
    return f"{words}; {said}" if (said := remark(change, names)) else words


def share_words(change: Change) -> str:
    """Return a change as a share of the reading before, "" where that says nothing."""
    share = change.share
    if share is None or change.moved is False or abs(share) >= 100.0:
        return ""
    return f"{share:+.1%}".replace("%", " %") if abs(share) < 0.1 else f"{share:+.0%}".replace("%", " %")


def remark(change: Change, names: tuple[str, str]) -> str:
    """Return what must be said of a change; "" where nothing has to be."""
    if change.before is None or change.after is None:
        return ""
    said = []
    if not change.same_rails:
        said.append(
            f"{names[0]} at {rails_words(change.before.rails_v)}, {names[1]} at {rails_words(change.after.rails_v)}"
        )
    if change.moved is False:
        said.append("within the meters' uncertainty")
    said += [f"{name}: {one.verdict}" for name, one in zip(names, (change.before, change.after), strict=True)
             if one.verdict in ("fail", "undecided")]  # fmt: skip
    return "; ".join(said)


def reading_words(result: Result | None) -> str:
    """Return what was read, a dash for nothing."""
    if result is None or result.reading is None:
        return "-"
    return quantity(result.reading.measured, result.reading.unit, uncertainty=result.reading.standard_uncertainty)


def _row(change: Change, names: tuple[str, str]) -> tuple[str, ...]:
    low, high = change.limits()
    return (
        clean(change.point),
        reading_words(change.before),
        reading_words(change.after),
        _amount(change),
        share_words(change),
        quantity(low, change.unit),
        quantity(high, change.unit),
        remark(change, names),
    )


def _amount(change: Change) -> str:
    amount: float | Overload | None = change.amount
    text = quantity(amount, change.unit, uncertainty=change.uncertainty)
    return f"+{text}" if change.amount is not None and change.amount > 0.0 else text
