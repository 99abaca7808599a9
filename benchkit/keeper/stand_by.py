"""The keeper's stand-by: a process that has everything loaded, and can only switch off.

It knows the supply and the record, owns neither, and waits.  What wakes it:

* the keeper's death, by the end of the lifeline (`benchkit.keeper.lifeline`);
* a keeper that is frozen with its output on: it is ended first, so that its connections to the supply are free;
* the client's word.

Woken, it connects the supply, switches it off, confirms that, and, if the keeper is dead, writes into the record what
has happened: the record's lock fell with the keeper.  Nobody's lock on the supply holds it up.  It outlives its client
as long as the keeper lives, so that a screen and a keeper that are killed together leave nothing on.

Messages, one JSON object a line: ``{"do": "know", "supply": {...}, "journal": "..."}``;
``{"do": "off", "id": 3, "reason": "..."}``, answered at once by ``{"heard": 3}`` and then by ``{"id": 3, "ok": {...}}``
with the fields of an ``output off`` event.
"""

from __future__ import annotations

import importlib
import sys
import time
from collections.abc import Mapping
from contextlib import suppress
from datetime import UTC, datetime
from pathlib import Path
from queue import Empty, SimpleQueue
from typing import Any

from benchkit.errors import BenchkitError
from benchkit.keeper import platform
from benchkit.keeper.lifeline import Listener
from benchkit.keeper.off_only import switch_off
from benchkit.keeper.offs import NO_SUPPLY
from benchkit.keeper.pipes import LineReader, LineWriter, watch_pipe

TICK_S = 0.1

SAME_S = 3.0
"""An "off" that was confirmed so short a time ago answers the next request too, s."""

AGAIN_S = 1.5
"""An "off" that failed within so short a time is tried once more, s."""

_JOURNAL_WAIT_S = 1.0


class StandBy:
    """The process's one object.

    Parameters
    ----------
    source, sink : int
        Descriptors of the client's pipe.
    lifeline : int or None
        The reading end of the keeper's.
    keeper : int or None
        The keeper's process id.
    """

    def __init__(self, source: int, sink: int, lifeline: int | None, keeper: int | None) -> None:
        self._inbox: SimpleQueue[tuple[str, Any]] = SimpleQueue()
        self._writer = LineWriter(sink)
        self._keeper = keeper
        self._supply: Mapping[str, Any] | None = None
        self._journal = ""
        self._listener = Listener(time.monotonic())
        self._has_lifeline = lifeline is not None
        self._client_gone = False
        self._last: tuple[float, dict[str, Any]] | None = None
        LineReader(source, self._receive)
        if lifeline is not None:
            watch_pipe(lifeline, lambda data: self._inbox.put(("lifeline", data)))

    def _receive(self, message: dict[str, Any] | None, _read_s: float) -> None:
        """Say at once that the client's word has been heard; runs on the reader's thread."""
        if message is not None and message.get("do") == "off":
            self._writer.send({"heard": message.get("id")})
        self._inbox.put(("client", message))

    def warm_up(self) -> None:
        """Load what switching off needs; what comes meanwhile waits in the inbox."""
        importlib.import_module("benchkit.keeper.bench")
        importlib.import_module("benchkit.journal")
        from benchkit.instruments.visa import resource_manager

        with suppress(BenchkitError):
            resource_manager()

    def run(self) -> None:
        """Wait, and act when woken, until neither keeper nor client is left."""
        while not self._over():
            with suppress(Empty):
                self._take(*self._inbox.get(timeout=TICK_S))
            if self._keeper is not None and self._listener.frozen(time.monotonic()):
                platform.end_process(self._keeper)
                self._keeper = None
        self._writer.finish(0.5)

    def _over(self) -> bool:
        return self._client_gone and (not self._has_lifeline or bool(self._listener.ended))

    def _take(self, source: str, what: Any) -> None:
        if source == "lifeline":
            before = self._listener.ended
            self._listener.hear(what, time.monotonic())
            if self._listener.ended and not before:
                self._keeper = None
                self._off_unasked()
        elif what is None:
            self._client_gone = True
        elif what.get("do") == "know":
            self._supply = what.get("supply")
            self._journal = str(what.get("journal") or "")
            if self._last is None:
                self._off_unasked()
        elif what.get("do") == "off":
            self._writer.send({"id": what.get("id"), "ok": self._off(str(what.get("reason", "")))})

    def _off_unasked(self) -> None:
        """Switch off if the keeper has gone without having done so."""
        if self._supply is not None and self._listener.ended in ("died", "unsure"):
            died = self._listener.ended == "died"
            self._off("the keeper died" if died else "the keeper left without a confirmed off")

    def _off(self, reason: str) -> dict[str, Any]:
        """Switch off, or answer with what was confirmed just now; a dead keeper's record learns of it."""
        result = self._fresh()
        if result is None:
            result = self._switch_off(reason)
        if self._journal and (self._listener.ended == "died" or (self._listener.ended and result["confirmed"])):
            self._write(result)
        return result

    def _fresh(self) -> dict[str, Any] | None:
        """Return what was confirmed so short a time ago that it still answers."""
        if self._last is None or time.monotonic() - self._last[0] > SAME_S or not self._last[1]["confirmed"]:
            return None
        return self._last[1]

    def _switch_off(self, reason: str) -> dict[str, Any]:
        if self._supply is None:
            return {"reason": reason, "confirmed": False, "how": NO_SUPPLY, "state": None}
        began_s = time.monotonic()
        result = switch_off({"supply": self._supply, "reason": reason})
        if not result["confirmed"] and time.monotonic() - began_s < AGAIN_S:
            result = switch_off({"supply": self._supply, "reason": reason})
        self._last = (time.monotonic(), result)
        return result

    def _write(self, result: Mapping[str, Any]) -> None:
        """Write into a dead keeper's record what has happened; what can't be written goes to the log alone."""
        journal, self._journal = self._journal, ""
        try:
            writer = _resumed(Path(journal))
            problem = "its process ended without a word; what stood by took over"
            if writer.torn:
                problem += f"; a line that it was writing was cut off after {len(writer.torn)} characters"
            with writer:
                lines: list[tuple[str, Mapping[str, Any]]] = [("output off", result)]
                if self._listener.ended == "died":
                    lines.insert(0, ("contact lost", {"who": "the keeper", "problem": problem}))
                for name, payload in lines:
                    at = datetime.now(UTC).strftime("%Y-%m-%dT%H:%M:%S.%fZ")
                    writer.append(name, payload, round(time.monotonic(), 6), at)
        except (BenchkitError, OSError) as error:
            print(f"the record could not be gone on with: {error}", file=sys.stderr, flush=True)


def _resumed(path: Path) -> Any:
    """Take a journal over; its lock may need a moment to fall."""
    from benchkit.journal import Writer

    end_s = time.monotonic() + _JOURNAL_WAIT_S
    while True:
        try:
            return Writer.resume(path)
        except BenchkitError:
            if time.monotonic() > end_s:
                raise
            time.sleep(0.05)
