"""The simulated 6½-digit meter: its SCPI headers, its ranges and its errors.

What it does like a real one
----------------------------
* Each function and range has a gain and an offset error of its own, drawn once for this instrument inside its
  specification (`SPECIFICATION`); noise comes on top, small enough that the specification still holds.
* Autorange takes the smallest range that holds the reading; beyond the last range, or beyond a range that was asked
  for, the reading is +9.9E37 or -9.9E37 (SCPI-1999 volume 1, 7.2.1).
* ``MEASure`` forgets range and sample count, ``CONFigure`` sets them and ``READ?`` uses them.
* 2-wire ohms reads its leads with the part; 4-wire ohms does not.
* A clip that has just been moved is warm from the hand: a thermal voltage of a microvolt or so that fades.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final, Protocol

import numpy as np

from benchkit.measure.accuracy import BENCH_METER, Accuracy, AccuracyRow
from benchkit.rehearsal.scpi import Arguments, Instrument, ScpiError, nr3

_LOW_OHMS: Final = (AccuracyRow(1.0, 0.010, 0.020), AccuracyRow(10.0, 0.010, 0.010))
SPECIFICATION: Final[Accuracy] = Accuracy(
    "the rehearsal's meter, 6½ digits",
    {**BENCH_METER.rows, "ohms 4-wire": (*_LOW_OHMS, *BENCH_METER.rows["ohms 4-wire"])},
    f"{BENCH_METER.source}; its 1 ohm and 10 ohm ranges are invented for the rehearsal",
)
"""The meter of a rehearsal: a good bench meter that can also tell 0.22 ohm from 0.223 ohm."""
OVERLOAD: Final = 9.9e37

_GAIN_SHARE = 0.85
_OFFSET_SHARE = 0.70
_NOISE_SHARE = 0.06
_CLIP_VOLTS = 1e-6
_CLIP_FADES_S = 8.0
_LEADS_OHM = (0.08, 0.18)
_CONTACT_OHM = 0.005
_MOST_SAMPLES = 1000

FUNCTIONS: Final[dict[str, str]] = {
    "VOLTage[:DC]": "dc volts",
    "VOLTage:AC": "ac volts",
    "CURRent[:DC]": "dc current",
    "RESistance": "ohms",
    "FRESistance": "ohms 4-wire",
    "DIODe": "diode",
    "TEMPerature": "temperature",
}
"""Header of each function, and its name as benchkit has it."""

_UNITS = {"dc volts": "V", "ac volts": "V", "dc current": "A", "ohms": "OHM", "ohms 4-wire": "OHM", "diode": "V"}
_SHORT = {
    "dc volts": "VOLT",
    "ac volts": "VOLT:AC",
    "dc current": "CURR",
    "ohms": "RES",
    "ohms 4-wire": "FRES",
    "diode": "DIOD",
    "temperature": "TEMP",
}


@dataclass(frozen=True)
class Sensed:
    """What there is to be read at the meter's clips.

    Parameters
    ----------
    value : float
        The true value in the function's unit; infinite where the meter runs into its compliance.
    noise : float
        Standard deviation of what the place itself adds, in the function's unit: hum, or a lead in the air.
    """

    value: float
    noise: float = 0.0


class Probed(Protocol):
    """What the meter's leads end at."""

    def sense(self, function: str, full_scale: float | None) -> Sensed:
        """Return what `function` (a name of `FUNCTIONS`) finds between the clips now; None lets the range follow."""
        ...

    @property
    def since_probe_s(self) -> float:
        """Simulated time (s) since the clips were last moved."""
        ...

    @property
    def probe_moves(self) -> int:
        """How often the clips have been moved."""
        ...


class Meter(Instrument):
    """The meter.

    Parameters
    ----------
    probed : Probed
        Where its leads end.
    rng : numpy.random.Generator
        For its errors (drawn now) and its noise (drawn at each reading).
    """

    def __init__(self, probed: Probed, rng: np.random.Generator) -> None:
        super().__init__("Rehearsal,Six and a Half,RB-M-0001,1.0")
        self._probed = probed
        self._rng = rng
        self._gain: dict[tuple[str, float], float] = {}
        self._offset: dict[tuple[str, float], float] = {}
        for function, rows in SPECIFICATION.rows.items():
            for row in rows:
                key = function, row.full_scale
                self._gain[key] = _GAIN_SHARE * row.percent_of_reading / 100.0 * rng.uniform(-1.0, 1.0)
                self._offset[key] = _OFFSET_SHARE * _offset_half_width(function, row) * rng.uniform(-1.0, 1.0)
        self._leads_ohm = float(rng.uniform(*_LEADS_OHM))
        self._clip_moves = -1
        self._clip_volts = 0.0
        self._contact_ohm = 0.0
        self._overloaded = 0
        self.reset()
        for pattern, function in FUNCTIONS.items():
            self.on(f"MEASure[:SCALar]:{pattern}?", self._measure_handler(function))
            self.on(f"CONFigure[:SCALar]:{pattern}", self._configure_handler(function))
        self.on("CONFigure?", lambda _: self._configured())
        self.on("READ?", lambda _: self._read())
        self.on("INITiate[:IMMediate]", self._initiate)
        self.on("FETCh?", lambda _: self._fetch())
        self.on("SAMPle:COUNt", self._set_samples)
        self.on("SAMPle:COUNt?", lambda _: str(self._samples))
        self.on("STATus:QUEStionable:CONDition?", lambda _: str(self._overloaded))

    def reset(self) -> None:
        """Go to d.c. volts, autorange, one sample."""
        self._function = "dc volts"
        self._range: float | None = None
        self._samples = 1
        self._last: list[float] = []

    def take(self, function: str, full_scale: float | None) -> float:
        """Take one reading, in the function's unit.

        Parameters
        ----------
        function : str
            A name of `FUNCTIONS`.
        full_scale : float or None
            The range; None lets the meter choose.

        Returns
        -------
        float
            What the meter shows; +-`OVERLOAD` beyond the range.
        """
        self._settle_clips()
        sensed = self._probed.sense(function, full_scale)
        rows = SPECIFICATION.rows[function]
        if math.isinf(sensed.value):
            return self._over(function, sensed.value)
        value = sensed.value
        if sensed.noise:
            value += sensed.noise * float(self._rng.standard_normal())
        if function in ("dc volts", "diode"):
            value += self._clip_volts * math.exp(-self._probed.since_probe_s / _CLIP_FADES_S)
        if function == "ohms":
            value += self._leads_ohm + self._contact_ohm
        if function == "ac volts":
            value = abs(value)
        if full_scale is None:
            row = next((row for row in rows if abs(value) <= row.full_scale), rows[-1])
        else:
            row = next(row for row in rows if row.full_scale == full_scale)
        if abs(value) > (1.0 if full_scale is None else 1.2) * row.full_scale:
            return self._over(function, value)
        key = function, row.full_scale
        noise = _NOISE_SHARE * _offset_half_width(function, row) * float(self._rng.standard_normal())
        shown = value * (1.0 + self._gain[key]) + self._offset[key] + noise
        if function == "ac volts":
            shown = abs(shown)
        self._overloaded = 0
        return _rounded(shown, row.full_scale * 1e-7)

    def _over(self, function: str, value: float) -> float:
        self._overloaded = {"dc current": 2, "ohms": 512, "ohms 4-wire": 512, "temperature": 16}.get(function, 1)
        return math.copysign(OVERLOAD, value)

    def _settle_clips(self) -> None:
        if self._probed.probe_moves != self._clip_moves:
            self._clip_moves = self._probed.probe_moves
            self._clip_volts = _CLIP_VOLTS * float(self._rng.standard_normal())
            self._contact_ohm = _CONTACT_OHM * float(self._rng.uniform(0.0, 1.0))

    def _measure_handler(self, function: str):  # type: ignore[no-untyped-def]
        def measure(arguments: Arguments) -> str:
            full_scale = self._range_of(function, arguments)
            self._function, self._range, self._samples = function, full_scale, 1
            self._last = [self.take(function, full_scale)]
            return nr3(self._last[0])

        return measure

    def _configure_handler(self, function: str):  # type: ignore[no-untyped-def]
        def configure(arguments: Arguments) -> None:
            full_scale = self._range_of(function, arguments)
            self._function, self._range, self._samples = function, full_scale, 1
            self._last = []

        return configure

    def _range_of(self, function: str, arguments: Arguments) -> float | None:
        """Take an optional range and resolution; return the full scale, None for autorange."""
        if function == "temperature":
            arguments.rest()  # the sensor's type: this meter has one kind
            return None
        rows = SPECIFICATION.rows[function]
        wanted = arguments.number(_UNITS[function], 0.0, rows[-1].full_scale, default=-1.0)
        arguments.number(_UNITS[function], 0.0, rows[-1].full_scale, default=-1.0)
        arguments.end()
        if wanted < 0.0:
            return None
        return next(row.full_scale for row in rows if row.full_scale >= wanted * (1.0 - 1e-12))

    def _configured(self) -> str:
        full_scale = "AUTO" if self._range is None else nr3(self._range)
        return f'"{_SHORT[self._function]} {full_scale}"'

    def _initiate(self, arguments: Arguments) -> None:
        arguments.end()
        self._last = [self.take(self._function, self._range) for _ in range(self._samples)]

    def _read(self) -> str:
        self._initiate(Arguments(()))
        return self._fetch()

    def _fetch(self) -> str:
        if not self._last:
            raise ScpiError(-230)
        return ",".join(nr3(value) for value in self._last)

    def _set_samples(self, arguments: Arguments) -> None:
        count = round(arguments.number("", 1, _MOST_SAMPLES))
        arguments.end()
        self._samples = count


def _offset_half_width(function: str, row: AccuracyRow) -> float:
    """Half-width (function's unit) of the range part; the leads of 2-wire ohms are modelled, not drawn."""
    return row.rest_half_width() - (row.floor if function == "ohms" else 0.0)


def _rounded(value: float, step: float) -> float:
    return round(value / step) * step
