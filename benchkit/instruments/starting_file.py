"""Write a starting bench file: what was asked and answered is filled in, what only papers know is explained.

Nothing is made up.  An accuracy, an input resistance or a calibration date that nobody has stated stays a comment, and
benchkit then says what it assumes.  A file that is there is never overwritten unless that is asked for, and then it
is replaced as a whole or not at all.
"""

from __future__ import annotations

import json
import os
import tempfile
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path

from benchkit.errors import FileError
from benchkit.instruments.bench import parse_bench
from benchkit.instruments.identified import Fit, Identified
from benchkit.instruments.profile import shipped
from benchkit.measure.readings import FUNCTIONS
from benchkit.quantities import printable

_RANGE = {"V": "10 V", "A": "1 A", "ohm": "10 kohm", "degC": "100 degC"}


@dataclass(frozen=True, kw_only=True)
class Starting:
    """What goes into the file.

    Parameters
    ----------
    name : str
        What this bench is called.
    meter, supply : Identified or None
        Asked, and with a profile that fits.
    library : str
        The VISA library that they were reached through.
    """

    name: str
    meter: Identified | None = None
    supply: Identified | None = None
    library: str = "@py"


def starting_text(starting: Starting, folder: Path) -> str:
    """Return the file's text.

    Parameters
    ----------
    starting : Starting
    folder : Path
        Where the file will stand: a profile of one's own is named from there.
    """
    lines = [
        "# The instruments of one bench. A line that begins with # is a remark; take the # away to make it count.",
        "",
        "[bench]",
        "format = 1",
        f"name = {_text(starting.name)}",
        '# mains = "60 Hz"  # where it is not 50 Hz: a meter integrates over whole cycles',
    ]
    if starting.library != "@py":
        lines.append(f"visa = {_text(starting.library):<34} # the VISA library that reaches the instruments")
    lines += _instrument("meter", starting.meter, folder)
    lines += _instrument("supply", starting.supply, folder)
    return "\n".join([*lines, ""])


def still_to_fill_in(starting: Starting) -> list[str]:
    """Return what the file lacks that only papers know."""
    lacking = []
    for kind, one in (("meter", starting.meter), ("supply", starting.supply)):
        if one is None:
            continue
        lacking.append(f"{kind}: accuracy, one table for each function and range, from its specification")
        lacking.append(f"{kind}: calibration_due, from its certificate")
        if kind == "meter":
            lacking.append("meter: input_resistance, from its specification")
        if not one.serial:
            lacking.append(f"{kind}: serial, if you want no other instrument in its place (it did not say its own)")
    return lacking


def write_starting_file(path: Path, starting: Starting, *, force: bool = False) -> None:
    """Write the file, having read it back as a bench file first.

    Raises
    ------
    FileError
        If it is there already, or can't be written.
    """
    if path.exists() and not force:
        raise _is_there(path)
    text = starting_text(starting, path.parent)
    parse_bench(text, str(path))
    try:
        if not force:
            with path.open("x", encoding="utf-8") as file:
                file.write(text)
            return
        descriptor, beside = tempfile.mkstemp(prefix=f".{path.name}-", dir=path.parent)
        try:
            with os.fdopen(descriptor, "w", encoding="utf-8") as file:
                file.write(text)
                file.flush()
                os.fsync(file.fileno())
            Path(beside).replace(path)
        except OSError:
            with suppress(OSError):
                Path(beside).unlink()
            raise
    except FileExistsError:
        raise _is_there(path) from None
    except OSError as error:
        raise FileError(
            str(path), "", f"it can't be written ({error.strerror})", "a folder to write to", "Choose another"
        ) from None


def check_place(path: Path, *, force: bool) -> None:
    """Refuse a place that is taken before any instrument is asked.

    Raises
    ------
    FileError
        As `write_starting_file`.
    """
    if path.exists() and not force:
        raise _is_there(path)
    if not path.parent.is_dir():
        raise FileError(str(path), "", f"there is no folder {path.parent}", "a folder to write to", "Make it first")


def _is_there(path: Path) -> FileError:
    return FileError(str(path), "", "it is there already", "a new file", "Choose another name, or say --force")


def _instrument(kind: str, one: Identified | None, folder: Path) -> list[str]:
    if one is None or one.best is None:
        who = "reads, and types what the meter shows" if kind == "meter" else "sets and switches by hand"
        return [
            "",
            f"# [{kind}]                           # none: a person {who}",
            '# address = "TCPIP::192.168.1.20::5025::SOCKET"',
            f'# profile = "scpi-{kind}"',
        ]
    fit = one.best
    lines = [
        "",
        f"[{kind}]",
        f"# It calls itself {printable(one.name)}",
        f"address = {_text(one.address)}",
        f"profile = {_text(_profile(fit, folder))}",
        f"# {_answered(fit)}",
    ]
    if one.serial:
        lines.append(f"serial = {_text(one.serial)}  # pinned: another instrument at this address stops the walk")
    else:
        lines.append('# serial = "MY123"  # pins one instrument; this one did not say its serial number')
    lines.append("# calibration_due = 2031-05-01  # from its certificate; an expired one is a caution in every record")
    if kind == "meter":
        lines.append('# input_resistance = "10 Mohm"  # on d.c. volts, from its specification; 10 Mohm is assumed')
    if one.baud is not None:
        lines += ["", f"[{kind}.line]", f"baud = {one.baud}  # answered at this speed"]
    return [*lines, *_accuracy(kind, fit)]


def _accuracy(kind: str, fit: Fit) -> list[str]:
    functions = list(fit.answered) if kind == "meter" else ["dc volts", "dc current"]
    lines = [
        "",
        "# How well it reads: one table for each function and range, from its specification, for the time since its",
        "# calibration. Put numbers for the question marks. Without any a stated default counts, and records say so.",
    ]
    for function in functions:
        lines += [
            f"# [[{kind}.accuracy]]",
            f"# function = {_text(function)}",
            f'# range = "{_RANGE.get(FUNCTIONS[function], "10 V")}"',
            "# percent_of_reading = ?",
            "# percent_of_range = ?",
        ]
    return lines


def _answered(fit: Fit) -> str:
    if fit.complete:
        return "It answered every question of this profile."
    missing = ", ".join(question for question, _ in fit.unanswered)
    return f"It answered {len(fit.answered)} of {len(fit.answered) + len(fit.unanswered)} questions; not {missing}."


def _profile(fit: Fit, folder: Path) -> str:
    if shipped(fit.profile) is not None:
        return fit.profile
    return Path(os.path.relpath(fit.profile, folder)).as_posix()


def _text(text: str) -> str:
    """Return a TOML basic string; JSON's escapes are among TOML's."""
    return json.dumps(text, ensure_ascii=True)
