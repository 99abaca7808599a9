"""What all texts made from records share: escaping, lines of prose, quantities, verdicts, lengths of time."""

from __future__ import annotations

import re
import textwrap
from collections.abc import Iterator
from typing import Final

from benchkit.events import Waited
from benchkit.quantities import Overload, show_within
from benchkit.record.facts import Summary, Took

WIDTH = 100
"""The most characters that a line of prose has; a table's line may be longer where a name is."""


def clean(text: str) -> str:
    """Return `text` with everything that is no printable character escaped."""
    return "".join(
        letter if letter.isprintable() else letter.encode("unicode_escape").decode("ascii") for letter in text
    )


def heading(text: str) -> Iterator[str]:
    """Yield a heading and the line under it."""
    yield text
    yield "-" * len(text)


_KEPT: Final = "\u00a0"
_BEFORE_UNIT: Final = re.compile(r"(?<=\d) (?=%|(?:[fpnumkM]?(?:V|A|ohm|W|F|J|Hz|s)|degC|K|min|h)\b)")


def wrapped(text: str, bullet: str = "") -> Iterator[str]:
    """Yield prose in lines, the first with a bullet; a number stays with its unit.

    Examples
    --------
    >>> list(wrapped(f"{'a' * (WIDTH - 4)} 1.0 % of it")) == ["a" * (WIDTH - 4), "1.0 % of it"]
    True
    """
    lines = textwrap.wrap(
        _BEFORE_UNIT.sub(_KEPT, text),
        WIDTH,
        initial_indent=bullet,
        subsequent_indent=" " * len(bullet),
        break_on_hyphens=False,
    )
    yield from (line.replace(_KEPT, " ") for line in lines)


def quantity(value: float | Overload | None, unit: str, digits: int = 4, uncertainty: float | None = None) -> str:
    """Return a quantity, a dash for none; what has a unit of its own, or none, is shown as it is."""
    if value is None:
        return "-"
    try:
        return show_within(value, unit, uncertainty, digits)
    except ValueError:  # a rule's number may have a unit of its own, or none
        return f"{value:.{digits}g} {unit}".strip() if isinstance(value, float) else "overload"


def verdict_words(summary: Summary) -> str:
    """Return the verdict in words, or why there is none."""
    if summary.record.status == 2:
        return "NONE: the record is broken"
    if summary.closed is None:
        return "NONE: the walk was not finished"
    stopped = f", stopped: {summary.closed.stopped}" if summary.closed.stopped else ""
    return summary.closed.verdict.upper() + stopped


def time_words(seconds: float) -> str:
    """Return a length of time.

    Examples
    --------
    >>> time_words(59.7), time_words(192.0), time_words(3700.0)
    ('1 min 0 s', '3 min 12 s', '1 h 1 min 40 s')
    """
    whole = max(0, round(seconds))
    hours, minutes = whole // 3600, whole // 60 % 60
    words = f"{hours} h {minutes} min " if hours else (f"{minutes} min " if minutes else "")
    return f"{words}{whole % 60} s"


def took_words(took: Took | None) -> str:
    """Return the time of a channel against its target; "" where it isn't known.

    Examples
    --------
    >>> took_words(Took(seconds=192.0, target_s=300.0))
    '3 min 12 s, target 5 min 0 s'
    >>> took_words(Took(seconds=400.0, target_s=300.0))
    '6 min 40 s, target 5 min 0 s: 1 min 40 s over'
    """
    if took is None:
        return ""
    words = time_words(took.seconds)
    if took.target_s is None:
        return words
    words += f", target {time_words(took.target_s)}"
    over = took.seconds - took.target_s
    return f"{words}: {time_words(over)} over" if round(over) > 0 else words


def replaced_words(summary: Summary) -> str:
    """Return which parts were replaced, in the operator's words; "" where nobody was asked."""
    said = [one for one in summary.replaced if one.parts.strip()]
    if not said:
        return "none" if summary.replaced else ""
    words = "; ".join(one.parts.strip() for one in said)
    return f"{words} (semiconductors among them)" if any(one.semiconductors for one in said) else words


def soak_words(waited: Waited) -> str:
    """Return how a soak went: how long it was, whether it came to rest, and where it was heading."""
    words = f"{time_words(waited.seconds)}, {'settled' if waited.settled else 'NOT settled'}"
    if waited.final is None:
        return words
    spread = None if waited.low is None or waited.high is None else (waited.high - waited.low) / 2.0
    words += f"; {clean(waited.point)} heading for {quantity(waited.final, waited.unit, uncertainty=spread)}"
    if waited.low is None or waited.high is None:
        return words
    low, high = (quantity(value, waited.unit, uncertainty=spread) for value in (waited.low, waited.high))
    return f"{words} (95 %: {low} to {high})"
