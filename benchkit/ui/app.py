"""The app around the screens: it puts the session's questions, keeps the heartbeat, and gets everybody out safely.

Rules
-----
* *One key, one meaning.*  F9 switches off, always; Delete does too, unless an entry has the focus.  The space bar only
  ever takes a reading: a foot that comes down twice must not end a walk, and a hand that is used to it as a way to
  switch off must not take a reading instead.
* *Off first.*  The off key, leaving, a signal, a terminal that has gone and an error of our own all ask for off before
  anything else, through the one callable `off_now`; it must be quick, callable from any thread and more than once.
* The heartbeat comes from the event loop that also handles keys: when the loop hangs, it stops, and the keeper acts.
* No handler waits.  What takes time is a task of its own.
* The session runs as a task of this loop; it sees a `Front` and nothing else.
"""

from __future__ import annotations

import asyncio
import contextlib
import os
import tempfile
from collections.abc import Callable, Coroutine
from dataclasses import dataclass
from pathlib import Path
from typing import Any, ClassVar, Final

from textual.app import App
from textual.binding import Binding
from textual.widgets import Input

from benchkit.errors import BenchkitError
from benchkit.events import Closed
from benchkit.procedure.actions import Question
from benchkit.session.front import Reply, SupplyView, View
from benchkit.ui import platform
from benchkit.ui.before import before_the_walk, left_before_the_walk
from benchkit.ui.entry import Identity, Opening, Start
from benchkit.ui.own_error import write_log
from benchkit.ui.painting import Painter
from benchkit.ui.screen_front import ScreenFront
from benchkit.ui.screens.leave import LeaveScreen
from benchkit.ui.screens.start import StartScreen
from benchkit.ui.screens.walk import WalkScreen
from benchkit.ui.series import NEXT
from benchkit.ui.sheet import SHEET, THEME
from benchkit.ui.widgets.answer import GUARD_S
from benchkit.ui.widgets.scroll_bar import use_whole_cells

HEARTBEAT_S: Final = 0.2
PAINT_S: Final = 0.1
CLOSE_WITHIN_S: Final = 3.0
"""How long leaving waits for the session to switch off and close its record (s)."""

CLOSE_WHEN_OFF_S: Final = 1.0
"""The same while the supply is known to be off and the walk keeps its place (s)."""

CLOSE_WHEN_TOLD_S: Final = 1.0
"""The same when told to go from outside: well inside the hard exit (s)."""

WATCHED: Final = ("trim", "probes", "watch")
"""Kinds of questions beside which a reading of the moment may be shown."""

STOPPED: Final = 4
OWN_ERROR: Final = 5


@dataclass
class _Pending:
    question: Question
    refused: str
    reply: asyncio.Future[Reply]


class BenchApp(App[int]):
    """The screens of one walk or rehearsal.

    Parameters
    ----------
    start : callable
        Runs the walk before a front end, for a unit and an operator; called when the person begins.
    off_now : callable
        Switches the supply off; takes the reason; quick, idempotent, from any thread; harmless before the walk.
    heartbeat : callable
        Called every `HEARTBEAT_S` on the event loop.
    opening : Opening
        What the start screen shows.
    identity : Identity or None
        When given, the start screen is left out.
    log_dir : Path or None
        Where an error of our own is written down; None: the directory for temporary files.
    guard_s : float
        Keys this soon after a question came up are not taken for its answer (s).
    bell : bool
        Ring when a reading was taken by itself.  What did not pass rings always, and so does a supply of which nobody
        knows whether it is on.
    """

    CSS = SHEET
    TITLE = "benchkit"
    ENABLE_COMMAND_PALETTE = False
    BINDINGS: ClassVar[list[Any]] = [
        Binding("f9", "off_at_once", "off", show=False, priority=True),
        Binding("delete", "off_by_delete", "off", show=False, priority=True),
        Binding("ctrl+q", "quit", "leave", show=False, priority=True),
        Binding("ctrl+c", "quit", "leave", show=False, priority=True),
    ]

    def __init__(
        self,
        start: Start,
        *,
        off_now: Callable[[str], object],
        heartbeat: Callable[[], object],
        opening: Opening,
        identity: Identity | None = None,
        log_dir: Path | None = None,
        guard_s: float = GUARD_S,
        bell: bool = True,
    ) -> None:
        super().__init__(ansi_color=True if os.environ.get("NO_COLOR") is not None else None)
        use_whole_cells()
        self.register_theme(THEME)
        self.theme = THEME.name
        self._start = start
        self._off_now = off_now
        self._heartbeat = heartbeat
        self._opening = opening
        self._identity = identity
        self._log_dir = log_dir if log_dir is not None else Path(tempfile.gettempdir())
        self._guard_s = guard_s
        self._painter = Painter(self, bell=bell, guard_s=guard_s)
        self.walk: WalkScreen | None = None
        self._walk_task: asyncio.Task[None] | None = None
        self._tasks: set[asyncio.Task[None]] = set()
        self._pending: _Pending | None = None
        self._ending: Closed | None = None
        self.off_asked = False
        self.goes_on = False
        self.crash: BaseException | None = None
        self.last_words = ""
        self.leaver: platform.Leaver | None = None
        self.before_watching: Callable[[], object] = lambda: None

    # --- life ---------------------------------------------------------------------------------------------------

    def on_mount(self) -> None:
        """Start the clocks and the first screen."""
        platform.ignore_stop_key()
        self.set_interval(HEARTBEAT_S, self._beat)
        self.set_interval(PAINT_S, self._painter.paint)
        if self._identity is not None:
            self.begin(self._identity)
        else:
            self.push_screen(StartScreen(self._opening))

    def on_unmount(self) -> None:
        """Leave no walk running behind a screen that has gone; off has been asked for by then."""
        if self._walk_task is not None:
            self._walk_task.cancel()

    def begin(self, identity: Identity) -> None:
        """Begin the walk."""
        if self._walk_task is not None:
            return
        self.walk = WalkScreen(self._guard_s)
        self._run(self._begin(self.walk, identity))

    async def _begin(self, screen: WalkScreen, identity: Identity) -> None:
        if isinstance(self.screen, StartScreen):
            await self.switch_screen(screen)
        else:
            await self.push_screen(screen)
        if self._view is None:
            screen.get_ready(self._opening.channel)
        self._walk_task = asyncio.create_task(self._walk_through(identity), name="walk")

    async def _walk_through(self, identity: Identity) -> None:
        try:
            self._ending = await self._start(ScreenFront(self), identity)
        except BenchkitError as error:
            self.call_off("the walk can't go on")
            self.last_words = error.message
            self.exit(error.exit_status)
        except Exception as error:
            self._handle_exception(error)

    def _beat(self) -> None:
        self._heartbeat()

    def _run(self, work: Coroutine[Any, Any, None]) -> None:
        task = asyncio.get_running_loop().create_task(work)
        self._tasks.add(task)
        task.add_done_callback(self._ran)

    def _ran(self, task: asyncio.Task[None]) -> None:
        self._tasks.discard(task)
        if not task.cancelled() and isinstance(error := task.exception(), Exception):
            self._handle_exception(error)

    # --- the session's side -------------------------------------------------------------------------------------

    @property
    def supply(self) -> SupplyView | None:
        """What is known of the supply; None before the walk has begun."""
        return self._view.supply if self._view is not None else None

    @property
    def supply_shown(self) -> SupplyView:
        """What the off line shows; before the walk has begun, that nobody has asked the supply yet."""
        return self.supply or before_the_walk(self._opening, pressed=self.off_asked)

    @property
    def _view(self) -> View | None:
        return self._painter.view

    def take_view(self, view: View) -> None:
        """Keep the newest picture, and have it painted."""
        if view.supply.energised == "off" or self._view is None:
            self.off_asked = False
        self._painter.take(view)

    async def put_question(self, question: Question, refused: str) -> Reply:
        """Put a question on the screen and wait."""
        pending = _Pending(question, refused, asyncio.get_running_loop().create_future())
        self._pending = pending
        self._painter.paint()
        if question.kind in WATCHED:
            self.before_watching()
        if self.walk is not None and not self._painter.leaving:  # whoever is leaving isn't asked any more
            self.walk.put(question, refused)
        try:
            return await pending.reply
        finally:
            if self._pending is pending:
                self._pending = None
                if self.walk is not None and self.is_running:
                    self.walk.withdraw()

    def answered(self, reply: Reply) -> None:
        """Hand an answer to the session."""
        if self._pending is not None and not self._pending.reply.done():
            self._pending.reply.set_result(reply)

    @property
    def next_label(self) -> str:
        """What may come after this walk, "" for nothing."""
        return self._opening.next_label

    def finish(self, choice: str = "") -> None:
        """Leave after the end of the walk, with its exit status, to go on with the next one or for good."""
        self.goes_on = choice == NEXT
        self._run(self._leave("", self._status_of_end()))

    @property
    def _keeps_place(self) -> bool:
        """Whether the off key has nothing to switch off: the walk stays where it is."""
        return self.supply is not None and (self.supply.energised == "off" or self.supply.never_on)

    @property
    def _walk_stopped(self) -> bool:
        return self._view is not None and bool(self._view.stopped)

    def _status_of_end(self) -> int:
        if self._ending is not None:
            return self._ending.exit_status
        status = self._view.exit_status if self._view is not None else None
        return status if status is not None else STOPPED

    # --- off and out --------------------------------------------------------------------------------------------

    def call_off(self, reason: str) -> None:
        """Ask for off; never fails, never waits."""
        self.off_asked = self._view is not None and not self._keeps_place
        with contextlib.suppress(Exception):
            self._off_now(reason)

    def check_action(self, action: str, parameters: tuple[object, ...]) -> bool | None:
        """Leave the keys that an entry has a use for to the entry that has the focus."""
        if action == "off_by_delete":
            return not isinstance(self.focused, Input)
        return True

    def action_off_at_once(self) -> None:
        """Switch off at once."""
        self.call_off("the operator asked for off")
        self.off_asked = self.off_asked or self._view is None
        self._painter.refresh_off_lines()
        self._painter.flash()

    def action_off_by_delete(self) -> None:
        """Switch off at once, when there is anything to switch off."""
        if self.supply is not None and not self._keeps_place:
            self.action_off_at_once()

    async def action_quit(self) -> None:
        """Leave; while the supply is on or may be, only after asking."""
        if self._painter.leaving or isinstance(self.screen, LeaveScreen):
            return
        if self.supply is None or self._keeps_place:
            self._begin_leaving()
        else:
            self.push_screen(LeaveScreen(self.supply), self._on_leave)

    def _on_leave(self, leave: bool | None) -> None:
        if leave:
            self._begin_leaving()

    def _begin_leaving(self) -> None:
        if self.walk is None:
            self.last_words = left_before_the_walk(self._opening)
        ended = self._ending is not None or (self._view is not None and self._view.exit_status is not None)
        self._run(self._leave("the operator left", self._status_of_end() if ended else STOPPED))

    async def _leave(self, reason: str, status: int, within_s: float | None = None) -> None:
        """Off first, then give the session a moment to close its record, then go."""
        if self._painter.leaving:
            return
        self._painter.leaving = True
        if self.walk is not None and self._pending is not None and self.walk.is_mounted:
            self.walk.withdraw()
            self._painter.say(self.walk)
        if reason:
            self.call_off(reason)
        task = self._walk_task
        if task is not None and not task.done():
            if (self._keeps_place and not self._walk_stopped) or (self.supply is not None and self.supply.by_hand):
                within_s = min(
                    CLOSE_WHEN_OFF_S, CLOSE_WITHIN_S
                )  # nothing is closed: the walk keeps its place, or only a person could end it
            _, waiting = await asyncio.wait({task}, timeout=CLOSE_WITHIN_S if within_s is None else within_s)
            if waiting:
                task.cancel()
                await asyncio.wait({task}, timeout=0.3)
        self.exit(status)

    def leave_from_outside(self, reason: str) -> None:
        """Leave because of a signal; called from another thread, off has been asked for already."""
        self.last_words = self.last_words or f"Stopped from outside ({reason}); the supply was told to switch off."
        loop = self._loop
        if loop is not None:
            loop.call_soon_threadsafe(lambda: self._run(self._leave("", STOPPED, within_s=CLOSE_WHEN_TOLD_S)))

    def _handle_exception(self, error: Exception) -> None:
        """Off first, then one plain sentence and a log; nothing that could fail in its turn."""
        if self.crash is not None:
            return
        self.crash = error
        self.call_off("an error of benchkit's own")
        self._return_code = OWN_ERROR
        if self._exception is None:
            self._exception = error
            self._exception_event.set()
        where = write_log(self._log_dir, error)
        self.last_words = (
            f"benchkit made an error of its own ({type(error).__name__}); the supply was told to switch off: "
            f"look whether it is off.{where}"
        )
        if self.leaver is not None:
            self.leaver.last_words = self.last_words
            self.leaver.exit_status = OWN_ERROR
            self.leaver.ask("an error of benchkit's own")
        self._close_messages_no_wait()

    def panic(self, *renderables: Any) -> None:
        """Treat what the toolkit calls a panic as an error of our own."""
        self._handle_exception(RuntimeError("the screen failed"))

    def exit_status(self) -> int:
        """Return the exit status once the app has ended."""
        if self.crash is not None:
            return OWN_ERROR
        return self.return_value if self.return_value is not None else STOPPED
