"""The procedure file: TOML that says which steps a walk has, in which order.

A procedure holds no formula.  A measuring step names a test point and where its limits come from: ``the model``, a
stated pair of values, ``the target`` of the design; a ``rule`` step names one of the rules and its number.

Kinds of step
-------------
``tell``         read it, do it, say that it is done
``confirm``      a question that takes yes or no; no is a failure
``text``         something typed in for the record
``measure``      readings of one or more test points, each judged
``rule``         a named rule judged on the readings of this section
``supply``       both rails to stated values; a hold point goes before it whenever a voltage or the limit rises
``limit check``  the limit tried into a short; the supply is off again afterwards
``hold``         a hold point: nobody passes without typing yes
``trim``         the trimmer turned until a drop is at a share of the target
``wait``         time passes under watch: a stated time, or until the reading that is clipped has come to rest
``parts replaced``  which parts were replaced, asked for: sections that are there for that follow, or fall away
``clip``         off, rails seen low at the unit, probes clipped to a point, and power again after a hold point
``off``          the supply off, confirmed
``discharge``    after off: every rail, and rail to rail, watched down until it is low; a second look after a minute
                 where much was stored
``series lamp``  mains through a lamp in series, for a first look; nothing here switches it, nothing is trimmed on it

A step that ``needs`` something falls away for a design that lacks it; so do, by themselves, steps that turn or check a
trimmer that isn't there.

Sections that may be left out
-----------------------------
``only_if``      done only when parts, or semiconductors, were replaced; or only when none were; or only ``from least
                 bias``: when parts were replaced, or a unit as it was found came into its limit
``optional``     done only when the operator says so; the words of the question stand behind it
Both end with the supply as it was at their beginning, so that what follows is the same either way.  What has to hold
before power holds on every path (`benchkit.procedure.paths`), and the trimmer is anywhere after one that turned it.

``as`` marks a section's readings as those that the unit was found with, or left with.

``at_limit`` names the section's own step of the kind ``off`` to which a rail leads that comes into its current limit,
or that the supply's own protection has switched off: a trimmer that was left too far up does that.  The walk then goes
on from there instead of ending, what is left of the section before that step falls away, and the next power is a first
power again.  A step whose ``act`` clears the protection is done only where one has tripped.
"""

from __future__ import annotations

import hashlib
import tomllib
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Any, Literal

import pydantic
import pydantic_core

from benchkit.errors import BenchkitError, FileError
from benchkit.procedure.file_words import (
    check_placeholders,
    check_point,
    check_quantities,
    check_rule,
    time_s,
)

Kind = Literal[
    "tell", "confirm", "text", "measure", "rule", "supply", "limit check", "hold", "trim", "wait", "clip", "off",
    "discharge", "series lamp", "parts replaced",
]  # fmt: skip

Need = Literal["a trimmer", "two rails", "one rail"]
"""What a design has to have for a step to make sense."""

Act = Literal[
    "short the leads", "connect the unit", "trimmer to least", "connect the dummy load", "take the dummy load off",
    "drive the stage", "drive at a third of full power", "stop driving", "clear the protection",
]  # fmt: skip
"""What a told step does to the bench, where the rest of the walk depends on it."""

OnlyIf = Literal[
    "parts replaced", "no parts replaced", "semiconductors replaced", "no semiconductors replaced", "from least bias",
]  # fmt: skip
"""What a section may depend on."""


MADE_SAFE = "made-safe"
"""The section that every way out goes through; it is always the last but for the verdict."""


_Name = Annotated[str, pydantic.StringConstraints(pattern=r"^[a-z0-9][a-z0-9-]*$", max_length=40)]
_Text = Annotated[str, pydantic.StringConstraints(strip_whitespace=True, min_length=1)]


class _Strict(pydantic.BaseModel):
    model_config = pydantic.ConfigDict(extra="forbid", frozen=True, strict=False)


class PairText(_Strict):
    """A stated pair of limits, as quantities; either side may be left open."""

    low: str | None = None
    high: str | None = None


class Step(_Strict):
    """One step as written in the file."""

    name: _Name
    kind: Kind
    title: _Text
    do: str = ""
    why: str = ""
    caution: str = ""
    expected: str = ""
    points: tuple[str, ...] = ()
    limits: Literal["the model", "the target"] | PairText | None = None
    rule: str | None = None
    number: str | None = None
    rails: str | None = None
    limit: str | None = None
    ramp: str | None = None
    share: str | None = None
    tolerance: str | None = None
    seconds: str | None = None
    act: Act | None = None
    needs: Need | None = None
    when: Literal["cold", "warm"] | None = None
    settle: str | None = None
    allow: str | None = None
    acceptance: Literal["guarded", "simple", "guarded rejection"] = "guarded"
    samples: int = pydantic.Field(default=1, ge=1, le=100)
    override: pydantic.StrictBool = True
    until: Literal["settled"] | None = None
    drift: str | None = None
    at_least: str | None = None
    state: Literal["driven"] | None = None
    resistor: str | None = None
    trim_again: _Name | None = None

    @pydantic.model_validator(mode="after")
    def _fits_its_kind(self) -> Step:
        wants = _WANTS.get(self.kind, ())
        for key in wants:
            if getattr(self, key) in (None, (), ""):
                raise ValueError(f"a step of the kind {self.kind!r} needs {key!r}")
        for key, kinds in _ONLY_FOR.items():
            if key in self.model_fields_set and self.kind not in kinds:
                raise ValueError(f"{key!r} belongs to steps of the kind {' or '.join(kinds)}, not {self.kind!r}")
        watches = self.drift is not None or self.at_least is not None or (self.kind == "wait" and bool(self.points))
        if self.until is None and watches:
            raise ValueError("'drift', 'at_least' and 'points' belong to a wait with until = \"settled\"")
        if self.resistor is not None:
            for name in self.points:
                if name not in ("rail+.drop", "rail-.drop"):
                    raise ValueError(f"'resistor' belongs to a rail's drop, not to {name}")
        for text in (self.title, self.do, self.why, self.caution, self.expected):
            check_placeholders(text)
        for name in self.points:
            check_point(name)
        if self.rule is not None:
            check_rule(self.rule)
        return self


_WANTS: dict[str, tuple[str, ...]] = {
    "measure": ("points", "limits"),
    "rule": ("rule",),
    "supply": ("rails", "limit"),
    "limit check": ("rails", "limit"),
    "trim": ("points", "share"),
    "wait": ("seconds",),
    "clip": ("points",),
    "tell": ("do",),
    "confirm": ("do",),
    "text": ("do",),
    "hold": ("do",),
    "series lamp": ("do",),
    "parts replaced": ("do",),
}

_ONLY_FOR: dict[str, tuple[str, ...]] = {
    "points": ("measure", "trim", "clip", "wait"),
    "limits": ("measure",),
    "rule": ("rule",),
    "number": ("rule",),
    "rails": ("supply", "limit check"),
    "limit": ("supply", "limit check"),
    "ramp": ("supply",),
    "share": ("trim",),
    "tolerance": ("trim",),
    "seconds": ("wait",),
    "act": ("tell", "clip"),
    "until": ("wait",),
    "drift": ("wait",),
    "at_least": ("wait",),
    "state": ("measure",),
    "resistor": ("measure", "trim"),
    "trim_again": ("measure",),
    "samples": ("measure", "trim"),
    "settle": ("measure",),
    "acceptance": ("measure",),
    "allow": ("measure",),
}


class Section(_Strict):
    """Steps that belong together, under one heading."""

    name: _Name
    title: _Text
    resume: pydantic.StrictBool = False
    only_if: OnlyIf | None = None
    optional: str = ""
    at_limit: _Name | None = None
    as_: Literal["found", "left"] | None = pydantic.Field(default=None, alias="as")
    step: tuple[Step, ...] = pydantic.Field(min_length=1)

    @pydantic.model_validator(mode="after")
    def _fits(self) -> Section:
        if "optional" in self.model_fields_set and not self.optional.strip():
            raise ValueError("'optional' is empty; it has to hold the question whether the section is done")
        check_placeholders(self.optional)
        if self.at_limit is not None:
            self._leads_to_off(self.at_limit)
        return self

    def _leads_to_off(self, name: str) -> None:
        place = next((n for n, step in enumerate(self.step) if step.name == name and step.kind == "off"), None)
        if place is None:
            raise ValueError(f"at_limit is {name!r}; it has to name a step of the kind 'off' in its section")
        if not any(step.kind == "supply" for step in self.step[:place]):
            raise ValueError(f"at_limit is {name!r}, with no step of the kind 'supply' before it in its section")
        if not any(step.kind == "discharge" for step in self.step[place:]):
            raise ValueError(
                f"at_limit is {name!r}, with no step of the kind 'discharge' behind it in its section: hands go in next"
            )


class Head(_Strict):
    """Who the procedure is.

    ``unknown_trimmer`` lets it give power with the trimmer wherever it was found: only behind checks for shorts, from
    the lowest rails on, with a limit that the target needs and no more; and never so behind replaced parts.
    """

    format: Literal[1]
    name: _Text
    purpose: _Text
    cautions: tuple[str, ...] = ()
    target_time: str | None = None
    unknown_trimmer: pydantic.StrictBool = False

    @property
    def target_time_s(self) -> float | None:
        """How long a channel should take (s); None where the file doesn't say."""
        return None if self.target_time is None else time_s(self.target_time)


class _Document(_Strict):
    procedure: Head
    section: tuple[Section, ...] = pydantic.Field(min_length=2)

    @pydantic.model_validator(mode="after")
    def _whole(self) -> _Document:
        names = [section.name for section in self.section]
        for name in names:
            if names.count(name) > 1:
                raise ValueError(f"two sections are named {name!r}")
        for section in self.section:
            steps = [step.name for step in section.step]
            for name in steps:
                if steps.count(name) > 1:
                    raise ValueError(f"two steps of the section {section.name!r} are named {name!r}")
        if names[-1] != MADE_SAFE:
            raise ValueError(
                f"the last section is {names[-1]!r}; it has to be {MADE_SAFE!r}, the way out of every walk"
            )
        if self.section[-1].step[0].kind != "off":
            raise ValueError(f"the section {MADE_SAFE!r} has to begin with a step of the kind 'off'")
        for section in self.section:
            apart = section.only_if is not None or section.optional
            if section.only_if is not None and section.optional:
                raise ValueError(f"the section {section.name!r} has only_if and optional: one of them")
            if apart and (section.name == MADE_SAFE or section.resume):
                raise ValueError(f"the section {section.name!r} can't be left out: the walk has to be able to go there")
        asked = False
        for section in self.section:
            if section.only_if is not None and not asked:
                raise ValueError(
                    f"the section {section.name!r} is done only if {section.only_if}; a section before it has to ask "
                    "for that, in a step of the kind 'parts replaced'"
                )
            asked = asked or any(step.kind == "parts replaced" for step in section.step)
        if not any(section.resume for section in self.section):
            raise ValueError("no section has resume = true: a walk that was cut off would not know where to go on")
        return self


@dataclass(frozen=True, kw_only=True)
class Procedure:
    """A checked procedure.

    Parameters
    ----------
    head : Head
    sections : tuple of Section
    text, sha256, file : str
        The file's text, the digest of its UTF-8 bytes, and the name under which it was given.
    """

    head: Head
    sections: tuple[Section, ...]
    text: str
    sha256: str
    file: str


def load_procedure(path: Path) -> Procedure:
    """Read and check a procedure file.

    Raises
    ------
    FileError
        With the file, the key, what was found and what was expected.
    """
    try:
        text = path.read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as error:
        reason = error.strerror if isinstance(error, OSError) else "it is no UTF-8 text"
        raise FileError(str(path), "", f"can't be read: {reason}", "a procedure file", "Check the name") from None
    return parse_procedure(text, str(path))


def parse_procedure(text: str, file: str) -> Procedure:
    """Check the text of a procedure file; see `load_procedure`."""
    try:
        raw = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise FileError(file, "", f"is no valid TOML: {error}", "TOML 1.0", "Mend that line") from None
    try:
        document = _Document.model_validate(raw)
    except pydantic.ValidationError as error:
        first = error.errors()[0]
        came, expected = _words(first)
        raise FileError(file, _key(raw, first["loc"]), came, expected) from None
    procedure = Procedure(
        head=document.procedure,
        sections=document.section,
        text=text,
        sha256=hashlib.sha256(text.encode()).hexdigest(),
        file=file,
    )
    if document.procedure.target_time is not None:
        try:
            time_s(document.procedure.target_time)
        except BenchkitError as error:
            raise FileError(file, "procedure target_time", error.came, error.expected) from None
    for section in procedure.sections:
        for step in section.step:
            check_quantities(file, section, step)
    return procedure


def _key(raw: dict[str, Any], location: tuple[int | str, ...]) -> str:
    parts: list[str] = []
    here: Any = raw
    for part in location:
        try:
            here = here[part]
        except (KeyError, IndexError, TypeError):
            here = None
        if isinstance(part, int):
            name = here.get("name") if isinstance(here, dict) else None
            parts.append(repr(name) if name else f"number {part + 1}")
        elif part not in ("PairText", "literal['the model','the target']"):
            parts.append(part)
    return " ".join(parts)


def _words(error: pydantic_core.ErrorDetails) -> tuple[str, str]:
    """What came and what was expected, of an error; a table or list is never shown."""
    value, said = error["input"], error["msg"].removeprefix("Value error, ")
    if error["type"] == "missing":
        return "it is missing", "a value for it"
    if error["type"] == "extra_forbidden":
        return f"found {_short(value)}", "no such key here"
    if error["type"] == "value_error" and isinstance(value, dict | list):
        return said, ""
    return f"found {_short(value)}", said


def _short(value: object) -> str:
    if isinstance(value, dict):
        return "a table"
    if isinstance(value, list):
        return "a list"
    text = repr(value)
    return text if len(text) <= 40 else text[:37] + "..."
