"""Gains of the loop from temperature to power and back.

With K = dP/dT, how each transistor's power moves with each junction's temperature, the whole circuit answering:

* M = rest @ K says how the temperatures that the powers lead to move with the temperatures; `rest` of
  `benchkit.stage.heat`. The loop gain is the largest real part of M's eigenvalues; from one on there is no stable rest.
  For one device on one resistance it is theta*dP/dT of the published criterion (`one_device_gain`). It also sees one
  device of a half taking over the current of the others.
* The sum form: theta_sink * d(power on the sink)/d(rise of the sink), junctions, drivers and spreader following the
  sink: what the junctions drift, less what the spreader takes back. It reaches one exactly where M's gain does, as long
  as the junctions alone are stable.
* Lags: a stage whose spreader lags can be unstable although M's gain is below one. The largest growth rate among the
  nodes says so.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit.stacks import each_its_own
from benchkit.stage.design import BOLTZMANN_J_PER_K, CHARGE_C, ZERO_CELSIUS_K
from benchkit.stage.draws import Array
from benchkit.stage.heat import HeatNodes

Matrix = NDArray[np.float64]


def one_device_gain(
    theta_k_per_w: float, volts: float, quiescent_a: float, emitter_ohm: float, drift_v_per_k: float, celsius: float
) -> float:
    """Loop gain theta*dP/dT of one device with fixed bias.

    dI/dT = drift/(VT/I + R_E), dP/dT = V*dI/dT; the criterion of thermal stability wants theta*dP/dT < 1.

    Parameters
    ----------
    theta_k_per_w : float
        From the junction to the air (K/W).
    volts : float
        Across the device (V).
    quiescent_a, emitter_ohm : float
        Its current (A) and emitter resistor (ohm).
    drift_v_per_k : float
        By how much its VBE falls (V/K), a positive number.
    celsius : float
        Its temperature, for VT.
    """
    thermal_v = BOLTZMANN_J_PER_K * (celsius + ZERO_CELSIUS_K) / CHARGE_C
    return theta_k_per_w * volts * drift_v_per_k / (thermal_v / quiescent_a + emitter_ohm)


def loop_gain(nodes: HeatNodes, powers: Matrix, *, tracking: bool = True) -> Array:
    """Largest real part of the eigenvalues of M = rest @ dP/dT, shape (units,).

    Parameters
    ----------
    powers : array of shape (units, parts, parts)
        dP/dT (W/K).
    tracking : bool
        False: with the spreader's temperature held, as if it saw nothing of the sink.
    """
    loop = nodes.rest[:-1] @ powers
    if not tracking:
        loop[:, nodes.parts.index("spreader.transistor"), :] = 0.0
    return _largest_real(loop)


def junction_gain(nodes: HeatNodes, powers: Matrix) -> Array:
    """Loop gain with the heat sink held where it is, shape (units,)."""
    return _largest_real(nodes.own()[:, None] * powers)


def sum_gain(nodes: HeatNodes, powers: Matrix) -> Array:
    """theta_sink * d(power on the sink)/d(rise of the sink), everything else following at rest; shape (units,)."""
    result = np.full(len(powers), np.nan)
    usable = np.isfinite(powers).all(axis=(1, 2))
    inner = np.eye(len(nodes.parts)) - nodes.own()[:, None] * powers[usable]
    seen = np.broadcast_to(nodes.seen()[:, None], (int(usable.sum()), len(nodes.parts), 1))
    follow = each_its_own(np.linalg.solve, inner, seen)
    per_kelvin = (powers[usable] @ follow)[:, :, 0]
    result[usable] = per_kelvin @ nodes.per_watt[-1]
    return result


def rates(nodes: HeatNodes, powers: Matrix) -> Matrix:
    """Matrix J of the nodes' linear equations dx/dt = J (x - rest), shape (units, nodes, nodes), 1/s."""
    goes = nodes.per_watt @ powers @ nodes.shows[:-1] + nodes.coupling - np.eye(len(nodes.names))
    return np.asarray(goes / nodes.lag_s[:, None])


def growth_per_s(nodes: HeatNodes, powers: Matrix) -> Array:
    """Largest growth rate (1/s) of a deviation from the state of rest; below zero where that is stable."""
    return _largest_real(rates(nodes, powers))


def _largest_real(matrix: Matrix) -> Array:
    result = np.full(len(matrix), np.nan)
    usable = np.isfinite(matrix).all(axis=(1, 2))
    result[usable] = np.linalg.eigvals(matrix[usable]).real.max(axis=1)
    return result
