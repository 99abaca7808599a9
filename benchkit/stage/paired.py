"""Ensembles of one design under many conditions, the same units in all of them.

* Unit 17 is the same unit everywhere, with the same parts, in the same room, on the same supply. So a resistor measured
  cold bears on a drop measured under power. A trimmer in an unknown position isn't touched in between.
* The bench isn't what the condition says: room and rails of each unit are off by what `benchkit.stage.latent` supposes.
  The design's limits come from the condition as it is stated, as in `benchkit.stage.expected`.
* A reading taken between several conditions has a place between them. Where these differ in the trim only, all
  readings under them have the same place, anywhere. Between cold and warm the ends count most (arcsine law: a stage at
  least bias hardly warms, and one that has run for long is warm), and readings don't share one place: taking them lasts
  minutes, and meanwhile the stage warms, cools or stays. Each unit goes from one place towards another, and each
  reading is taken somewhere on that way. With one place for all, a drift by a tenth from the first reading to the last
  put one in six readings of healthy units outside their limits (demonstration design Tern 40 at 0.6 of travel).
"""

from __future__ import annotations

import zlib
from dataclasses import replace

import numpy as np

from benchkit.errors import EntryError, ModelError
from benchkit.stage.conditions import Condition, Unpowered
from benchkit.stage.design import Design
from benchkit.stage.draws import Array, Parameters, draw, seeds
from benchkit.stage.expected import ensemble, expected_unpowered
from benchkit.stage.latent import RAIL_SHARE, STATED_AMBIENT_K, UNSTATED_AMBIENT_K
from benchkit.stage.observations import Conditions
from benchkit.stage.operate import solve_units
from benchkit.stage.points import find_point
from benchkit.stage.quantiles import interval
from benchkit.stage.unpowered import solve_unpowered

Reading = tuple[Conditions, str]
"""A point, and what it is read under."""
_Ends = tuple[float, float]


class PairedUnits:
    """The units; conditions are solved when they are first asked for, and kept.

    Parameters
    ----------
    design : Design
    units : int
    seed : int
        Of the draws; with the same seed the design's limits are those of `benchkit.stage.expected`.
    """

    def __init__(self, design: Design, units: int, seed: int) -> None:
        self.design, self.seed = design, seed
        self._count = units
        self._parameters: Parameters = draw(design, units, seeds("limits", seed))
        room, positive, negative = (self.rng(name).standard_normal(units) for name in ("room", "rail+", "rail-"))
        self._room, self._positive, self._negative = room, 1.0 + RAIL_SHARE * positive, 1.0 + RAIL_SHARE * negative
        self._powered: dict[Condition, dict[str, tuple[Array, _Ends]]] = {}
        self._unpowered: dict[Unpowered, Array] = {}
        self._unpowered_limits: dict[Unpowered, _Ends] = {}
        self._refused: dict[Condition, ModelError] = {}

    def __len__(self) -> int:
        return self._count

    def true_readings(self, reading: Reading) -> Array:
        """Return what the ensemble's units really read, shape (units,); nan where a unit has no solution."""
        conditions, point = reading
        ends = [self._readings(condition, point) for condition in conditions]
        if len(ends) == 1:
            return ends[0]
        along = self._place(reading) * (len(ends) - 1)
        first = np.minimum(along.astype(np.intp), len(ends) - 2)
        share = along - first
        stack, unit = np.stack(ends), np.arange(self._count)
        with np.errstate(invalid="ignore"):
            return np.asarray((1.0 - share) * stack[first, unit] + share * stack[first + 1, unit])

    def _place(self, reading: Reading) -> Array:
        """Where between its conditions a reading is taken, from 0 at the first to 1 at the last."""
        conditions, _ = reading
        start, aim = self.rng(f"place {conditions!r}").uniform(size=(2, self._count))
        if len({condition.when for condition in conditions if isinstance(condition, Condition)}) < 2:
            return np.asarray(start)
        start, aim = (np.sin(np.pi / 2.0 * place) ** 2 for place in (start, aim))
        gone = self.rng(f"drift {reading!r}").uniform(size=self._count)
        return np.asarray(start + gone * (aim - start))

    def has(self, reading: Reading) -> bool:
        """Whether there is anything for a reading: a modelled point under conditions that have solutions."""
        conditions, point = reading
        try:
            for condition in conditions:
                self._readings(condition, point)
        except (EntryError, ModelError):
            return False
        return True

    def design_limits(self, reading: Reading) -> tuple[float, float]:
        """Limits of a reading for every unit of the design; the widest of those under its conditions.

        Raises
        ------
        EntryError
            When the design has no such point, or it isn't read under the conditions.
        ModelError
            When too few units have a solution.
        """
        conditions, point = reading
        ends = [self._limits(condition, point) for condition in conditions]
        return min(low for low, _ in ends), max(high for _, high in ends)

    def rng(self, name: str) -> np.random.Generator:
        """Make the generator of one use; another name is another stream."""
        return np.random.default_rng([self.seed, zlib.crc32(name.encode())])

    def _readings(self, condition: Condition | Unpowered, point: str) -> Array:
        """True readings of the units on their benches."""
        if isinstance(condition, Condition):
            return self._solved(condition, point)[0]
        own = replace(condition, point=find_point(self.design, point).name)
        if own not in self._unpowered:
            self._unpowered[own] = self._solve_unpowered(own)
        return self._unpowered[own]

    def _limits(self, condition: Condition | Unpowered, point: str) -> _Ends:
        if isinstance(condition, Condition):
            return self._solved(condition, point)[1]
        own = replace(condition, point=find_point(self.design, point).name)
        if own not in self._unpowered_limits:
            trimmer, ambient_c = own.trimmer, own.ambient_c
            found = expected_unpowered(self.design, own.point, trimmer, self._count, self.seed, ambient_c).points[0]
            self._unpowered_limits[own] = (found.low, found.high)
        return self._unpowered_limits[own]

    def _solved(self, condition: Condition, point: str) -> tuple[Array, _Ends]:
        """True readings of the units, and the design's limits, under a powered condition."""
        name = find_point(self.design, point).name
        if condition in self._refused:
            raise self._refused[condition]
        if condition not in self._powered:
            try:
                self._powered[condition] = self._solve_powered(condition)
            except ModelError as error:
                self._refused[condition] = error
                raise
        if name not in self._powered[condition]:
            raise EntryError(f'"{point}" came', "a point that is read under its condition")
        return self._powered[condition][name]

    def _room_c(self, condition: Condition | Unpowered) -> Array:
        if condition.ambient_c is not None:
            return np.asarray(condition.ambient_c + STATED_AMBIENT_K * self._room)
        return np.asarray(self.design.thermal.ambient_c + UNSTATED_AMBIENT_K * self._room)

    def _solve_powered(self, condition: Condition) -> dict[str, tuple[Array, _Ends]]:
        stated = ensemble(self.design, condition, self._count, self.seed)
        solved = solve_units(
            self.design, self._parameters, condition, room_c=self._room_c(condition), start=stated.drawn,
            rails_v=(condition.positive_v * self._positive, condition.negative_v * self._negative),
        )  # fmt: skip
        good = solved.converged & solved.in_reach
        result = {}
        for name, readings in solved.points.items():
            limits = interval(stated.drawn.points[name][stated.good])
            result[name] = (np.where(good, readings, np.nan), limits)
        return result

    def _solve_unpowered(self, condition: Unpowered) -> Array:
        if condition.point.startswith("ohm.heatsink."):
            return np.full(self._count, np.inf)
        solved = solve_unpowered(self.design, self._parameters, condition, room_c=self._room_c(condition))
        return np.broadcast_to(np.where(solved.converged, solved.values, np.nan), self._count)
