"""The client's hand on the stand-by: started beforehand, told what to know, asked to switch off.

Nothing here raises.  When the stand-by can't be had, a process is started anew, which takes longer and does the same.
"""

from __future__ import annotations

import os
import subprocess
import threading
from collections.abc import Mapping
from concurrent.futures import Future
from contextlib import suppress
from pathlib import Path
from typing import Any

from benchkit.keeper import platform
from benchkit.keeper.protocol import decode, encode
from benchkit.keeper.spawning import STAND_BY_LIMIT_S, spawn, switch_off_anew

_END_LIMIT_S = 6.0


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
    """

    def __init__(self, lifeline: int | None, keeper: int, log_dir: Path | None = None) -> None:
        self._log_dir = log_dir
        self._lifeline = lifeline
        self._keeper = keeper
        self._lock = threading.Lock()
        self._process: subprocess.Popen[bytes] | None = None
        self._started = False
        self._ended = False
        self._known: dict[str, Any] = {"supply": None, "journal": ""}
        self._waiting: dict[int, Future[dict[str, Any]]] = {}
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
        future: Future[dict[str, Any]] = Future()
        with self._lock:
            process = self._process
            self._last_id += 1
            number = self._last_id
            if process is not None:
                self._waiting[number] = future
        if process is not None and self._send(process, {"do": "off", "id": number, "reason": reason}):
            with suppress(Exception):
                return future.result(STAND_BY_LIMIT_S)
        return switch_off_anew(self.supply, reason)

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
        with suppress(Exception):
            with self._lock:
                if self._ended:
                    return
                lifeline, self._lifeline = self._lifeline, None
                try:
                    process = spawn(["--stand-by", "--keeper", str(self._keeper)], self._log_dir, lifeline)
                finally:
                    if lifeline is not None:
                        os.close(lifeline)
                self._process = process
            self._send(process, {"do": "know", **self._known})
            threading.Thread(target=self._read, args=(process,), name="reader of the stand-by", daemon=True).start()

    def _read(self, process: subprocess.Popen[bytes]) -> None:
        assert process.stdout is not None
        with suppress(Exception), process.stdout as pipe:
            for line in pipe:
                message = decode(line)
                with self._lock:
                    future = self._waiting.pop(int(message["id"]), None)
                if future is not None:
                    future.set_result(dict(message["ok"]))
        with self._lock:
            self._process = None if self._process is process and not self._ended else self._process
            left, self._waiting = self._waiting, {}
        for future in left.values():
            future.set_exception(OSError("the stand-by has ended"))
        if not self._ended:
            with suppress(OSError, ValueError):
                assert process.stdin is not None
                process.stdin.close()
            process.wait()

    def _send(self, process: subprocess.Popen[bytes], message: Mapping[str, Any]) -> bool:
        assert process.stdin is not None
        try:
            process.stdin.write(encode(message))
            process.stdin.flush()
        except (OSError, ValueError):
            return False
        return True
