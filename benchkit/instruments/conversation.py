"""Questions and answers with one instrument, kept in step whatever goes wrong.

Rules
-----
* A link is open when the instrument has said its name (``*IDN?``), and not before.
* After any failed question the link is *dirty*: an answer may still be on its way and would be taken for the next
  one.  Before the next question a *mark* is asked for (`benchkit.instruments.marks`), a number that no earlier answer
  can hold, and all lines before it are thrown away.  Instruments answer in their order, so that nothing old can come
  behind it.  The next question is then closed by a second mark, and its answer counts only when it is the one line
  between the two: an answer that was lost is not replaced by one that came twice.
* If the mark doesn't come, or the instrument has none, a new link is opened: what was said to the old connection can't
  arrive at the new one.  On one and the same wire (serial, USB, VXI-11) it can; there the mark has to come on the new
  link too if it ever came.  An instrument without any is in step there after silence as long as a whole time-out, and
  its name: as sure as silence is, no more.
* A question that is *closed* is followed by a mark of its own on a link that never failed, too: a copy of an earlier
  answer that comes only after the question was sent shows by the line that it leaves before that mark, and would shift
  all later answers.  A meter's readings are closed.  A look at the supply is not: marks write into the instrument at
  each look, "off" must not wait for one, and looks are so far apart that what was left over is found before the next.
* What this can't find: such a copy before an answer that isn't closed, until the line that is left over waits before a
  question; in a closed one, a copy that comes when the true answer is lost, both within this question; and nothing is
  closed for an instrument without marks.
* Bytes that wait before a question was asked, or behind an answer, make the link dirty too.
* Only questions are ever repeated, once.  A setting is never sent twice by itself: it is read back.  The exception is
  what `Conversation.tell_at_once` sends, "off", which may be said any number of times.
* Opening happens in a thread that is left behind when it takes too long.
"""

from __future__ import annotations

import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import replace
from typing import TypeVar

from benchkit.errors import InstrumentError
from benchkit.instruments.address import Address
from benchkit.instruments.lines import REPLY_LIMIT, Lines, load_library, opened
from benchkit.instruments.marks import Marks, shows
from benchkit.instruments.names import is_name, name_in
from benchkit.instruments.numbers import visible
from benchkit.instruments.settings import LinkSettings, SerialLine
from benchkit.instruments.traffic import TrafficLog
from benchkit.instruments.transports import Transport, open_transport

__all__ = ["IDENTIFY", "REPLY_LIMIT", "Conversation", "LinkSettings", "Opener", "SerialLine", "Transport"]

T = TypeVar("T")

IDENTIFY = "*IDN?"

_QUIET_S = 0.02
_SHORT_SILENCE_S = 0.1
_MARK_S = 1.0
_MARK_TRIES = 2
_MOST_LINES = 1000

Opener = Callable[[Address, LinkSettings], Transport]


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
    opener : callable, optional
        Makes the transport; without it `open_transport` does.

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
        address: Address,
        settings: LinkSettings,
        log: TrafficLog,
        cancel: threading.Event,
        *,
        opener: Opener | None = None,
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
        self._opener = open_transport if opener is None else opener
        self._lines: Lines | None = None
        self._dirty = False
        self._marks = Marks()
        self._mark = -1
        self._marked = False
        self._mark_came: bool | None = None
        self._unanswered = 0
        self._hurried = False

    @property
    def dirty(self) -> bool:
        """True when the next question has to get back into step first."""
        return self._dirty or self._lines is None

    @contextmanager
    def impatient(self, patience_s: float, *, repeats: bool) -> Iterator[None]:
        """Cap every wait for the time of a block."""
        before = self.patience_s, self.repeats
        self.patience_s, self.repeats = patience_s, repeats
        try:
            yield
        finally:
            self.patience_s, self.repeats = before

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
        lines = self._lines = self._opened()
        self.openings += 1
        self._dirty = self._marked = False
        try:
            self._begin(lines, first)
            name = self._first_name(lines)
        except InstrumentError:
            self.close()
            raise
        self._unanswered = 0
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

    def learn_mark(self) -> None:
        """Find out, once, whether the instrument answers marks; without an answer a new link is opened."""
        for _ in range(_MARK_TRIES):
            if not self.settings.sync or self._mark_came is not None:
                return
            if self._lines is None:
                self.open()
            self._dirty = True
            self._in_step()
        self._mark_came = self._mark_came or False

    def ask(
        self, message: str, parse: Callable[[str], T], *, timeout_s: float | None = None, closed: bool = False
    ) -> T:
        """Send a question and return its parsed answer; after a failure get back into step and ask once more.

        Parameters
        ----------
        message : str
            Without its termination.
        parse : callable
            Turns the reply into a value or raises `InstrumentError`.
        timeout_s : float, optional
            For the reply; the settings' without it.
        closed : bool
            Take the answer only if that to a mark is the next line, where the instrument is known to have marks.

        Raises
        ------
        InstrumentError
            Any kind; a cancelled question is ``refused``.
        """
        try:
            return self._ask_once(message, parse, timeout_s, closed)
        except InstrumentError as error:
            if not self.repeats or self.cancelled or error.kind in {"refused", "unsupported", "bad address"}:
                raise
            self._log.note(self.label, f"asks again ({error.kind})")
            return self._ask_once(message, parse, timeout_s, closed)

    def tell(self, message: str) -> None:
        """Send a setting; getting back into step first if need be.  It is never sent twice."""
        self._send(self._in_step(), message)

    def tell_at_once(self, message: str) -> None:
        """Send a message whatever state the link is in, without getting into step; over a new link if need be."""
        if self._lines is not None:
            try:
                self._send(self._lines, message, hurry=True)
            except InstrumentError as error:
                self._log.note(self.label, f"opens a new link ({error.kind})")
            else:
                self._hurried = True
                return
        self.open(message)

    def close(self) -> None:
        """Close the link; the next question opens a new one."""
        if self._lines is not None:
            self._lines.close()
            self._lines = None

    def _opened(self) -> Lines:
        if self._opener is open_transport:
            load_library(self.settings.library, self._who(), self._cancel)
        limit_s = self._at_most(self.settings.open_timeout_s)
        patient = replace(self.settings, open_timeout_s=limit_s)
        transport = opened(lambda: self._opener(self.address, patient), self._who(), limit_s, self._cancel)
        return Lines(transport, self.settings, self._log, self.label, self._who(), self._cancel)

    def _begin(self, lines: Lines, first: str) -> None:
        """Say what has to be said before the name; what is urgent both before and after it."""
        if first:
            lines.send(first, hurry=True)
            self._hurried = True
        if self.settings.settle_s:
            lines.rest_for(self.settings.settle_s)
            lines.drain(_QUIET_S)
        for message in self.settings.prepare:
            lines.send(message, hurry=bool(first))
        if first and (self.settings.settle_s or self.settings.prepare):
            lines.send(first, hurry=True)

    def _first_name(self, lines: Lines) -> str:
        """Ask for the name; once more if the first question was lost on opening."""
        if not lines.fresh_when_reopened and not self._mark_comes(lines):
            if self._mark_came:
                raise InstrumentError(
                    "timeout",
                    f"{self._who()} did not answer {self.settings.sync} as it did before",
                    "a number of our own choice",
                    "Check the cable and the instrument",
                )
            lines.quiet(self._at_most(self.settings.timeout_s) if self._unanswered else _SHORT_SILENCE_S)
        limit_s = self._at_most(self.settings.open_timeout_s)
        try:
            return self._answer(lines, IDENTIFY, self._as_name, min(1.0, limit_s))
        except InstrumentError as error:
            if error.kind != "timeout" and (lines.fresh_when_reopened or error.kind != "garbled"):
                raise
        lines.drain(_QUIET_S)
        if self._mark_comes(lines):
            return self._answer(lines, IDENTIFY, self._as_name, limit_s)
        lines.send(IDENTIFY)
        line = lines.find(IDENTIFY, is_name, limit_s)
        lines.quiet(self._at_most(self.settings.timeout_s))
        return self._as_name(line)

    def _as_name(self, line: str) -> str:
        return name_in(line, self._who())

    def _ask_once(self, message: str, parse: Callable[[str], T], timeout_s: float | None, closed: bool) -> T:
        lines = self._in_step()
        limit_s = self._at_most(self.settings.timeout_s if timeout_s is None else timeout_s)
        try:
            value = self._answer(lines, message, parse, limit_s, closed=closed)
        except InstrumentError as error:
            self._dirty = True
            self._unanswered += 1
            if error.kind == "link lost":
                self.close()
            raise self._named(error, message) from None
        self._hurried = False
        return value

    def _answer(
        self, lines: Lines, message: str, parse: Callable[[str], T], limit_s: float, *, closed: bool = False
    ) -> T:
        """Ask, and take the one line that is the answer; when `_marked` or closed, the one line before a mark."""
        self._send(lines, message)
        end_s = time.monotonic() + limit_s
        reply = lines.read(message, limit_s)
        for _ in range(_MOST_LINES):
            if not shows(reply, self._mark):
                break
            if not self._marked:
                raise InstrumentError("garbled", f"the reply was {visible(reply)}, left over", "the answer to this")
            reply = lines.read(message, end_s - time.monotonic())
        if self._marked or (closed and self._mark_came):
            question = self._ask_for_mark(lines)
            if not shows(lines.read(question, self._at_most(self.settings.timeout_s)), self._mark):
                raise self._too_much(message, reply)
            self._marked = False
        value = parse(reply)
        if lines.pending():
            raise self._too_much(message, reply)
        return value

    def _in_step(self) -> Lines:
        """Return the link, in step; over a new one if it must be."""
        if self._lines is None:
            self.open()
        assert self._lines is not None
        try:
            if not self._dirty and not self._lines.pending():
                return self._lines
            self._dirty = True
            self._find_step(self._lines)
        except InstrumentError as error:
            if self._cancel.is_set():
                raise
            self._log.note(self.label, f"opens a new link ({error.kind})")
            if not self._hurried and self._lines is not None:
                self._lines.reset()
            self.open()
        self._dirty = False
        self._unanswered = 0
        return self._lines

    def _find_step(self, lines: Lines) -> None:
        lines.drain(_QUIET_S)
        if self._mark_comes(lines):
            return
        if lines.fresh_when_reopened or self._mark_came:
            raise InstrumentError("timeout", f"{self._who()} is not in step")
        lines.quiet(self._at_most(self.settings.timeout_s))
        lines.send(IDENTIFY)
        lines.find(IDENTIFY, lambda line: line.strip() == self.idn, self._at_most(self.settings.timeout_s))
        if lines.quiet(_SHORT_SILENCE_S):
            raise InstrumentError("garbled", f"{self._who()} said its name and more", "its name")

    def _mark_comes(self, lines: Lines) -> bool:
        """Ask for a mark and throw away the lines before it; False when the instrument has none or is silent."""
        if not self.settings.sync or (lines.fresh_when_reopened and self._mark_came is False):
            return False
        tries, limit_s = (1, _MARK_S) if lines.fresh_when_reopened else (2, max(_MARK_S, self.settings.timeout_s))
        for _ in range(tries):
            question = self._ask_for_mark(lines)
            try:
                lines.find(question, lambda line: shows(line, self._mark), self._at_most(limit_s) / 2)
            except InstrumentError as error:
                if error.kind != "timeout":
                    raise
            else:
                self._mark_came = self._marked = True
                return True
        self._mark_came = self._mark_came or False
        return False

    def _ask_for_mark(self, lines: Lines) -> str:
        self._mark = self._marks.fresh()
        question = self.settings.sync.replace("{n}", str(self._mark))
        self._send(lines, question)
        return question

    def _send(self, lines: Lines, message: str, *, hurry: bool = False) -> None:
        try:
            lines.send(message, hurry=hurry)
        except InstrumentError as error:
            self._dirty = True
            if error.kind != "refused":
                self.close()
            raise

    def _at_most(self, seconds: float) -> float:
        return seconds if self.patience_s is None else min(seconds, self.patience_s)

    def _too_much(self, message: str, reply: str) -> InstrumentError:
        return InstrumentError(
            "garbled",
            f"{self._who()} sent more than one line as answer to {message}",
            "one line",
            "Check whether another program talks to it",
            partial=reply.encode("latin-1", "replace"),
        )

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
