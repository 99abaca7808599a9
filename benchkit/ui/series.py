"""Which walk comes after which: the channels of one unit, then the next unit.

One walk is one channel and one record.  Operator, design, procedure and bench stay; for another unit only its serial
number is asked for.
"""

from __future__ import annotations

import unicodedata
from dataclasses import dataclass, replace
from string import digits
from typing import Final

from benchkit.errors import EntryError
from benchkit.procedure.actions import Choice, Question
from benchkit.quantities import quoted

MOST_CHANNELS: Final = 8
LONGEST_NAME: Final = 12

NEXT: Final = "next"
"""The choice that goes on with the next channel or unit."""

LEAVE: Final = "quit"
"""The choice that leaves."""

_WANTED = (
    f"a whole number from 1 to {MOST_CHANNELS}, or names with commas between, such as L,R; "
    f"a name has 1 to {LONGEST_NAME} letters and digits, first a letter"
)


def parse_channels(text: str | None) -> tuple[str, ...]:
    """Return the names of a unit's channels; () for a unit that has but one, without a name.

    Parameters
    ----------
    text : str or None
        What was typed; None where nothing was said of channels.

    Raises
    ------
    EntryError

    Examples
    --------
    >>> parse_channels("2"), parse_channels("L, R"), parse_channels(None)
    (('1', '2'), ('L', 'R'), ())
    """
    if text is None:
        return ()
    if text.strip().isascii() and text.strip().isdigit():
        count = int(text.strip()[:9])
        if not 1 <= count <= MOST_CHANNELS:
            raise EntryError(f"--channels got {quoted(text)}", _WANTED)
        return tuple(str(number) for number in range(1, count + 1))
    names = tuple(unicodedata.normalize("NFC", name.strip()) for name in text.split(","))
    if not all(_is_name(name) for name in names):
        raise EntryError(f"--channels got {quoted(text)}", _WANTED)
    if len({name.casefold() for name in names}) < len(names):
        raise EntryError(f"--channels got {quoted(text)}, which names one channel twice", _WANTED)
    if len(names) > MOST_CHANNELS:
        raise EntryError(f"--channels got {len(names)} names", _WANTED)
    return names


def _is_name(text: str) -> bool:
    """Whether `text` can be a channel's name: the letters of any script, but only the digits 0 to 9."""
    return 0 < len(text) <= LONGEST_NAME and text[0].isalpha() and all(c.isalpha() or c in digits for c in text)


@dataclass(frozen=True, kw_only=True)
class Turn:
    """One walk of a series.

    Parameters
    ----------
    channels : tuple of str
        Of a unit; () where it has but one.
    unit : str
        Serial number, "" where it is yet to be asked for.
    channel : str
        "" for the only one.
    number : int
        How many walks were before this one.
    another_unit : bool
        Only the serial number is left to ask for.
    alone : bool
        Nothing can come after it, because nobody said which channels there are.
    """

    channels: tuple[str, ...] = ()
    unit: str = ""
    channel: str = ""
    number: int = 0
    another_unit: bool = False
    alone: bool = False

    @property
    def left(self) -> tuple[str, ...]:
        """The channels of this unit that are still to come."""
        return self.channels[self.channels.index(self.channel) + 1 :] if self.channel in self.channels else ()

    @property
    def next_label(self) -> str:
        """What comes after this walk, in words; "" where nothing can."""
        if self.alone:
            return ""
        return f"next channel: {self.left[0]}" if self.left else "next unit"

    def after(self, unit: str = "") -> Turn:
        """Return the walk after this one: the next channel of `unit`, else the first of another unit."""
        if self.left:
            return replace(
                self, unit=unit or self.unit, channel=self.left[0], number=self.number + 1, another_unit=False
            )
        first = self.channels[0] if self.channels else ""
        return replace(self, unit="", channel=first, number=self.number + 1, another_unit=True)


def first_turn(channels: tuple[str, ...], unit: str) -> Turn:
    """Return the first walk of a series."""
    return Turn(channels=channels, unit=unit, channel=channels[0] if channels else "")


def resumed_turn(channels: tuple[str, ...], unit: str, channel: str) -> Turn:
    """Return the walk that is gone on with; the channels behind it follow.

    Raises
    ------
    EntryError
        When it is of none of the channels that were named.
    """
    if channels and channel not in channels:
        raise EntryError(
            f"This record is of {f'the channel {quoted(channel)}' if channel else 'a unit without channels'}",
            f"one of the channels {', '.join(channels)}",
            "Leave --channels out, or name the record's",
        )
    return Turn(channels=channels, unit=unit, channel=channel, alone=bool(channel) and not channels)


def end_question(next_label: str) -> Question:
    """Return the last question of a walk: leave, or go on with the next channel or unit."""
    leave = Choice(value=LEAVE, label="leave benchkit")
    if not next_label:
        choices: tuple[Choice, ...] = (leave,)
        do = "Enter leaves benchkit."
    else:
        following = Choice(value=NEXT, label=next_label)
        # With a channel left the usual answer is to go on with it.
        goes_on = "channel" in next_label
        choices = (following, leave) if goes_on else (leave, following)
        do = f"Enter goes on with the {next_label}; Q leaves benchkit."
        if not goes_on:
            do = f"Enter leaves benchkit; N goes on with the {next_label}."
    return Question(item="", kind="tell", title="Finished", do=do, choices=choices)
