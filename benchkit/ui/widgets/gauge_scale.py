"""Where the limits, the reading and its uncertainty lie on a line of characters.

The scale depends on the limits alone, never on the reading: a needle that moves while its scale stays tells more than
both moving.  Limits lie at one fifth and four fifths of the width.  A reading beyond the scale is drawn at its end as
``<`` or ``>``, and says so.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

MARGIN: Final = 1.0 / 3.0
"""What is shown beyond each limit, as a share of the distance between them: puts the limits at 1/5 and 4/5."""

DESIGN: Final = "design"
THIS_UNIT: Final = "this unit"
"""What the two kinds of limits are called wherever both are shown."""

COVERAGE: Final = 2.0
"""Standard uncertainties that the drawn line reaches to each side of the reading."""


@dataclass(frozen=True, kw_only=True)
class Scale:
    """A linear scale of `width` cells from `start` at the middle of the first to `end` at the middle of the last."""

    width: int
    start: float
    end: float

    def cell(self, value: float) -> int:
        """Return the cell of `value`, from 0 to ``width - 1``; values beyond the ends give the end cells."""
        if not math.isfinite(value):
            return 0 if value == -math.inf else self.width - 1
        share = (value - self.start) / (self.end - self.start)
        if not math.isfinite(share * self.width):  # far beyond an end of a very narrow scale
            return 0 if value < self.start else self.width - 1
        return min(self.width - 1, max(0, math.floor(share * (self.width - 1) + 0.5)))

    def beyond(self, value: float) -> int:
        """Return -1 when `value` lies before the first cell, +1 when after the last, else 0."""
        step = (self.end - self.start) / (2 * (self.width - 1)) if self.width > 1 else 0.0
        if value < self.start - step:
            return -1
        return 1 if value > self.end + step else 0


@dataclass(frozen=True, kw_only=True)
class GaugeRows:
    """Rows of equal width: needle, band, the figures of the limits under their marks, and those of this unit.

    `unit` is "" where this unit has no limits of its own.
    """

    needle: str
    band: str
    figures: str
    unit: str = ""


def scale_for(width: int, low: float | None, high: float | None, value: float | None = None) -> Scale | None:
    """Return the scale for limits of which one may be missing, or None when both are.

    With one limit only, the scale spans once the limit's own size (or the reading's distance, if that is more).
    """
    if width < 3:
        return None
    if low is not None and high is not None:
        span = high - low
        if span <= 0.0:
            span = max(abs(high), 1e-12) * 0.1
        return Scale(width=width, start=low - MARGIN * span, end=high + MARGIN * span)
    edge = high if high is not None else low
    if edge is None:
        return None
    reach = max(abs(edge), abs(value - edge) if value is not None else 0.0, 1e-12)
    if high is not None:
        return Scale(width=width, start=edge - reach * 1.25, end=edge + reach * 0.4)
    return Scale(width=width, start=edge - reach * 0.4, end=edge + reach * 1.25)


def gauge_rows(
    width: int,
    value: float | None,
    low: float | None,
    high: float | None,
    *,
    uncertainty: float | None = None,
    target: float | None = None,
    low_text: str = "",
    high_text: str = "",
    unit_low: float | None = None,
    unit_high: float | None = None,
    unit_text: str = "",
) -> GaugeRows | None:
    """Return the gauge as text, or None when there is nothing to draw it against.

    Parameters
    ----------
    width : int
        Cells.
    value, low, high, target, uncertainty : float or None
        In one unit; `uncertainty` is the standard one, drawn `COVERAGE` times to each side.
    low_text, high_text : str
        Figures to put under the limits.
    unit_low, unit_high, unit_text : float or None, str
        This unit's limits inside the design's: shaded in the band, and named in a row of their own.

    Examples
    --------
    >>> rows = gauge_rows(31, 0.0, -3.0, 3.0, uncertainty=0.5, low_text="-3 V", high_text="3 V")
    >>> print(rows.needle.rstrip()); print(rows.band); print(rows.figures.rstrip())
                ├──▼──┤
    ░░░░░░├═════════════════┤░░░░░░
        -3 V               3 V
    """
    scale = scale_for(width, low, high, value)
    if scale is None:
        return None
    band = ["░"] * width
    first = scale.cell(low) if low is not None else 0
    last = scale.cell(high) if high is not None else width - 1
    for at in range(first, last + 1):
        band[at] = "═"
    if target is not None and not scale.beyond(target):
        band[scale.cell(target)] = "┼"
    if unit_low is not None or unit_high is not None:
        inner_first = first if unit_low is None else scale.cell(unit_low)
        inner_last = last if unit_high is None else scale.cell(unit_high)
        for at in range(inner_first, inner_last + 1):
            band[at] = "█"
    if low is not None and band[first] != "█":
        band[first] = "├"
    if high is not None and band[last] != "█":
        band[last] = "┤"
    figures = _figures(
        width, first if low is not None else None, low_text, last if high is not None else None, high_text
    )
    if unit_text:
        figures = _named(figures, DESIGN)
    return GaugeRows(
        needle=_needle(scale, value, uncertainty),
        band="".join(band),
        figures=figures,
        unit=f"{THIS_UNIT}  {unit_text}"[:width].ljust(width) if unit_text else "",
    )


def _named(figures: str, name: str) -> str:
    """Put a name before the figures where they leave room for it."""
    room = len(figures) - len(figures.lstrip())
    return name + figures[len(name) :] if room > len(name) else figures


def _needle(scale: Scale, value: float | None, uncertainty: float | None) -> str:
    row = [" "] * scale.width
    if value is None:
        return "".join(row)
    if uncertainty is not None and uncertainty > 0.0:
        first, last = scale.cell(value - COVERAGE * uncertainty), scale.cell(value + COVERAGE * uncertainty)
        if last - first >= 2:
            for at in range(first, last + 1):
                row[at] = "─"
            row[first], row[last] = "├", "┤"
    beyond = scale.beyond(value)
    row[scale.cell(value)] = "▼" if not beyond else ("<" if beyond < 0 else ">")
    return "".join(row)


def _figures(width: int, first: int | None, low_text: str, last: int | None, high_text: str) -> str:
    row = [" "] * width
    end_of_low = 0
    if first is not None and low_text:
        start = min(max(0, first - len(low_text) // 2), max(0, width - len(low_text)))
        row[start : start + len(low_text)] = low_text[: width - start]
        end_of_low = start + len(low_text) + 1
    if last is not None and high_text:
        start = min(max(end_of_low, last - len(high_text) // 2), max(0, width - len(high_text)))
        if start >= end_of_low:
            row[start : start + len(high_text)] = high_text[: width - start]
    return "".join(row)[:width]
