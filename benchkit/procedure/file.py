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
``wait``         time passes under watch
``clip``         off, rails seen low at the unit, probes clipped to a point, and power again after a hold point
``off``          the supply off, confirmed
``discharge``    after off: every rail, and rail to rail, watched down until it is low; a second look after a minute
                 where much was stored
``series lamp``  mains through a lamp in series, for a first look; nothing here switches it, nothing is trimmed on it

A step that ``needs`` something falls away for a design that lacks it; so do, by themselves, steps that turn or check a
trimmer that isn't there.
"""

from __future__ import annotations

import hashlib
import re
import tomllib
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Any, Literal

import pydantic

from benchkit import quantities
from benchkit.errors import BenchkitError, EntryError, FileError
from benchkit.judge.rules import find_rule

Kind = Literal[
    "tell", "confirm", "text", "measure", "rule", "supply", "limit check", "hold", "trim", "wait", "clip", "off",
    "discharge", "series lamp",
]  # fmt: skip

Need = Literal["a trimmer", "two rails", "one rail"]
"""What a design has to have for a step to make sense."""

Act = Literal["short the leads", "connect the unit", "trimmer to least"]
"""What a told step does to the bench, where the rest of the walk depends on it."""

MADE_SAFE = "made-safe"
"""The section that every way out goes through; it is always the last but for the verdict."""

PLACEHOLDERS = frozenset(
    {
        "turns", "less_bias_way", "more_bias_way", "limit", "rails", "target", "design", "arm", "discharge_time",
        "both_rails", "Both_rails", "least_bias",
    }
)  # fmt: skip
"""The words in braces that a step's text may hold; each stands for a fact of the design or of the step."""

_Name = Annotated[str, pydantic.StringConstraints(pattern=r"^[a-z0-9][a-z0-9-]*$", max_length=40)]
_Text = Annotated[str, pydantic.StringConstraints(strip_whitespace=True, min_length=1)]


_SIDE = r"\.(upper|lower)"
_PART = rf"(spreader\.transistor|(predriver|driver){_SIDE}|output{_SIDE}\.\d+)"
_POINT = re.compile(
    rf"rails|rail[+-](\.current|\.drop|\.ac)?|output(\.ac)?|spread({_SIDE})?|feed{_SIDE}|(pre)?driver\.resistor({_SIDE})?"
    rf"|emitter\.(upper|lower|pair)\.\d+|stopper{_SIDE}\.\d+|{_PART}\.vbe|heatsink"
    rf"|ohm\.(rails|rail[+-]|output|(spreader|feed){_SIDE}|(emitter|stopper){_SIDE}\.\d+|(pre)?driver\.resistor({_SIDE})?"
    rf"|heatsink\.{_PART})|diode\.{_PART}"
)
"""Names of test points that some design has; a step may name one that this design lacks, but not one that none has."""


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
    override: bool = True

    @pydantic.model_validator(mode="after")
    def _fits_its_kind(self) -> Step:
        wants = _WANTS.get(self.kind, ())
        for key in wants:
            if getattr(self, key) in (None, (), ""):
                raise ValueError(f"a step of the kind {self.kind!r} needs {key!r}")
        for key, kinds in _ONLY_FOR.items():
            if key in self.model_fields_set and self.kind not in kinds:
                raise ValueError(f"{key!r} belongs to steps of the kind {' or '.join(kinds)}, not {self.kind!r}")
        for text in (self.title, self.do, self.why, self.caution, self.expected):
            _check_placeholders(text)
        for name in self.points:
            _check_point(name)
        if self.rule is not None:
            _check_rule(self.rule)
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
}

_ONLY_FOR: dict[str, tuple[str, ...]] = {
    "points": ("measure", "trim", "clip"),
    "limits": ("measure",),
    "rule": ("rule",),
    "number": ("rule",),
    "rails": ("supply", "limit check"),
    "limit": ("supply", "limit check"),
    "ramp": ("supply",),
    "share": ("trim",),
    "tolerance": ("trim",),
    "seconds": ("wait",),
    "act": ("tell",),
    "samples": ("measure", "trim"),
    "settle": ("measure",),
    "acceptance": ("measure",),
    "allow": ("measure",),
}


class Section(_Strict):
    """Steps that belong together, under one heading."""

    name: _Name
    title: _Text
    resume: bool = False
    step: tuple[Step, ...] = pydantic.Field(min_length=1)


class Head(_Strict):
    """Who the procedure is."""

    format: Literal[1]
    name: _Text
    purpose: _Text
    cautions: tuple[str, ...] = ()


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
        raise FileError(
            file, _key(raw, first["loc"]), f"found {_short(first['input'])}", first["msg"].removeprefix("Value error, ")
        ) from None
    procedure = Procedure(
        head=document.procedure,
        sections=document.section,
        text=text,
        sha256=hashlib.sha256(text.encode()).hexdigest(),
        file=file,
    )
    for section in procedure.sections:
        for step in section.step:
            _check_quantities(file, section, step)
    return procedure


def _check_quantities(file: str, section: Section, step: Step) -> None:
    checks: list[tuple[str, str | None, str]] = [("seconds", step.seconds, "s"), ("ramp", step.ramp, "s")]
    if step.rails is not None and step.rails not in ("lowest", "full") and not step.rails.rstrip().endswith("%"):
        checks.append(("rails", step.rails, "V"))
    if step.settle is not None and step.settle != "the capacitors":
        checks.append(("settle", step.settle, "s"))
    if step.limit is not None and step.limit not in ("for least bias", "for the target"):
        checks.append(("limit", step.limit, "A"))
    for key in ("share", "tolerance"):
        checks.append((key, getattr(step, key), "%"))
    if step.rails is not None and step.rails.rstrip().endswith("%"):
        checks.append(("rails", step.rails, "%"))
    for key, value, unit in checks:
        if value is None:
            continue
        where = f"section {section.name}, step {step.name}, {key}"
        try:
            number = quantities.parse(value, unit)
        except BenchkitError as error:
            raise FileError(file, where, error.came, error.expected) from None
        least, most = _RANGES.get((key, unit), (0.0, None))
        if number <= least or (most is not None and number > most):
            expected = f"more than {least:g} {unit}" + ("" if most is None else f", at most {most:g} {unit}")
            raise FileError(file, where, f"found {value!r}", expected)


_RANGES: dict[tuple[str, str], tuple[float, float | None]] = {
    ("share", "%"): (0.0, 100.0),
    ("tolerance", "%"): (0.0, 100.0),
    ("rails", "%"): (0.0, 100.0),
}
"""What a quantity has to be above and may reach at most; all others are above zero."""


def _check_point(name: str) -> None:
    plain = name.replace("ARM", "lower").replace("PART", "output.upper.1").replace("N", "1")
    if not _POINT.fullmatch(plain):
        raise ValueError(f"{name!r} is no test point; the names stand in the list of test points")


def _check_rule(name: str) -> None:
    try:
        find_rule(name)
    except EntryError as error:
        raise ValueError(f"{error.came}; expected {error.expected}") from None


def _check_placeholders(text: str) -> None:
    rest = text
    while "{" in rest:
        _, _, rest = rest.partition("{")
        word, closed, rest = rest.partition("}")
        if not closed or word not in PLACEHOLDERS:
            known = ", ".join(sorted(PLACEHOLDERS))
            raise ValueError(f"the text holds {{{word}}}; the words in braces that are known are {known}")


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


def _short(value: object) -> str:
    text = repr(value)
    return text if len(text) <= 80 else text[:77] + "..."
