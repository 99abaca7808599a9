"""Heat: the nodes that store it, what moves them, and junction temperatures in balance with given powers.

The one place where the equations stand
---------------------------------------
Each node x (K) heads for a goal with a time constant of its own, dx/dt = (goal - x)/lag:

* heat sink: the rise above the ambient temperature; goal = theta_sink * (sum of the output devices' P), lag =
  theta_sink * capacity;
* output junction: the rise above the sink; goal = theta_junction * P;
* driver and pre-driver: its own heating; goal = theta_own * P. It sees its share of the sink's rise at once;
* spreader: its own heating and its share of the sink's rise, goal = theta_own * P + tracking * (rise of the sink), both
  with the design's lag; without one, it sees the sink at once and only its own heating lags.

So goal = per_watt @ P + coupling @ x, and the temperatures above the ambient one are shows @ x. Warm states, the loop
from temperature to power and back, warm-up curves and the rehearsal's unit all use these matrices.

The heat sink carries the output devices. Emitter resistors, feeds and drivers are taken to shed their heat to the air.
The time constants of junctions and drivers (`JUNCTION_LAG_S`, `DRIVER_LAG_S`, `SPREADER_LAG_S`) are ours, of the size
that such devices have; the design format states none. They shape the way to the state of rest, not that state.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache
from typing import Final

import numpy as np
from numpy.typing import NDArray

from benchkit.stage.design import Design
from benchkit.stage.draws import Array
from benchkit.stage.points import transistors_of

JUNCTION_LAG_S: Final = 1.0
DRIVER_LAG_S: Final = 25.0
SPREADER_LAG_S: Final = 15.0
HEATSINK: Final = "heatsink"

Matrix = NDArray[np.float64]


@dataclass(frozen=True)
class Heat:
    """Temperatures in balance.

    Attributes
    ----------
    temperatures_c : dict of str to array of shape (units,)
        Junctions by part name, and ``heatsink``.
    """

    temperatures_c: dict[str, Array]


@dataclass(frozen=True, kw_only=True, eq=False)
class HeatNodes:
    """A design's nodes and the matrices that move them; see the top of this module.

    Attributes
    ----------
    parts : tuple of str
        The transistors: columns of `per_watt`.
    names : tuple of str
        Where temperatures are known: the transistors, then ``heatsink``; rows of `shows`.  The nodes have the same
        names and the same order.
    on_sink : array of bool of shape (parts,)
        Which transistors heat the sink.
    per_watt : array of shape (nodes, parts)
        K/W.
    coupling : array of shape (nodes, nodes)
        Share of other nodes' rise that a node heads for.
    lag_s : array of shape (nodes,)
        Time constants (s), all above zero.
    shows : array of shape (names, nodes)
        Temperatures above the ambient one from nodes.
    rest : array of shape (names, parts)
        Temperatures above the ambient one at rest, by power (K/W): shows @ (1 - coupling)^-1 @ per_watt.
    """

    parts: tuple[str, ...]
    names: tuple[str, ...]
    on_sink: NDArray[np.bool_]
    per_watt: Matrix
    coupling: Matrix
    lag_s: Matrix
    shows: Matrix
    rest: Matrix

    def goals(self, x: Array, powers_w: Array) -> Array:
        """Where nodes x (K) are heading under powers (W), of shapes (nodes, units) and (parts, units)."""
        return np.asarray(self.per_watt @ powers_w + self.coupling @ x)

    def seen(self) -> Matrix:
        """Share of the sink's rise that each transistor sees at rest, shape (parts,)."""
        return np.asarray((self.shows @ np.linalg.inv(np.eye(len(self.names)) - self.coupling))[:-1, -1])

    def own(self) -> Matrix:
        """Resistance (K/W) from each junction to what it stands on or to the air, shape (parts,)."""
        return np.asarray(np.diagonal(self.per_watt)[: len(self.parts)])


@lru_cache(maxsize=64)
def heat_nodes(design: Design) -> HeatNodes:
    """Build the nodes of a design; cached."""
    thermal = design.thermal
    transistors = transistors_of(design)
    names = (*(part.name for part in transistors), HEATSINK)
    count = len(transistors)
    sink = count
    per_watt, coupling = np.zeros((count + 1, count)), np.zeros((count + 1, count + 1))
    shows, lag_s = np.eye(count + 1), np.empty(count + 1)
    # A sink without resistance never rises, whatever its time constant.
    lag_s[sink] = thermal.heatsink_k_per_w * thermal.heatsink_capacity_j_per_k or 1.0
    for row, part in enumerate(transistors):
        if part.role == "output":
            per_watt[row, row], lag_s[row] = thermal.junction_to_heatsink_k_per_w, JUNCTION_LAG_S
            per_watt[sink, row] = thermal.heatsink_k_per_w
            shows[row, sink] = 1.0
        elif part.role == "spreader":
            per_watt[row, row], lag_s[row] = thermal.spreader_to_ambient_k_per_w, SPREADER_LAG_S
            if thermal.spreader_lag_s > 0.0:
                coupling[row, sink], lag_s[row] = thermal.spreader_tracking, thermal.spreader_lag_s
            else:
                shows[row, sink] = thermal.spreader_tracking
        else:
            per_watt[row, row], lag_s[row] = thermal.driver_to_ambient_k_per_w, DRIVER_LAG_S
            shows[row, sink] = thermal.driver_tracking or 0.0
    rest = shows @ np.linalg.inv(np.eye(count + 1) - coupling) @ per_watt
    on_sink = np.array([part.role == "output" for part in transistors])
    return HeatNodes(
        parts=names[:-1], names=names, on_sink=on_sink, per_watt=per_watt, coupling=coupling, lag_s=lag_s,
        shows=shows, rest=rest,
    )  # fmt: skip


def heat(design: Design, powers_w: Mapping[str, Array], ambient_c: Array | float) -> Heat:
    """Temperatures that given powers lead to when everything has come to rest.

    Parameters
    ----------
    design : Design
    powers_w : mapping
        What heats each transistor (W), arrays of shape (units,).
    ambient_c : float or array of shape (units,)

    Returns
    -------
    Heat
        sink = ambient + theta_sink * (sum of the output devices' P); output junction = sink + theta_junction * P;
        driver and spreader = ambient + tracking * (rise of the sink) + theta_own * P.
    """
    nodes = heat_nodes(design)
    with np.errstate(over="ignore", invalid="ignore"):  # a unit without a solution has powers beyond all numbers
        rises_k = nodes.rest @ np.array([powers_w[part] for part in nodes.parts])
    return Heat({name: np.asarray(ambient_c + rise) for name, rise in zip(nodes.names, rises_k, strict=True)})
