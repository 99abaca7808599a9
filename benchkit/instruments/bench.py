"""The bench file: which instruments stand here, where they answer, and how well they read.

TOML, with these tables; ``[meter]`` or ``[supply]`` may be absent, and then a person reads or switches::

    [bench]
    format = 1
    name = "bench 2"
    mains = "50 Hz"                        # optional: what the meter integrates over
    visa = "@py"                           # optional: another VISA library, as PyVISA names it

    [meter]
    address = "TCPIP::192.168.1.20::5025::SOCKET"
    profile = "scpi-meter"                 # a shipped profile, or a file beside this one
    serial = "MY123"                       # optional: another serial number stops the walk
    input_resistance = "10 Mohm"           # optional
    calibration_due = 2031-05-01           # optional

    [meter.line]                           # optional, for a serial address: what differs from the profile's line
    baud = 19200

    [[meter.accuracy]]                     # one for each function and range; see `accuracy_from_rows`
    function = "dc volts"
    range = "100 mV"
    percent_of_reading = 0.005
    percent_of_range = 0.0035

    [supply]                               # the same keys, without input_resistance
    address = "TCPIP::192.168.1.21::5025::SOCKET"
    profile = "scpi-supply"

A table without an address says how well a person's own meter, or the display of a supply that is set by hand, reads:
only its accuracy, calibration and input resistance are stated.

There is one meter, and one supply with two outputs; two supplies with one output each are not taken.
"""

from __future__ import annotations

import datetime
import hashlib
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Any

from pydantic import Field, PlainValidator
from pydantic_core import PydanticCustomError

from benchkit.errors import BenchkitError, FileError
from benchkit.instruments.address import parse_address
from benchkit.instruments.mistakes import checked, near, one_of, read_toml
from benchkit.instruments.profile import (
    MeterProfile,
    SupplyProfile,
    meter_profile,
    profile_table,
    shipped,
    shipped_names,
    supply_profile,
)
from benchkit.instruments.profile_parts import Date, Format, LinePart, Part, Text
from benchkit.instruments.settings import PURE_LIBRARY, LinkSettings
from benchkit.measure.accuracy import STATED_DEFAULT, SUPPLY_READOUT, Accuracy, accuracy_from_rows
from benchkit.quantities import parse

DEFAULT_INPUT_RESISTANCE_OHM = 10e6
"""What is assumed of a meter that doesn't state it; common practice for meters of all prices."""

_OF_A_LINK = ("profile", "serial", "line")
"""Keys that mean something only beside an address."""

_LEAST_MAINS_HZ, _MOST_MAINS_HZ = 40.0, 440.0


@dataclass(frozen=True, kw_only=True)
class BenchInstrument:
    """One instrument of the bench.

    Parameters
    ----------
    address : str
        As VISA writes it.
    profile : dict
        The whole profile as a plain table, with what the bench file says of line and mains in its place, so that a
        record stands alone.
    serial : str
        The pinned serial number; empty if any will do.
    accuracy : Accuracy
        Its specification, or the stated default.
    calibration_due : date or None
    input_resistance_ohm : float
        Of a meter, ohm.
    library : str
        The VISA library that it is reached through.
    """

    address: str
    profile: dict[str, Any]
    serial: str
    accuracy: Accuracy
    calibration_due: datetime.date | None
    input_resistance_ohm: float = DEFAULT_INPUT_RESISTANCE_OHM
    library: str = PURE_LIBRARY

    @property
    def setup(self) -> dict[str, Any]:
        """What the keeper needs to own it, as plain values."""
        return {"address": self.address, "profile": self.profile, "serial": self.serial, "library": self.library}


@dataclass(frozen=True, kw_only=True)
class Bench:
    """A bench file that has been checked.

    Parameters
    ----------
    name : str
    text, sha256 : str
        The file as it is, and its digest: they go into the record.
    meter, supply : BenchInstrument or None
        None where a person reads or switches.
    cautions : tuple of str
        What a careful person would object to: calibration overdue, accuracy assumed, no protection in the supply.
    own_accuracy, own_supply_accuracy : Accuracy or None
        Of a meter that a person reads and of a supply that a person sets, where the file states it.
    """

    name: str
    text: str
    sha256: str
    meter: BenchInstrument | None
    supply: BenchInstrument | None
    cautions: tuple[str, ...]
    own_accuracy: Accuracy | None = None
    own_supply_accuracy: Accuracy | None = None

    @property
    def accuracy(self) -> Accuracy:
        """The meter's specification, or the stated default."""
        return (self.own_accuracy or STATED_DEFAULT) if self.meter is None else self.meter.accuracy

    @property
    def supply_accuracy(self) -> Accuracy:
        """The specification of the supply's own readings, or the stated default."""
        return (self.own_supply_accuracy or STATED_DEFAULT) if self.supply is None else self.supply.accuracy

    @property
    def setup(self) -> dict[str, Any]:
        """The plain table for `benchkit.keeper.client.KeeperClient.connect`."""
        return {
            "meter": None if self.meter is None else self.meter.setup,
            "supply": None if self.supply is None else self.supply.setup,
        }


def link_settings(profile: MeterProfile | SupplyProfile, setup: Mapping[str, Any]) -> LinkSettings:
    """Return how to speak with an instrument, from its profile and its `BenchInstrument.setup`."""
    return profile.link.settings(str(setup.get("library") or PURE_LIBRARY))


def _quantity(value: Any, unit: str, least: float, most: float, example: str) -> float:
    if isinstance(value, str):
        try:
            found = parse(value, unit)
        except BenchkitError as error:
            raise PydanticCustomError(
                "quantity",
                "{expected}",
                {"found": value, "expected": f'{error.expected.split(", such as")[0]}, such as "{example}"'},
            ) from None
        if least <= found <= most:
            return found
    raise PydanticCustomError(
        "quantity",
        "{expected}",
        {"found": value, "expected": f'{least:g} to {most:g} {unit}, written like "{example}"'},
    )


Mains = Annotated[float, PlainValidator(lambda value: _quantity(value, "Hz", _LEAST_MAINS_HZ, _MOST_MAINS_HZ, "50 Hz"))]
Resistance = Annotated[float, PlainValidator(lambda value: _quantity(value, "ohm", 1e3, 1e15, "10 Mohm"))]
Filled = Annotated[Text, Field(min_length=1)]


class _Head(Part):
    format: Format
    name: Filled
    mains: Mains | None = None
    visa: Text = ""


class _Instrument(Part):
    address: Text = ""
    profile: Filled
    serial: Text = ""
    calibration_due: Date | None = None
    line: LinePart | None = None
    accuracy: tuple[dict[str, Any], ...] = ()


class _Meter(_Instrument):
    profile: Filled = "scpi-meter"
    input_resistance: Resistance | None = None


class _Supply(_Instrument):
    profile: Filled = "scpi-supply"


class _File(Part):
    bench: _Head
    meter: _Meter | None = None
    supply: _Supply | None = None


def load_bench(path: str | Path, *, visa: str = "") -> Bench:
    """Read and check a bench file.

    Parameters
    ----------
    path : str or Path
    visa : str
        A VISA library to use instead of the file's.

    Raises
    ------
    FileError
        With the file, the key, what was found and what was expected.
    """
    path = Path(path)
    try:
        text = path.read_text(encoding="utf-8-sig")
    except (OSError, UnicodeDecodeError) as error:
        reason = error.strerror if isinstance(error, OSError) else "it is no UTF-8 text"
        raise FileError(str(path), "", f"it can't be read ({reason})", "a bench file", "Check the path") from None
    return parse_bench(text, str(path), visa=visa)


def parse_bench(text: str, file_name: str, *, today: datetime.date | None = None, visa: str = "") -> Bench:
    """Check the text of a bench file.

    Parameters
    ----------
    text : str
        TOML.
    file_name : str
        For messages, and the place where profiles are looked for.
    today : date, optional
        What calibration dates are compared with.
    visa : str
        A VISA library to use instead of the file's.

    Raises
    ------
    FileError
        With the file, the key, what was found and what was expected.
    """
    file = checked(_File, read_toml(text, file_name, "a bench file"), file_name)
    cautions: list[str] = []
    today = today or datetime.date.today()
    head = file.bench.model_copy(update={"visa": visa}) if visa else file.bench
    meter = supply = None
    own: dict[str, Accuracy] = {}
    for label, table in (("meter", file.meter), ("supply", file.supply)):
        if table is not None and "address" not in table.model_fields_set:
            own[label] = _by_hand(label, table, file_name, today, cautions)
        elif isinstance(table, _Meter):
            meter = _instrument(label, table, file_name, head, today, cautions)
        elif table is not None:
            supply = _instrument(label, table, file_name, head, today, cautions)
    if meter is not None and supply is not None and meter.address == supply.address:
        raise FileError(
            file_name,
            "supply.address",
            f"found {supply.address!r}, which is the meter's too",
            "an address of its own for each instrument",
            "Correct it",
        )
    return Bench(
        name=file.bench.name,
        text=text,
        sha256=hashlib.sha256(text.encode("utf-8")).hexdigest(),
        meter=meter,
        supply=supply,
        cautions=tuple(cautions),
        own_accuracy=own.get("meter"),
        own_supply_accuracy=own.get("supply"),
    )


def _by_hand(
    label: str, table: _Meter | _Supply, file_name: str, today: datetime.date, cautions: list[str]
) -> Accuracy:
    """Return the accuracy of what a person reads; what only a link needs is a mistake there."""
    needless = sorted(table.model_fields_set & set(_OF_A_LINK))
    if needless or not table.accuracy:
        beside = f", and {needless[0]} stands there" if needless else ""
        expected = f"an address; only for a {label} that a person reads accuracy alone, without {', '.join(_OF_A_LINK)}"
        raise FileError(file_name, f"{label}.address", f"this key is missing{beside}", expected, "Correct it")
    _calibration(label, table.calibration_due, today, cautions)
    stated = _accuracy(label, table, file_name, cautions)
    assumed = STATED_DEFAULT if label == "meter" else SUPPLY_READOUT
    missing = [function for function in assumed.rows if function not in stated.rows]
    if missing:
        unsaid = ", ".join(missing)
        cautions.append(f"The bench file states no accuracy of the {label} for {unsaid}; taken as: {assumed.name}.")
    return Accuracy(stated.name, {**assumed.rows, **stated.rows}, stated.source)


def _instrument(
    label: str, table: _Meter | _Supply, file_name: str, head: _Head, today: datetime.date, cautions: list[str]
) -> BenchInstrument:
    folder = Path(file_name).parent
    if shipped(table.profile) is None and not (folder / table.profile).is_file():
        names = shipped_names()
        raise FileError(
            file_name,
            f"{label}.profile",
            f"found {table.profile!r}, which is neither a profile that comes along nor a file beside this one",
            one_of(names, near(table.profile, names)) + ", or a file",
            "Correct it",
        )
    profile = profile_table(table.profile, folder)
    where = f"the profile {table.profile}"
    model = (meter_profile if label == "meter" else supply_profile)(profile, where)
    if table.line is not None:
        profile = _with(profile, "link", "line", table.line.model_dump(exclude_unset=True))
    if head.mains is not None and label == "meter":
        profile = _with(profile, "timing", "mains_hz", head.mains)
    if isinstance(model, SupplyProfile):
        cautions += model.cautions
    library = head.visa or PURE_LIBRARY
    _check_address(label, table, file_name, library)
    return BenchInstrument(
        address=table.address,
        profile=profile,
        serial=table.serial,
        accuracy=_accuracy(label, table, file_name, cautions),
        calibration_due=_calibration(label, table.calibration_due, today, cautions),
        input_resistance_ohm=_resistance(table, cautions),
        library=library,
    )


def _with(profile: Mapping[str, Any], part: str, key: str, value: Any) -> dict[str, Any]:
    """Return a profile with one entry changed; a table is laid over the one that is there."""
    inner = profile.get(part, {})
    if not isinstance(inner, dict):
        return dict(profile)
    old = inner.get(key)
    if isinstance(value, dict):
        value = {**(old if isinstance(old, dict) else {}), **value}
    return {**profile, part: {**inner, key: value}}


def _check_address(label: str, table: _Instrument, file_name: str, library: str) -> None:
    try:
        address = parse_address(table.address, library)
    except BenchkitError as error:
        raise FileError(file_name, f"{label}.address", error.came, error.expected, error.next_step) from None
    if table.line is not None and address.kind not in {"serial", "other"}:
        raise FileError(
            file_name,
            f"{label}.line",
            f"the address {table.address} is no serial port",
            "a line only for a serial port, such as ASRL/dev/ttyUSB0::INSTR",
            "Leave it out",
        )


def _accuracy(label: str, table: _Instrument, file_name: str, cautions: list[str]) -> Accuracy:
    if not table.accuracy:
        assumed = STATED_DEFAULT if label == "meter" else SUPPLY_READOUT
        cautions.append(f"The bench file states no accuracy for the {label}; taken as: {assumed.name}.")
        return assumed
    try:
        return accuracy_from_rows(f"the {label}", table.accuracy, f"the bench file {file_name}")
    except BenchkitError as error:
        raise FileError(file_name, f"{label}.accuracy", error.came, error.expected, error.next_step) from None


def _calibration(
    label: str, due: datetime.date | None, today: datetime.date, cautions: list[str]
) -> datetime.date | None:
    if due is None:
        cautions.append(f"The bench file gives no calibration date for the {label}.")
    elif due < today:
        cautions.append(f"The calibration of the {label} was due on {due.isoformat()}.")
    return due


def _resistance(table: _Meter | _Supply, cautions: list[str]) -> float:
    if not isinstance(table, _Meter):
        return DEFAULT_INPUT_RESISTANCE_OHM
    if table.input_resistance is None:
        cautions.append("The bench file states no input resistance for the meter; taken as 10 Mohm.")
        return DEFAULT_INPUT_RESISTANCE_OHM
    return table.input_resistance
