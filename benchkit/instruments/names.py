"""Names that instruments give themselves (``*IDN?``): told apart from readings that are left over."""

from __future__ import annotations

from benchkit.errors import InstrumentError
from benchkit.instruments.numbers import visible

_NUMBER_LETTERS = str.maketrans("", "", "Ee")


def is_name(line: str) -> bool:
    """Tell whether a line can be a name: text with letters, and no number of any form."""
    name = line.strip()
    return name.isprintable() and any(letter.isalpha() for letter in name.translate(_NUMBER_LETTERS))


def name_in(line: str, who: str) -> str:
    """Return the name that a line holds; `who` is how a message calls the instrument.

    Raises
    ------
    InstrumentError
        ``garbled`` if it can't be one.
    """
    if not is_name(line):
        raise InstrumentError(
            "garbled",
            f"{who} gave its name as {visible(line.strip())}",
            "maker, model, serial and version",
            "Check the address, the line's settings and whether another program talks to it",
        )
    return line.strip()


def demand_serial(label: str, name: str, serial: str) -> None:
    """Refuse an instrument that is not the one that the bench file names.

    Raises
    ------
    InstrumentError
        ``refused`` when the third field of its name is not the pinned serial number.
    """
    if not serial:
        return
    fields = [part.strip() for part in name.split(",")]
    found = fields[2] if len(fields) > 2 else ""
    if found != serial:
        raise InstrumentError(
            "refused",
            f"{label[0].upper()}{label[1:]} names itself {visible(name)}",
            f"the serial number {serial!r} of the bench file",
            "Connect the right one, or correct the bench file if it was exchanged",
        )
