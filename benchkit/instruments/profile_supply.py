"""The profile of a supply: commands, questions, the words of its answers, and what it hasn't.

The rules stand at the top of `benchkit.instruments.profile`.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import Annotated, Literal, Self

from pydantic import Field, model_validator

from benchkit.instruments.mistakes import near, one_of
from benchkit.instruments.profile_parts import (
    Format,
    LinkPart,
    NeededSeries,
    Number,
    NumbersPart,
    Part,
    Positive,
    ReplyForm,
    Series,
    Text,
    Whole,
    Words,
    Yes,
    demand_ends,
    mistake,
)
from benchkit.instruments.replies import ReplyRules, WordRules

_NUMERIC = ("set_volts", "limits", "volts", "amps", "over_voltage")
_HOW = frozenset({"joined", "between", "shared"})


class Outputs(Part):
    """``[outputs]``: what stands for ``{output}``."""

    positive: Text = "1"
    negative: Text = "2"


class SupplyCommands(Part):
    """``[commands]``: ``volts`` with ``{output}``, or ``positive_volts`` and ``negative_volts``; likewise over-voltage.

    With ``joiner`` the messages for both rails' voltages become one; "" keeps them apart.
    """

    volts: Series = ()
    positive_volts: Series = ()
    negative_volts: Series = ()
    limit: NeededSeries
    on: NeededSeries
    off: NeededSeries
    over_voltage: Series = ()
    over_voltage_positive: Series = ()
    over_voltage_negative: Series = ()
    over_current_on: Series = ()
    over_current_off: Series = ()
    clear_protection: Series = ()
    joiner: Text = ";:"

    @model_validator(mode="after")
    def _whole(self) -> Self:
        for name in ("volts", "over_voltage"):
            pair = ("positive_volts", "negative_volts") if name == "volts" else (f"{name}_positive", f"{name}_negative")
            one, halves = getattr(self, name), [getattr(self, half) for half in pair]
            if one and any(halves):
                raise mistake(name, one[-1], f"either {name}, or {pair[0]} and {pair[1]}")
            if any(halves) and not all(halves):
                raise mistake(pair[0] if halves[1] else pair[1], "nothing", f"a message, as {pair[1]} has one")
            if name == "volts" and not one and not any(halves):
                raise mistake(name, "nothing", f"a message with {{output}} and {{value}}; or {pair[0]} and {pair[1]}")
            for key in (name, *pair):
                messages = getattr(self, key)
                if messages and not _holds(messages, "{value}", "{volts}" if name == "volts" else "{value}"):
                    raise mistake(key, messages[-1], "{value} in it")
            if one and not _holds(one, "{output}"):
                raise mistake(name, one[-1], "{output} in it, because each rail has a value of its own")
        if not _holds(self.limit, "{value}", "{amps}"):
            raise mistake("limit", self.limit[-1], "{value} in it")
        if bool(self.over_current_on) != bool(self.over_current_off):
            key = "over_current_off" if self.over_current_on else "over_current_on"
            raise mistake(key, "nothing", "both or none: it is off while rails rise, on when they rest")
        for key in type(self).model_fields:
            messages = getattr(self, key)
            if key != "joiner" and messages and any(message.rstrip().endswith("?") for message in messages):
                raise mistake(key, messages[-1], "a command; a question is never sent as one")
        return self


class SupplyQuestions(Part):
    """``[questions]``: what the supply is asked.

    With ``joined`` the supply takes all questions of a look in one message and joins its answers by semicolons, as
    IEEE 488.2 has it; then a look at the supply is one question instead of many.  ``between`` stands between the two
    values of an answer for both outputs; what ``shared`` names has one value that holds for both.  The questions about
    settings, outputs and measurements must stand there, so that none is forgotten; "" is a supply that hasn't it.
    """

    joined: Yes = False
    between: Annotated[Text, Field(min_length=1, max_length=1)] = ","
    shared: Words = ()
    set_volts: Series
    limits: Series
    output: Series
    volts: NeededSeries
    amps: Series
    in_limit: Series = ()
    over_voltage: Series = ()
    over_current: Series = ()
    tripped: Series = ()
    over_current_tripped: Series = ()
    error: Series = ()

    @model_validator(mode="after")
    def _whole(self) -> Self:
        for key in type(self).model_fields:
            messages = getattr(self, key)
            if key in _HOW or not messages:
                continue
            if self.joined and len(messages) > 1:
                raise mistake(key, "a list", "one message, because the questions are joined")
        for key in self.shared:
            known = tuple(name for name in type(self).model_fields if name not in _HOW and name != "error")
            if key not in known:
                raise mistake("shared", key, one_of(known, near(key, known)))
            if _holds(getattr(self, key), "{output}"):
                raise mistake("shared", key, f"no question with {{output}}: {key} is asked for each output")
        if not self.output and not self.amps:
            raise mistake("output", "nothing", "a question, because nothing else shows whether an output is on")
        return self


class Answers(Part):
    """``[answers]``: the words of an answer with two meanings, where they are not 1/0 and ON/OFF."""

    on: Words = ("1", "ON")
    off: Words = ("0", "OFF")
    in_limit: Words = ()
    not_in_limit: Words = ()
    tripped: Words = ("1", "ON")
    not_tripped: Words = ("0", "OFF")
    no_error: Words = ()

    @model_validator(mode="after")
    def _apart(self) -> Self:
        for yes, no in (("on", "off"), ("in_limit", "not_in_limit"), ("tripped", "not_tripped")):
            both = {word.upper() for word in getattr(self, yes)} & {word.upper() for word in getattr(self, no)}
            if both:
                raise mistake(no, sorted(both)[0], f"no word that {yes} holds too")
            if bool(getattr(self, yes)) != bool(getattr(self, no)):
                raise mistake(no if getattr(self, yes) else yes, "nothing", "both, because any other answer is none")
        return self


class SupplyProfile(Part):
    """A supply's dialect, for two outputs: the positive rail and the negative one.

    Parameters
    ----------
    forms : mapping of str to str
        What stands around the number in the answer to one question, where ``numbers.reply`` doesn't fit.
    negative_programmed_positive : bool
        The second output is an output like the first, turned round: its magnitude is programmed and read.
    in_limit_bits, tripped_bits : int
        The bits of the status registers that say that an output is held by its current limit, or has tripped; 0 for
        `tripped_bits`: the answer is a word.
    volts_tolerance_v, amps_tolerance_a : float
        How far a setting that is read back may be from the one that was sent.
    decimals : int
        Digits after the point of what is sent.
    off_current_a : float
        A current below it counts as none when "off" is confirmed.
    settle_s : float
        Rest between switching on and the first measurement, s.
    over_voltage_least_v, over_voltage_most_v : float
        What its over-voltage protection can be set to; 0 for the second: no bound is known.
    over_voltage_tolerance_v : float
        How far it may be from what was sent.
    """

    format: Format
    kind: Literal["supply"]
    title: Text = ""
    link: LinkPart = LinkPart()
    numbers: NumbersPart = NumbersPart()
    outputs: Outputs = Outputs()
    commands: SupplyCommands
    questions: SupplyQuestions
    answers: Answers = Answers()
    forms: Mapping[str, ReplyForm] = {}
    negative_programmed_positive: Yes = True
    in_limit_bits: Annotated[Whole, Field(ge=0, le=65535)] = 1
    tripped_bits: Annotated[Whole, Field(ge=0, le=65535)] = 0
    volts_tolerance_v: Positive = 0.02
    amps_tolerance_a: Positive = 0.002
    decimals: Annotated[Whole, Field(ge=1, le=6)] = 4
    off_current_a: Positive = 0.02
    settle_s: Annotated[Number, Field(ge=0.0, le=5.0)] = 0.0
    error_limit: Annotated[Whole, Field(ge=1, le=100)] = 20
    over_voltage_least_v: Annotated[Number, Field(ge=0.0)] = 0.0
    over_voltage_most_v: Annotated[Number, Field(ge=0.0)] = 0.0
    over_voltage_tolerance_v: Positive = 0.2

    @model_validator(mode="after")
    def _consistent(self) -> Self:
        demand_ends(self.link, self.numbers)
        for key in self.forms:
            if key not in _NUMERIC:
                raise mistake(f"forms.{key}", self.forms[key], one_of(_NUMERIC, near(key, _NUMERIC)))
        if self.outputs.positive == self.outputs.negative:
            raise mistake("outputs.negative", self.outputs.negative, "another output than the positive rail's")
        if self.questions.in_limit and not self.answers.in_limit and not self.in_limit_bits:
            raise mistake("in_limit_bits", 0, "the bits that say so, or the words in [answers]")
        if self.has_over_voltage and not self.questions.over_voltage:
            raise mistake("questions.over_voltage", "nothing", "a question, because a protection is read back")
        for where, part in (("commands", self.commands), ("questions", self.questions)):
            for key in type(part).model_fields:
                messages = getattr(part, key)
                if not isinstance(messages, tuple):
                    continue
                known = ("{output}", "{value}", "{volts}", "{amps}") if where == "commands" else ("{output}",)
                for message in messages:
                    rest = message
                    for word in known:
                        rest = rest.replace(word, "")
                    if "{" in rest or "}" in rest:
                        raise mistake(f"{where}.{key}", message, "no other braces than " + ", ".join(known))
        return self

    def rules(self, question: str, unit: str) -> ReplyRules:
        """How the number in the answer to a question is written."""
        rules = self.numbers.rules(unit)
        return replace(rules, form=self.forms[question]) if question in self.forms else rules

    @property
    def has_over_voltage(self) -> bool:
        """Whether the supply has an over-voltage protection of its own."""
        return bool(self.commands.over_voltage or self.commands.over_voltage_positive)

    @property
    def on_words(self) -> WordRules:
        """How an output's state is said."""
        return _words(self.answers.on, self.answers.off, 0, "an output state")

    @property
    def limit_words(self) -> WordRules:
        """How it is said that an output is held by its limit."""
        bits = 0 if self.answers.in_limit else self.in_limit_bits
        return _words(self.answers.in_limit, self.answers.not_in_limit, bits, "whether the limit holds it")

    @property
    def trip_words(self) -> WordRules:
        """How it is said that a protection has tripped."""
        return _words(self.answers.tripped, self.answers.not_tripped, self.tripped_bits, "whether it has tripped")

    @property
    def cautions(self) -> tuple[str, ...]:
        """What this supply hasn't, in words, where a careful person would want to know."""
        questions, said = self.questions, []
        if not self.has_over_voltage:
            said.append("The supply has no over-voltage protection of its own that this profile knows.")
        if not questions.output:
            said.append(
                "The supply does not tell whether its outputs are on; off is judged from volts and amperes alone."
            )
        if not questions.set_volts or not questions.limits:
            said.append("The supply does not read back its settings; they are judged from what it then measures.")
        if not questions.amps:
            said.append("The supply measures no current; the watch has its voltages only.")
        elif not questions.in_limit:
            said.append("The supply does not say when its limit holds it; that is judged from the measured current.")
        return tuple(said)


def _words(yes: tuple[str, ...], no: tuple[str, ...], bits: int, what: str) -> WordRules:
    return WordRules(
        yes=tuple(word.upper() for word in yes), no=tuple(word.upper() for word in no), bits=bits, what=what
    )


def _holds(messages: tuple[str, ...], *words: str) -> bool:
    return any(word in message for message in messages for word in words)
