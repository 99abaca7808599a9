"""Plain mode: the same walk in lines of text, for any terminal, a screen reader or a pipe.

Each question is numbered answers, each with a letter too, and a prompt.  What an answer wants in words stands behind it
or on the next line.  The word ``off`` and Enter, or Ctrl+C, switch
the supply off at any moment, whether anything is asked or not.  So does the end of the input; after that nothing can
be asked any more, and the walk is left where it is.
"""

from __future__ import annotations

import asyncio
import math
import sys
import textwrap
import threading
import time
from collections.abc import Callable
from typing import TextIO

import click

from benchkit.procedure.actions import Choice, Question
from benchkit.session.front import AimView, LiveView, Reply, SuspectsView, View
from benchkit.ui.live_text import LiveLines
from benchkit.ui.widgets.answer_keys import keyed, keys_in_words
from benchkit.ui.widgets.summary_words import broken_words
from benchkit.ui.widgets.trim_words import plain_reading

WIDTH = 78

END_S = 6.0
"""So long is waited for the walk to take the question back when the input has ended, s."""


class PlainFront:
    """Prints what a screen would show and reads lines.

    Parameters
    ----------
    off_now : callable
        Switches the supply off at once.
    out, source : text streams
    bell : bool
        Ring, at a terminal only, when a reading was taken by itself.
    clock : callable
        Tells the time (s): a watched reading gets at most one line a second.
    """

    def __init__(
        self,
        off_now: Callable[[str], None],
        *,
        out: TextIO | None = None,
        source: TextIO | None = None,
        bell: bool = True,
        clock: Callable[[], float] = time.monotonic,
    ) -> None:
        self._off_now = off_now
        self._bell = bell
        self._live_lines = LiveLines(clock)
        self._asking: Question | None = None
        self._out = out or sys.stdout
        self._source = source or sys.stdin
        self.anew()
        self._lines: asyncio.Queue[str | None] = asyncio.Queue()
        self._ended = False
        self._loop = asyncio.get_running_loop()
        threading.Thread(target=self._listen, name="benchkit-lines", daemon=True).start()

    def anew(self) -> None:
        """Forget what has been told: another walk begins, with the same lines coming in."""
        self._told: dict[str, str] = {}
        self._busy = ""
        self._watched = 0.0
        self._broken = ""
        self._supply = ""
        self._section = ""
        self._message = ""
        self._aim = ""
        self._asked = ""
        self._suspects: SuspectsView | None = None
        self._view: View | None = None

    def show(self, view: View) -> None:
        """Print what has changed."""
        self._view = view
        if view.live is not None and self._live_lines.taken(view.live):
            self._ring()
        if view.section_title != self._section:
            self._section = view.section_title
            channel = f" (channel {view.channel})" if view.channel else ""
            self._print(f"\n== {view.section_title}{channel} ==")
        for result in view.results:
            line = f"{result.value_text} {result.verdict} {result.why}"
            if self._told.get(result.item) != line:
                self._told[result.item] = line
                value = f" {result.value_text}" if result.value_text else ""
                self._wrapped(f"[{result.verdict.upper()}] {result.title}{value}. {result.why}", "  ")
        if view.suspects is not None and view.suspects != self._suspects:
            self._tell_suspects(view.suspects)
        self._suspects = view.suspects
        if view.aim is not None and view.aim.unit_text and self._asked == view.item:
            self._tell_aim(view.aim)
        self._tell_progress(view)
        if (state := f"{view.supply.energised} {view.supply.label}") != self._supply:
            self._supply = state
            self._wrapped(view.supply.words, "  ")
        if view.broken != self._broken:
            self._broken = view.broken
            self._print(f"  {broken_words(view.broken)}")
        if view.message and view.message != self._message:
            self._message = view.message
            self._wrapped(f"! {view.message}", "  ")

    def _tell_progress(self, view: View) -> None:
        """Say what is being waited for; a reading that is being watched again whenever it has moved by a third."""
        live = view.live
        key = view.busy
        watched = live is not None and (bool(live.settles_text) or live.settled_share is not None or not view.busy)
        if live is not None and watched and (self._asking is not None or view.busy):
            self._tell_live(view, live)
        elif live is not None and view.busy:
            size = abs(live.value) if live.value is not None else math.inf
            moved = not 2.0 / 3.0 < (size or 1e-9) / (self._watched or 1e-9) < 1.5
            if view.busy == self._busy and not moved:
                return
            self._watched = size
            left = "" if view.remaining_s is None else f" About {view.remaining_s:.0f} s left."
            self._print(f"  ... {live.point} {live.text}. {view.busy}{left}")
        elif view.busy and view.busy != self._busy:
            left = "" if view.remaining_s is None else f" About {view.remaining_s:.0f} s left."
            self._print(f"  ... {view.busy}{left}")
        self._busy = key

    def _tell_live(self, view: View, live: LiveView) -> None:
        """Say how a reading that is trimmed, soaks or is to be taken stands, at most once a second."""
        asking = self._asking
        if asking is not None and asking.kind not in ("trim", "probes", "watch"):
            return
        placing = asking is not None and asking.kind == "probes"
        line = self._live_lines.line(live, view.busy, view.remaining_s, placing=placing)
        if line:
            self._print(f"  ~ {line}")

    def _ring(self) -> None:
        if self._bell and self._out.isatty():
            self._out.write("\a")
            self._out.flush()

    def _tell_suspects(self, suspects: SuspectsView) -> None:
        self._print("")
        self._wrapped(suspects.heading, "  ")
        for suspect in suspects.suspects:
            self._wrapped(f"{suspect.share_text}  {suspect.title}".strip(), "    ")
            for line in (suspect.alike, *suspect.evidence):
                self._wrapped(line, "        ")
        self._wrapped(suspects.unseen, "  ")
        self._wrapped(suspects.next_step, "  ")

    def _tell_aim(self, aim: AimView) -> None:
        """Print this unit's limits once for a question, whether they are known before it or come while it stands."""
        if self._aim != aim.unit_text:
            self._aim = aim.unit_text
            self._wrapped(f"This unit: {aim.unit_text}.", "  ")

    async def ask(self, question: Question, refused: str = "") -> Reply:
        """Print the question and read one line.

        Raises
        ------
        click.Abort
            When the input has ended: nobody is there who could answer.
        """
        if self._ended and self._lines.empty():
            raise click.Abort
        self._forget_typed_ahead()
        if refused:
            self._print(f"  ! {refused}")
        else:
            self._put(question)
        self._asking = question
        try:
            return await self._line_for(question)
        finally:
            self._asking = None

    async def _line_for(self, question: Question) -> Reply:
        named: Choice | None = None
        """The choice that was named in the line before, without the words that it wants."""
        while True:
            self._out.write(self._prompt(question) if named is None else _words_prompt(named))
            self._out.flush()
            line = await self._lines.get()
            if line is None:
                self._off_now("the input of the terminal has ended")
                await asyncio.sleep(END_S)
                raise click.Abort
            if _is_off(line):
                self._off_now("the operator typed off")
                continue
            text, chosen, named = line.strip(), named, None
            if chosen is not None and not text:
                self._print("  Nothing was typed: the question stands again.")
                continue
            if chosen is not None and not _is_choice(text, question):
                return Reply(choice=chosen.value, text=text)
            reply = self._reply(question, text)
            named = None if reply is None else _wanting_words(question, reply)
            if named is not None:
                continue
            if reply is not None:
                return reply
            by_hand = self._view is not None and self._view.supply.by_hand
            off = "off to stop (the supply is yours to switch)" if by_hand else "off to switch the supply off"
            self._print(f"  ! That is no answer here: {_wanted(question)}, or {off}.")

    def _forget_typed_ahead(self) -> None:
        """At a terminal, drop what was typed before the question stood there: it can't be an answer to it."""
        if not self._source.isatty():
            return
        ended = False
        while not self._lines.empty():
            ended = self._lines.get_nowait() is None or ended
        if ended:
            self._lines.put_nowait(None)

    def _put(self, question: Question) -> None:
        view = self._view
        self._asked, self._aim = question.item, ""
        where = f"({view.item_number} of {view.item_count}) " if view is not None else ""
        self._print("")
        self._wrapped(f"{where}{question.title}", "")
        self._wrapped(question.do, "  ")
        if question.red:
            self._wrapped(f"Red: {question.red}.", "  ")
        if question.black:
            self._wrapped(f"Black: {question.black}.", "  ")
        if question.kind == "probes" and view is not None and view.next_probe:
            self._wrapped(f"After this: {view.next_probe}.", "  ")
        if question.expected:
            self._wrapped(f"Expected: {question.expected}.", "  ")
        if view is not None and view.aim is not None and view.aim.point == question.point and view.aim.unit_text:
            self._tell_aim(view.aim)
        if question.why:
            self._wrapped(f"Why: {question.why}", "  ")
        if question.caution:
            self._wrapped(f"CAUTION: {question.caution}", "  ")
        if question.kind in ("by hand", "text"):
            for choice in question.choices[1:]:
                self._print(f"    or the words {choice.value}: {choice.label}")
        offered = () if question.kind in ("by hand", "text") else keyed(question.choices)
        for number, (letter, choice) in enumerate(offered, start=1):
            reason = " (the reason behind it or on the next line)" if choice.wants_reason and not choice.wanted else ""
            key = "" if question.kind == "hold" and choice.value == "yes" else f" ({letter.upper()})"
            self._print(f"    {number} {choice.label}{key}{reason}")
        if question.kind == "trim" and view is not None and view.kind == "rehearsal":
            self._print("    + or - and turns, such as +0.25, turns the simulated screw towards more or less bias")
            if view.live is not None:
                self._print(f"    now {plain_reading(view.live)}")

    def _prompt(self, question: Question) -> str:
        live = self._view.live if self._view is not None and question.kind == "trim" else None
        now = f" now {plain_reading(live)}" if live is not None else ""
        if question.kind == "hold":
            return "  type yes, or 2 or M to make safe> "
        return f" {now}> "

    def _reply(self, question: Question, text: str) -> Reply | None:
        first, _, rest = text.partition(" ")
        words = {choice.value for choice in question.choices[1:]}
        if question.kind == "hold" and text.lower() == "yes":
            return Reply(choice="yes", text="yes")
        if question.kind == "trim" and first[:1] in ("+", "-") and self._view is not None:
            try:
                turns = float(first)
            except ValueError:
                return None
            return Reply(choice="turn", turns=turns) if math.isfinite(turns) else None
        if not text and question.kind in ("tell", "probes", "trim"):
            if question.kind == "trim":
                return Reply(choice="turn", turns=0.0) if self._view and self._view.kind == "rehearsal" else None
            return Reply(choice=question.choices[0].value)
        if question.kind in ("by hand", "text") and text and text.lower() not in words:
            return Reply(choice=question.choices[0].value, text=text)
        if question.kind == "by hand" and not text and len(question.choices) == 1:
            return Reply(choice=question.choices[0].value)
        for choice in question.choices:
            if text.lower() == choice.value and not (question.kind == "hold" and choice.value == "yes"):
                return Reply(choice=choice.value)
        if _is_number_of(first, question):
            chosen = question.choices[int(first) - 1]
            if question.kind == "hold" and chosen.value == "yes":
                return None
            return Reply(choice=chosen.value, text=rest.strip())
        for letter, choice in () if question.kind in ("by hand", "text") else keyed(question.choices):
            if first.lower() == letter and (not rest.strip() or choice.wants_reason):
                if question.kind == "hold" and choice.value == "yes":
                    return None
                return Reply(choice=choice.value, text=rest.strip())
        return None

    def _listen(self) -> None:
        while True:
            try:
                line = self._source.readline()
            except (OSError, ValueError):
                line = ""
            try:
                self._loop.call_soon_threadsafe(self._take, line)
            except RuntimeError:
                return
            if not line:
                return

    def _take(self, line: str) -> None:
        """Take a line as it comes, asked for or not; "" is the end of the input.

        Lines of a pipe keep their order; at a terminal, off overtakes whatever was typed before it.
        """
        if _is_off(line) and (self._lines.empty() or self._source.isatty()):
            self._off_now("the operator typed off")
            return
        self._ended = self._ended or not line
        self._lines.put_nowait(line or None)

    def _wrapped(self, text: str, indent: str) -> None:
        if text:
            self._print(textwrap.fill(text, WIDTH, initial_indent=indent, subsequent_indent=indent + "  "))

    def _print(self, text: str) -> None:
        self._out.write(f"{text}\n")
        self._out.flush()


def _is_off(line: str) -> bool:
    return line.strip().lower() == "off"


def _wanting_words(question: Question, reply: Reply) -> Choice | None:
    """Return the choice of `reply` when it still wants words; stopping never waits for any."""
    if reply.text or reply.choice == "make safe":
        return None
    return next((choice for choice in question.choices if choice.value == reply.choice and choice.wants_reason), None)


def _words_prompt(choice: Choice) -> str:
    return f"  type {choice.wanted or 'the reason'}, or nothing to go back> "


def _is_choice(text: str, question: Question) -> bool:
    """Whether a line names a choice and nothing more: then it is that answer, and no words for the one before."""
    word = text.lower()
    return any(
        word in (choice.value, letter, str(number))
        for number, (letter, choice) in enumerate(keyed(question.choices), start=1)
    )


def _wanted(question: Question) -> str:
    """Say what is taken for an answer to `question`."""
    if question.kind in ("by hand", "text"):
        return "type what is asked for, or the words above"
    if question.kind == "hold":
        others = [choice for choice in keyed(question.choices) if choice[1].value != "yes"]
        return "type yes in full" + "".join(f", {letter.upper()} to {choice.label}" for letter, choice in others)
    return f"type the number or its letter ({keys_in_words(question.choices)})"


def _is_number_of(word: str, question: Question) -> bool:
    """A bare whole number that is one of the choices; "2" for a by-hand entry is a choice, "2 V" is not."""
    if not word.isascii() or not word.isdigit() or len(word) > 2:
        return False
    return 1 <= int(word) <= len(question.choices)
