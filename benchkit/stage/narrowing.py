"""Limits of one unit's remaining readings, from what has been read of it.

The design's limits hold 99.73 % of all healthy units. Once something has been read of a unit, measured resistors
included, only part of those units is like it, and what remains to be read is known better.

How it is done
--------------
* `benchkit.stage.paired` holds the ensembles: the same units under every condition, on benches that are a little off.
* The known readings of the ensemble get noise from a fixed seed. How much of a reading's uncertainty it shares with the
  others (a meter's gain) and how much is its own isn't known, and either can be the worse: so both are counted in full,
  one noise for all readings in the same unit and one for each.
* Limits are for the true reading; the guard band of the judgement comes on top of them, as it does on the design's.
* `benchkit.stage.conditioning` does the statistics.

Narrowed limits lie inside the design's. Cutting them to those leaves 0.27 % of units outside already, whatever was
narrowed; so that the whole stays near that, the conditioned limits hold 99.9 % before they are cut. Where they come out
no narrower than nine tenths of the design's, the design's stay. They also stay, with the reason, when the known
readings don't go together as in a healthy unit, and for readings that have no spread or may be an overload.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from benchkit.quantities import show
from benchkit.stage.conditioning import LEAST_UNITS, Column, Conditioned, Mask, Matrix
from benchkit.stage.design import Design
from benchkit.stage.draws import Array
from benchkit.stage.expected import DEFAULT_UNITS
from benchkit.stage.observations import Conditions, Observation
from benchkit.stage.paired import PairedUnits, Reading
from benchkit.stage.points import find_point

OUTSIDE = 1e-3
"""Share of units outside the conditioned limits, before these are cut to the design's."""
LEAST_GAIN = 0.9
"""Limits wider than this share of the design's are no narrower."""
_NO_SPREAD = 1e-7
_HELD = 0.1
"""Design's limits closer than this share of the readings on a real bench: the condition holds the reading."""
_FITS_KEPT = 4
_INPUTS_KEPT = 512
_FLOOR = 3.0
"""Standard uncertainties below which a known reading counts as near zero."""


@dataclass(frozen=True, kw_only=True)
class NarrowedLimits:
    """Limits of a reading that is still to be taken.

    Attributes
    ----------
    conditions : tuple of Condition or Unpowered
    point, unit : str
    low, high : float
        For this unit, in the point's unit; the design's where nothing narrows.
    design_low, design_high : float
        For every unit; infinite where a healthy unit may read overload.
    narrowed : bool
    why : str
        Why not, where it isn't the readings' own lack of bearing; otherwise empty.
    """

    conditions: Conditions
    point: str
    unit: str
    low: float
    high: float
    design_low: float
    design_high: float
    narrowed: bool
    why: str = ""


@dataclass(frozen=True)
class Known:
    """A reading that came in, without its value: what a fit depends on.

    Attributes
    ----------
    reading : tuple
        Conditions and point.
    standard_uncertainty : float
        In the point's unit.
    """

    reading: Reading
    standard_uncertainty: float


@dataclass(frozen=True)
class _Input:
    """A known column, and what its readings are clipped to where units read overload; infinite where none does."""

    column: Column
    most: float


@dataclass(frozen=True)
class _Fit:
    used: tuple[int, ...]
    most: Array
    fitted: tuple[int, ...]
    conditioned: Conditioned | None


class Narrowing:
    """Ensembles of one design, kept; readings of one unit come in.

    The first call that names a condition solves an ensemble under it, about a second; later ones take about 0.1 s.

    Parameters
    ----------
    design : Design
    units : int
        Units in each ensemble.
    seed : int
        Of the draws; with the same seed the design's limits are those of `benchkit.stage.expected`.
    """

    def __init__(self, design: Design, units: int = DEFAULT_UNITS, seed: int = 0) -> None:
        self.design = design
        self.units = PairedUnits(design, units, seed)
        self._outputs: dict[Reading, Column | None] = {}
        self._inputs: dict[tuple[Known, int], _Input | None] = {}
        self._fits: dict[object, _Fit] = {}

    def limits(self, known: Sequence[Observation], wanted: Sequence[Reading]) -> tuple[NarrowedLimits, ...]:
        """Narrow the limits of wanted readings by the known ones.

        Parameters
        ----------
        known : sequence of Observation
            Of one unit. Readings of points or conditions that the model has nothing for are passed over.
        wanted : sequence of (conditions, point)

        Returns
        -------
        tuple of NarrowedLimits
            In the order of `wanted`.

        Raises
        ------
        EntryError
            When a wanted point is none of the design's, or not read under its conditions.
        ModelError
            When a wanted reading's ensemble has too few solutions.
        """
        design_limits = [self.units.design_limits(reading) for reading in wanted]
        usable = [
            one for one in known
            if self.units.has((one.conditions, one.point)) and not math.isnan(one.value)
            and 0.0 <= one.standard_uncertainty < math.inf
        ]  # fmt: skip
        parts = tuple(Known((one.conditions, one.point), one.standard_uncertainty) for one in usable)
        values = np.array([[one.value for one in usable]])
        fit = self._fit(parts, tuple(wanted))
        low, high, narrowed, odd = self._narrowed(fit, values, np.array(design_limits).reshape(-1, 2))
        why = self._why_odd(fit, parts, values) if odd[0] else ""
        result = []
        for number, (conditions, point) in enumerate(wanted):
            design_low, design_high = design_limits[number]
            result.append(
                NarrowedLimits(
                    conditions=conditions, point=point, unit=find_point(self.design, point).unit,
                    low=float(low[0, number]), high=float(high[0, number]), design_low=design_low,
                    design_high=design_high, narrowed=bool(narrowed[0, number]), why=why,
                )
            )  # fmt: skip
        return tuple(result)

    def limits_many(
        self, known: Sequence[Known], wanted: Sequence[Reading], values: Matrix
    ) -> tuple[Matrix, Matrix, Mask, Mask]:
        """Narrow the limits of many units' wanted readings at once.

        Parameters
        ----------
        known : sequence of Known
            Every one modelled.
        wanted : sequence of (conditions, point)
        values : array of shape (units, known)

        Returns
        -------
        low, high : arrays of shape (units, wanted)
        narrowed : array of bool of shape (units, wanted)
        odd : array of bool of shape (units,)

        Raises
        ------
        EntryError, ModelError
            As `limits`.
        """
        design_limits = np.array([self.units.design_limits(reading) for reading in wanted]).reshape(-1, 2)
        return self._narrowed(self._fit(tuple(known), tuple(wanted)), np.asarray(values), design_limits)

    # ------------------------------------------------------------------------------------------------------------ fits

    def _output(self, reading: Reading) -> Column | None:
        """Return the column of a wanted reading; None when it has no spread of its own or may be an overload."""
        if reading not in self._outputs:
            readings = self.units.true_readings(reading)
            low, high = self.units.design_limits(reading)
            held = np.isinf(readings).any() or _without_spread(readings)
            held = held or high - low < _HELD * np.ptp(readings[np.isfinite(readings)])
            self._outputs[reading] = None if held else _column(readings, 0.0)
        return self._outputs[reading]

    def _input(self, known: Known, again: int) -> _Input | None:
        """Return the column of a known reading, noise included; None when it bears on nothing."""
        key = (known, again)
        if key not in self._inputs:
            while len(self._inputs) >= _INPUTS_KEPT:
                del self._inputs[next(iter(self._inputs))]
            unit = find_point(self.design, known.reading[1]).unit
            names = (f"noise {known.reading!r} {again}", f"gain {unit}")
            noise = sum(self.units.rng(name).standard_normal(len(self.units)) for name in names)
            true = self.units.true_readings(known.reading)
            over = np.isposinf(true)
            readings = true + known.standard_uncertainty * noise
            most = np.inf
            if over.any() and np.isfinite(readings).any():
                most = float(readings[np.isfinite(readings)].max())
                readings = np.minimum(readings, most)
            bears = not _without_spread(readings)
            floor = _FLOOR * known.standard_uncertainty
            self._inputs[key] = _Input(_column(readings, floor), most) if bears else None
        return self._inputs[key]

    def _fit(self, known: tuple[Known, ...], wanted: tuple[Reading, ...]) -> _Fit:
        key = (known, wanted)
        if key not in self._fits:
            while len(self._fits) >= _FITS_KEPT:
                del self._fits[next(iter(self._fits))]
            self._fits[key] = self._make_fit(known, wanted)
        return self._fits[key]

    def _make_fit(self, known: tuple[Known, ...], wanted: tuple[Reading, ...]) -> _Fit:
        counts: dict[Reading, int] = {}
        used, inputs, most = [], [], []
        for number, one in enumerate(known):
            again = counts[one.reading] = counts.get(one.reading, -1) + 1
            found = self._input(one, again)
            if found is not None:
                used.append(number)
                inputs.append(found.column)
                most.append(found.most)
        outputs = [(number, column) for number, one in enumerate(wanted) if (column := self._output(one))]
        fitted = tuple(number for number, _ in outputs)
        made = None
        if inputs and outputs:
            columns = [*inputs, *(column for _, column in outputs)]
            rows = np.flatnonzero(np.all([np.isfinite(column.standard) for column in columns], axis=0))
            if len(rows) >= LEAST_UNITS:
                made = Conditioned(inputs, [column for _, column in outputs], rows, OUTSIDE)
        return _Fit(tuple(used), np.array(most), fitted, made)

    def _narrowed(self, fit: _Fit, values: Matrix, design_limits: Matrix) -> tuple[Matrix, Matrix, Mask, Mask]:
        units, many = len(values), len(design_limits)
        low = np.broadcast_to(design_limits[:, 0], (units, many)).copy()
        high = np.broadcast_to(design_limits[:, 1], (units, many)).copy()
        narrowed, odd = np.zeros((units, many), np.bool_), np.zeros(units, np.bool_)
        if fit.conditioned is None:
            return low, high, narrowed, odd
        own = np.minimum(values[:, fit.used], fit.most)
        whole = np.isfinite(own).all(axis=1)
        odd[~whole] = True
        new_low, new_high, odd[whole] = fit.conditioned.limits_many(own[whole])
        at = np.ix_(np.flatnonzero(whole), np.array(fit.fitted))
        cut_low, cut_high = np.maximum(new_low, low[at]), np.minimum(new_high, high[at])
        with np.errstate(invalid="ignore"):
            gain = (cut_high > cut_low) & (cut_high - cut_low < LEAST_GAIN * (high[at] - low[at]))
        gain &= ~odd[whole][:, None]
        low[at], high[at] = np.where(gain, cut_low, low[at]), np.where(gain, cut_high, high[at])
        narrowed[at] = gain
        return low, high, narrowed, odd

    def _why_odd(self, fit: _Fit, known: tuple[Known, ...], values: Matrix) -> str:
        assert fit.conditioned is not None
        own = np.minimum(values[0, list(fit.used)], fit.most)
        overload = np.flatnonzero(~np.isfinite(own))
        number = fit.used[int(overload[0]) if len(overload) else fit.conditioned.oddest(own)]
        point, value = known[number].reading[1], float(values[0, number])
        shown = "overload" if math.isinf(value) else show(value, find_point(self.design, point).unit)
        return (
            f"The readings don't go together as a healthy unit's do ({point}, {shown}, least of all), "
            "so they say nothing about the others"
        )


def _without_spread(readings: Array) -> bool:
    """Whether a reading is the same in all units that have one."""
    finite = readings[np.isfinite(readings)]
    if not finite.size:
        return True
    low, high = float(finite.min()), float(finite.max())
    return high - low <= _NO_SPREAD * (1e-3 + max(abs(low), abs(high)))


def _column(readings: Array, floor: float) -> Column:
    """Make a column; units without a solution stay nan."""
    good = np.isfinite(readings)
    if good.all():
        return Column.of(readings, floor)
    made = Column.of(readings[good], floor)
    standard = np.full(len(readings), np.nan)
    standard[good] = made.standard
    return replace(made, standard=standard)
