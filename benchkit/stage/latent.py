"""A unit as a point in standard normal space: what is not known of it, one coordinate each.

A hypothesis about a unit ("healthy", "emitter.upper.1 open") leaves the values of its parts open within their
tolerances. Every value that can vary is written as a function of one coordinate z with a standard normal prior, so that
|z|^2/2 is what a value costs: a marked tolerance is value*(1 + p*(2*Phi(z) - 1)), uniform over +-p; a device's spread
is log-normal. Beside the parts there is what the bench leaves open: how far the rails stand off their setting, how far
the room is from the stated temperature, where between two conditions a reading was taken, where an unknown trimmer
stands.
"""

from __future__ import annotations

import zlib
from statistics import NormalDist

import numpy as np

from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design
from benchkit.stage.draws import NORMAL_95, Array, Parameters, spreads

AMBIENT = "ambient"
RAIL_SHARE = 2e-3
"""Standard deviation of a rail from its setting, as a share: a bench supply's setting (common practice)."""
STATED_AMBIENT_K = 0.5
UNSTATED_AMBIENT_K = 2.0
"""Standard deviation of the room's temperature from the stated one, and from the design's where nobody stated it."""


def rest_moves_v(design: Design, condition: Condition, units: int, seed: int) -> Array:
    """How far the output rests from where it is said to, because the rails stand off their setting.

    Nothing else of a stage follows its rails so closely that a supply's own error shows.

    Parameters
    ----------
    design : Design
        Of an output that rests at a share of its rails.
    condition : Condition
    units, seed : int

    Returns
    -------
    array of shape (units,)
        Volts; normal, `RAIL_SHARE` of each rail by its share in the rest.
    """
    share = design.output.rest.share or 0.0
    rng = np.random.default_rng([seed, zlib.crc32(b"rest")])
    positive, negative = RAIL_SHARE * rng.standard_normal((2, units))
    return np.asarray(share * condition.positive_v * positive + (1.0 - share) * condition.negative_v * negative)


_GRID = np.linspace(-6.0, 6.0, 2401)
_SHARE = np.array([NormalDist().cdf(z) for z in _GRID])


def share_below(z: Array) -> Array:
    """Standard normal distribution function, linear between points 0.005 apart (within 1e-6)."""
    return np.asarray(np.interp(z, _GRID, _SHARE))


class Coordinates:
    """The coordinates of a design's units.

    Parameters
    ----------
    design : Design
    extra : sequence of str
        Names of coordinates beside parts and room: rails, and places and travels, which `place` reads.

    Attributes
    ----------
    names : tuple of str
        One a coordinate: keys of the parameter set, then `AMBIENT`, then the extra ones.
    """

    def __init__(self, design: Design, extra: tuple[str, ...] = ()) -> None:
        entries = tuple(spreads(design))
        self._fixed = {key: np.asarray(value, dtype=np.float64) for key, value, _ in entries}
        self._varying = tuple((key, value, *spread) for key, value, spread in entries if spread[0] != "exact")
        self.names = (*(entry[0] for entry in self._varying), AMBIENT, *extra)
        self.index = {name: number for number, name in enumerate(self.names)}

    def __len__(self) -> int:
        return len(self.names)

    def parameters(self, z: Array) -> Parameters:
        """Make the parameter set of units at z, of shape (coordinates, units)."""
        made = dict(self._fixed)
        for row, (key, value, kind, size) in zip(z, self._varying, strict=False):
            if kind == "log-normal":
                made[key] = value * np.exp(np.log1p(size) / NORMAL_95 * row)
            else:
                off = size * (2.0 * share_below(row) - 1.0)
                made[key] = value * (1.0 + off) if kind == "uniform" else value + off
        return made

    def row(self, z: Array, name: str) -> Array:
        """One coordinate of every unit, shape (units,)."""
        return np.asarray(z[self.index[name]])

    def place_and_slope(self, z: Array, name: str) -> tuple[Array, Array]:
        """A coordinate as a share, uniform from 0 to 1, and its derivative."""
        row = z[self.index[name]]
        return share_below(row), np.exp(-0.5 * row**2) / np.sqrt(2.0 * np.pi)

    def place(self, z: Array, name: str) -> Array:
        """A coordinate as a share, uniform from 0 to 1."""
        return share_below(z[self.index[name]])


def tiled(z: Array, step: float, unmoved: int = 0) -> Array:
    """Units with each coordinate moved by ``step`` in turn, and last unmoved ones.

    Returns
    -------
    array of shape (coordinates, directions * units)
        With coordinates + unmoved + 1 directions one after the other: coordinate 0 of all units, coordinate 1 ...
    """
    count, units = z.shape
    result = np.tile(z, count + unmoved + 1)
    for number in range(count):
        result[number, number * units : (number + 1) * units] += step
    return result
