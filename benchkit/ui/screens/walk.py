"""The screen of a walk: head, trail, the page of the moment, message, off line."""

from __future__ import annotations

from typing import Any, ClassVar, Final

from rich.table import Table
from rich.text import Text
from textual import events
from textual.binding import BindingType
from textual.widgets import ContentSwitcher

from benchkit.procedure.actions import Question
from benchkit.session.front import READ_BY_HAND, View
from benchkit.ui.layout import ROOMY
from benchkit.ui.look import CARE, INK, LINE, QUIET, STRONG, VERDICT_COLOURS, safe
from benchkit.ui.pages.base import Page
from benchkit.ui.pages.step import DecidePage, HoldPage, StepPage
from benchkit.ui.pages.summary import SummaryPage
from benchkit.ui.pages.trim import TrimPage
from benchkit.ui.pages.watch import SoakPage, WatchPage, is_soak
from benchkit.ui.screens.base import TURN_OVER, BenchScreen
from benchkit.ui.series import end_question
from benchkit.ui.widgets.answer import Answer
from benchkit.ui.widgets.cut import Cut
from benchkit.ui.widgets.message_line import MessageLine
from benchkit.ui.widgets.trail_words import Role, trail
from benchkit.ui.widgets.words import Words

PAGE_FOR: Final[dict[str, str]] = {"hold": "hold", "decide": "decide", "trim": "trim", "watch": "watch"}
"""Page of a kind of question; every other kind has the step page."""

_ROLE_STYLES: Final[dict[Role, str]] = {
    **{verdict: f"bold {colour}" for verdict, colour in VERDICT_COLOURS.items()},
    "here": f"bold reverse {INK}",
    "coming": QUIET,
    "line": LINE,
}


def channel_time(elapsed_s: float | None, target_s: float | None) -> str:
    """Return how long this channel has taken, and what is allowed for it.

    Examples
    --------
    >>> channel_time(192.4, 300.0)
    '3:12 of 5:00  '
    """
    if elapsed_s is None:
        return ""
    allowed = f" of {_clock(target_s)}" if target_s is not None else ""
    return f"{_clock(elapsed_s)}{allowed}  "


def _clock(seconds: float) -> str:
    whole = max(0, round(seconds))  # as at the end and in the record
    return f"{whole // 60}:{whole % 60:02d}"


class WalkScreen(BenchScreen):
    """Everything between the start and the end of a walk."""

    BINDINGS: ClassVar[list[BindingType]] = TURN_OVER

    def __init__(self, guard_s: float, **more: Any) -> None:
        super().__init__(**more)
        self._head = Words(classes="walk-head")
        self._trail = Words(classes="walk-trail")
        self._message = MessageLine(classes="walk-message")
        self._pages: dict[str, Page] = {
            "step": StepPage(guard_s, id="step"),
            "hold": HoldPage(guard_s, id="hold"),
            "decide": DecidePage(guard_s, id="decide"),
            "trim": TrimPage(guard_s, id="trim"),
            "watch": WatchPage(guard_s, id="watch"),
            "soak": SoakPage(guard_s, id="soak"),
            "summary": SummaryPage(guard_s, id="summary"),
        }
        self._switcher = ContentSwitcher(*self._pages.values(), initial="step", classes="walk-pages")
        self._view: View | None = None

    def compose_body(self) -> Any:
        """Lay out from head to message."""
        yield self._head
        yield self._trail
        yield self._switcher
        yield self._message

    @property
    def page(self) -> Page:
        """The page of the moment."""
        return self._pages[self._switcher.current or "step"]

    def get_ready(self, channel: str) -> None:
        """Say what is being done before there is anything of the walk to show."""
        about = f" for channel {safe(channel)}" if channel else ""
        self.page.card.wait(f"Getting ready{about}: the record is opened and the instruments are reached.", None, None)

    def put(self, question: Question, refused: str) -> None:
        """Put a question on its page."""
        page = PAGE_FOR.get(question.kind, "step")
        soak = page == "watch" and self._view is not None and is_soak(self._view)
        self._turn_to("soak" if soak else page)
        self.page.by_hand = self._view is not None and self._view.meter == READ_BY_HAND
        self.page.put(question, refused)
        if self._view is not None:
            self.page.say(self._view)

    def withdraw(self) -> None:
        """Take the question away; a trim keeps its page until something else comes."""
        self.page.withdraw()
        if self._view is not None:
            self.page.say(self._view)

    def say(self, view: View) -> None:
        """Show a picture of the walk."""
        self._view = view
        if view.exit_status is not None and self.page.id != "summary":
            self._turn_to("summary")
            self.page.put(end_question(self.bench.next_label), "")
        elif self.page.question is None and self.page.id != "summary":
            if is_soak(view):
                self._turn_to("soak")
            elif self.page.id != "step" and (view.live is None or self.page.id == "soak"):
                self._turn_to("step")
        self._say_head(view)
        self._say_trail(view)
        self.page.say(view)
        self._say_message()
        self.refresh_off_line()

    def age(self) -> None:
        """Let a watched reading grow old in sight."""
        self.page.mark_overflow()
        self.page.age()
        self._say_message()
        if self.focused is None and self.arrangement != "tiny":
            self.page.answer.take_focus()  # whatever took it away: a question that stands has the keys

    def lay_out(self, width: int, height: int) -> None:
        """Choose the layout; head and trail have another form where there is room."""
        before = self.arrangement
        super().lay_out(width, height)
        if self.arrangement == "tiny":
            self.set_focus(None)  # nobody answers what can't be seen
        elif before == "tiny":
            self.page.answer.take_focus()
        if self._view is not None and self.is_mounted:
            self._say_head(self._view)
            self._say_trail(self._view)

    def hold_keys(self, seconds: float) -> None:
        """A reading was taken by itself: what is pressed now was meant for it."""
        for page in self._pages.values():
            page.answer.hold(seconds)

    def action_turn_over(self, rows: int) -> None:
        """Move the sheet."""
        self.page.turn_over(rows)

    def on_key(self, event: events.Key) -> None:
        """Take the space bar, and what is typed between two questions, where it belongs to the second."""
        if self.arrangement != "tiny" and self.page.answer.type_ahead(event):  # nobody answers what can't be seen
            event.stop()
        elif self.arrangement != "tiny" and self.page.take_key(event.key):
            event.stop()
            event.prevent_default()

    def on_answer_given(self, message: Answer.Given) -> None:
        """Hand the answer on."""
        message.stop()
        if self.page.id == "summary":
            self.bench.finish(message.reply.choice)
        else:
            self.bench.answered(message.reply)

    def _turn_to(self, page: str) -> None:
        if self._switcher.current != page:
            lost = self.page.answer.make_way()
            self.page.turn_away()
            self._switcher.current = page
            self.page.answer.stray = lost

    def _say_message(self) -> None:
        """Show the message; beside a plot it has one row, and comes part by part."""
        if self._view is None:
            return
        roomy = self.arrangement == "roomy"
        most = 3 if roomy else 1 if self.page.id in ("trim", "soak") else 2
        self._message.set_class(self._view.message.startswith("STOPPED: tripped"), "tripped")
        self._message.put(self._view.message, self.app.size.width - 2, most)

    def _say_head(self, view: View) -> None:
        row = Table.grid(expand=True)
        row.add_column(ratio=1, no_wrap=True, overflow="crop")
        row.add_column(justify="right", no_wrap=True, overflow="crop")
        left = Text.assemble(
            (safe(view.design), f"bold {STRONG}"),
            (f"  channel {safe(view.channel)}" if view.channel else "", f"bold {INK}"),
            (f"  unit {safe(view.unit)}", INK),
            (f"  {safe(view.operator)}", QUIET),
        )
        over = view.elapsed_s is not None and view.target_time_s is not None and view.elapsed_s > view.target_time_s
        kept = f"{view.kept} {'line' if view.kept == 1 else 'lines'} kept"
        if view.elapsed_s is not None and self.app.size.width < ROOMY[0]:
            kept = f"{view.kept} kept"
        right = Text.assemble(
            "  ",
            (channel_time(view.elapsed_s, view.target_time_s), f"bold {CARE}" if over else INK),
            ("rehearsal  " if view.kind == "rehearsal" else "", f"bold {CARE}"),
            (kept, QUIET),
        )
        row.add_row(Cut(left), right)
        self._head.say_drawn((left.plain, right.plain, self.app.size.width), row)

    def _say_trail(self, view: View) -> None:
        width = max(20, self.app.size.width - 2)
        text = Text()
        for piece in trail(view.sections, width, spelled=self.arrangement == "roomy"):
            text.append(piece.text, style=_ROLE_STYLES[piece.role])
        self._trail.say(text)
