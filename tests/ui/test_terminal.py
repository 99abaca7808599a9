"""The screens on a real pseudo-terminal: signals, hang-up, a stalled reader, an error, colours, and the off key."""

from __future__ import annotations

import os
import re
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from pathlib import Path

import pytest

pytestmark = pytest.mark.skipif(os.name != "posix", reason="needs a pseudo-terminal")

ROOT = Path(__file__).parents[2]
F9 = b"\x1b[20~"
DELETE = b"\x1b[3~"
COLOUR = re.compile(rb"\x1b\[[0-9;]*?(?:(?<=[\[;])(?:3[0-7]|4[0-7]|9[0-7]|10[0-7])(?=[;m])|(?<=[\[;])[34]8[;:])")


class Terminal:
    """One run of `tests.ui.on_terminal` on a pseudo-terminal of its own."""

    def __init__(self, directory: Path, how: str, **environment: str) -> None:
        import fcntl
        import pty
        import struct
        import termios

        self.file = directory / "offs"
        self.logs = directory / "logs"
        self.output = bytearray()
        self.reading = threading.Event()
        self.reading.set()
        self.master, slave = pty.openpty()
        fcntl.ioctl(slave, termios.TIOCSWINSZ, struct.pack("HHHH", 24, 80, 0, 0))
        clean = {key: value for key, value in os.environ.items() if key not in ("NO_COLOR", "TEXTUAL_THEME")}
        self.process = subprocess.Popen(
            [sys.executable, "-m", "tests.ui.on_terminal", str(self.file), how],
            cwd=ROOT,
            stdin=slave,
            stdout=slave,
            stderr=slave,
            start_new_session=True,
            env=clean | {"TERM": "xterm-256color", "COLORTERM": ""} | environment,
        )
        self.held = slave
        self._thread = threading.Thread(target=self._read, daemon=True)
        self._thread.start()

    def _read(self) -> None:
        while True:
            self.reading.wait()
            try:
                found = os.read(self.master, 65536)
            except OSError:
                return
            if not found:
                return
            self.output.extend(found)

    def read_to_the_end(self) -> None:
        """Wait until all that the ended process wrote has been read; our end of the line keeps it from being lost."""
        deadline = time.monotonic() + 10.0
        length = -1
        while length != len(self.output) and time.monotonic() < deadline:
            length = len(self.output)
            time.sleep(0.5)

    def lines(self) -> list[str]:
        return self.file.read_text(encoding="utf-8").splitlines() if self.file.exists() else []

    def wait_for(self, word: str, timeout_s: float = 20.0) -> float:
        """Wait for a line that begins with `word`; return its time."""
        deadline = time.monotonic() + timeout_s
        while True:
            for line in self.lines():
                at, _, words = line.partition(" ")
                if words.startswith(word):
                    return float(at)
            assert time.monotonic() < deadline, (word, self.lines(), bytes(self.output[-2000:]))
            time.sleep(0.01)

    def send(self, keys: bytes) -> float:
        os.write(self.master, keys)
        return time.monotonic()

    def close(self) -> None:
        if self.process.poll() is None:
            self.process.kill()
        self.process.wait(10)
        self.reading.set()
        os.close(self.held)
        self._thread.join(10)  # it would read from the next terminal of the same number
        if self.master >= 0:
            os.close(self.master)


@pytest.fixture
def terminal(tmp_path: Path, request: pytest.FixtureRequest) -> Iterator[Terminal]:
    how, environment = getattr(request, "param", ("type", {}))
    found = Terminal(tmp_path, how, **environment)
    try:
        found.wait_for("ready")
        yield found
    finally:
        found.close()


def test_the_off_key_works_while_somebody_types_and_while_being_asked(terminal: Terminal) -> None:
    terminal.send(b"1.")
    sent = terminal.send(F9)
    assert terminal.wait_for("off the operator asked for off") - sent < 0.5
    terminal.send(b"5 mV\r")
    terminal.wait_for("reply done 1.5 mV")


@pytest.mark.parametrize("terminal", [("choose", {})], indirect=True)
def test_the_sleep_signal_and_the_stop_key_leave_the_screen_awake(terminal: Terminal) -> None:
    terminal.process.send_signal(signal.SIGTSTP)
    terminal.send(b"\x1a")
    time.sleep(0.3)
    sent = terminal.send(DELETE)
    assert terminal.wait_for("off the operator asked for off") - sent < 0.5
    assert terminal.process.poll() is None


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGHUP, signal.SIGINT])
def test_signals_switch_off_first_and_end_with_four(terminal: Terminal, number: signal.Signals) -> None:
    sent = time.monotonic()
    terminal.process.send_signal(number)
    assert terminal.wait_for(f"off signal {number.name}") - sent < 0.5
    assert terminal.process.wait(5.0) == 4
    assert time.monotonic() - sent < 4.0
    time.sleep(0.05)
    assert b"\x1b[?1049l" in terminal.output, "the terminal is given back"
    assert COLOUR.search(bytes(terminal.output)), "what the test of NO_COLOR looks for is there without it"
    assert b"Traceback" not in terminal.output


def test_a_terminal_that_goes_away_switches_off(terminal: Terminal) -> None:
    os.close(terminal.master)
    terminal.master = -1
    closed = time.monotonic()
    assert terminal.wait_for("off ") - closed < 1.0
    assert terminal.process.wait(5.0) == 4


@pytest.mark.parametrize("terminal", [("pour", {})], indirect=True)
def test_a_terminal_that_stops_reading_does_not_hold_up_a_signal(terminal: Terminal) -> None:
    terminal.reading.clear()
    time.sleep(2.5)
    sent = time.monotonic()
    terminal.process.send_signal(signal.SIGTERM)
    assert terminal.wait_for("off signal SIGTERM") - sent < 0.5
    assert terminal.process.wait(5.0) == 4
    assert time.monotonic() - sent < 3.5


@pytest.mark.parametrize("terminal", [("crash", {})], indirect=True)
def test_an_error_of_our_own_is_one_sentence_and_five(terminal: Terminal) -> None:
    terminal.wait_for("off an error of benchkit's own")
    assert terminal.process.wait(8.0) == 5
    terminal.read_to_the_end()
    assert b"Traceback" not in terminal.output
    assert b"ZeroDivisionError" in terminal.output
    [log] = terminal.logs.iterdir()
    assert "as planned" in log.read_text(encoding="utf-8")


@pytest.mark.parametrize("terminal", [("choose", {"NO_COLOR": "1"})], indirect=True)
def test_no_color_means_none(terminal: Terminal) -> None:
    time.sleep(0.3)
    assert not COLOUR.search(bytes(terminal.output))
    assert b"SUPPLY ON" in terminal.output


@pytest.mark.parametrize("terminal", [("choose", {})], indirect=True)
def test_leaving_is_asked_and_the_heart_has_beaten(terminal: Terminal) -> None:
    time.sleep(1.0)
    terminal.send(b"\x11")
    time.sleep(0.5)
    assert terminal.process.poll() is None
    terminal.send(b"y")
    terminal.wait_for("off the operator left")
    assert terminal.process.wait(8.0) == 4
    beats = int(terminal.lines()[-1].rpartition(" ")[2])
    assert beats >= 5
