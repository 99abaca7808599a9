"""The end of a walk: the verdict in words, what did not pass, how long it took, what changed, where the record is."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

from rich.console import Group
from rich.text import Text
from textual.containers import VerticalScroll

from benchkit.procedure.actions import Question
from benchkit.record.at_the_end import end_lines
from benchkit.record.show import DEFERENCE
from benchkit.session.front import View
from benchkit.session.threads import in_thread
from benchkit.ui.look import CARE, INK, QUIET, STRONG, VERDICT_COLOURS, safe
from benchkit.ui.pages.base import Page
from benchkit.ui.widgets.outcome import result_line, verdict_strip
from benchkit.ui.widgets.summary_words import NOTHING_BROKEN, broken_words, closing_sentence, still_open
from benchkit.ui.widgets.suspects_text import suspects_drawn
from benchkit.ui.widgets.trail_words import count_by_verdict
from benchkit.ui.widgets.words import Words


class SummaryPage(Page):
    """Verdict, sentence, results that did not pass, time, changes since before, record.

    Time and changes are read from the record, which may take a moment: they come when they are there.
    """

    def __init__(self, guard_s: float, **more: Any) -> None:
        super().__init__(guard_s, **more)
        self._verdict = Words(classes="summary-verdict")
        self._body = Words(classes="summary-body")
        self._enter = Words(classes="summary-enter")
        self._scroll = VerticalScroll(self._body, classes="summary-scroll", can_focus=False)
        self._view: View | None = None
        self._looked = False
        self._changes: tuple[str, ...] = ()

    def compose(self) -> Any:
        """Lay out verdict, body, answer."""
        yield self._verdict
        yield self._scroll
        yield self._enter
        yield self.answer

    def put(self, question: Question, refused: str) -> None:
        """Put the last question of all: leave, or what comes next."""
        self.question = question
        self.answer.put(question, refused)
        self._enter.say(Text(question.do, style=INK))

    def say(self, view: View) -> None:
        """Show how the walk ended; suspects of what passed in the end are no longer of use."""
        if view.verdict == "pass" and view.suspects is not None:
            view = replace(view, suspects=None)
        self._view = view
        if view.exit_status is not None and not self._looked:
            self._looked = True
            self.run_worker(self._look(Path(view.record)))
        sentence = closing_sentence(view)
        self._verdict.say(Text.assemble(verdict_strip(view.verdict), "\n\n", (safe(sentence), f"bold {STRONG}")))
        lines: list[Text] = [Text(count_by_verdict([result.verdict for result in view.results]) + ".", style=INK)]
        open_results = still_open(view.results)
        if open_results:
            lines.append(Text(""))
            for result in open_results:
                lines.append(result_line(result))
                if result.why:
                    lines.append(Text(f"    {safe(result.why)}", style=VERDICT_COLOURS[result.verdict]))
        if view.suspects is not None and not view.suspects.working:
            lines.append(Text(""))
        explained = len(lines)
        if self._changes:
            lines.append(Text(""))
            lines.extend(Text(safe(line), style=INK) for line in self._changes)
        lines.append(Text(""))
        unit = f"{view.unit}, channel {view.channel}" if view.channel else view.unit
        lines.append(Text(f"{safe(view.design)}, unit {safe(unit)}, by {safe(view.operator)}", style=INK))
        lines.append(Text(f"The record holds {view.kept} lines: {safe(view.record)}", style=INK))
        if view.broken:
            lines.append(
                Text(broken_words(view.broken), style=f"bold {CARE}" if view.broken != NOTHING_BROKEN else INK)
            )
        if view.kind == "rehearsal":
            lines.append(Text("A rehearsal on a simulated unit: it says nothing about a real one.", style=INK))
        lines.append(Text(""))
        lines.append(Text(DEFERENCE, style=QUIET))
        body = Text("\n").join(lines)
        if view.suspects is None or view.suspects.working:
            self._body.say(body)
            return
        parts = (Text("\n").join(lines[:explained]), suspects_drawn(view.suspects), Text("\n").join(lines[explained:]))
        self._body.say_drawn((body.plain, view.suspects), Group(*parts))

    async def _look(self, record: Path) -> None:
        """Read what changed out of the record, and show it."""
        self._changes = await in_thread(lambda: end_lines(record), "benchkit-record")
        if self._changes and self._view is not None:
            self.say(self._view)

    @property
    def sheet(self) -> VerticalScroll:
        """The body."""
        return self._scroll
