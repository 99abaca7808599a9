"""Try a bench: a reading of each function of the meter, the supply's settings, and the supply into open circuit.

Rules
-----
* Nothing is switched on without an explicit yes, and nothing when an output is on already: what hangs on it is unknown.
* How it is switched on for a moment, and off on every way out, is `benchkit.instruments.open_circuit`'s affair.
* The supply is left off, with the low voltage, the low limit and the low protection in it.
* No walk runs here; the lock file of each instrument keeps it from one that does.
"""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Sequence
from concurrent.futures import Future
from dataclasses import asdict, dataclass, field
from typing import Any, Protocol, TypeVar

from benchkit.errors import BenchkitError, InstrumentError
from benchkit.events import SupplyState
from benchkit.instruments.bench import Bench, BenchInstrument, link_settings
from benchkit.instruments.link import Link
from benchkit.instruments.lockfile import ResourceLock
from benchkit.instruments.meter import Meter, RawReading
from benchkit.instruments.names import demand_serial
from benchkit.instruments.open_circuit import OnNoticed, try_open_circuit
from benchkit.instruments.profile import meter_profile, supply_profile
from benchkit.instruments.supply import OffOutcome, Supply
from benchkit.instruments.traffic import TrafficLog
from benchkit.measure.readings import FUNCTIONS
from benchkit.quantities import show

T = TypeVar("T")

NEEDED = ("dc volts", "ohms")
"""The functions that every walk needs; a meter that lacks another is a caution."""

OPEN_LEADS = {
    "dc volts": (0.0, 1.0),
    "ac volts": (0.0, 10.0),
    "dc current": (0.0, 1e-3),
    "ohms": (1e6, math.inf),
    "ohms 4-wire": (1e6, math.inf),
    "diode": (1.0, math.inf),
}
"""Between what a meter may read with open leads, in the function's unit: wide bounds of our own."""

_SAME = 3
"""As many functions that read the very same number, not nought, are a doubt."""

_ANSWER_S = 30.0
_CLOSE_S = 1.0
_LOOK_S = 0.1
_STUCK_S = 30.0


class Progress(Protocol):
    """Hears what is being waited for."""

    def __call__(self, what: str, left_s: float) -> None:
        """Take what is going on, and how long it may still take, s."""


@dataclass(frozen=True, kw_only=True)
class FunctionChecked:
    """One function of the meter: a value, an overload or a problem, and how long it took."""

    function: str
    took_s: float
    value: float | None = None
    overload: bool = False
    problem: str = ""

    def as_json(self) -> dict[str, Any]:
        """Return it as a plain table."""
        return {
            "function": self.function,
            "unit": FUNCTIONS[self.function],
            "value": self.value,
            "overload": self.overload,
            "took_s": round(self.took_s, 3),
            "problem": self.problem,
        }


@dataclass
class MeterChecked:
    """What the meter did."""

    name: str = ""
    readings: list[FunctionChecked] = field(default_factory=list)

    def as_json(self) -> dict[str, Any]:
        """Return it as a plain table."""
        return {"name": self.name, "readings": [one.as_json() for one in self.readings]}


@dataclass
class SupplyChecked:
    """What the supply did.

    Attributes
    ----------
    name : str
    before : SupplyState or None
        As it was found.
    powered : SupplyState or None
        With the outputs on into open circuit.
    not_powered : str
        Why it was not switched on; empty when it was.
    off : OffOutcome or None
        How the switching off ended.
    on_s : float
        How long "on" lasted as seen from here, until "off" had been confirmed, s.
    """

    name: str = ""
    before: SupplyState | None = None
    powered: SupplyState | None = None
    not_powered: str = ""
    off: OffOutcome | None = None
    on_s: float = 0.0

    def as_json(self) -> dict[str, Any]:
        """Return it as a plain table."""
        return {
            "name": self.name,
            "found": _state_json(self.before),
            "into_open_circuit": _state_json(self.powered),
            "not_powered": self.not_powered,
            "off_confirmed": None if self.off is None else self.off.confirmed,
            "off": "" if self.off is None else self.off.how,
            "on_s": round(self.on_s, 3),
        }


@dataclass
class Checked:
    """A whole check.

    Attributes
    ----------
    bench : str
    meter, supply : MeterChecked, SupplyChecked or None
    cautions : list of str
        To know of, and no failure.
    problems : list of str
        What did not work.
    stopped : str
        The signal that ended it early; empty when none did.
    """

    bench: str
    meter: MeterChecked | None = None
    supply: SupplyChecked | None = None
    cautions: list[str] = field(default_factory=list)
    problems: list[str] = field(default_factory=list)
    stopped: str = ""

    @property
    def exit_status(self) -> int:
        """0 when all worked, 3 for instrument trouble, 4 when it was stopped and the supply is known to be off."""
        return 3 if self.problems else 4 if self.stopped else 0

    def as_json(self) -> dict[str, Any]:
        """Return it as a plain table, format 1."""
        return {
            "format": 1,
            "bench": self.bench,
            "meter": None if self.meter is None else self.meter.as_json(),
            "supply": None if self.supply is None else self.supply.as_json(),
            "cautions": self.cautions,
            "problems": self.problems,
            "stopped": self.stopped,
        }


def check_bench(
    bench: Bench,
    *,
    yes: Callable[[SupplyChecked], bool] | None = None,
    progress: Progress = lambda what, left_s: None,
) -> Checked:
    """Try every instrument of a bench.

    Parameters
    ----------
    bench : Bench
    yes : callable, optional
        Asked before the supply is switched on, with what is known of it; without it nothing is switched on.
    progress : callable
        Hears what is being waited for, about ten times a second.

    Returns
    -------
    Checked
        Whatever went wrong with an instrument stands in its problems.
    """
    checked = Checked(bench=bench.name, cautions=list(bench.cautions))
    if bench.meter is not None:
        checked.meter = MeterChecked()
        try:
            _check_meter(bench.meter, checked, checked.meter, progress)
        except BenchkitError as error:
            checked.problems.append(str(error))
    if bench.supply is not None:
        checked.supply = SupplyChecked()
        try:
            _check_supply(bench.supply, checked, checked.supply, yes, progress)
        except BenchkitError as error:
            checked.problems.append(str(error))
    return checked


def _check_meter(table: BenchInstrument, checked: Checked, found: MeterChecked, progress: Progress) -> None:
    profile = meter_profile(table.profile, "the meter's profile")
    settings = link_settings(profile, table.setup)
    lock = ResourceLock(table.address)
    try:
        meter = Meter(Link("the meter", table.address, settings, TrafficLog()), profile)
        try:
            found.name = _wait(meter.identify(), "the meter's name", settings.open_timeout_s, progress)
            demand_serial("the meter", found.name, table.serial)
            for function in profile.functions:
                one = _read(meter, function, progress)
                found.readings.append(one)
                if one.problem and function in NEEDED:
                    checked.problems.append(f"The meter gave no reading of {function}. {one.problem}")
                elif one.problem:
                    checked.cautions.append(
                        f"The meter gave no reading of {function}: enter such readings by hand, or leave the function "
                        "out of the profile."
                    )
            checked.cautions += doubts(found.readings)
        finally:
            meter.close(_CLOSE_S)
    finally:
        lock.release()


def doubts(readings: Sequence[FunctionChecked]) -> list[str]:
    """Return what can't be so with nothing connected to the meter, or looks as if it never switched its function.

    Parameters
    ----------
    readings : sequence of FunctionChecked
        One of each function.
    """
    said = []
    for one in readings:
        least, most = OPEN_LEADS.get(one.function, (0.0, math.inf))
        if one.value is not None and not least <= abs(one.value) <= most:
            unit = FUNCTIONS[one.function]
            expected = (
                f"at most {show(most, unit, 2)}" if least == 0.0 else f"overload, or at least {show(least, unit, 2)}"
            )
            said.append(
                f"The meter reads {show(one.value, unit)} on {one.function} with nothing connected."
                f" Expected {expected}. Take off what is connected, and look whether the meter's own display agrees."
            )
    for value in dict.fromkeys(one.value for one in readings if one.value):
        same = [one.function for one in readings if one.value == value]
        if len(same) >= _SAME:
            said.append(
                f"The meter gave the same number, {value:.6g}, on {', '.join(same)}. Expected different ones. Look"
                " whether its display switches over; if not, the profile doesn't fit it."
            )
    return said


def _read(meter: Meter, function: str, progress: Progress) -> FunctionChecked:
    begin_s = time.monotonic()
    try:
        reading: RawReading = _wait(meter.read(function), function, meter.expected_s(function), progress)
    except InstrumentError as error:
        return FunctionChecked(function=function, took_s=time.monotonic() - begin_s, problem=str(error))
    return FunctionChecked(
        function=function, took_s=time.monotonic() - begin_s, value=reading.value, overload=reading.overload
    )


def _check_supply(
    table: BenchInstrument,
    checked: Checked,
    found: SupplyChecked,
    yes: Callable[[SupplyChecked], bool] | None,
    progress: Progress,
) -> None:
    profile = supply_profile(table.profile, "the supply's profile")
    settings = link_settings(profile, table.setup)
    log = OnNoticed(profile.commands.on)
    lock = ResourceLock(table.address)
    try:
        supply = Supply(Link("the supply", table.address, settings, log), profile)
        try:
            found.name = _wait(supply.identify(), "the supply's name", settings.open_timeout_s, progress)
            demand_serial("the supply", found.name, table.serial)
            found.before = _wait(supply.sample(), "the supply's settings", _ANSWER_S, progress).state
            if found.before.output_on is not False:
                says = "An output is on already" if profile.questions.output else "It does not say whether it is on"
                found.not_powered = f"{says}: it was not touched"
            elif yes is None:
                found.not_powered = "It was not asked for"
            elif not yes(found):
                found.not_powered = "Nobody said yes"
            elif _wait(supply.sample(), "the supply's outputs", _ANSWER_S, progress).state.output_on:
                found.not_powered = "An output was switched on meanwhile: it was not touched"
            else:
                tried = try_open_circuit(supply, log)
                found.powered, found.off, found.on_s = tried.powered, tried.off, tried.on_s
                checked.problems += tried.problems
                checked.stopped = tried.stopped
                state = found.powered
                if profile.has_over_voltage and state is not None and state.protection_positive_v is None:
                    checked.cautions.append("The supply's over-voltage protection was set and could not be read back.")
            if found.not_powered:
                checked.cautions.append(
                    "The supply was not switched on: nobody has seen yet that it comes on, and goes off when"
                    " benchkit says so."
                )
        finally:
            supply.close(_CLOSE_S)
    finally:
        lock.release()


def _wait(future: Future[T], what: str, within_s: float, progress: Progress) -> T:
    """Wait for an answer and tell how long it may still take.

    A link has its own time-outs and may ask twice; only one that is stuck itself is given up here.
    """
    end_s = time.monotonic() + within_s
    while True:
        left_s = end_s - time.monotonic()
        progress(what, max(0.0, left_s))
        try:
            return future.result(_LOOK_S)
        except TimeoutError:
            if future.done():
                raise
            if left_s < -(3.0 * within_s + _STUCK_S):
                raise InstrumentError(
                    "timeout",
                    f"The link did not come back from asking for {what} within {within_s - left_s:.0f} s",
                    "an answer, or an error of its own",
                    "Switch the instrument off and on, and check again",
                ) from None


def _state_json(state: SupplyState | None) -> dict[str, Any] | None:
    return None if state is None else {key: value for key, value in asdict(state).items() if value is not None}
