"""The bench file: which instruments stand here, where they answer, and how well they read.

TOML, with these tables; ``[meter]`` or ``[supply]`` may be absent, and then a person reads or switches::

    [bench]
    format = 1
    name = "bench 2"

    [meter]
    address = "TCPIP::192.168.1.20::5025::SOCKET"
    profile = "scpi-meter"                 # a shipped profile, or a file beside this one
    serial = "MY123"                       # optional: another serial number stops the walk
    input_resistance = "10 Mohm"           # optional
    calibration_due = 2031-05-01           # optional

    [[meter.accuracy]]                     # one for each function and range; see `accuracy_from_rows`
    function = "dc volts"
    range = "100 mV"
    percent_of_reading = 0.005
    percent_of_range = 0.0035

    [supply]                               # the same keys, without input_resistance
    address = "TCPIP::192.168.1.21::5025::SOCKET"
    profile = "scpi-supply"
"""

from __future__ import annotations

import datetime
import hashlib
import tomllib
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

from pydantic import BaseModel, ConfigDict, Field, ValidationError

from benchkit.errors import BenchkitError, FileError
from benchkit.instruments.address import parse_address
from benchkit.instruments.profile import meter_profile, profile_table, supply_profile
from benchkit.measure.accuracy import STATED_DEFAULT, Accuracy, accuracy_from_rows
from benchkit.quantities import parse

DEFAULT_INPUT_RESISTANCE_OHM = 10e6
"""What is assumed of a meter that doesn't state it; common practice for meters of all prices."""


@dataclass(frozen=True, kw_only=True)
class BenchInstrument:
    """One instrument of the bench.

    Parameters
    ----------
    address : str
        As VISA writes it.
    profile : dict
        The whole profile as a plain table, so that a record stands alone.
    serial : str
        The pinned serial number; empty if any will do.
    accuracy : Accuracy
        Its specification, or the stated default.
    calibration_due : date or None
    input_resistance_ohm : float
        Of a meter, ohm.
    """

    address: str
    profile: dict[str, Any]
    serial: str
    accuracy: Accuracy
    calibration_due: datetime.date | None
    input_resistance_ohm: float = DEFAULT_INPUT_RESISTANCE_OHM

    @property
    def setup(self) -> dict[str, Any]:
        """What the keeper needs to own it."""
        return {"address": self.address, "profile": self.profile, "serial": self.serial}


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
        What a careful person would object to: calibration overdue, accuracy assumed.
    """

    name: str
    text: str
    sha256: str
    meter: BenchInstrument | None
    supply: BenchInstrument | None
    cautions: tuple[str, ...]

    @property
    def accuracy(self) -> Accuracy:
        """The meter's specification, or the stated default."""
        return STATED_DEFAULT if self.meter is None else self.meter.accuracy

    @property
    def supply_accuracy(self) -> Accuracy:
        """The specification of the supply's own readings, or the stated default."""
        return STATED_DEFAULT if self.supply is None else self.supply.accuracy

    @property
    def setup(self) -> dict[str, Any]:
        """The plain table for `benchkit.keeper.client.KeeperClient.connect`."""
        return {
            "meter": None if self.meter is None else self.meter.setup,
            "supply": None if self.supply is None else self.supply.setup,
        }


class _Table(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True)


class _Head(_Table):
    format: Literal[1]
    name: str = Field(min_length=1)


class _Instrument(_Table):
    address: str
    profile: str
    serial: str = ""
    calibration_due: datetime.date | None = None
    accuracy: list[dict[str, Any]] = []


class _Meter(_Instrument):
    profile: str = "scpi-meter"
    input_resistance: str = ""


class _Supply(_Instrument):
    profile: str = "scpi-supply"


class _File(_Table):
    bench: _Head
    meter: _Meter | None = None
    supply: _Supply | None = None


def load_bench(path: str | Path) -> Bench:
    """Read and check a bench file.

    Raises
    ------
    FileError
        With the file, the key, what was found and what was expected.
    """
    path = Path(path)
    try:
        text = path.read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as error:
        reason = error.strerror if isinstance(error, OSError) else "it is no UTF-8 text"
        raise FileError(str(path), "", f"it can't be read ({reason})", "a bench file", "Check the path") from None
    return parse_bench(text, str(path))


def parse_bench(text: str, file_name: str, *, today: datetime.date | None = None) -> Bench:
    """Check the text of a bench file.

    Parameters
    ----------
    text : str
        TOML.
    file_name : str
        For messages, and the place where profiles are looked for.
    today : date, optional
        What calibration dates are compared with.

    Raises
    ------
    FileError
        With the file, the key, what was found and what was expected.
    """
    try:
        file = _File.model_validate(tomllib.loads(text))
    except tomllib.TOMLDecodeError as error:
        raise FileError(file_name, "", f"it is no TOML ({error})", "a bench file", "Correct it") from None
    except ValidationError as error:
        first = error.errors()[0]
        key = ".".join(str(part) for part in first["loc"])
        raise FileError(file_name, key, f"found {first['input']!r}", first["msg"], "Correct it") from None
    cautions: list[str] = []
    today = today or datetime.date.today()
    meter = supply = None
    if file.meter is not None:
        meter = _instrument("meter", file.meter, file_name, today, cautions)
    if file.supply is not None:
        supply = _instrument("supply", file.supply, file_name, today, cautions)
    return Bench(
        name=file.bench.name,
        text=text,
        sha256=hashlib.sha256(text.encode("utf-8")).hexdigest(),
        meter=meter,
        supply=supply,
        cautions=tuple(cautions),
    )


def _instrument(
    label: str, table: _Meter | _Supply, file_name: str, today: datetime.date, cautions: list[str]
) -> BenchInstrument:
    profile = profile_table(table.profile, Path(file_name).parent)
    try:
        (meter_profile if label == "meter" else supply_profile)(profile, f"the profile {table.profile}")
        parse_address(table.address)
    except FileError:
        raise
    except BenchkitError as error:
        raise FileError(file_name, f"{label}.address", error.came, error.expected, error.next_step) from None
    accuracy = STATED_DEFAULT
    if table.accuracy:
        try:
            accuracy = accuracy_from_rows(f"the {label}", table.accuracy, f"the bench file {file_name}")
        except BenchkitError as error:
            raise FileError(file_name, f"{label}.accuracy", error.came, error.expected, error.next_step) from None
    else:
        cautions.append(f"The bench file states no accuracy for the {label}; taken as: {STATED_DEFAULT.name}.")
    due = table.calibration_due
    if due is None:
        cautions.append(f"The bench file gives no calibration date for the {label}.")
    elif due < today:
        cautions.append(f"The calibration of the {label} was due on {due.isoformat()}.")
    resistance_ohm = DEFAULT_INPUT_RESISTANCE_OHM
    if isinstance(table, _Meter):
        if table.input_resistance:
            try:
                resistance_ohm = parse(table.input_resistance, "ohm")
            except BenchkitError as error:
                raise FileError(file_name, "meter.input_resistance", error.came, error.expected) from None
            if resistance_ohm <= 0:
                raise FileError(
                    file_name, "meter.input_resistance", f"found {table.input_resistance!r}", "more than 0 ohm"
                )
        else:
            cautions.append("The bench file states no input resistance for the meter; taken as 10 Mohm.")
    return BenchInstrument(
        address=table.address,
        profile=profile,
        serial=table.serial,
        accuracy=accuracy,
        calibration_due=due,
        input_resistance_ohm=resistance_ohm,
    )
