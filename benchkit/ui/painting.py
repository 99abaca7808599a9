"""When a picture of the walk goes onto the screen, and what rings and flashes with it.

Rules
-----
* A new picture is painted at once, but not sooner than `LEAST_PAINT_S` after the last; one that is overtaken by a newer
  one is never painted.
* What changed about the supply, and the end of a walk, wait for nothing.
"""

from __future__ import annotations

import time
from dataclasses import replace
from typing import TYPE_CHECKING, Final

from benchkit.session.front import View
from benchkit.ui.screens.base import BenchScreen
from benchkit.ui.screens.walk import WalkScreen

if TYPE_CHECKING:
    from benchkit.ui.app import BenchApp

LEAST_PAINT_S: Final = 0.08
"""From one picture to the next at least (s)."""

FLASH_S: Final = 0.7
HOLD_AFTER_CAPTURE_S: Final = 1.0
"""Keys this soon after a reading was taken by itself answer nothing (s)."""

LEAVING: Final = "The walk ends here; it can be gone on with later."


class Painter:
    """Keeps the newest picture and paints it.

    Parameters
    ----------
    app : BenchApp
    bell : bool
        Ring when a reading was taken by itself.
    guard_s : float
        Keys this soon after a question came up are not taken for its answer (s).

    Attributes
    ----------
    view : View or None
        The newest picture.
    leaving : bool
        The walk is being left.
    """

    def __init__(self, app: BenchApp, *, bell: bool, guard_s: float) -> None:
        self._app, self._bell = app, bell
        self._hold_s = min(HOLD_AFTER_CAPTURE_S, 4.0 * guard_s)
        self.view: View | None = None
        self.leaving = False
        self._painted: View | None = None
        self._painted_s = 0.0
        self._planned = False
        self._captured = 0

    def take(self, view: View) -> None:
        """Keep the newest picture; a change of the supply is shown without waiting for the next repaint."""
        earlier, self.view = self.view, view
        self._hear(view)
        if earlier is None or earlier.supply != view.supply or view.exit_status is not None:
            self.paint()
        elif not self._planned:
            self._planned = True
            wait_s = self._painted_s + LEAST_PAINT_S - time.monotonic()
            if wait_s > 0.0:
                self._app.set_timer(wait_s, self.paint)
            else:
                self._app.call_later(self.paint)

    def _hear(self, view: View) -> None:
        """Ring when a reading was taken; what is pressed just then was meant for that reading."""
        if view.live is None:
            return
        captured, self._captured = self._captured, view.live.captured
        if view.live.captured > captured:
            if self._bell:
                self._app.bell()
            if self._app.walk is not None:
                self._app.walk.hold_keys(self._hold_s)

    def paint(self) -> None:
        """Paint what is new, and let what is shown grow old in sight."""
        self._planned = False
        walk, view = self._app.walk, self.view
        if walk is None or not walk.is_mounted:
            return
        if view is not None and view is not self._painted:
            earlier, self._painted, self._painted_s = self._painted, view, time.monotonic()
            self.say(walk)
            self._attend(earlier, view)
        walk.age()
        self.refresh_off_lines()

    def say(self, walk: WalkScreen) -> None:
        """Put the newest picture on the screen of the walk."""
        view = self.view
        if view is not None:
            walk.say(replace(view, message=LEAVING) if self.leaving and view.exit_status is None else view)

    def _attend(self, earlier: View | None, view: View) -> None:
        """Ring and flash when something did not pass or the supply changed its state."""
        fresh = view.results[len(earlier.results) if earlier is not None else 0 :]
        before = None if earlier is None else (earlier.supply.energised, earlier.supply.calm)
        changed = before is not None and before != (view.supply.energised, view.supply.calm)
        alarming = changed and view.supply.energised == "unknown" and not view.supply.calm
        if alarming or any(result.verdict != "pass" for result in fresh):
            self._app.bell()
        if changed:
            self.flash()

    def flash(self) -> None:
        """Let the off line stand out for a moment."""
        screen = self._app.screen
        if isinstance(screen, BenchScreen):
            screen.off_line.add_class("flash")
            self._app.set_timer(FLASH_S, lambda: screen.off_line.remove_class("flash"))

    def refresh_off_lines(self) -> None:
        """Show on every screen what is known of the supply."""
        for screen in self._app.screen_stack:
            if isinstance(screen, BenchScreen):
                screen.refresh_off_line()
