"""Runs the screens of one walk from their first picture to the words at the end."""

from __future__ import annotations

import contextlib
import sys
from collections.abc import Callable
from pathlib import Path

from benchkit.ui import memory, platform
from benchkit.ui.app import BenchApp
from benchkit.ui.entry import Identity, Opening, Start


def run_app(
    start: Start,
    *,
    off_now: Callable[[str], object],
    heartbeat: Callable[[], object],
    opening: Opening,
    identity: Identity | None = None,
    log_dir: Path | None = None,
    bell: bool = True,
    on_next: Callable[[], object] = lambda: None,
) -> int:
    """Run the screens until the person leaves, and return the exit status.

    See `BenchApp` for the parameters; `on_next` is called when the person goes on with the next walk.  Whatever ends
    the screens, `off_now` has been called unless the walk had come to its own end.  What has to be said at the end goes
    to standard error as one line.
    """
    app = BenchApp(
        start,
        off_now=off_now,
        heartbeat=heartbeat,
        opening=opening,
        identity=identity,
        log_dir=log_dir,
        bell=bell,
    )
    leaver = platform.Leaver(off_now, app.leave_from_outside)
    app.leaver = leaver
    app.before_watching = memory.hold
    memory.begin()
    try:
        with leaver.installed():
            app.run(mouse=False)
    finally:
        if app.return_value is None:
            with contextlib.suppress(Exception):
                off_now("the screens have ended")
        memory.end()
    if app.goes_on and app.crash is None:
        on_next()
    if app.last_words:
        with contextlib.suppress(OSError, ValueError):
            print(app.last_words, file=sys.stderr)
    return app.exit_status()
