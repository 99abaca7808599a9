"""Readings of drawn units with planted faults, made by the forward model, for the tests of what works backwards."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

import numpy as np

from benchkit.stage.conditions import Condition, TrimmerPosition, Unpowered
from benchkit.stage.design import Design
from benchkit.stage.draws import Array, draw, seeds
from benchkit.stage.faults import HEALTHY, Fault, parse_fault
from benchkit.stage.latent import Coordinates
from benchkit.stage.observations import Observation
from benchkit.stage.operate import solve_units
from benchkit.stage.readouts import Linear
from benchkit.stage.suspicion import Suspicion
from benchkit.stage.unpowered import solve_unpowered

POINTS = (
    "rail+", "rail-", "rail+.current", "rail-.current", "output", "spread", "spread.upper", "spread.lower",
    "driver.resistor", "emitter.upper.1", "emitter.lower.1",
)  # fmt: skip
SHARE, FLOOR = 3e-4, 20e-6
"""The readings' uncertainty, as a share and at least."""


def fault_of(text: str, design: Design) -> Fault:
    return HEALTHY if text == "healthy" else parse_fault(text, design)


def observed(condition: Condition | Unpowered, point: str, value: float, u: float | None = None) -> Observation:
    own = SHARE * abs(value) + FLOOR if u is None else u
    u = own if np.isfinite(own) else 0.0
    return Observation(conditions=(condition,), point=point, value=float(value), standard_uncertainty=u)


def powered(
    design: Design, condition: Condition, faults: Sequence[Fault], points: Iterable[str], seed: int = 1
) -> list[list[Observation]]:
    """What a meter with noise reads of one drawn unit a fault."""
    units = len(faults)
    solved = solve_units(design, draw(design, units, seeds("unit", seed)), condition, list(faults), loading="each")
    assert solved.converged.all()
    noise = seeds("noise", seed).standard_normal((len(solved.points), units))
    result: list[list[Observation]] = [[] for _ in faults]
    for row, point in enumerate(solved.points):
        if point not in points:
            continue
        for unit in range(units):
            true = float(solved.points[point][unit])
            value = true + noise[row, unit] * (SHARE * abs(true) + FLOOR)
            result[unit].append(observed(condition, point, value))
    return result


def unpowered(
    design: Design, trimmer: TrimmerPosition, faults: Sequence[Fault], points: Iterable[str], seed: int = 1
) -> list[list[Observation]]:
    """The same units, unpowered; without noise."""
    parameters = draw(design, len(faults), seeds("unit", seed))
    result: list[list[Observation]] = [[] for _ in faults]
    for point in points:
        condition = Unpowered(point=point, trimmer=trimmer)
        found = solve_unpowered(design, parameters, condition, list(faults))
        assert found.converged.all()
        for unit, value in enumerate(found.values):
            result[unit].append(observed(condition, point, float(value)))
    return result


def first_group(said: Suspicion) -> set[Fault]:
    """The first suspect and what is named together with it."""
    return {said.suspects[0].fault, *said.suspects[0].alike}


def probability_of(said: Suspicion, fault: Fault) -> float:
    return next(one.probability for one in said.suspects if one.fault == fault)


def drawn_z(coordinates: Coordinates, units: int, seed: int = 3) -> Array:
    """Units drawn in the space of coordinates, shape (coordinates, units)."""
    return np.asarray(np.random.default_rng(seed).standard_normal((len(coordinates), units)))


def check_slopes(found: Linear, up: Linear, down: Linear, number: int, step: float, tolerance: float) -> None:
    """Compare the slope by one coordinate, to a share of the largest slope that the reading has by any."""
    assert up.good.all()
    assert down.good.all()
    largest = np.abs(found.slope).max(axis=2)
    off = np.abs((up.f - down.f) / (2.0 * step) - found.slope[:, :, number])
    worst = np.unravel_index((off / (tolerance * largest + 1e-6)).argmax(), off.shape)
    assert (off <= tolerance * largest + 1e-6).all(), (number, worst, found.slope[worst][number], off[worst])
