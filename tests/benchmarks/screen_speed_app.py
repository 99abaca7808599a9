"""The app that `tests.benchmarks.screen_speed` measures, with notes of when what happened and of what held it up.

A watcher in a thread of its own sees that the event loop has not come round for `LATE_S` and notes what the loop's
thread is at; the garbage collector says when it stops all.  What a note calls *starved* is time in which the process
wanted the processor, or the interpreter's lock, and did not get it.
"""

from __future__ import annotations

import asyncio
import gc
import os
import resource
import sys
import threading
import time
import traceback
from dataclasses import replace
from pathlib import Path

from benchkit.events import Closed
from benchkit.session.front import Front, LiveView
from benchkit.ui.widgets.trim_words import in_step
from tests.ui import scripted
from tests.ui.live_views import TRIM_VIEW, trimming

INTERVAL_S = 0.1
BEAT_S = 0.005
LATE_S = 0.02
LEAST_NOTED_S = 0.03
DESIGN = "tern-40"
TURN_PAGE_EVERY = 50
"""So many readings from one change of the pages to the next, so that fresh layouts are measured too."""


def value_of(number: int) -> float:
    """The reading with this number (V); ninety-seven in a row differ in their figures."""
    return 0.018 + 4e-5 * (7 * number % 97)


def live_of(number: int, base: LiveView) -> LiveView:
    """A picture whose trend has moved on by one reading, with words that change as they do at a bench."""
    value = value_of(number)
    step = number * INTERVAL_S
    end = base.trend[-1][0]
    trend = (*((at - end + step, old) for at, old in base.trend[-240:-1]), (step, value))
    ahead = tuple((at - end + step, old) for at, old in base.predicted)
    return replace(
        base,
        value=value,
        text=in_step(value, base.target, base.unit),
        trend=trend,
        predicted=ahead,
        rate_text=f"rising 0.{number % 90 + 10} mV/min",
        mood="turn" if number // 30 % 2 else "overshot",
    )


class Notes:
    """What happened, with times of the system's one clock."""

    def __init__(self) -> None:
        self.lines: list[str] = []

    def note(self, words: str, at: float | None = None) -> None:
        """Keep a line."""
        self.lines.append(f"{time.monotonic() if at is None else at:.6f} {words}")


class Watcher:
    """Notes when the event loop is late, for how long, and what its thread is at meanwhile."""

    def __init__(self, notes: Notes) -> None:
        self._notes, self._beat_s, self._used_s, self._seen = notes, time.monotonic(), 0.0, ""
        self._main = threading.get_ident()
        self._gc_s = 0.0
        gc.callbacks.append(self._collecting)

    def start(self) -> None:
        """Begin on the running loop."""
        threading.Thread(target=self._watch, daemon=True).start()
        self._tick()

    def _tick(self) -> None:
        now, used_s = time.monotonic(), time.thread_time()
        late_s = now - self._beat_s - BEAT_S
        if late_s > LEAST_NOTED_S:
            own_s = used_s - self._used_s
            where = self._seen or "nothing seen"
            self._notes.note(f"late {late_s!r} {max(0.0, late_s + BEAT_S - own_s)!r} {where}")
        self._beat_s, self._used_s, self._seen = now, used_s, ""
        asyncio.get_running_loop().call_later(BEAT_S, self._tick)

    def _watch(self) -> None:
        while True:
            time.sleep(0.005)
            if time.monotonic() - self._beat_s < LATE_S:
                continue
            frame = sys._current_frames().get(self._main)
            stack = traceback.extract_stack(frame) if frame is not None else []
            names = [f"{Path(one.filename).stem}.{one.name}:{one.lineno}" for one in stack[-6:]]
            self._seen = self._seen or " > ".join(names)

    def _collecting(self, phase: str, info: dict[str, int]) -> None:
        now = time.monotonic()
        if phase == "start":
            self._gc_s = now
        elif now - self._gc_s > 0.005:
            self._notes.note(f"collected {now - self._gc_s!r} {info['generation']}")


def work_aside(stop: threading.Event, notes: Notes) -> None:
    """Let the model work as it does beside a walk, again and again."""
    from benchkit.shipped import find_design
    from benchkit.stage.design import load_design
    from benchkit.stage.narrowing import Narrowing
    from benchkit.stage.observations import Observation
    from benchkit.stage.suspects import suspect
    from tests.benchmarks.suspects_units import low_rails

    design = load_design(find_design(DESIGN))
    condition = (low_rails(design),)
    known = (
        Observation(conditions=condition, point="emitter.upper.1", value=0.002, standard_uncertainty=1e-5),
    )  # fmt: skip
    seed = 0
    while not stop.is_set():
        seed += 1
        suspect(design, known)
        Narrowing(design, 300, seed).limits(known, [(condition, "emitter.lower.1")])
        notes.note("model")


def run(file: Path, seconds: float, aside: bool) -> int:
    """Run the app; everything that happened goes to `file`."""
    from benchkit.ui.entry import Identity
    from benchkit.ui.running import run_app

    notes, stop = Notes(), threading.Event()
    note = notes.note

    def used_s() -> float:
        used = resource.getrusage(resource.RUSAGE_SELF)
        return used.ru_utime + used.ru_stime

    async def start(front: Front, identity: Identity) -> Closed:
        base = trimming(0.0193)
        front.show(replace(TRIM_VIEW, kind="rehearsal", live=live_of(0, base)))
        asked = asyncio.ensure_future(front.ask(scripted.TRIM))
        if aside:
            threading.Thread(target=work_aside, args=(stop, notes), daemon=True).start()
        await asyncio.sleep(1.0)
        Watcher(notes).start()
        began, used = time.monotonic(), used_s()
        note("began")
        number = 0
        while time.monotonic() - began < seconds:
            number += 1
            if number % TURN_PAGE_EVERY == 0:
                asked.cancel()
                note("turned")
                front.show(replace(TRIM_VIEW, kind="rehearsal", live=None, busy="The model works.", busy_share=0.5))
                await asyncio.sleep(INTERVAL_S)
                asked = asyncio.ensure_future(front.ask(scripted.TRIM))
                began += INTERVAL_S
            live = live_of(number, base)
            note(f"shown {number} {live.value!r}")
            front.show(replace(TRIM_VIEW, kind="rehearsal", live=live, elapsed_s=number * INTERVAL_S))
            left_s = began + number * INTERVAL_S - time.monotonic()
            done, _ = await asyncio.wait({asked}, timeout=max(0.001, left_s))
            if done:
                note("reply")
                asked = asyncio.ensure_future(front.ask(scripted.TRIM))
                await asyncio.sleep(max(0.0, began + number * INTERVAL_S - time.monotonic()))
        note(f"used {(used_s() - used) / (time.monotonic() - began)!r}")
        stop.set()
        asked.cancel()
        front.show(replace(TRIM_VIEW, supply=scripted.OFF, live=None, exit_status=0, verdict="pass"))
        asyncio.get_running_loop().call_later(0.5, os.kill, os.getpid(), 15)
        return scripted.closed()

    run_app(
        start,
        off_now=lambda _reason: note("off"),
        heartbeat=lambda: None,
        opening=scripted.OPENING,
        identity=scripted.WHO,
        log_dir=file.parent,
    )
    file.write_text("\n".join(notes.lines), encoding="utf-8")
    return 0


if __name__ == "__main__":
    sys.exit(run(Path(sys.argv[1]), float(sys.argv[2]), sys.argv[3] == "aside"))
