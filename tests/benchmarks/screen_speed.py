"""How soon a reading and a key show on the trim page, and what that costs.

Usage: ``python -m tests.benchmarks.screen_speed [SECONDS]`` (POSIX only).  The app runs on a pseudo-terminal of its own
over a scripted session that shows ten readings a second.  A small terminal of ours follows what it paints: a reading
counts as shown when all rows of its figures stand there.  Printed, for two sizes:

* from the session's ``show`` to the figures on the terminal (the session's own part, from the instrument's reply to
  ``show``, is not in it);
* from a key to the reply in the session, and from F9 to the words that off has been asked for;
* processor time of the app's process as a share of one core, start and end left out; bytes a second.
"""

from __future__ import annotations

import asyncio
import codecs
import contextlib
import math
import os
import re
import select
import subprocess
import sys
import tempfile
import time
from dataclasses import dataclass, field, replace
from pathlib import Path

from benchkit.events import Closed
from benchkit.session.front import Front, LiveView
from benchkit.ui.widgets.digit_shapes import big_rows, fit, split_reading
from benchkit.ui.widgets.trim_words import in_step
from tests.ui import scripted
from tests.ui.live_views import TRIM_VIEW, trimming

SIZES = ((80, 24, 61, 7), (120, 40, 89, 12))
"""Columns and rows of the terminal, and the room that the figures have there."""

INTERVAL_S = 0.1
KEY_EVERY_S = 0.73
F9 = b"\x1b[20~"
RIGHT = b"\x1b[C"
SEQUENCE = re.compile(
    r"\x1b\[([?<>=]?)([0-9;]*)[ -/]*([@-~])|\x1b[PX^_\]].*?(?:\x1b\\|\x07)|\x1b[()][0-9A-B]|\x1b[=>78]", re.DOTALL
)


# --- the app ---------------------------------------------------------------------------------------------------------


def value_of(number: int) -> float:
    """The reading with this number (V); ninety-seven in a row differ in their figures."""
    return 0.018 + 4e-5 * (7 * number % 97)


def live_of(number: int, base: LiveView) -> LiveView:
    """A picture whose trend has moved on by one reading."""
    value = value_of(number)
    step = number * INTERVAL_S
    end = base.trend[-1][0]
    trend = (*((at - end + step, old) for at, old in base.trend[-240:-1]), (step, value))
    ahead = tuple((at - end + step, old) for at, old in base.predicted)
    return replace(base, value=value, text=in_step(value, base.target, base.unit), trend=trend, predicted=ahead)


def app_side(file: Path, seconds: float) -> int:
    """Run the app; everything that happened goes to `file`, with times of the system's one clock."""
    import resource

    from benchkit.ui.app import run_app
    from benchkit.ui.entry import Identity

    notes: list[str] = []

    def note(words: str) -> None:
        notes.append(f"{time.monotonic():.6f} {words}")

    def used_s() -> float:
        used = resource.getrusage(resource.RUSAGE_SELF)
        return used.ru_utime + used.ru_stime

    async def start(front: Front, identity: Identity) -> Closed:
        base = trimming(0.0193)
        front.show(replace(TRIM_VIEW, kind="rehearsal", live=live_of(0, base)))
        asked = asyncio.ensure_future(front.ask(scripted.TRIM))
        await asyncio.sleep(1.0)
        began, used = time.monotonic(), used_s()
        note("began")
        number = 0
        while time.monotonic() - began < seconds:
            number += 1
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
    file.write_text("\n".join(notes), encoding="utf-8")
    return 0


# --- the terminal ----------------------------------------------------------------------------------------------------


@dataclass
class Screen:
    """As much of a terminal as it takes to know what stands where."""

    columns: int
    rows: int
    x: int = 0
    y: int = 0
    rest: str = ""
    cells: list[list[str]] = field(default_factory=list)

    def __post_init__(self) -> None:
        self.cells = [[" "] * self.columns for _ in range(self.rows)]

    def feed(self, text: str) -> None:
        """Follow what was written."""
        text, self.rest = self.rest + text, ""
        at = 0
        while at < len(text):
            if text[at] == "\x1b":
                found = SEQUENCE.match(text, at)
                if found is None:
                    self.rest = text[at:]
                    return
                self._obey(found)
                at = found.end()
                continue
            self._put(text[at])
            at += 1

    def _obey(self, found: re.Match[str]) -> None:
        mark, numbers, kind = found.group(1), found.group(2), found.group(3)
        if kind == "H" and not mark:
            row, _, column = (numbers or "").partition(";")
            self.y, self.x = int(row or 1) - 1, int(column or 1) - 1
        elif kind == "J":
            self.__post_init__()

    def _put(self, character: str) -> None:
        if character == "\n":
            self.y, self.x = self.y + 1, 0
        elif character == "\r":
            self.x = 0
        elif character >= " ":
            if 0 <= self.y < self.rows and 0 <= self.x < self.columns:
                self.cells[self.y][self.x] = character
            self.x += 1

    def shows(self, rows: tuple[str, ...]) -> bool:
        """Whether these rows stand below one another somewhere."""
        lines = ["".join(row) for row in self.cells]
        for top in range(self.rows - len(rows) + 1):
            at = lines[top].find(rows[0])
            if at >= 0 and all(lines[top + down][at : at + len(row)] == row for down, row in enumerate(rows)):
                return True
        return False


@dataclass
class Measured:
    """What came of one run: delays in seconds."""

    painted: list[float] = field(default_factory=list)
    answered: list[float] = field(default_factory=list)
    off: list[float] = field(default_factory=list)
    unseen: int = 0
    share: float = 0.0
    bytes_per_s: float = 0.0


def measure(columns: int, rows: int, room: tuple[int, int], seconds: float) -> Measured:
    """Run the app on a terminal of this size."""
    import fcntl
    import pty
    import struct
    import termios

    master, slave = pty.openpty()
    fcntl.ioctl(slave, termios.TIOCSWINSZ, struct.pack("HHHH", rows, columns, 0, 0))
    clean = {key: value for key, value in os.environ.items() if key not in ("NO_COLOR", "TEXTUAL_THEME")}
    with tempfile.TemporaryDirectory() as folder:
        file = Path(folder) / "notes"
        process = subprocess.Popen(
            [sys.executable, "-m", "tests.benchmarks.screen_speed", "--app", str(file), str(seconds)],
            stdin=slave,
            stdout=slave,
            stderr=slave,
            start_new_session=True,
            env=clean | {"TERM": "xterm-256color", "COLORTERM": "truecolor"},
        )
        os.close(slave)
        try:
            chunks, keys = _follow(master, process)
        finally:
            process.kill()
            process.wait(10)
            os.close(master)
        return _reckon(file.read_text(encoding="utf-8").splitlines(), chunks, keys, columns, rows, room)


def _follow(master: int, process: subprocess.Popen[bytes]) -> tuple[list[tuple[float, bytes]], list[tuple[float, str]]]:
    """Read all that is painted with its time, and press keys meanwhile; it is thought about afterwards."""
    chunks: list[tuple[float, bytes]] = []
    keys: list[tuple[float, str]] = []
    started = time.monotonic()
    due = started + 4.0
    while process.poll() is None:
        ready, _, _ = select.select([master], [], [], 0.02)
        now = time.monotonic()
        if ready:
            with contextlib.suppress(OSError):
                chunks.append((now, os.read(master, 65536)))
        if now >= due:
            due += KEY_EVERY_S
            name, sequence = ("off", F9) if len(keys) % 4 == 3 else ("key", RIGHT)
            os.write(master, sequence)
            keys.append((time.monotonic(), name))
    return chunks, keys


def _reckon(
    notes: list[str],
    chunks: list[tuple[float, bytes]],
    keys: list[tuple[float, str]],
    columns: int,
    rows: int,
    room: tuple[int, int],
) -> Measured:
    found = Measured()
    told = [(float(line.split()[0]), line.split()[1:]) for line in notes]
    shown = [(at, float(words[2])) for at, words in told if words[0] == "shown"]
    began = next(at for at, words in told if words[0] == "began")
    ended, found.share = next((at, float(words[1])) for at, words in told if words[0] == "used")
    found.bytes_per_s = sum(len(chunk) for at, chunk in chunks if began <= at <= ended) / (ended - began)
    screen, last, decoder = Screen(columns, rows), -1, codecs.getincrementaldecoder("utf-8")("replace")
    for at, chunk in chunks:
        screen.feed(decoder.decode(chunk))
        waiting = [number for number in range(last + 1, len(shown)) if shown[number][0] <= at][-20:]
        for number in reversed(waiting):
            if _seen(screen, shown[number][1], room):
                found.painted.append(at - shown[number][0])
                found.unseen += number - last - 1
                last = number
                break
    if not found.painted:
        print("\n".join("".join(row) for row in screen.cells))
    replies = [at for at, words in told if words[0] == "reply"]
    offs = [at for at, words in told if words[0] == "off"]
    for pressed, name in keys:
        after = [at for at in (offs if name == "off" else replies) if at >= pressed]
        if after and began < pressed < ended - 0.5:
            (found.off if name == "off" else found.answered).append(after[0] - pressed)
    return found


def _seen(screen: Screen, value: float, room: tuple[int, int]) -> bool:
    figures, unit = split_reading(in_step(value, 0.02, "V"))
    size = fit(figures, room[0] - len(unit) - 2, room[1])
    assert size is not None
    return screen.shows(big_rows(figures, size))


def words(delays: list[float]) -> str:
    """Return median, 95 % and most of some delays, in milliseconds."""
    if not delays:
        return "nothing was seen"
    ordered = sorted(delays)
    middle, high = ordered[len(ordered) // 2], ordered[min(len(ordered) - 1, math.ceil(0.95 * len(ordered)))]
    return (
        f"median {middle * 1e3:4.0f} ms, 95 % below {high * 1e3:4.0f} ms, most {ordered[-1] * 1e3:4.0f} ms"
        f" ({len(ordered)})"
    )


def main() -> int:
    """Measure and print."""
    if sys.argv[1:2] == ["--app"]:
        return app_side(Path(sys.argv[2]), float(sys.argv[3]))
    seconds = float(sys.argv[1]) if len(sys.argv) > 1 else 20.0
    print(f"{seconds:.0f} s at {1 / INTERVAL_S:.0f} readings a second; load of this computer {os.getloadavg()[0]:.1f}")
    for columns, rows, width, height in SIZES:
        found = measure(columns, rows, (width, height), seconds)
        print(f"{columns}x{rows}")
        print(f"  from show to the figures:  {words(found.painted)}; overtaken by a newer one: {found.unseen}")
        print(f"  from a key to its reply:   {words(found.answered)}")
        print(f"  from F9 to off:            {words(found.off)}")
        print(f"  processor: {found.share * 100:.1f} % of one core; {found.bytes_per_s / 1e3:.1f} kB/s to the terminal")
    return 0


if __name__ == "__main__":
    sys.exit(main())
