"""Everything that differs between POSIX and Windows: signals, hang-up of the terminal, its state, sleep signals.

Strategy
--------
A handler of `signal.signal` runs between two bytecodes of the main thread, whatever that thread is doing.  So it may
take no lock and may not wait: it puts one word into a `queue.SimpleQueue` (whose `put` is re-entrant) and returns.
`Leaver` owns the thread at the other end: *off first*, then the polite way out, and when that has not ended the
process within two seconds, the hard one.  It works when the event loop is blocked, when the terminal has stopped
reading and when the terminal has gone.
"""

from __future__ import annotations

import contextlib
import os
import queue
import signal
import sys
import threading
from collections.abc import Callable, Iterator
from typing import Any, Final

POSIX: Final = os.name == "posix"
HARD_EXIT_AFTER_S: Final = 2.0
_HANGUP_POLL_MS: Final = 500


def leaving_signals() -> tuple[int, ...]:
    """Return the signals of this system that end the program, off first."""
    names = ("SIGTERM", "SIGHUP", "SIGINT", "SIGQUIT") if POSIX else ("SIGTERM", "SIGINT", "SIGBREAK")
    return tuple(int(getattr(signal, name)) for name in names if hasattr(signal, name))


def ignore_stop_key() -> None:
    """Ignore the signal that would put the program to sleep with the supply on; nothing on Windows.

    Call it once the screen runs: the terminal driver sets a handler of its own before.
    """
    if POSIX:
        signal.signal(signal.SIGTSTP, signal.SIG_IGN)


class Leaver:
    """Sees to it that the program ends in order when it is told to from outside.

    Parameters
    ----------
    off : callable
        Switches the supply off; takes the reason.  It is called from a thread of its own, must be safe to call from
        any thread and more than once, and must not touch the screen.
    leave : callable
        Asks the screen to end; takes the reason.  Called right after `off`, from the same thread.
    exit_status : int
        With which a hard exit ends the process.
    hard_exit_s : float
        How long the polite way out may take (s).
    hard_exit : callable
        Ends the process at once; takes the exit status.
    """

    def __init__(
        self,
        off: Callable[[str], object],
        leave: Callable[[str], object],
        *,
        exit_status: int = 4,
        hard_exit_s: float = HARD_EXIT_AFTER_S,
        hard_exit: Callable[[int], object] = os._exit,
    ) -> None:
        self._off = off
        self._leave = leave
        self.exit_status = exit_status
        self.last_words = ""
        self._hard_exit_s = hard_exit_s
        self._hard_exit = hard_exit
        self._asked: queue.SimpleQueue[str | None] = queue.SimpleQueue()
        self._ended = threading.Event()
        self._terminal = _terminal_state()
        self._thread = threading.Thread(target=self._run, name="benchkit-leave", daemon=True)
        self._thread.start()

    def ask(self, reason: str) -> None:
        """Ask for off and the way out.  Re-entrant: safe inside a signal handler."""
        self._asked.put(reason)

    @contextlib.contextmanager
    def installed(self) -> Iterator[None]:
        """Take over the signals and the watch on the terminal while the screen runs."""
        earlier: dict[int, Any] = {}
        for number in leaving_signals():
            earlier[number] = signal.signal(number, self._on_signal)
        stop = threading.Event()
        if POSIX and sys.__stdin__ is not None and sys.__stdin__.isatty():
            watch = threading.Thread(
                target=_watch_hangup, args=(sys.__stdin__.fileno(), stop, self.ask), name="benchkit-tty", daemon=True
            )
            watch.start()
        try:
            yield
        finally:
            stop.set()
            self._ended.set()
            self._asked.put(None)
            for number, handler in earlier.items():
                signal.signal(number, handler)

    def _on_signal(self, number: int, _frame: object) -> None:
        self._asked.put(f"signal {signal.Signals(number).name}")

    def _run(self) -> None:
        reason = self._asked.get()
        if reason is None:
            return
        # The clock of the hard exit starts before anything that could hang.
        deadline = threading.Timer(self._hard_exit_s, self._end_hard)
        deadline.daemon = True
        deadline.start()
        with contextlib.suppress(Exception):
            self._off(reason)
        with contextlib.suppress(Exception):
            self._leave(reason)
        self._ended.wait()
        deadline.cancel()

    def _end_hard(self) -> None:
        if self._ended.is_set():
            return
        _restore_terminal(self._terminal, self.last_words)
        self._hard_exit(self.exit_status)


def _watch_hangup(descriptor: int, stop: threading.Event, ask: Callable[[str], None]) -> None:
    """Call `ask` once when the terminal behind `descriptor` has hung up."""
    import select

    if not hasattr(select, "poll"):
        return
    poll = select.poll()
    poll.register(descriptor, 0)  # hang-up and error are always reported
    while not stop.is_set():
        try:
            found = poll.poll(_HANGUP_POLL_MS)
        except OSError:
            found = [(descriptor, select.POLLHUP)]
        if found and not stop.is_set():
            ask("the terminal has gone")
            return


def _terminal_state() -> object:
    if not POSIX or sys.__stdin__ is None:
        return None
    import termios

    try:
        return termios.tcgetattr(sys.__stdin__.fileno())
    except (termios.error, ValueError, OSError):
        return None


def _restore_terminal(state: object, last_words: str) -> None:
    """Give the terminal back as it was, as far as that goes without waiting for it."""
    if not POSIX or state is None or sys.__stdin__ is None or sys.__stderr__ is None:
        return
    import select
    import termios

    with contextlib.suppress(Exception):
        termios.tcsetattr(sys.__stdin__.fileno(), termios.TCSANOW, state)  # type: ignore[arg-type]
    with contextlib.suppress(Exception):
        output = sys.__stderr__.fileno()
        if select.select([], [output], [], 0)[1]:
            os.write(
                output,
                b"\x1b[?1000l\x1b[?1003l\x1b[?1006l\x1b[?2004l\x1b[<u\x1b[?1049l\x1b[?25h\x1b[?7h\r\n"
                + last_words.encode()
                + b"\r\n",
            )
