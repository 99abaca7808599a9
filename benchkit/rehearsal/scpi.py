"""The language of the simulated instruments: messages in, replies out.

Rules (IEEE 488.2 program messages and the SCPI-1999 header rules, as instrument manuals print them)
----------------------------------------------------------------------------------------------------
* One message is one line.  Its units are separated by ``;`` and carried out in order; the replies of its queries are
  joined by ``;`` into one line.
* A header is ``*WORD`` (common) or ``WORD:WORD...``; ``?`` at its end makes it a query.  A word is accepted in its
  long or its short form and in nothing between.
* A header that starts with ``:`` starts at the root.  Any other starts where the one before it in the same message
  left off: at the path of that header without its last word.  Common commands leave the path alone.
* Parameters are separated by ``,``: numbers (with an optional unit), words, quoted text, channel lists ``(@1,2)`` and
  ``(@1:4)``.  Listening is tolerant (``+1``, ``.5``, ``1e3``, lower case, blanks), talking is strict.
* The first wrong unit puts one entry into the error queue and ends the message; what stood before it has happened,
  and its replies are sent.
* The queue holds `QUEUE_LENGTH` entries; a full one turns its last entry into ``-350,"Queue overflow"``.

Error numbers are those of SCPI-1999 volume 2, 21.8: -100...-199 command, -200...-299 execution, -300...-399 device,
-400...-499 query errors.
"""

from __future__ import annotations

import functools
import itertools
import math
import re
from collections import deque
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass

QUEUE_LENGTH = 20

ERRORS = {
    -100: "Command error",
    -101: "Invalid character",
    -102: "Syntax error",
    -103: "Invalid separator",
    -104: "Data type error",
    -108: "Parameter not allowed",
    -109: "Missing parameter",
    -112: "Program mnemonic too long",
    -113: "Undefined header",
    -120: "Numeric data error",
    -131: "Invalid suffix",
    -151: "Invalid string data",
    -170: "Expression error",
    -200: "Execution error",
    -221: "Settings conflict",
    -222: "Data out of range",
    -224: "Illegal parameter value",
    -230: "Data corrupt or stale",
    -350: "Queue overflow",
    -363: "Input buffer overrun",
}

_WORD = re.compile(r"[A-Za-z][A-Za-z0-9_]*")
_HEADER = re.compile(r"(\*[A-Za-z]+|:?[A-Za-z][A-Za-z0-9_]*(?::[A-Za-z][A-Za-z0-9_]*)*)(\??)")
_NUMBER = re.compile(r"([+-]?(?:\d+\.?\d*|\.\d+)(?:\s*[eE]\s*[+-]?\d+)?)\s*([A-Za-z]*)")
_CHANNELS = re.compile(r"\(\s*@\s*(\d+(?:\s*:\s*\d+)?(?:\s*,\s*\d+(?:\s*:\s*\d+)?)*)\s*\)")
_MULTIPLIERS = {"": 1.0, "M": 1e-3, "U": 1e-6, "K": 1e3}


class ScpiError(Exception):
    """One entry for the error queue.

    Parameters
    ----------
    code : int
        A number of `ERRORS`.
    """

    def __init__(self, code: int) -> None:
        self.code = code
        super().__init__(f'{code},"{ERRORS[code]}"')


@dataclass(frozen=True)
class Number:
    """A numeric parameter, with its unit in capitals (empty without one)."""

    value: float
    suffix: str = ""


@dataclass(frozen=True)
class Word:
    """Character data, in capitals."""

    text: str


@dataclass(frozen=True)
class Quoted:
    """Text between quotes."""

    text: str


@dataclass(frozen=True)
class Channels:
    """A channel list, its ranges written out."""

    numbers: tuple[int, ...]


Parameter = Number | Word | Quoted | Channels


@dataclass(frozen=True)
class Unit:
    """One unit of a message: the full path in capitals, whether it is a query, and its parameters."""

    path: tuple[str, ...]
    query: bool
    parameters: tuple[Parameter, ...]


def parse(message: str) -> Iterator[Unit]:
    """Yield the units of `message`, one by one.

    Raises
    ------
    ScpiError
        When the unit to be yielded next is malformed; the units before it have been yielded.
    """
    if any(not (" " <= character <= "~" or character == "\t") for character in message):
        raise ScpiError(-101)
    if not message.strip():
        return
    base: tuple[str, ...] = ()
    for text in _split(message, ";"):
        stripped = text.strip()
        match = _HEADER.match(stripped)
        if match is None:
            raise ScpiError(-102)
        header, rest = match.group(1).upper(), stripped[match.end() :]
        if rest and not rest[0].isspace():
            raise ScpiError(-103 if rest[0] in ",;" else -102)
        words = tuple(header.lstrip(":").split(":"))
        if any(len(word) > 12 for word in words):
            raise ScpiError(-112)
        if header.startswith("*"):
            path = words
        else:
            path = words if header.startswith(":") else base + words
            base = path[:-1]
        yield Unit(path, bool(match.group(2)), _parameters(rest))


def _split(text: str, separator: str) -> list[str]:
    """Split at `separator` outside quotes and parentheses."""
    pieces: list[str] = []
    start = depth = 0
    quote = ""
    for position, character in enumerate(text):
        if quote:
            quote = "" if character == quote else quote
        elif character in "\"'":
            quote = character
        elif character == "(":
            depth += 1
        elif character == ")":
            depth -= 1
            if depth < 0:
                raise ScpiError(-102)
        elif character == separator and depth == 0:
            pieces.append(text[start:position])
            start = position + 1
    if quote:
        raise ScpiError(-151)
    if depth:
        raise ScpiError(-170)
    pieces.append(text[start:])
    return pieces


def _parameters(text: str) -> tuple[Parameter, ...]:
    if not text.strip():
        return ()
    return tuple(_parameter(piece.strip()) for piece in _split(text, ","))


def _parameter(text: str) -> Parameter:
    if not text:
        raise ScpiError(-109)
    if text[0] in "\"'":
        inner = text[1:-1]
        if len(text) < 2 or text[-1] != text[0] or text[0] in inner.replace(text[0] * 2, ""):
            raise ScpiError(-151)
        return Quoted(inner.replace(text[0] * 2, text[0]))
    if text[0] == "(":
        match = _CHANNELS.fullmatch(text)
        if match is None:
            raise ScpiError(-170)
        return Channels(tuple(itertools.chain.from_iterable(_span(piece) for piece in match.group(1).split(","))))
    number = _NUMBER.fullmatch(text)
    if number is not None:
        value = float(re.sub(r"\s", "", number.group(1)))
        if not math.isfinite(value):
            raise ScpiError(-222)
        return Number(value, number.group(2).upper())
    if _WORD.fullmatch(text):
        return Word(text.upper())
    raise ScpiError(-120 if text[0] in "+-.0123456789" else -102)


def _span(text: str) -> tuple[int, ...]:
    ends = [int(part) for part in text.split(":")]
    if max(ends) > 99:
        raise ScpiError(-222)
    if len(ends) == 1:
        return (ends[0],)
    return tuple(range(ends[0], ends[1] + 1)) if ends[0] <= ends[1] else tuple(range(ends[0], ends[1] - 1, -1))


def _multiplier(suffix: str, unit: str) -> float:
    """Return what a written suffix such as ``MV`` multiplies by, where `unit` is expected."""
    if not suffix:
        return 1.0
    prefix = suffix.removesuffix(unit)
    if not unit or prefix == suffix or prefix not in _MULTIPLIERS:
        raise ScpiError(-131)
    return 1e6 if (unit, prefix) == ("OHM", "M") else _MULTIPLIERS[prefix]


class Arguments:
    """The parameters of one unit, taken one after the other; `end` refuses what is left over."""

    def __init__(self, parameters: Sequence[Parameter]) -> None:
        self._left = list(parameters)

    def number(self, unit: str, low: float, high: float, *, default: float | None = None) -> float:
        """Take a number in `unit` (``V``, ``A``, ...) within `low` ... `high`; MIN and MAX name those.

        Raises
        ------
        ScpiError
            -104 for another type, -109 when it is missing and has no default, -131 for a wrong unit, -222 outside.
        """
        if not self._left or (default is not None and isinstance(self._left[0], Channels)):
            if default is None:
                raise ScpiError(-109)
            return default
        parameter = self._left.pop(0)
        if isinstance(parameter, Word):
            named = {"MIN": low, "MINIMUM": low, "MAX": high, "MAXIMUM": high}
            if default is not None:
                named |= {"DEF": default, "DEFAULT": default, "AUTO": default}
            if parameter.text not in named:
                raise ScpiError(-224)
            return named[parameter.text]
        if not isinstance(parameter, Number):
            raise ScpiError(-109 if isinstance(parameter, Channels) else -104)
        value = parameter.value * _multiplier(parameter.suffix, unit)
        if not low <= value <= high:
            raise ScpiError(-222)
        return value

    def boolean(self) -> bool:
        """Take ON, OFF, 1 or 0."""
        if not self._left or isinstance(self._left[0], Channels):
            raise ScpiError(-109)
        parameter = self._left.pop(0)
        if isinstance(parameter, Word) and parameter.text in ("ON", "OFF"):
            return parameter.text == "ON"
        if isinstance(parameter, Number) and not parameter.suffix:
            return round(parameter.value) != 0
        raise ScpiError(-224 if isinstance(parameter, Word) else -104)

    def channels(self, count: int) -> tuple[int, ...]:
        """Take a channel list of numbers 1 ... `count`; without one, channel 1."""
        if not self._left:
            return (1,)
        parameter = self._left.pop(0)
        if not isinstance(parameter, Channels):
            raise ScpiError(-108)
        if any(not 1 <= number <= count for number in parameter.numbers):
            raise ScpiError(-222)
        return parameter.numbers

    def rest(self) -> tuple[Parameter, ...]:
        """Take everything that is left, unread."""
        taken, self._left = tuple(self._left), []
        return taken

    def end(self) -> None:
        """Refuse a parameter too many."""
        if self._left:
            raise ScpiError(-108)


Handler = Callable[[Arguments], str | None]


@functools.cache
def spellings(pattern: str) -> tuple[tuple[str, ...], ...]:
    """Return every way to write a header given as ``MEASure[:SCALar]:VOLTage[:DC]``.

    Capitals are the short form, the whole word the long one, brackets mean that the word may be left out.
    """
    choices: list[list[tuple[str, ...]]] = []
    for bracket, word in re.findall(r"(\[?):?(\*?[A-Za-z]+)", pattern):
        short = "".join(letter for letter in word if not letter.islower())
        forms: list[tuple[str, ...]] = [(form,) for form in sorted({word.upper(), short})]
        choices.append([(), *forms] if bracket else forms)
    return tuple(tuple(itertools.chain.from_iterable(combination)) for combination in itertools.product(*choices))


class Instrument:
    """What every SCPI instrument has: a command tree, an error queue and the common commands.

    Parameters
    ----------
    identity : str
        The four fields of ``*IDN?``.
    """

    def __init__(self, identity: str) -> None:
        self.identity = identity
        self._tree: dict[tuple[tuple[str, ...], bool], Handler] = {}
        self._errors: deque[int] = deque()
        self._event_status = 128  # power on
        self._event_enable = 0
        self._service_enable = 0
        self.on("*IDN?", lambda _: self.identity)
        self.on("*RST", self._reset)
        self.on("*CLS", self._clear)
        self.on("*OPC", self._operation_complete)
        self.on("*OPC?", lambda _: "1")
        self.on("*WAI", lambda _: None)
        self.on("*TST?", lambda _: "0")
        self.on("*ESR?", self._read_event_status)
        self.on("*ESE", self._set_event_enable)
        self.on("*ESE?", lambda _: str(self._event_enable))
        self.on("*SRE", self._set_service_enable)
        self.on("*SRE?", lambda _: str(self._service_enable))
        self.on("*STB?", lambda _: str(self.status_byte()))
        self.on("SYSTem:ERRor[:NEXT]?", lambda _: self._next_error())
        self.on("SYSTem:VERSion?", lambda _: "1999.0")
        self.on("SYSTem:REMote", lambda _: None)
        self.on("SYSTem:LOCal", lambda _: None)

    def on(self, pattern: str, handler: Handler) -> None:
        """Let `handler` carry out every spelling of `pattern`; a ``?`` at its end makes it the query."""
        for path in spellings(pattern.rstrip("?")):
            self._tree[path, pattern.endswith("?")] = handler

    def handle(self, message: str) -> str | None:
        """Carry out one message; return its reply without terminator, None when it has none."""
        replies: list[str] = []
        try:
            for unit in parse(message):
                handler = self._tree.get((unit.path, unit.query))
                if handler is None:
                    raise ScpiError(-113)
                arguments = Arguments(unit.parameters)
                if unit.path[0].startswith("*") and unit.path[0] not in ("*ESE", "*SRE"):
                    arguments.end()
                reply = handler(arguments)
                arguments.end()
                if reply is not None:
                    replies.append(reply)
        except ScpiError as error:
            self.complain(error.code)
        return ";".join(replies) if replies else None

    def complain(self, code: int) -> None:
        """Put an entry into the error queue and its bit into the event status."""
        if len(self._errors) >= QUEUE_LENGTH:
            self._errors[-1] = -350
        else:
            self._errors.append(code)
        self._event_status |= {1: 32, 2: 16, 3: 8, 4: 4}[-code // 100]

    def status_byte(self) -> int:
        """Return the status byte: bit 2 while the error queue holds something, bit 5 for the enabled event bits."""
        byte = (4 if self._errors else 0) | (32 if self._event_status & self._event_enable else 0)
        return byte | (64 if byte & self._service_enable else 0)

    def reset(self) -> None:
        """Go to the settings of ``*RST``; an instrument overrides this."""

    def _reset(self, _: Arguments) -> None:
        self.reset()

    def _clear(self, _: Arguments) -> None:
        self._errors.clear()
        self._event_status = 0

    def _operation_complete(self, _: Arguments) -> None:
        self._event_status |= 1

    def _read_event_status(self, _: Arguments) -> str:
        value, self._event_status = self._event_status, 0
        return str(value)

    def _set_event_enable(self, arguments: Arguments) -> None:
        self._event_enable = round(arguments.number("", 0, 255))

    def _set_service_enable(self, arguments: Arguments) -> None:
        self._service_enable = round(arguments.number("", 0, 255)) & ~64

    def _next_error(self) -> str:
        return str(ScpiError(self._errors.popleft())) if self._errors else '0,"No error"'


def nr3(value: float) -> str:
    """Return `value` as a strict NR3 number with nine digits: ``+1.23456789E-03`` (IEEE 488.2, 8.7.4)."""
    return f"{value:+.8E}"
