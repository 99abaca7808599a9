"""Profiles: what an instrument calls things, so that a new dialect needs no code.

A profile is a TOML file; the shipped ones stand in ``profiles/`` beside this module and use the standard SCPI forms.
One beside the bench file may say ``based_on = "scpi-meter"`` and name only what differs.
"""

from __future__ import annotations

import importlib.resources
import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Annotated, Any, Literal, TypeVar

from pydantic import BaseModel, ConfigDict, Field, StringConstraints, ValidationError

from benchkit.errors import FileError
from benchkit.instruments.conversation import LinkSettings
from benchkit.instruments.numbers import NumberRules
from benchkit.measure.readings import FUNCTIONS

Message = Annotated[str, StringConstraints(pattern=r"^[\x20-\x7e]+$")]
Termination = Annotated[str, StringConstraints(pattern=r"^[\x00-\x7f]{1,2}$")]
Seconds = Annotated[float, Field(ge=0.0, le=600.0, allow_inf_nan=False)]
Positive = Annotated[float, Field(gt=0.0, allow_inf_nan=False)]

P = TypeVar("P", "MeterProfile", "SupplyProfile")


class _Part(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True, strict=False)


class LinkPart(_Part):
    """``[link]``: terminations and times, s."""

    read_termination: Annotated[str, StringConstraints(pattern=r"^[\x00-\x7f]$")] = "\n"
    write_termination: Termination = "\n"
    timeout_s: Seconds = 2.0
    open_timeout_s: Seconds = 3.0
    gap_s: Annotated[float, Field(ge=0.0, le=1.0)] = 0.0
    settle_s: Annotated[float, Field(ge=0.0, le=10.0)] = 0.0

    def settings(self) -> LinkSettings:
        """Return them as the link takes them."""
        return LinkSettings(**self.model_dump())


class NumbersPart(_Part):
    """``[numbers]``: how overload is said, and units that may follow a number."""

    overload_from: Positive = 9.0e37
    overload_words: tuple[str, ...] = NumberRules.overload_words  # type: ignore[assignment]
    units: tuple[str, ...] = ()

    def rules(self) -> NumberRules:
        """Return them as the parser takes them."""
        return NumberRules(
            overload_from=self.overload_from,
            overload_words=frozenset(word.upper() for word in self.overload_words),
            units=frozenset(self.units),
        )


class TimingPart(_Part):
    """``[timing]``: how long one reading may take."""

    mains_hz: Positive = 50.0
    power_line_cycles: Positive = 10.0
    autozero: bool = True
    settling_s: Seconds = 0.5
    ac_settling_s: Seconds = 7.0
    autorange_s: Seconds = 1.0

    def timeout_s(self, function: str) -> float:
        """Return the time-out for one reading, s: twice the integration, settling, autorange and 1 s in reserve."""
        integration_s = 2.0 * self.power_line_cycles / self.mains_hz * (2.0 if self.autozero else 1.0)
        settling_s = self.ac_settling_s if function == "ac volts" else self.settling_s
        return integration_s + settling_s + self.autorange_s + 1.0


class MeterProfile(_Part):
    """A meter's dialect.

    ``[functions]`` holds a question for each function of `FUNCTIONS` that it has; ``[ranged]`` the same with
    ``{range}`` in it, for a reading on a stated range.
    """

    format: Literal[1]
    kind: Literal["meter"]
    title: str = ""
    link: LinkPart = LinkPart()
    numbers: NumbersPart = NumbersPart()
    timing: TimingPart = TimingPart()
    functions: dict[str, Message]
    ranged: dict[str, Message] = {}


class SupplyCommands(_Part):
    """``[commands]``: ``{value}`` stands for the number.  Several are joined into one message by `joiner`."""

    positive_volts: Message
    negative_volts: Message
    limit: Message
    on: Message
    off: Message
    joiner: Message = ";:"


class SupplyQuestions(_Part):
    """``[questions]``: each is answered by two values, the positive rail's first.

    With ``joined`` the supply takes all questions of a sample in one message and joins its answers by semicolons, as
    IEEE 488.2 has it; then a look at the supply is one question instead of six.
    """

    joined: bool = False
    set_volts: Message
    limits: Message
    output: Message
    volts: Message
    amps: Message
    in_limit: Message | Literal[""] = ""
    error: Message | Literal[""] = ""


class SupplyProfile(_Part):
    """A supply's dialect, for two outputs: the positive rail and the negative one.

    Parameters
    ----------
    negative_programmed_positive : bool
        The second output is an output like the first, turned round: its magnitude is programmed and read.
    in_limit_bits : int
        The bits of the status register that say that an output is held by its current limit.
    volts_tolerance_v, amps_tolerance_a : float
        How far a setting that is read back may be from the one that was sent.
    off_current_a : float
        A current below it counts as none when "off" is confirmed.
    settle_s : float
        Rest between switching on and the first measurement, s.
    """

    format: Literal[1]
    kind: Literal["supply"]
    title: str = ""
    link: LinkPart = LinkPart()
    numbers: NumbersPart = NumbersPart()
    commands: SupplyCommands
    questions: SupplyQuestions
    negative_programmed_positive: bool = True
    in_limit_bits: Annotated[int, Field(ge=0, le=65535)] = 1
    volts_tolerance_v: Positive = 0.02
    amps_tolerance_a: Positive = 0.002
    off_current_a: Positive = 0.02
    settle_s: Annotated[float, Field(ge=0.0, le=5.0)] = 0.0
    error_limit: Annotated[int, Field(ge=1, le=100)] = 20


def shipped(name: str) -> dict[str, Any] | None:
    """Return a shipped profile as a plain table, or None if there is none of that name."""
    folder = importlib.resources.files("benchkit.instruments") / "profiles"
    if not name.replace("-", "").isalnum():
        return None
    file = folder / f"{name}.toml"
    return tomllib.loads(file.read_text("utf-8")) if file.is_file() else None


def shipped_names() -> tuple[str, ...]:
    """Return the names of the shipped profiles."""
    folder = importlib.resources.files("benchkit.instruments") / "profiles"
    return tuple(sorted(file.name[:-5] for file in folder.iterdir() if file.name.endswith(".toml")))


def profile_table(name: str, folder: Path) -> dict[str, Any]:
    """Return the table of a profile that a bench file names: a shipped one, or a file relative to `folder`.

    Raises
    ------
    FileError
        If there is none, or it is no TOML.
    """
    found = shipped(name)
    if found is not None:
        return found
    path = folder / name
    try:
        text = path.read_text("utf-8")
    except (OSError, UnicodeDecodeError, ValueError) as error:
        raise FileError(
            str(path),
            "",
            f"this profile can't be read ({error})",
            "one of " + ", ".join(shipped_names()) + ", or a file beside the bench file",
            "Correct the profile in the bench file",
        ) from None
    try:
        table = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise FileError(str(path), "", f"this is no TOML ({error})", "a profile", "Correct it") from None
    base = table.pop("based_on", None)
    if base is None:
        return table
    below = shipped(base) if isinstance(base, str) else None
    if below is None:
        raise FileError(str(path), "based_on", f"found {base!r}", "one of " + ", ".join(shipped_names()))
    return _over(below, table)


def meter_profile(table: str | Mapping[str, Any], where: str = "the profile") -> MeterProfile:
    """Check a meter's profile: a table, or the name of a shipped one.

    Raises
    ------
    FileError
        With the dotted key, what was found and what was expected.
    """
    profile = _checked(MeterProfile, table, where)
    for part, questions in (("functions", profile.functions), ("ranged", profile.ranged)):
        for function, message in questions.items():
            if function not in FUNCTIONS:
                raise FileError(where, f"{part}.{function}", "there is no such function", ", ".join(FUNCTIONS))
            if part == "ranged" and "{range}" not in message:
                raise FileError(where, f"{part}.{function}", f"found {message!r}", "{range} in it")
    return profile


def supply_profile(table: str | Mapping[str, Any], where: str = "the profile") -> SupplyProfile:
    """Check a supply's profile: a table, or the name of a shipped one.

    Raises
    ------
    FileError
        With the dotted key, what was found and what was expected.
    """
    profile = _checked(SupplyProfile, table, where)
    for key in ("positive_volts", "negative_volts", "limit"):
        if "{value}" not in getattr(profile.commands, key):
            raise FileError(where, f"commands.{key}", f"found {getattr(profile.commands, key)!r}", "{value} in it")
    return profile


def _checked(kind: type[P], table: str | Mapping[str, Any], where: str) -> P:
    if isinstance(table, str):
        found = shipped(table)
        if found is None:
            raise FileError(where, "", f"there is no profile {table!r}", "one of " + ", ".join(shipped_names()))
        table = found
    try:
        return kind.model_validate(dict(table))
    except ValidationError as error:
        first = error.errors()[0]
        key = ".".join(str(part) for part in first["loc"])
        raise FileError(where, key, f"found {first['input']!r}", first["msg"], "Correct the profile") from None


def _over(below: Mapping[str, Any], above: Mapping[str, Any]) -> dict[str, Any]:
    """Return `below` with what `above` says in its place, table by table."""
    merged = dict(below)
    for key, value in above.items():
        old = merged.get(key)
        merged[key] = _over(old, value) if isinstance(old, dict) and isinstance(value, dict) else value
    return merged
