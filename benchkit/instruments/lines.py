"""Lines over a transport: messages out, one line after the other in, with a deadline and a way to be cancelled.

Waiting is done in slices; between them the deadline, a cancel and a closed peer are looked at.  Replies are bounded.
"""

from __future__ import annotations

import threading
import time
from collections import deque
from collections.abc import Callable

from benchkit.errors import InstrumentError
from benchkit.instruments.numbers import visible
from benchkit.instruments.settings import LinkSettings
from benchkit.instruments.traffic import TrafficLog
from benchkit.instruments.transports import SLICE_S, Transport
from benchkit.instruments.transports.worker import Abandonable
from benchkit.instruments.visa import resource_manager

REPLY_LIMIT = 65536
"""The longest reply that is taken, bytes."""

_HURRIED_GAP_S = 0.05
_OPENING_RESERVE_S = 0.25
LIBRARY_LIMIT_S = 15.0
"""So long may importing PyVISA and loading its library take, s (our own figure: a slow disk, a busy machine)."""


def opened(opening: Callable[[], Transport], who: str, limit_s: float, cancel: threading.Event) -> Transport:
    """Open a transport within its time, in a thread that is left behind when it takes longer or is cancelled.

    Raises
    ------
    InstrumentError
        What the opening raised; ``timeout``; ``refused`` when cancelled.
    """
    thread = Abandonable(opening, lambda late: late.close(), f"opening of {who}")
    transport = thread.result(limit_s + _OPENING_RESERVE_S, SLICE_S, cancel.is_set)
    if transport is not None:
        return transport
    if cancel.is_set():
        raise InstrumentError("refused", "Opening the link was given up because the output is being switched off")
    raise InstrumentError(
        "timeout",
        f"{who} did not open a link within {limit_s:.1f} s",
        "an instrument that answers there",
        "Check that it is switched on, the cable and the address",
    )


def load_library(library: str, who: str, cancel: threading.Event) -> None:
    """Import PyVISA and load the library before any opening is timed: the first time that takes up to some seconds.

    Raises
    ------
    InstrumentError
        ``unsupported`` if there is no such library; ``timeout``; ``refused`` when cancelled.
    """
    thread = Abandonable(lambda: resource_manager(library), lambda _: None, f"library for {who}")
    if thread.result(LIBRARY_LIMIT_S, SLICE_S, cancel.is_set) is not None:
        return
    if cancel.is_set():
        raise InstrumentError("refused", "Opening the link was given up because the output is being switched off")
    raise InstrumentError(
        "timeout",
        f"The VISA library {library} for {who} did not load within {LIBRARY_LIMIT_S:.0f} s",
        "a library that can be used",
        "Check --visa or the key visa of the bench file",
    )


class Lines:
    """What goes over one open link.  Only the link's owner thread may call it.

    Parameters
    ----------
    transport : Transport
        The open link.
    settings : LinkSettings
    log : TrafficLog
    label, who : str
        How the log and messages call the instrument.
    cancel : threading.Event
        When set, waiting ends within one slice.
    """

    def __init__(
        self,
        transport: Transport,
        settings: LinkSettings,
        log: TrafficLog,
        label: str,
        who: str,
        cancel: threading.Event,
    ) -> None:
        self._transport = transport
        self._settings = settings
        self._log = log
        self._label = label
        self._who = who
        self._cancel = cancel
        self._rest: deque[bytes] = deque()
        self._last_message_s = -1e9
        self._terminator = settings.read_termination.encode("latin-1")
        self.fresh_when_reopened = transport.fresh_when_reopened

    def send(self, message: str, *, hurry: bool = False) -> None:
        """Send one message; in a hurry a cancel is not looked at, and the gap before it is short."""
        gap_s = self._settings.gap_s
        if hurry:
            gap_s = min(gap_s, _HURRIED_GAP_S)
        else:
            self.look_for_cancel(message)
        wait_s = self._last_message_s + gap_s - time.monotonic()
        if wait_s > 0:
            time.sleep(wait_s)
        data = (message + self._settings.write_termination).encode("ascii", "replace")
        self._transport.write(data)
        self._last_message_s = time.monotonic()
        self._log.note(self._label, "sent", data)

    def read(self, message: str, timeout_s: float) -> str:
        """Return the next line; `message` is what it should answer, for the error's words.

        Raises
        ------
        InstrumentError
            ``timeout``, ``link lost``, ``garbled`` when it has no end, ``refused`` when cancelled.
        """
        if self._rest:
            return self._rest.popleft().decode("latin-1")
        begin_s = last_s = time.monotonic()
        idle_s = self._settings.ends_by_idle_s
        slice_s = min(SLICE_S, idle_s / 2) if idle_s else SLICE_S
        data = bytearray()
        while True:
            left_s = max(0.0, begin_s + timeout_s - time.monotonic())
            try:
                piece = self._transport.read_piece(min(slice_s, left_s), left_s)
            except InstrumentError as error:
                raise self._broke(error, bytes(data)) from None
            now_s = time.monotonic()
            took_s = now_s - begin_s
            if piece.data:
                data += piece.data
                last_s = now_s
            ended = (piece.ended and bool(data)) or (bool(self._terminator) and data.endswith(self._terminator))
            if ended or (idle_s and data and now_s - last_s >= idle_s):
                self._log.note(self._label, "got", bytes(data), took_s)
                first, *others = self._split(bytes(data))
                self._rest.extend(others)
                return first.decode("latin-1")
            if len(data) > REPLY_LIMIT:
                raise InstrumentError(
                    "garbled",
                    f"{self._who} sent {len(data)} bytes without an end",
                    "one line",
                    "Check the terminations in its profile",
                    partial=bytes(data[:200]),
                )
            if not piece.data and self._transport.peer_closed():
                self._log.note(self._label, "closed the link", bytes(data), took_s)
                had = f" after {visible(bytes(data))}" if data else ""
                raise InstrumentError(
                    "link lost",
                    f"{self._who} closed the connection{had} instead of answering {message}",
                    "",
                    "Check that it is switched on and that no other program uses it",
                    partial=bytes(data),
                )
            self.look_for_cancel(message)
            if took_s >= timeout_s:
                self._log.note(self._label, "gave up", bytes(data), took_s)
                raise self._too_late(message, timeout_s, bytes(data))

    def find(self, message: str, wanted: Callable[[str], bool], limit_s: float) -> str:
        """Throw lines away until one is wanted, and return that.

        Raises
        ------
        InstrumentError
            As `read` does; ``timeout`` also when only others come.
        """
        end_s = time.monotonic() + limit_s
        while (left_s := end_s - time.monotonic()) >= 0.0:
            try:
                line = self.read(message, left_s)
            except InstrumentError as error:
                if error.kind != "garbled":
                    raise
                continue
            if wanted(line):
                return line
            self._log.note(self._label, "threw away", line.encode("latin-1"))
        raise self._too_late(message, limit_s, b"")

    def pending(self) -> bool:
        """Tell whether unasked bytes wait, as far as that can be seen."""
        return bool(self._rest) or self._transport.pending()

    def drain(self, quiet_s: float) -> None:
        """Throw away what has come, until nothing comes for `quiet_s`."""
        thrown = b"".join(self._rest) + self._transport.drain(quiet_s)
        self._rest.clear()
        if thrown:
            self._log.note(self._label, "threw away", thrown)

    def quiet(self, silence_s: float) -> bool:
        """Throw away what comes until nothing has come for so long; tell whether anything came."""
        end_s = time.monotonic() + 2 * silence_s + 1.0
        last_s = time.monotonic()
        came = bool(self._rest)
        self._rest.clear()
        while time.monotonic() - last_s < silence_s:
            data = self._transport.read_piece(min(SLICE_S, silence_s), silence_s).data
            if data:
                self._log.note(self._label, "threw away", data)
                last_s = time.monotonic()
                came = True
            elif self._transport.peer_closed():
                raise InstrumentError("link lost", f"{self._who} closed the connection", "silence", "Connect again")
            self.look_for_cancel("getting into step")
            if time.monotonic() > end_s:
                raise InstrumentError("garbled", f"{self._who} does not stop sending", "silence", "Check its settings")
        return came

    def rest_for(self, seconds: float) -> None:
        """Wait, unless cancelled."""
        end_s = time.monotonic() + seconds
        while (left_s := end_s - time.monotonic()) > 0:
            time.sleep(min(SLICE_S, left_s))
            self.look_for_cancel("opening the link")

    def look_for_cancel(self, message: str) -> None:
        """Raise if something urgent waits."""
        if self._cancel.is_set():
            raise InstrumentError("refused", f"{message} was given up because the output is being switched off")

    def reset(self) -> None:
        """Empty the instrument's own buffers, where the link can."""
        self._transport.reset()

    def close(self) -> None:
        """Close; never raises."""
        self._rest.clear()
        self._transport.close()

    def _split(self, data: bytes) -> list[bytes]:
        """Return the lines of one message; a terminator at its end ends the last one."""
        if not self._terminator:
            return [data]
        return data.removesuffix(self._terminator).split(self._terminator)

    def _broke(self, error: InstrumentError, data: bytes) -> InstrumentError:
        """Return an error of the link with what had come before it."""
        if not data:
            return error
        came = f"After {visible(data)}: {error.came}"
        return InstrumentError(error.kind, came, error.expected, error.next_step, partial=data)

    def _too_late(self, message: str, timeout_s: float, data: bytes) -> InstrumentError:
        came = f"only {visible(data)} came" if data else "nothing came"
        end = f"a line that ends in {self._settings.read_termination!r}" if self._terminator else "an answer"
        return InstrumentError(
            "timeout",
            f"{self._who} did not answer {message} within {max(timeout_s, 0.0):.1f} s; {came}",
            end,
            "Check that it is in remote control and that the profile fits it",
            partial=data,
        )
