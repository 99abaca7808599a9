"""How soon a reading and a key show on the trim page, what holds them up, and what that costs.

Usage: ``python -m tests.benchmarks.screen_speed [SECONDS]`` (POSIX only).  The app (`screen_speed_app`) runs on a
pseudo-terminal of its own over a scripted session that shows ten readings a second, and turns to another page and back
every five seconds.  A small terminal of ours follows what it paints: a reading counts as shown when all rows of its
figures stand there.  Keys are pressed all the while, in every phase between two readings.  Printed, for two sizes, by
itself and while the model works aside:

* from the session's ``show`` to the figures on the terminal (the session's own part, from the instrument's reply to
  ``show``, is not in it);
* from a key to the reply in the session, and from F9 to the words that off has been asked for; keys without an answer;
* the longest time that the event loop was held up, how much of it the process had no processor or no lock, and where
  the loop's thread was then; the longest stop of the garbage collector;
* processor time of the app's process as a share of one core, start and end left out; bytes a second.
"""

from __future__ import annotations

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
from dataclasses import dataclass, field
from pathlib import Path

from benchkit.ui.widgets.digit_shapes import big_rows, fit, split_reading
from benchkit.ui.widgets.trim_words import in_step
from tests.benchmarks.screen_speed_app import INTERVAL_S

SIZES = ((80, 24, 61, 7), (120, 40, 89, 12))
"""Columns and rows of the terminal, and the room that the figures have there."""

KEY_EVERY_S = 0.237
TURNED_S = 0.3
"""So long after the page has turned a key may find no question."""

F9 = b"\x1b[20~"
RIGHT = b"\x1b[C"
SEQUENCE = re.compile(
    r"\x1b\[([?<>=]?)([0-9;]*)[ -/]*([@-~])|\x1b[PX^_\]].*?(?:\x1b\\|\x07)|\x1b[()][0-9A-B]|\x1b[=>78]", re.DOTALL
)


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
    lost: int = 0
    unseen: int = 0
    worst_at: float = 0.0
    late: list[tuple[float, float, str]] = field(default_factory=list)
    collected: list[tuple[float, str]] = field(default_factory=list)
    answers: int = 0
    share: float = 0.0
    bytes_per_s: float = 0.0


def measure(columns: int, rows: int, room: tuple[int, int], seconds: float, aside: str) -> Measured:
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
            [sys.executable, "-m", "tests.benchmarks.screen_speed_app", str(file), str(seconds), aside],
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
            name, sequence = ("off", F9) if len(keys) % 4 == 3 else ("reply", RIGHT)
            keys.append((time.monotonic(), name))  # before it is written: an answer may come before the write returns
            os.write(master, sequence)
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
    times = {name: [at for at, words in told if words[0] == name] for name in ("reply", "off", "turned")}
    for name, delays in (("off", found.off), ("reply", found.answered)):
        pressed = [at for at, key in keys if key == name]
        for number, at in enumerate(pressed):
            if not began < at < ended - 0.5 or any(-TURNED_S < at - turned < TURNED_S for turned in times["turned"]):
                continue
            until = pressed[number + 1] if number + 1 < len(pressed) else math.inf
            answers = [answer for answer in times[name] if at <= answer < until]
            if answers:
                delays.append(answers[0] - at)
            else:
                found.lost += 1
    for at, words in told:
        if words[0] == "late" and at <= ended:
            found.late.append((float(words[1]), float(words[2]), " ".join(words[3:])))
        elif words[0] == "collected":
            found.collected.append((float(words[1]), words[2]))
    found.answers = sum(words[0] == "model" for _, words in told)
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


def tell(found: Measured) -> None:
    """Print one run."""
    print(f"  from show to the figures:  {words(found.painted)}; overtaken by a newer one: {found.unseen}")
    print(f"  from a key to its reply:   {words(found.answered)}")
    print(f"  from F9 to off:            {words(found.off)}; keys without an answer: {found.lost}")
    for late_s, starved_s, where in sorted(found.late, reverse=True)[:3]:
        print(f"  held up for {late_s * 1e3:4.0f} ms ({starved_s * 1e3:4.0f} ms of it starved): {where}")
    if found.collected:
        longest_s, which = max(found.collected)
        print(f"  garbage collector: {len(found.collected)} stops, most {longest_s * 1e3:.0f} ms, generation {which}")
    print(f"  processor: {found.share * 100:.1f} % of one core; {found.bytes_per_s / 1e3:.1f} kB/s to the terminal")


def main() -> int:
    """Measure and print."""
    seconds = float(sys.argv[1]) if len(sys.argv) > 1 else 20.0
    print(f"{seconds:.0f} s at {1 / INTERVAL_S:.0f} readings a second")
    for aside in ("alone", "aside"):
        for columns, rows, width, height in SIZES:
            before = os.getloadavg()[0]
            found = measure(columns, rows, (width, height), seconds, aside)
            with_model = f", with the model at work aside ({found.answers} answers)" if aside == "aside" else ""
            print(f"{columns}x{rows}{with_model}; load of this computer {before:.1f} to {os.getloadavg()[0]:.1f}")
            tell(found)
    return 0


if __name__ == "__main__":
    sys.exit(main())
