"""A reading against its limits, with its uncertainty."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, ClassVar

from rich.segment import Segment
from rich.style import Style
from textual.strip import Strip
from textual.widget import Widget

from benchkit.events import Verdict
from benchkit.ui.look import FAIL, INK, LINE, PASS, QUIET, STRONG, UNDECIDED, safe
from benchkit.ui.widgets.gauge_scale import gauge_rows


@dataclass(frozen=True, kw_only=True)
class Gauged:
    """What a gauge shows."""

    value: float | None = None
    low: float | None = None
    high: float | None = None
    uncertainty: float | None = None
    target: float | None = None
    low_text: str = ""
    high_text: str = ""
    unit_low: float | None = None
    unit_high: float | None = None
    unit_text: str = ""
    verdict: Verdict | None = None


class Gauge(Widget):
    """Needle with its uncertainty, band of the limits, the limits' figures, and this unit's where it has its own."""

    COMPONENT_CLASSES: ClassVar[set[str]] = {
        "gauge--needle",
        "gauge--pass",
        "gauge--fail",
        "gauge--undecided",
        "gauge--outside",
        "gauge--figures",
        "gauge--unit",
    }
    DEFAULT_CSS = f"""
    Gauge {{ height: 3; }}
    Gauge > .gauge--needle {{ color: {STRONG}; text-style: bold; }}
    Gauge > .gauge--pass {{ color: {PASS}; text-style: bold; }}
    Gauge > .gauge--fail {{ color: {FAIL}; text-style: bold; }}
    Gauge > .gauge--undecided {{ color: {UNDECIDED}; text-style: bold; }}
    Gauge > .gauge--outside {{ color: {LINE}; }}
    Gauge > .gauge--figures {{ color: {QUIET}; }}
    Gauge > .gauge--unit {{ color: {INK}; }}
    """

    def __init__(self, **more: Any) -> None:
        super().__init__(**more)
        self._gauged = Gauged()

    def say(self, gauged: Gauged) -> None:
        """Show `gauged`."""
        if gauged != self._gauged:
            self._gauged = gauged
            self.styles.height = 4 if gauged.unit_text else 3
            self.refresh()

    def render_line(self, y: int) -> Strip:
        """Draw one row."""
        width = self.size.width
        shown = self._gauged
        rows = gauge_rows(
            width,
            shown.value,
            shown.low,
            shown.high,
            uncertainty=shown.uncertainty,
            target=shown.target,
            low_text=safe(shown.low_text),
            high_text=safe(shown.high_text),
            unit_low=shown.unit_low,
            unit_high=shown.unit_high,
            unit_text=safe(shown.unit_text),
        )
        if rows is None:
            return Strip.blank(width, self.rich_style)
        if y == 0:
            kind = f"gauge--{shown.verdict}" if shown.verdict else "gauge--needle"
            return Strip([Segment(rows.needle, self._style(kind))], width)
        if y == 1:
            return Strip(self._band(rows.band), width)
        row = {2: rows.figures, 3: rows.unit}.get(y, "")
        if not row:
            return Strip.blank(width, self.rich_style)
        return Strip([Segment(row, self._style("gauge--figures" if y == 2 else "gauge--unit"))], width)

    def _band(self, band: str) -> list[Segment]:
        inside = self.get_component_rich_style("gauge--needle")
        outside = self._style("gauge--outside")
        segments: list[Segment] = []
        for character in band:
            style = outside if character == "░" else inside
            if segments and segments[-1].style == style:
                segments[-1] = Segment(segments[-1].text + character, style)
            else:
                segments.append(Segment(character, style))
        return segments

    def _style(self, kind: str) -> Style:
        return self.get_component_rich_style(kind)
