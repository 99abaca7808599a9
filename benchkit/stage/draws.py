"""Units: the nominal one, and units drawn from the tolerances of a design.

A parameter set is a mapping from keys to arrays of shape ``(units,)``, or of shape ``()`` for what is the same in every
unit. The keys are those of the netlist's values (``emitter.upper.1`` in ohm, ``output.upper.1.IS``,
``feed.upper.amps``) and a few of the stage's own:

* ``spreader.trimmer.track`` (ohm, end to end), ``spreader.trimmer.position`` (0..1 from the least-bias end: where the
  trimmer stands when its position is unknown);
* ``output.offset`` (V, how far a servo leaves the output from rest);
* ``feed.lower.idle`` (0..1, what a servo that doesn't regulate sends, as a share of its most).

Distributions: a marked tolerance is uniform (JCGM 100:2008, 4.3.7); a device's spread of s is log-normal, 95 % of
devices between value/(1 + s) and value*(1 + s).

The order of the draws is fixed: parts in the order of `parts_of`, then what else the design marks. A unit's own draws
never come from the stream that limits are made from: `seeds` gives each use a child of its own.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from benchkit.errors import EntryError
from benchkit.stage.design import Design
from benchkit.stage.faults import healthy_values, transistor_defaults
from benchkit.stage.points import Part, parts_of

Array = NDArray[np.float64]
Parameters = dict[str, Array]
SeedUse = Literal["limits", "unit", "noise", "stand-in"]

SEED_USES: tuple[SeedUse, ...] = ("limits", "unit", "noise", "stand-in")
"""Children of a seed, in their fixed order: a new use goes to the end."""
BOND_OHM = 1e-3
"""From the heat sink to 0 V."""
NORMAL_95 = 1.959963984540054
"""Half-width of the central 95 % of a standard normal distribution."""


def seeds(use: SeedUse, seed: int) -> np.random.Generator:
    """Make the generator for one use of a seed.

    Parameters
    ----------
    use : "limits", "unit", "noise" or "stand-in"
    seed : int
        Zero or more.

    Returns
    -------
    numpy.random.Generator
        Independent of the other uses' generators.

    Raises
    ------
    EntryError
        For a negative seed.
    """
    if seed < 0:
        raise EntryError(f"seed: {seed} came", "a whole number, zero or more")
    children = np.random.SeedSequence(seed).spawn(len(SEED_USES))
    return np.random.default_rng(children[SEED_USES.index(use)])


def nominal(design: Design) -> Parameters:
    """Parameters of the nominal unit: every part at its marked value, no offset, the trimmer in the middle.

    Returns
    -------
    dict of str to arrays of shape ()
    """
    return {key: np.asarray(value, dtype=np.float64) for key, value, _ in spreads(design)}


def draw(design: Design, units: int, rng: np.random.Generator) -> Parameters:
    """Draw units from the tolerances of a design.

    Parameters
    ----------
    design : Design
    units : int
    rng : numpy.random.Generator
        From `seeds`.

    Returns
    -------
    dict of str to arrays of shape (units,)
        Shape () for what has no tolerance.
    """
    drawn: Parameters = {}
    for key, value, spread in spreads(design):
        kind, size = spread
        if kind == "uniform":
            drawn[key] = value * (1.0 + size * rng.uniform(-1.0, 1.0, units))
        elif kind == "log-normal":
            drawn[key] = value * np.exp(np.log1p(size) / NORMAL_95 * rng.standard_normal(units))
        elif kind == "either way":
            drawn[key] = value + size * rng.uniform(-1.0, 1.0, units)
        else:
            drawn[key] = np.asarray(value, dtype=np.float64)
    return drawn


def take(parameters: Parameters, which: NDArray[np.bool_] | NDArray[np.intp]) -> Parameters:
    """Pick units out of a parameter set."""
    return {key: value if value.ndim == 0 else value[which] for key, value in parameters.items()}


Entry = tuple[str, float, tuple[str, float]]
_EXACT = ("exact", 0.0)


def spreads(design: Design) -> Iterator[Entry]:
    """Every parameter with its marked value and how it varies, in the fixed order of the draws.

    Yields
    ------
    key, value, (kind, size)
        ``kind`` is "exact", "uniform" (value*(1 + size*u), u from -1 to 1), "log-normal" (95 % between value/(1 + size)
        and value*(1 + size)) or "either way" (value + size*u).
    """
    for part in parts_of(design):
        yield from _part(design, part)
    rails = design.rails
    for sign in ("positive",) if design.single_supply else ("positive", "negative"):
        if rails.bleed is not None:
            yield f"bleed.{sign}", rails.bleed.value, ("uniform", rails.bleed.fraction)
        other = getattr(rails, f"other_{sign}")
        if other is not None:
            yield f"other.{sign}.amps", other.value, ("uniform", other.fraction)
    yield "heatsink.bond", BOND_OHM, _EXACT
    yield "output.offset", 0.0, ("either way", design.output.offset_v)


def _part(design: Design, part: Part) -> Iterator[Entry]:
    tolerance = ("uniform", part.fraction) if part.fraction else _EXACT
    if part.kind == "resistor":
        yield part.name, part.nominal, tolerance
    elif part.kind == "trimmer":
        yield f"{part.name}.track", part.nominal, tolerance
        yield f"{part.name}.position", 0.5, ("either way", 0.5)
    elif part.kind == "source":
        yield f"{part.name}.amps", part.nominal, tolerance
    elif part.kind == "servo":
        yield f"{part.name}.max_a", design.servo_max_a, _EXACT
        yield f"{part.name}.idle", 0.5, ("either way", 0.5)
    else:
        device = design.device[part.device]
        yield f"{part.name}.polarity", 1.0 if device.polarity == "npn" else -1.0, _EXACT
        for key, default in transistor_defaults().items():
            spread = device.spread.get(key, 0.0)
            value = float(device.parameters.get(key, default))
            yield f"{part.name}.{key}", value, ("log-normal", spread) if spread else _EXACT
    for key, value in healthy_values(part).items():
        yield key, value, _EXACT
