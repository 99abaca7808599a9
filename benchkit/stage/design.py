"""Design files, format 1: reading, checking, and what follows from them without solving anything.

A design file is TOML. It is checked in three passes, each of which names the file and the dotted key:

1. TOML itself (`tomllib`): the line and column of a syntax error.
2. Shape and quantities (pydantic, unknown keys refused): every key has its unit, its sign and its range here.
3. Sense: devices exist and have the polarity of their place, keys fit the topology, the trimmer has a track left.

Last comes the question whether this version has a model of the topology (`benchkit.stage.topologies`).

Attributes carry their unit (``rails.positive_v``); the keys in the file are those of the format (``rails.positive``).
A value with a tolerance is a `Tolerance`: the marked value in the base unit and the half-width as a fraction.
"""

from __future__ import annotations

import difflib
import hashlib
import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field, PrivateAttr, ValidationError

from benchkit.errors import FileError
from benchkit.quantities import quoted
from benchkit.stage.design_values import (
    Amps,
    AnyFeed,
    AnyRest,
    Celsius,
    Fraction,
    JoulePerKelvin,
    KelvinPerWatt,
    NegativeVolts,
    OffsetVolts,
    Ohms,
    PlainOhms,
    PositiveAmps,
    PositiveFarads,
    PositiveVolts,
    PositiveWatts,
    Seconds,
    TargetTolerance,
    Text,
    Tracking,
)

BOLTZMANN_J_PER_K = 1.380649e-23
CHARGE_C = 1.602176634e-19
ZERO_CELSIUS_K = 273.15

DEVICE_PARAMETERS = (
    "IS", "BF", "NF", "VAF", "IKF", "ISE", "NE", "BR", "NR", "VAR",
    "IKR", "ISC", "NC", "RB", "RE", "RC", "XTI", "EG", "XTB",
)  # fmt: skip
"""Gummel-Poon d.c. parameters that a device table may set; an absent one has its published default."""

_MAY_BE_ZERO = frozenset({"ISE", "ISC", "RB", "RE", "RC", "XTI", "XTB"})

Topology = Literal[
    "single-emitter-follower", "double-emitter-follower", "triple-emitter-follower", "complementary-feedback-pair"
]


class _Table(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid", populate_by_name=False, allow_inf_nan=False)


class Head(_Table):
    """``[design]``."""

    format: Literal[1]
    name: Text
    revision: Text


class Rails(_Table):
    """``[rails]``: set values at full voltage and what else hangs on the rails."""

    positive_v: PositiveVolts = Field(alias="positive")
    negative_v: NegativeVolts = Field(alias="negative")
    reservoir_f: PositiveFarads | None = Field(None, alias="reservoir")
    bleed: Ohms | None = None
    local_capacitors_f: PositiveFarads | None = Field(None, alias="local_capacitors")
    other_positive: Amps | None = None
    other_negative: Amps | None = None


class Feeds(_Table):
    """``[feed]``: what sends current through the spreader."""

    upper: AnyFeed
    lower: AnyFeed
    max_current_a: PositiveAmps | None = Field(None, alias="max_current")
    works_from_v: PositiveVolts | None = Field(None, alias="works_from")
    settles_after_s: Seconds | None = Field(None, alias="settles_after")


class Trimmer(_Table):
    """``[spreader.trimmer]``."""

    value: Ohms
    arm: Literal["lower", "upper", "between"]
    end_resistance_ohm: PlainOhms = Field(0.0, alias="end_resistance")
    turns: Annotated[float, Field(gt=0.0, le=100.0)]
    raises_bias: Literal["clockwise", "anticlockwise"]
    wiring: Literal["series", "tied"]


class Spreader(_Table):
    """``[spreader]``: the bias spreader between the two output-stage bases."""

    transistor: Text
    upper: Ohms
    lower: Ohms
    collector_resistor: Ohms | None = None
    bypass_f: PositiveFarads | None = Field(None, alias="bypass")
    trimmer: Trimmer | None = None


class Output(_Table):
    """``[output]``: the followers."""

    topology: Topology
    pairs: Annotated[int, Field(ge=1, le=12, strict=True)] = 1
    upper: Text
    lower: Text
    driver_upper: Text | None = None
    driver_lower: Text | None = None
    driver_resistor: Ohms | None = None
    driver_resistor_to: Literal["each other", "output"] = "each other"
    predriver_upper: Text | None = None
    predriver_lower: Text | None = None
    predriver_resistor: Ohms | None = None
    emitter_resistor: Ohms
    base_stopper: Ohms | None = None
    rest: AnyRest
    offset_v: OffsetVolts = Field(0.02, alias="offset")


class Target(_Table):
    """``[target]``: one of emitter drop, quiescent current, or the optimum."""

    emitter_drop_v: PositiveVolts | None = Field(None, alias="emitter_drop")
    quiescent_current_a: PositiveAmps | None = Field(None, alias="quiescent_current")
    optimum: Literal[True] | None = None
    tolerance: TargetTolerance
    when: Literal["warm", "cold"]


class Thermal(_Table):
    """``[thermal]``."""

    ambient_c: Celsius = Field(alias="ambient")
    heatsink_k_per_w: KelvinPerWatt = Field(alias="heatsink")
    heatsink_capacity_j_per_k: JoulePerKelvin = Field(alias="heatsink_capacity")
    junction_to_heatsink_k_per_w: KelvinPerWatt = Field(alias="junction_to_heatsink")
    spreader_tracking: Tracking
    driver_tracking: Tracking | None = None
    driver_to_ambient_k_per_w: KelvinPerWatt = Field(0.0, alias="driver_to_ambient")
    spreader_to_ambient_k_per_w: KelvinPerWatt = Field(0.0, alias="spreader_to_ambient")
    spreader_lag_s: Seconds = Field(0.0, alias="spreader_lag")
    max_heatsink_c: Celsius = Field(alias="max_heatsink")


class Rating(_Table):
    """One entry of ``[ratings]``."""

    power_w: PositiveWatts | None = Field(None, alias="power")
    junction_c: Celsius | None = Field(None, alias="junction")
    voltage_v: PositiveVolts | None = Field(None, alias="voltage")
    current_a: PositiveAmps | None = Field(None, alias="current")


class Device(_Table):
    """``[device.NAME]``: Gummel-Poon parameters at 27 degC in SI units, and their spread."""

    polarity: Literal["npn", "pnp"]
    parameters: Mapping[str, float]
    spread: Mapping[str, Fraction] = Field(default_factory=dict)


class Design(_Table):
    """A whole design file, checked.

    Attributes
    ----------
    head, rails, feed, spreader, output, target, thermal, ratings, device
        The tables of the file; ``head`` is ``[design]``.
    """

    head: Head = Field(alias="design")
    rails: Rails
    feed: Feeds
    spreader: Spreader
    output: Output
    target: Target
    thermal: Thermal
    ratings: Mapping[str, Rating] = Field(default_factory=dict)
    device: Mapping[str, Device]
    _text: str = PrivateAttr("")
    _file: str = PrivateAttr("")
    _hash: int = PrivateAttr(0)

    @property
    def name(self) -> str:
        """Name of the design."""
        return self.head.name

    @property
    def revision(self) -> str:
        """Revision of the design."""
        return self.head.revision

    @property
    def text(self) -> str:
        """The file's own text, as read."""
        return self._text

    @property
    def file(self) -> str:
        """The file's name as the user gave it."""
        return self._file

    @property
    def sha256(self) -> str:
        """SHA-256 of the text in UTF-8, hexadecimal."""
        return hashlib.sha256(self._text.encode("utf-8")).hexdigest()

    def __hash__(self) -> int:
        return self._hash

    def __eq__(self, other: object) -> bool:
        return isinstance(other, Design) and self._text == other._text and self._file == other._file

    def with_thermal(self, words: str, **changes: float) -> Design:
        """Return the same design with other thermal data; `words` keep the two apart where designs are remembered."""
        other = self.model_copy(update={"thermal": self.thermal.model_copy(update=changes)})
        other._file = f"{self._file}, {words}"
        other._hash = hash((other._text, other._file))
        return other

    def rest_v(self, positive_v: float, negative_v: float) -> float:
        """Rest voltage of the output (V) at the given rails (V)."""
        if self.output.rest.share is None:
            return float(self.output.rest.volts or 0.0)
        return negative_v + self.output.rest.share * (positive_v - negative_v)

    @property
    def single_supply(self) -> bool:
        """Whether the negative rail is 0 V: the stage has one supply, and `output` rests between rail and 0 V."""
        return self.rails.negative_v == 0.0

    @property
    def servo_max_a(self) -> float:
        """Most current (A) that the servo can take; without ``max_current`` three times what the upper feed sends."""
        if self.feed.max_current_a is not None:
            return self.feed.max_current_a
        if self.feed.upper.kind == "source":
            return 3.0 * self.feed.upper.value.value
        return 3.0 * self.rails.positive_v / self.feed.upper.value.value


def load_design(path: str | Path) -> Design:
    """Read and check a design file.

    Parameters
    ----------
    path : str or Path
        A TOML file in UTF-8.

    Returns
    -------
    Design
        Frozen; ``text`` and ``sha256`` are those of the file.

    Raises
    ------
    FileError
        With the file and the dotted key.
    """
    try:
        text = Path(path).read_bytes().decode("utf-8")
    except OSError as error:
        reason = error.strerror or type(error).__name__
        raise FileError(str(path), "", f"the file can't be read ({reason})", "a design file (TOML)") from None
    except UnicodeDecodeError as error:
        raise FileError(str(path), "", f"byte {error.start} is not UTF-8", "a text file in UTF-8") from None
    return parse_design(text, str(path))


def parse_design(text: str, file_name: str = "design") -> Design:
    """Check the text of a design file.

    Parameters
    ----------
    text : str
        TOML, format 1.
    file_name : str
        What messages call the file.

    Returns
    -------
    Design

    Raises
    ------
    FileError
        For broken TOML, a wrong or unknown key, or a topology without a model.
    """
    from benchkit.stage.design_checks import check_sense

    try:
        # A byte order mark at the start and Windows line ends are how some editors save; neither changes the meaning.
        tables = tomllib.loads(text.removeprefix("\ufeff").replace("\r\n", "\n"))
    except tomllib.TOMLDecodeError as error:
        raise FileError(file_name, "", f"this is no valid TOML: {error}", "a design file, format 1") from None
    head = tables.get("design")
    if isinstance(head, dict) and "format" in head and (isinstance(head["format"], bool) or head["format"] != 1):
        raise FileError(
            file_name, "design.format", f"{quoted(str(head['format']))} came", "1, the format that this version reads"
        )
    try:
        design = Design.model_validate(tables)
    except ValidationError as error:
        raise _file_error(error, file_name) from None
    design._text = text
    design._file = file_name
    design._hash = hash((text, file_name))
    check_sense(design, file_name)
    return design


def target_drop_v(design: Design) -> float:
    """Emitter drop (V) at the target, with every part at its nominal value.

    Notes
    -----
    The optimum of emitter followers is I_Q*(R_E + re + rb/hFE) = VT at the ambient temperature, with the mean of the
    two output devices' ohmic RE and RB/BF: B. M. Oliver, *Distortion in Complementary Pair Class B Amplifiers*,
    Hewlett-Packard Journal, February 1971. That of a feedback pair is the bias of least gain ripple by the model, at
    the ambient temperature too; the stage is solved for it once.
    """
    emitter_ohm = design.output.emitter_resistor.value
    target = design.target
    if target.emitter_drop_v is not None:
        return target.emitter_drop_v
    if target.quiescent_current_a is not None:
        return target.quiescent_current_a / design.output.pairs * emitter_ohm
    from benchkit.stage.crossover import least_ripple_drop_v, oliver_drop_v, setting_at

    if design.output.topology == "complementary-feedback-pair":
        return least_ripple_drop_v(design, setting_at(design, design.thermal.ambient_c))
    return oliver_drop_v(design, design.thermal.ambient_c)


def _file_error(error: ValidationError, file_name: str) -> FileError:
    """Turn pydantic's findings into one message: the first in full, the others by their keys."""
    findings = error.errors()
    first = findings[0]
    key = ".".join(str(part) for part in first["loc"])
    came, expected, next_step = _in_words(first, key)
    others = [".".join(str(part) for part in found["loc"]) for found in findings[1:]]
    if others:
        also = f"Also look at {', '.join(others[:6])}{' and others' if len(others) > 6 else ''}"
        next_step = f"{next_step}. {also}" if next_step else also
    return FileError(file_name, key, came, expected, next_step)


def _in_words(finding: Any, key: str) -> tuple[str, str, str]:
    kind = finding["type"]
    context = finding.get("ctx", {})
    found = quoted(finding["input"] if isinstance(finding["input"], str) else repr(finding["input"]))
    if kind == "benchkit":
        return context["came"], context["expected"], context["next_step"]
    if kind == "missing":
        return "the key is missing", "it, because the model needs its value", ""
    if kind == "extra_forbidden":
        known = known_keys(key.rpartition(".")[0])
        near = difflib.get_close_matches(key.rpartition(".")[2], known, 1)
        hint = f'Did you mean "{near[0]}"?' if near else ""
        return "this key is not known", "one of " + ", ".join(known) if known else "no such key", hint
    if kind == "literal_error":
        return f"{found} came", str(context["expected"]), ""
    if kind in {"model_type", "dict_type", "mapping_type"}:
        return f"{found} came", "a table", ""
    return f"{found} came", str(finding["msg"])[:1].lower() + str(finding["msg"])[1:], ""


_TABLES: Mapping[str, type[BaseModel]] = {
    "": Design,
    "design": Head,
    "rails": Rails,
    "feed": Feeds,
    "spreader": Spreader,
    "spreader.trimmer": Trimmer,
    "output": Output,
    "target": Target,
    "thermal": Thermal,
}


def known_keys(table: str) -> tuple[str, ...]:
    """Keys that the dotted table may hold, as written in the file; empty where names are free."""
    outer = table.partition(".")[0]
    named: Mapping[str, type[BaseModel]] = {"device": Device, "ratings": Rating}
    model = _TABLES.get(table) or (named.get(outer) if "." in table else None)
    return tuple(field.alias or name for name, field in model.model_fields.items()) if model else ()
