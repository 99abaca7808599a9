"""The client's hand on the stand-by: started beforehand, told what to know, asked to switch off.

Nothing here raises.  One that dies while the keeper lives is replaced at once; where that can't be done, somebody is
told.  One that does not even say that it has heard the word is frozen: it is ended, and another one takes its place,
hears of the keeper's death by the same lifeline, switches off, and writes what happened.  When none can be had, a
process is started that can do no more than switch off.
"""

from __future__ import annotations

import os
import subprocess
import threading
import time
from collections.abc import Callable, Mapping
from concurrent.futures import Future
from contextlib import suppress
from pathlib import Path
from typing import Any

from benchkit.keeper import platform
from benchkit.keeper.protocol import decode, encode
from benchkit.keeper.spawning import STAND_BY_LIMIT_S, spawn, switch_off_anew

_END_LIMIT_S = 6.0
_HEARD_S = 1.0
_BEGINS_S = 3.0
"""So long may one that has just been started take to hear anything, s."""

_QUICK_S = 2.0
_QUICK_DEATHS = 3
"""So many that live shorter than that, one after the other, and no other one is tried."""


class StandingBy:
    """A stand-by that may not have been started yet.

    Parameters
    ----------
    lifeline : int or None
        The reading end of the keeper's lifeline; it is ours to close.
    keeper : int
        The keeper's process id.
    log_dir : Path or None
        For ``keeper.log``.
    keeper_lives : callable
        Whether the keeper is still there: else one that dies is not replaced.
    on_trouble : callable
        Called, on a thread of its own, with what has to be said when there is no stand-by any more.
    """

    def __init__(
        self,
        lifeline: int | None,
        keeper: int,
        log_dir: Path | None = None,
        keeper_lives: Callable[[], bool] = lambda: False,
        on_trouble: Callable[[str], None] = lambda text: None,
    ) -> None:
        self._keeper_lives = keeper_lives
        self._on_trouble = on_trouble
        self._begun_s = 0.0
        self._quick_deaths = 0
        self._given_up: subprocess.Popen[bytes] | None = None
        self._log_dir = log_dir
        self._lifeline = lifeline
        self._keeper = keeper
        self._lock = threading.Lock()
        self._process: subprocess.Popen[bytes] | None = None
        self._started = False
        self._ended = False
        self._known: dict[str, Any] = {"supply": None, "journal": ""}
        self._waiting: dict[int, tuple[subprocess.Popen[bytes], Future[dict[str, Any]], threading.Event]] = {}
        self._last_id = 0

    @property
    def pid(self) -> int | None:
        """Its process id, None while there is none."""
        with self._lock:
            return None if self._process is None else self._process.pid

    @property
    def supply(self) -> Mapping[str, Any] | None:
        """What it would switch off."""
        supply: Mapping[str, Any] | None = self._known["supply"]
        return supply

    def know(self, **parts: Any) -> None:
        """Tell it the ``supply`` (as in the table for ``connect``, or None) or the ``journal``."""
        with self._lock:
            self._known.update(parts)
            process = self._process
        if process is not None:
            self._send(process, {"do": "know", **self._known})

    def start(self) -> None:
        """Start it in the background, once."""
        with self._lock:
            if self._started or self._ended:
                return
            self._started = True
        threading.Thread(target=self._start, name="start of the stand-by", daemon=True).start()

    def off(self, reason: str) -> dict[str, Any]:
        """Switch off and wait; return the fields of an ``output off`` event."""
        answer = self._ask(reason, patient=False)
        if answer is None and self._given_up is not None:
            self._start()
            answer = self._ask(reason, patient=True)
        return switch_off_anew(self.supply, reason) if answer is None else answer

    def _ask(self, reason: str, *, patient: bool) -> dict[str, Any] | None:
        """Ask for "off" and wait; None if there is nobody, or nobody who hears, who is ended then."""
        future: Future[dict[str, Any]] = Future()
        heard = threading.Event()
        with self._lock:
            process = self._process
            if process is None:
                return None
            self._last_id += 1
            number = self._last_id
            self._waiting[number] = (process, future, heard)
            limit_s = max(_HEARD_S, self._begun_s + _BEGINS_S - time.monotonic())
        if not self._send(process, {"do": "off", "id": number, "reason": reason}):
            return None
        if not patient and not heard.wait(limit_s):
            with self._lock:
                self._given_up, self._process = process, None
            platform.kill_hard(process)
            return None
        with suppress(Exception):
            return future.result(STAND_BY_LIMIT_S)
        return None

    def close(self) -> None:
        """Let it end; it does so once the keeper has."""
        with self._lock:
            self._ended = True
            process, lifeline, self._lifeline = self._process, self._lifeline, None
        if lifeline is not None:
            os.close(lifeline)
        if process is None:
            return
        assert process.stdin is not None
        with suppress(OSError, ValueError):
            process.stdin.close()
        try:
            process.wait(_END_LIMIT_S)
        except subprocess.TimeoutExpired:
            platform.kill_hard(process)
            process.wait()

    def _start(self) -> None:
        """Start one; whoever can't be told of a failure finds no process."""
        with suppress(Exception):
            with self._lock:
                if self._ended:
                    return
                process = spawn(["--stand-by", "--keeper", str(self._keeper)], self._log_dir, self._lifeline)
                self._process = process
                self._begun_s = time.monotonic()
            self._send(process, {"do": "know", **self._known})
            threading.Thread(target=self._read, args=(process,), name="reader of the stand-by", daemon=True).start()

    def _read(self, process: subprocess.Popen[bytes]) -> None:
        assert process.stdout is not None
        with suppress(Exception), process.stdout as pipe:
            for line in pipe:
                self._hear(decode(line))
        with self._lock:
            self._process = None if self._process is process and not self._ended else self._process
            left = [number for number, (asked, _, _) in self._waiting.items() if asked is process]
            gone = [self._waiting.pop(number) for number in left]
        for _, future, heard in gone:
            future.set_exception(OSError("the stand-by has ended"))
            heard.set()
        if not self._ended:
            with suppress(OSError, ValueError):
                assert process.stdin is not None
                process.stdin.close()
            process.wait()
        if process is not self._given_up:
            self._replace()

    def _hear(self, message: Mapping[str, Any]) -> None:
        with self._lock:
            number = int(message["heard"] if "heard" in message else message["id"])
            waits = self._waiting.get(number) if "heard" in message else self._waiting.pop(number, None)
        if waits is not None:
            waits[2].set()
            if "ok" in message:
                waits[1].set_result(dict(message["ok"]))

    def _replace(self) -> None:
        """Put another one in the place of one that died, as long as there is a keeper to stand by for."""
        if self._ended or not self._keeper_lives():
            return
        quick = time.monotonic() - self._begun_s < _QUICK_S
        self._quick_deaths = self._quick_deaths + 1 if quick else 0
        if self._quick_deaths < _QUICK_DEATHS:
            self._start()
        if self.pid is None and not self._ended:
            self._on_trouble(
                "What stands by for the keeper of the instruments has ended, and no other can be started: if keeper "
                "and screen were killed now, the supply would stay on. Switch it off by hand should this computer fail."
            )

    def _send(self, process: subprocess.Popen[bytes], message: Mapping[str, Any]) -> bool:
        assert process.stdin is not None
        try:
            process.stdin.write(encode(message))
            process.stdin.flush()
        except (OSError, ValueError):
            return False
        return True
