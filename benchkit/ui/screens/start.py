"""The first screen: what this is, whom it defers to, what is about to happen, which unit, and who."""

from __future__ import annotations

from typing import Any, ClassVar

from rich.table import Table
from rich.text import Text
from textual.binding import BindingType
from textual.containers import Vertical, VerticalScroll
from textual.widgets import Input

from benchkit.record.show import DEFERENCE
from benchkit.ui.entry import Identity, Opening, entry_problem
from benchkit.ui.look import CARE, INK, QUIET, STRONG, safe
from benchkit.ui.screens.base import TURN_OVER, BenchScreen
from benchkit.ui.widgets.words import Words

OTHER = "  Tab: the other entry."


class StartScreen(BenchScreen):
    """Two entries; Enter in the last one begins."""

    BINDINGS: ClassVar[list[BindingType]] = TURN_OVER

    def __init__(self, opening: Opening, **more: Any) -> None:
        super().__init__(**more)
        self._opening = opening
        self._unit = Input(opening.unit, id="unit", compact=True, select_on_focus=True, disabled=opening.resumed)
        self._operator = Input(
            opening.operator, id="operator", compact=True, select_on_focus=True, disabled=opening.another_unit
        )
        self._hint = Words(classes="start-hint")
        self._begun = False
        self._body = VerticalScroll(classes="start-body", can_focus=False)

    def compose_body(self) -> Any:
        """Lay out title, facts, entries."""
        with self._body:
            yield Words(classes="start-title").with_words(_title(self._opening))
            yield Words(DEFERENCE, classes="start-deference")
            yield Words(classes="start-facts").with_words(_facts(self._opening))
        with Vertical(classes="start-entries"):
            yield Words("unit's serial number", classes="start-label")
            yield self._unit
            yield Words("operator", classes="start-label")
            yield self._operator
        yield self._hint

    def on_mount(self) -> None:
        """Begin at the serial number."""
        alone = self._opening.another_unit
        self._hint.say(f"Enter: {'begin' if alone else 'next, then begin'}.  Ctrl+Q: leave.{'' if alone else OTHER}")
        (self._operator if self._unit.disabled else self._unit).focus()

    def action_turn_over(self, rows: int) -> None:
        """Move what is longer than its room."""
        self._body.scroll_relative(y=rows, animate=False)

    def on_input_submitted(self, message: Input.Submitted) -> None:
        """Go on to the other entry, or begin."""
        message.stop()
        if self._begun:
            return
        problems = (
            (self._unit, entry_problem("serial number", self._unit.value)),
            (self._operator, entry_problem("operator", self._operator.value)),
        )
        if message.input is self._unit and not problems[0][1] and not self._operator.disabled:
            self._operator.focus()
            return
        for entry, problem in problems:
            if problem:
                self._hint.say(problem)
                self._hint.add_class("refused")
                entry.focus()
                return
        self._begun = True
        self.bench.begin(Identity(unit=self._unit.value.strip(), operator=self._operator.value.strip()))


def _title(opening: Opening) -> Text:
    kind = "a rehearsal on a simulated unit" if opening.kind == "rehearsal" else "a walk on a real unit"
    if opening.resumed:
        kind += ", gone on with where it was cut off"
    elif opening.another_unit:
        kind += ": the next one, type or scan its number"
    return Text.assemble(("benchkit", f"bold {STRONG}"), (f"  {kind}", f"bold {CARE}"))


def _facts(opening: Opening) -> Table:
    table = Table.grid(padding=(0, 2, 0, 0))
    table.add_column(justify="right", no_wrap=True)
    table.add_column(ratio=1)
    for label, words in (
        ("procedure", opening.procedure),
        ("", opening.purpose),
        ("design", opening.design),
        ("channel", opening.channel),
        ("meter", opening.meter),
        ("supply", opening.supply),
        ("record", opening.record),
    ):
        if words:
            table.add_row(Text(label, style=QUIET), Text(safe(words), style=INK if label else QUIET))
    return table
