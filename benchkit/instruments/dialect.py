"""How a profile's messages are spoken: filled in, sent in their order, and answered for two outputs.

Rules
-----
* A series for each output ends in one question, after messages such as the choice of a channel.  Within one look at
  the supply that choice is sent again only when it changes.
* When the link was opened anew while a series was under way, the choice may be gone: the whole series is asked again.
  That concerns questions; a series that sets something is never repeated.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any, TypeVar

from benchkit.errors import InstrumentError
from benchkit.instruments.conversation import Conversation
from benchkit.instruments.numbers import garbled
from benchkit.instruments.profile import SupplyProfile
from benchkit.instruments.replies import WordRules

T = TypeVar("T")
Pair = tuple[Any, Any]
Read = Callable[[str], Any]

_TRIES = 3


@dataclass
class Chosen:
    """What has been chosen in an instrument by messages before a question, and over which opening of the link."""

    openings: int = -1
    messages: tuple[str, ...] = ()


def fill(series: tuple[str, ...], words: Mapping[str, str]) -> tuple[str, ...]:
    """Return a series with ``{key}`` replaced for each of `words`."""
    filled = series
    for key, word in words.items():
        filled = tuple(message.replace("{" + key + "}", word) for message in filled)
    return filled


def ask_series(
    conversation: Conversation,
    series: tuple[str, ...],
    parse: Callable[[str], T],
    *,
    timeout_s: float | None = None,
    chosen: Chosen | None = None,
    after_choice: Callable[[], None] | None = None,
    closed: bool = False,
) -> T:
    """Send a series and return the parsed answer to its last message.

    Parameters
    ----------
    conversation : Conversation
    series : tuple of str
        The last is the question.
    parse : callable
        Turns the reply into a value or raises `InstrumentError`.
    timeout_s : float, optional
        For the answer.
    chosen : Chosen, optional
        What an earlier series of the same job has sent; messages that would only repeat it are left out.
    after_choice : callable, optional
        Run between the messages before the question and the question, when they were sent.
    closed : bool
        Close the question by a mark, see `Conversation.ask`.

    Raises
    ------
    InstrumentError
        Any kind.
    """
    *before, question = series
    known = Chosen() if chosen is None else chosen
    for _ in range(_TRIES):
        if before and (known.openings != conversation.openings or known.messages != tuple(before)):
            known.messages = ()
            for message in before:
                conversation.tell(message)
                if message is before[0]:
                    known.openings = conversation.openings
            if known.openings != conversation.openings:
                continue
            known.messages = tuple(before)
            if after_choice is not None:
                after_choice()
        openings = conversation.openings
        value = conversation.ask(question, parse, timeout_s=timeout_s, closed=closed)
        if not before or openings == conversation.openings:
            return value
    raise InstrumentError(
        "link lost",
        f"The link broke again and again between {before[0]} and {question}",
        "",
        "Check cable and network",
    )


@dataclass
class Question:
    """One question about both outputs: its series, what reads one value of its answer, and whether that is all."""

    series: tuple[str, ...]
    read: Read
    shared: bool = False

    @property
    def each(self) -> bool:
        """Whether it is asked once for each output."""
        return any("{output}" in message for message in self.series)


@dataclass
class SupplyTalk:
    """A supply's questions, asked for both outputs.

    Parameters
    ----------
    profile : SupplyProfile
    """

    profile: SupplyProfile
    names: tuple[str, str] = field(init=False)

    def __post_init__(self) -> None:
        self.names = (self.profile.outputs.positive, self.profile.outputs.negative)
        questions = self.profile.questions
        units = {"set_volts": "V", "limits": "A", "volts": "V", "amps": "A", "over_voltage": "V"}
        number = {key: self.profile.rules(key, unit).number for key, unit in units.items()}
        self.questions: dict[str, Question] = {
            "output": Question(questions.output, self.profile.on_words.read),
            "set_volts": Question(questions.set_volts, number["set_volts"]),
            "limits": Question(questions.limits, number["limits"]),
            "volts": Question(questions.volts, number["volts"]),
            "amps": Question(questions.amps, number["amps"]),
            "in_limit": Question(questions.in_limit, self.profile.limit_words.read),
            "over_voltage": Question(questions.over_voltage, number["over_voltage"]),
            "over_current": Question(
                questions.over_current, WordRules(what="whether over-current protection is on").read
            ),
            "tripped": Question(questions.tripped, self.profile.trip_words.read),
            "over_current_tripped": Question(questions.over_current_tripped, self.profile.trip_words.read),
        }
        for key in questions.shared:
            self.questions[key].shared = True

    def has(self, key: str) -> bool:
        """Whether the supply can be asked that."""
        return bool(self.questions[key].series)

    def ask(self, conversation: Conversation, key: str) -> Pair:
        """Return one answer for both outputs, the positive rail's first."""
        return self.ask_all(conversation, (key,))[key]

    def ask_all(self, conversation: Conversation, keys: tuple[str, ...]) -> dict[str, Pair]:
        """Return the answers to those of `keys` that the supply has, in one message where it takes that.

        Raises
        ------
        InstrumentError
            Any kind.
        """
        wanted = {key: self.questions[key] for key in keys if self.has(key)}
        if self.profile.questions.joined and len(wanted) > 1:
            return self._joined(conversation, wanted)
        found: dict[str, Pair] = {}
        for key, question in wanted.items():
            if not question.each:
                found[key] = ask_series(conversation, question.series, self._both(question))
        halves: dict[str, list[Any]] = {key: [] for key, question in wanted.items() if question.each}
        chosen = Chosen()
        for name in self.names if halves else ():
            for key, half in halves.items():
                series = fill(wanted[key].series, {"output": name})
                half.append(ask_series(conversation, series, wanted[key].read, chosen=chosen))
        return found | {key: (half[0], half[1]) for key, half in halves.items()}

    def _both(self, question: Question) -> Callable[[str], Pair]:
        read = question.read

        def parse(text: str) -> Pair:
            if question.shared:
                value = read(text)
                return (value, value)
            parts = text.strip(" \r").split(self.profile.questions.between)
            if len(parts) != 2:
                raise garbled(text, f"2 values with {self.profile.questions.between!r} between")
            try:
                return (read(parts[0]), read(parts[1]))
            except InstrumentError as error:
                raise garbled(text, f"2 values, each {error.expected}") from None

        return parse

    def _joined(self, conversation: Conversation, wanted: Mapping[str, Question]) -> dict[str, Pair]:
        """Ask several questions in one message; their answers come with semicolons between."""
        units: list[tuple[str, Callable[[str], Any]]] = []
        for question in wanted.values():
            if question.each:
                units += [(fill(question.series, {"output": name})[0], question.read) for name in self.names]
            else:
                units.append((question.series[0], self._both(question)))

        def parse(text: str) -> list[Any]:
            parts = text.split(";")
            if len(parts) != len(units):
                raise garbled(text, f"{len(units)} answers with semicolons between")
            return [read(part) for part, (_, read) in zip(parts, units, strict=True)]

        answers = iter(conversation.ask(";:".join(message for message, _ in units), parse))
        return {
            key: (next(answers), next(answers)) if question.each else next(answers) for key, question in wanted.items()
        }

    def commands(self, series: tuple[str, ...], words: tuple[Mapping[str, str], Mapping[str, str]]) -> list[str]:
        """Return the messages of a command in their order: once for each output, or once for both.

        Parameters
        ----------
        series : tuple of str
        words : pair of mapping
            What stands for ``{value}`` and so on, for the positive rail and the negative one.
        """
        if not any("{output}" in message for message in series):
            return list(fill(series, words[0]))
        return [
            message
            for name, given in zip(self.names, words, strict=True)
            for message in fill(series, {"output": name, **given})
        ]

    def halves(
        self, series: tuple[tuple[str, ...], tuple[str, ...]], words: tuple[Mapping[str, str], Mapping[str, str]]
    ) -> list[tuple[str, ...]]:
        """Return the messages for the positive rail and those for the negative one."""
        return [
            fill(half, {"output": name, **given}) for half, name, given in zip(series, self.names, words, strict=True)
        ]
