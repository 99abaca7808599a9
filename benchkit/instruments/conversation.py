"""Questions and answers with one instrument, kept in step whatever goes wrong.

Rules
-----
* A link is open when the instrument has said its name (``*IDN?``), and not before.
* After any failed question the link is *dirty*: an answer may still be on its way and would be taken for the next
  one.  Before the next question everything that has come is thrown away, the name is asked for, and lines are read
  until it comes.  Instruments answer in order, so that nothing old can come behind it.  If it doesn't come, the link
  is closed and a new one opened; the name must be the same.
* Bytes that wait before a question was asked, or behind an answer, make the link dirty too.
* Only questions are ever repeated, once.  A setting is never sent twice by itself: it is read back.
* Waiting is done in slices; between them the deadline, a cancel and a closed peer are looked at.
* Replies are bounded, and control characters never get further than a quoted message.
"""

from __future__ import annotations

import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, replace
from typing import Protocol, TypeVar

from benchkit.errors import InstrumentError
from benchkit.instruments.address import SocketAddress
from benchkit.instruments.numbers import visible
from benchkit.instruments.traffic import TrafficLog
from benchkit.instruments.visa import VisaSocket

T = TypeVar("T")

IDENTIFY = "*IDN?"
REPLY_LIMIT = 65536
"""The longest reply that is taken, bytes."""

_QUIET_S = 0.02


class Transport(Protocol):
    """What a conversation needs of a link; `VisaSocket` is the one there is."""

    def write(self, data: bytes) -> None:
        """Send bytes."""

    def read_slice(self) -> bytes:
        """Wait for one slice at most and return what came, ended by the terminator if it came."""

    def pending(self) -> bool:
        """Tell whether unasked bytes wait."""

    def peer_closed(self) -> bool:
        """Tell whether the other side is gone."""

    def drain(self, quiet_s: float) -> bytes:
        """Throw waiting bytes away."""

    def close(self) -> None:
        """Close without raising."""


@dataclass(frozen=True, kw_only=True)
class LinkSettings:
    """How to speak with one instrument.

    Parameters
    ----------
    read_termination, write_termination : str
        What ends a reply (one character) and a message.
    timeout_s : float
        For a plain question, s.
    open_timeout_s : float
        For opening and the first answer, s.
    gap_s : float
        The least time between two messages, s.
    settle_s : float
        Rest after opening, s.
    """

    read_termination: str = "\n"
    write_termination: str = "\n"
    timeout_s: float = 2.0
    open_timeout_s: float = 3.0
    gap_s: float = 0.0
    settle_s: float = 0.0


Opener = Callable[[SocketAddress, LinkSettings], Transport]


def open_socket(address: SocketAddress, settings: LinkSettings) -> Transport:
    """Open a raw socket over PyVISA."""
    return VisaSocket(address, read_termination=settings.read_termination, open_timeout_s=settings.open_timeout_s)


class Conversation:
    """One instrument's questions and answers.  Only the link's owner thread may call it.

    Parameters
    ----------
    label : str
        ``the meter`` or ``the supply``: how messages call it.
    address, settings
        Where it is and how to speak.
    log : TrafficLog
    cancel : threading.Event
        When set, the running question ends within one slice.
    opener : callable
        Makes the transport.

    Attributes
    ----------
    idn : str
        The name it gave; empty before it was first opened.
    openings : int
        How often it was opened: a change means that nothing is known about its settings.
    patience_s : float or None
        When set, no wait for an answer or an opening is longer than this, s.
    repeats : bool
        False: a failed question is not asked a second time.
    """

    def __init__(
        self,
        label: str,
        address: SocketAddress,
        settings: LinkSettings,
        log: TrafficLog,
        cancel: threading.Event,
        *,
        opener: Opener = open_socket,
    ) -> None:
        self.label = label
        self.address = address
        self.settings = settings
        self.idn = ""
        self.openings = 0
        self.patience_s: float | None = None
        self.repeats = True
        self._log = log
        self._cancel = cancel
        self._opener = opener
        self._transport: Transport | None = None
        self._dirty = False
        self._last_message_s = -1e9
        self._terminator = settings.read_termination.encode("latin-1")

    @property
    def dirty(self) -> bool:
        """True when the next question has to get back into step first."""
        return self._dirty or self._transport is None

    @contextmanager
    def impatient(self, patience_s: float, *, repeats: bool) -> Iterator[None]:
        """Cap every wait for the time of a block."""
        self.patience_s, self.repeats = patience_s, repeats
        try:
            yield
        finally:
            self.patience_s, self.repeats = None, True

    @property
    def cancelled(self) -> bool:
        """True when something urgent waits for the running job to end."""
        return self._cancel.is_set()

    def open(self, first: str = "") -> str:
        """Open the link, prove it by the instrument's name, and return that.

        Parameters
        ----------
        first : str
            A message to send before anything else: "off" waits for nobody's name.

        Raises
        ------
        InstrumentError
            If it can't be opened, does not answer, or another instrument answers than before.
        """
        self.close()
        patient = replace(self.settings, open_timeout_s=self._at_most(self.settings.open_timeout_s))
        self._transport = self._opener(self.address, patient)
        self.openings += 1
        self._dirty = False
        try:
            if first:
                self._send(first, hurry=True)
            if self.settings.settle_s:
                time.sleep(self.settings.settle_s)
                self._transport.drain(_QUIET_S)
            name = self._first_name()
        except InstrumentError:
            self.close()
            raise
        if self.idn and name != self.idn:
            self.close()
            raise InstrumentError(
                "refused",
                f"At {self.address.text} {visible(name)} answers now",
                f"{visible(self.idn)}, as before",
                "Find out which instrument is connected",
            )
        self.idn = name
        return name

    def ask(self, message: str, parse: Callable[[str], T], *, timeout_s: float | None = None) -> T:
        """Send a question and return its parsed answer; after a failure get back into step and ask once more.

        Parameters
        ----------
        message : str
            Without its termination.
        parse : callable
            Turns the reply into a value or raises `InstrumentError`.
        timeout_s : float, optional
            For the reply; the settings' without it.

        Raises
        ------
        InstrumentError
            Any kind; a cancelled question is ``refused``.
        """
        try:
            return self._ask_once(message, parse, timeout_s)
        except InstrumentError as error:
            if not self.repeats or self.cancelled or error.kind in {"refused", "unsupported", "bad address"}:
                raise
            self._log.note(self.label, f"asks again ({error.kind})")
            return self._ask_once(message, parse, timeout_s)

    def tell(self, message: str) -> None:
        """Send a setting; getting back into step first if need be.  It is never sent twice."""
        self._in_step()
        self._send(message)

    def tell_at_once(self, message: str) -> None:
        """Send a message whatever state the link is in, without getting into step; open it if it is closed."""
        if self._transport is None:
            self.open(message)
        else:
            self._send(message, hurry=True)

    def close(self) -> None:
        """Close the link; the next question opens a new one."""
        if self._transport is not None:
            self._transport.close()
            self._transport = None

    def _ask_once(self, message: str, parse: Callable[[str], T], timeout_s: float | None) -> T:
        self._in_step()
        try:
            self._send(message)
            reply = self._read_line(message, self._at_most(self.settings.timeout_s if timeout_s is None else timeout_s))
            value = parse(reply)
        except InstrumentError as error:
            self._dirty = True
            if error.kind == "link lost":
                self.close()
            raise self._named(error, message) from None
        assert self._transport is not None
        if self._transport.pending():
            self._dirty = True
            raise InstrumentError(
                "garbled",
                f"{self._who()} sent more than one line as answer to {message}",
                "one line",
                "Check whether another program talks to it",
                partial=reply.encode("latin-1"),
            )
        return value

    def _at_most(self, seconds: float) -> float:
        return seconds if self.patience_s is None else min(seconds, self.patience_s)

    def _first_name(self) -> str:
        """Ask for the name; once more if the first question was lost on opening."""
        first = min(1.0, self._at_most(self.settings.open_timeout_s))
        try:
            return self._ask_name(first)
        except InstrumentError as error:
            if error.kind != "timeout":
                raise
        assert self._transport is not None
        self._transport.drain(_QUIET_S)
        return self._ask_name(self._at_most(self.settings.open_timeout_s))

    def _ask_name(self, timeout_s: float) -> str:
        self._send(IDENTIFY)
        name = self._read_line(IDENTIFY, timeout_s).strip()
        if not name or not name.isprintable():
            raise InstrumentError(
                "garbled", f"{self._who()} gave its name as {visible(name)}", "maker, model, serial and version"
            )
        return name

    def _in_step(self) -> None:
        """Get back into step if need be."""
        if self._transport is None:
            self.open()
            return
        if not self._dirty and self._transport.pending():
            self._dirty = True
        if not self._dirty:
            return
        try:
            thrown = self._transport.drain(_QUIET_S)
            if thrown:
                self._log.note(self.label, "threw away", thrown)
            self._send(IDENTIFY)
            deadline = time.monotonic() + self._at_most(self.settings.timeout_s)
            while (line := self._read_line(IDENTIFY, deadline - time.monotonic()).strip()) != self.idn:
                self._log.note(self.label, "threw away", line.encode("latin-1"))
            self._transport.drain(_QUIET_S)
            self._dirty = False
        except InstrumentError as error:
            if self._cancel.is_set():
                raise
            self._log.note(self.label, f"opens a new link ({error.kind})")
            self.open()

    def _send(self, message: str, *, hurry: bool = False) -> None:
        assert self._transport is not None
        if not hurry:
            self._look_for_cancel(message)
            wait_s = self._last_message_s + self.settings.gap_s - time.monotonic()
            if wait_s > 0:
                time.sleep(wait_s)
        data = (message + self.settings.write_termination).encode("ascii")
        try:
            self._transport.write(data)
        except InstrumentError:
            self._dirty = True
            self.close()
            raise
        self._last_message_s = time.monotonic()
        self._log.note(self.label, "sent", data)

    def _read_line(self, message: str, timeout_s: float) -> str:
        assert self._transport is not None
        begin_s = time.monotonic()
        data = b""
        while True:
            data += self._transport.read_slice()
            took_s = time.monotonic() - begin_s
            if data.endswith(self._terminator):
                self._log.note(self.label, "got", data, took_s)
                return data[: -len(self._terminator)].decode("latin-1")
            if len(data) > REPLY_LIMIT:
                raise InstrumentError(
                    "garbled", f"{self._who()} sent {len(data)} bytes without an end", "one line", partial=data[:200]
                )
            if self._transport.peer_closed():
                self._log.note(self.label, "closed the link", data, took_s)
                had = f" after {visible(data)}" if data else ""
                raise InstrumentError(
                    "link lost",
                    f"{self._who()} closed the connection{had} instead of answering {message}",
                    "",
                    "Check that it is switched on and that no other program uses it",
                    partial=data,
                )
            self._look_for_cancel(message)
            if took_s >= timeout_s:
                self._log.note(self.label, "gave up", data, took_s)
                raise self._too_late(message, timeout_s, data)

    def _too_late(self, message: str, timeout_s: float, data: bytes) -> InstrumentError:
        came = f"only {visible(data)} came" if data else "nothing came"
        return InstrumentError(
            "timeout",
            f"{self._who()} did not answer {message} within {max(timeout_s, 0.0):.1f} s; {came}",
            f"a line that ends in {self.settings.read_termination!r}",
            "Check that it is in remote control and that the profile fits it",
            partial=data,
        )

    def _look_for_cancel(self, message: str) -> None:
        if self._cancel.is_set():
            self._dirty = True
            raise InstrumentError("refused", f"{message} was given up because the output is being switched off")

    def _named(self, error: InstrumentError, message: str) -> InstrumentError:
        if error.kind != "garbled" or message in error.came:
            return error
        return InstrumentError(
            "garbled",
            f"{self._who()} answered {message}: {error.came[0].lower()}{error.came[1:]}",
            error.expected,
            error.next_step,
            partial=error.partial,
        )

    def _who(self) -> str:
        return f"{self.label[0].upper()}{self.label[1:]} at {self.address.text}"
