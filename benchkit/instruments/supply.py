"""A supply with two outputs, the positive and the negative rail, that are always set together.

Rules
-----
* Setting: output off if it shall be off; the limit, read back; both voltages in one message, read back; then on, read
  back.  The voltage is never raised before the limit has been seen in the supply itself.
* A setting is never sent a second time by itself.  If the link had to be opened anew in between, nothing more is set.
* If only one output comes on, or a setting is not what was sent, both are switched off when they had been off before.
* "Off" needs nothing to be in step: it is sent first, and only then is the link put in order, the output state read
  back and the current measured.  It is confirmed when both outputs read back as off *and* no current flows; the rails'
  voltage is reported but proves nothing, because capacitors hold it.  One more try is made over a new link.  Otherwise
  the words are: output state unknown, switch it off by hand.
"""

from __future__ import annotations

import math
import time
from collections.abc import Callable
from concurrent.futures import Future
from contextlib import suppress
from dataclasses import dataclass, replace
from functools import partial

from benchkit.errors import EntryError, InstrumentError
from benchkit.events import SupplyState
from benchkit.instruments.conversation import Conversation
from benchkit.instruments.link import Link
from benchkit.instruments.numbers import (
    NumberRules,
    garbled,
    parse_flags,
    parse_numbers,
    parse_switches,
    visible,
)
from benchkit.instruments.profile import SupplyProfile

OFF_TIMEOUT_S = 1.2
"""How long each answer may take while "off" is being confirmed, s."""

WATCH_TIMEOUT_S = 1.0
"""How long each answer may take while the supply is watched, s; a silent one is given up after four times that."""

UNKNOWN = "output state unknown: switch it off by hand"

_OFF_TRIES = 2
_OFF_BUDGET_S = 2.5
_OFF_PAUSE_S = 0.05


@dataclass(frozen=True, kw_only=True)
class OffOutcome:
    """What became of an "off": confirmed or not, in words, and the last that the supply said."""

    confirmed: bool
    how: str
    state: SupplyState | None


@dataclass(frozen=True, kw_only=True)
class Sample:
    """One look at the supply: its state, and each output's switch (positive, negative) as read back."""

    state: SupplyState
    outputs: tuple[bool, bool]


class Supply:
    """A supply behind a link.

    Parameters
    ----------
    link : Link
        Its owner thread.
    profile : SupplyProfile
        Its dialect.
    """

    def __init__(self, link: Link, profile: SupplyProfile) -> None:
        self._link = link
        self._profile = profile
        self._rules = profile.numbers.rules()

    def identify(self) -> Future[str]:
        """Open the link, empty the supply's error queue of what was before, and return its name."""
        return self._link.submit(self._identify)

    def set(self, positive_v: float, negative_v: float, limit_a: float, output_on: bool) -> Future[Sample]:
        """Set both rails and the limit, and the output; return what was read back.

        Parameters
        ----------
        positive_v, negative_v : float
            V; the negative rail is zero or negative.
        limit_a : float
            For each rail, A.
        output_on : bool
            Both outputs on, or both off.

        Raises
        ------
        EntryError
            If a number makes no sense.
        InstrumentError
            From the future; ``refused`` when the supply did not do it.
        """
        if not (math.isfinite(positive_v) and positive_v >= 0):
            raise EntryError(f"The positive rail was to be {positive_v!r} V", "0 V or more")
        if not (math.isfinite(negative_v) and negative_v <= 0):
            raise EntryError(f"The negative rail was to be {negative_v!r} V", "0 V or less")
        if not (math.isfinite(limit_a) and limit_a > 0):
            raise EntryError(f"The current limit was to be {limit_a!r} A", "more than 0 A")
        return self._link.submit(
            lambda conversation: self._set(conversation, positive_v, negative_v, limit_a, output_on)
        )

    def sample(self) -> Future[Sample]:
        """Read the supply's outputs, settings and measurements; each answer may take `WATCH_TIMEOUT_S`."""

        def job(conversation: Conversation) -> Sample:
            with conversation.impatient(WATCH_TIMEOUT_S, repeats=True):
                return self._sample(conversation)

        return self._link.submit(job)

    def off(self) -> Future[OffOutcome]:
        """Switch both outputs off and confirm it, before anything else that waits.  The future never fails."""
        return self._link.submit_urgent(self._off)

    def close(self, wait_s: float = 1.0) -> None:
        """Close the link, waiting for that for at most `wait_s`.  It switches nothing."""
        self._link.close(wait_s)

    def _identify(self, conversation: Conversation) -> str:
        name = conversation.idn or conversation.open()
        with suppress(InstrumentError):
            self._look_for_errors(conversation)
        return name

    def _set(
        self, conversation: Conversation, positive_v: float, negative_v: float, limit_a: float, output_on: bool
    ) -> Sample:
        commands, questions = self._profile.commands, self._profile.questions
        was_on = any(self._switches(conversation))
        openings = conversation.openings
        try:
            if not output_on and was_on:
                self._tell(conversation, openings, commands.off)
            self._tell(conversation, openings, commands.limit.replace("{value}", f"{limit_a:.4f}"))
            self._demand(conversation, questions.limits, (limit_a, limit_a), self._profile.amps_tolerance_a, "A")
            volts = (positive_v, negative_v if not self._profile.negative_programmed_positive else -negative_v)
            both = (
                commands.positive_volts.replace("{value}", f"{volts[0]:.4f}"),
                commands.negative_volts.replace("{value}", f"{volts[1] + 0.0:.4f}"),
            )
            self._tell(conversation, openings, commands.joiner.join(both))
            self._demand(conversation, questions.set_volts, volts, self._profile.volts_tolerance_v, "V")
            if output_on and not was_on:
                self._tell(conversation, openings, commands.on)
                if self._profile.settle_s:
                    time.sleep(self._profile.settle_s)
            self._look_for_errors(conversation)
            sample = self._sample(conversation)
            if sample.outputs != (output_on, output_on):
                raise InstrumentError(
                    "refused",
                    f"The supply's outputs read back as {_words(sample.outputs)}",
                    f"both {'on' if output_on else 'off'}",
                    "Look at the supply's own display",
                )
            return sample
        except InstrumentError as error:
            if not was_on and output_on and not conversation.cancelled:
                outcome = self._off(conversation)
                if not outcome.confirmed:
                    raise InstrumentError(
                        error.kind, error.came, error.expected, outcome.how, partial=error.partial
                    ) from None
            raise

    def _tell(self, conversation: Conversation, openings: int, message: str) -> None:
        if conversation.openings != openings or conversation.dirty:
            raise InstrumentError(
                "link lost",
                f"The link to the supply had to be put in order before {message}",
                "",
                "Nothing more was set; read the supply's state and decide again",
            )
        conversation.tell(message)

    def _demand(
        self, conversation: Conversation, question: str, wanted: tuple[float, float], tolerance: float, unit: str
    ) -> None:
        got = self._pair(conversation, question)
        if any(abs(a - b) > tolerance for a, b in zip(got, wanted, strict=True)):
            self._look_for_errors(conversation)
            raise InstrumentError(
                "refused",
                f"The supply answers {question} with {got[0]:g} {unit} and {got[1]:g} {unit}",
                f"{wanted[0]:g} {unit} and {wanted[1]:g} {unit}, as sent",
                "Check what the supply can deliver and whether it is under remote control",
            )

    def _look_for_errors(self, conversation: Conversation) -> None:
        """Empty the supply's error queue; the first entry is raised."""
        question = self._profile.questions.error
        if not question:
            return
        found: list[str] = []
        for _ in range(self._profile.error_limit):
            entry = conversation.ask(question, str.strip)
            if entry.lstrip("+-0").startswith(",") or entry.lstrip("+-0") == "":
                break
            found.append(entry)
        if found:
            raise InstrumentError(
                "refused",
                f"The supply reports the error {visible(found[0])}",
                "none",
                "See the supply's manual for it",
            )

    def _sample(self, conversation: Conversation) -> Sample:
        sign = -1.0 if self._profile.negative_programmed_positive else 1.0
        outputs, set_volts, limits, volts, amps, flags = self._answers(conversation)
        bits = self._profile.in_limit_bits
        state = SupplyState(
            output_on=any(outputs),
            positive_v=volts[0],
            negative_v=sign * volts[1] + 0.0,
            positive_a=amps[0],
            negative_a=-sign * amps[1] + 0.0,
            set_positive_v=set_volts[0],
            set_negative_v=sign * set_volts[1] + 0.0,
            limit_a=max(limits),
            positive_in_limit=bool(int(flags[0]) & bits),
            negative_in_limit=bool(int(flags[1]) & bits),
        )
        return Sample(state=state, outputs=(bool(outputs[0]), bool(outputs[1])))

    def _answers(self, conversation: Conversation) -> list[tuple[float, ...]]:
        """Ask all questions of a sample, in one message if the profile says that the supply takes that."""
        questions = self._profile.questions
        numbers = partial(parse_numbers, count=2, rules=self._rules)
        wanted: list[tuple[str, Callable[[str], tuple[float, ...]]]] = [
            (questions.output, partial(parse_switches, count=2)),
            (questions.set_volts, numbers),
            (questions.limits, numbers),
            (questions.volts, numbers),
            (questions.amps, numbers),
        ]
        if questions.in_limit:
            wanted.append((questions.in_limit, partial(parse_flags, count=2)))
        if questions.joined:

            def parse(text: str) -> list[tuple[float, ...]]:
                parts = text.split(";")
                if len(parts) != len(wanted):
                    raise garbled(text, f"{len(wanted)} answers with semicolons between")
                return [read(part) for part, (_, read) in zip(parts, wanted, strict=True)]

            answers = conversation.ask(";:".join(question for question, _ in wanted), parse)
        else:
            answers = [conversation.ask(question, read) for question, read in wanted]
        return answers if questions.in_limit else [*answers, (0, 0)]

    def _switches(self, conversation: Conversation) -> tuple[bool, bool]:
        pair = conversation.ask(self._profile.questions.output, lambda text: parse_switches(text, 2))
        return (pair[0], pair[1])

    def _pair(self, conversation: Conversation, question: str) -> tuple[float, float]:
        rules: NumberRules = self._rules
        pair = conversation.ask(question, lambda text: parse_numbers(text, 2, rules))
        return (pair[0], pair[1])

    def _off(self, conversation: Conversation) -> OffOutcome:
        """Switch off and confirm; whatever happens becomes words, never an exception."""
        deadline_s = time.monotonic() + _OFF_BUDGET_S
        with conversation.impatient(OFF_TIMEOUT_S, repeats=False):
            return self._off_within(conversation, deadline_s)

    def _off_within(self, conversation: Conversation, deadline_s: float) -> OffOutcome:
        problem = ""
        state: SupplyState | None = None
        for attempt in range(_OFF_TRIES):
            try:
                conversation.tell_at_once(self._profile.commands.off)
                outputs = self._switches(conversation)
                if any(outputs):
                    conversation.tell_at_once(self._profile.commands.off)
                    outputs = self._switches(conversation)
                state = SupplyState(output_on=any(outputs))
                if any(outputs):
                    problem = f"the outputs still read back as {_words(outputs)}"
                else:
                    sample = self._sample(conversation)
                    state = sample.state
                    problem = self._still_alive(sample)
                    if not problem:
                        return OffOutcome(confirmed=True, how=_confirmed(state), state=state)
            except Exception as error:
                problem = str(error)
                if state is not None:
                    state = replace(state, output_on=None)
                conversation.close()
            if time.monotonic() > deadline_s:
                break
            if attempt + 1 < _OFF_TRIES:
                time.sleep(_OFF_PAUSE_S)
        return OffOutcome(confirmed=False, how=f"{UNKNOWN} ({problem.rstrip('.')})", state=state)

    def _still_alive(self, sample: Sample) -> str:
        """Return what speaks against "off", or nothing."""
        if any(sample.outputs):
            return f"the outputs read back as {_words(sample.outputs)}"
        state = sample.state
        assert state.positive_a is not None
        assert state.negative_a is not None
        if max(abs(state.positive_a), abs(state.negative_a)) > self._profile.off_current_a:
            return f"{state.positive_a:.3f} A and {state.negative_a:.3f} A still flow"
        return ""


def _confirmed(state: SupplyState) -> str:
    return (
        "both outputs read back as off, no current flows; "
        f"{state.positive_v or 0.0:.2f} V and {state.negative_v or 0.0:.2f} V at the supply"
    )


def _words(outputs: tuple[bool, bool]) -> str:
    words = ["on" if output else "off" for output in outputs]
    return f"both {words[0]}" if outputs[0] == outputs[1] else f"positive {words[0]}, negative {words[1]}"
