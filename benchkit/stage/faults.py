"""The fault table: part x fault, how often it is met, why, and how it is put into the values of a circuit.

Rules
-----
* A fault changes *values* only. Everything that it needs is always in the netlist: parallel resistors beside each
  transistor (``PART.ce``, ``PART.be``, ``PART.bc``, ``PART.sink``; 1 Tohm in a healthy unit), a wiper contact, a second
  source beside the servo (``feed.lower.stuck``). So units with different faults are solved as one batch.
* A short is 0.05 ohm, never more than a twentieth of the part; an open is the part's value x 1e8; an open terminal of a
  transistor is 1 Gohm in series with it.
* ``swapped`` belongs to the two fixed resistors of the spreader. It is one fault and stands under ``spreader.upper``;
  ``spreader.lower: swapped`` is read as the same.
* Priors are rates per part and unit as met on a bench with prototypes, production and repairs together. They are round
  numbers from common practice, meant as ratios: assembly errors (a joint, a decade, a part the wrong way round) for
  small parts, shorts for power devices. Only suspects use them.
"""

from __future__ import annotations

from collections.abc import Callable, MutableMapping, Sequence
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit.netlist import TRANSISTOR_DEFAULTS
from benchkit.errors import EntryError
from benchkit.stage.design import Design
from benchkit.stage.points import Part, parts_of

Values = MutableMapping[str, NDArray[np.float64]]
Where = NDArray[np.bool_]

SHORT_OHM = 0.05
OPEN_FACTOR = 1e8
OPEN_OHM = 1e9
ABSENT_OHM = 1e12
LEAK_OHM = 1e3
STUCK_HIGH = 3.0
STUCK_LOW = 0.3
CONTACT_OHM = 1e-3
BESIDE_TRANSISTOR = ("ce", "be", "bc", "sink")
"""Suffixes of the resistors that lie beside every transistor."""


@dataclass(frozen=True)
class Fault:
    """A part and what is wrong with it, in the fixed words."""

    part: str
    fault: str

    def __str__(self) -> str:
        return f"{self.part}: {self.fault}"


HEALTHY = Fault("healthy", "none")


@dataclass(frozen=True)
class FaultRow:
    """One row of the table.

    Attributes
    ----------
    kind : str
        Kind of part ("resistor", "trimmer", "transistor", "source", "servo").
    fault : str
        The fixed word.
    prior : float
        Probability that a part of this kind has the fault, for the roles that `role_factors` doesn't name.
    reason : str
        How it comes about.
    apply : callable
        ``apply(values, part, design, where)`` changes ``values`` in place for the units in ``where``.
    role_factors : tuple of (role, factor)
        Where a role is more or less prone than others.
    roles : tuple of str
        Roles that can have it; empty for all.
    """

    kind: str
    fault: str
    prior: float
    reason: str
    apply: Callable[[Values, str, Design, Where], None]
    role_factors: tuple[tuple[str, float], ...] = ()
    roles: tuple[str, ...] = ()


def _scale(key_suffix: str, factor: float) -> Callable[[Values, str, Design, Where], None]:
    def apply(values: Values, part: str, design: Design, where: Where) -> None:
        key = part + key_suffix
        values[key] = np.where(where, values[key] * factor, values[key])

    return apply


def _short(values: Values, part: str, design: Design, where: Where) -> None:
    values[part] = np.where(where, np.minimum(SHORT_OHM, values[part] / 20.0), values[part])


def _swapped(values: Values, part: str, design: Design, where: Where) -> None:
    upper, lower = values["spreader.upper"], values["spreader.lower"]
    values["spreader.upper"], values["spreader.lower"] = np.where(where, lower, upper), np.where(where, upper, lower)


def _wiper_open(values: Values, part: str, design: Design, where: Where) -> None:
    trimmer = design.spreader.trimmer
    assert trimmer is not None
    if trimmer.arm == "between":
        key, value = f"{part}.wiper", np.full(where.shape, OPEN_OHM)
    elif trimmer.wiring == "series":
        key, value = part, values[part] * OPEN_FACTOR
    else:
        key, value = part, values[f"{part}.track"]
    values[key] = np.where(where, value, values[key])


def _parallel(suffix: str, ohm: float) -> Callable[[Values, str, Design, Where], None]:
    def apply(values: Values, part: str, design: Design, where: Where) -> None:
        key = f"{part}.{suffix}"
        values[key] = np.where(where, ohm, values[key])

    return apply


def _lift(*terminals: str) -> Callable[[Values, str, Design, Where], None]:
    def apply(values: Values, part: str, design: Design, where: Where) -> None:
        for terminal in terminals:
            key = f"{part}.{terminal}"
            values[key] = np.where(where, OPEN_OHM, values[key])

    return apply


_FORWARD_REVERSE = (
    ("BF", "BR"), ("NF", "NR"), ("VAF", "VAR"), ("IKF", "IKR"), ("ISE", "ISC"), ("NE", "NC"), ("RE", "RC"),
)  # fmt: skip


def _reversed(values: Values, part: str, design: Design, where: Where) -> None:
    for forward, reverse in _FORWARD_REVERSE:
        a, b = values[f"{part}.{forward}"], values[f"{part}.{reverse}"]
        values[f"{part}.{forward}"], values[f"{part}.{reverse}"] = np.where(where, b, a), np.where(where, a, b)


def _stuck_servo(share_of_most: float, share_of_feed: float) -> Callable[[Values, str, Design, Where], None]:
    """Switch the servo off; the second source beside it sends shares of its most and of the upper feed's current."""

    def apply(values: Values, part: str, design: Design, where: Where) -> None:
        feed_a = design.feed.upper.value.value
        if design.feed.upper.kind == "resistor":
            rails = design.rails
            feed_a = (
                rails.positive_v - design.rest_v(rails.positive_v, rails.negative_v)
            ) / design.feed.upper.value.value
        stuck_a = share_of_most * values[f"{part}.max_a"] + share_of_feed * feed_a
        values[f"{part}.stuck.amps"] = np.where(where, stuck_a, values[f"{part}.stuck.amps"])
        values[f"{part}.max_a"] = np.where(where, SERVO_OFF_A, values[f"{part}.max_a"])

    return apply


SERVO_OFF_A = 1e-12
"""What a servo that is switched off still sends: nothing that a meter sees, but no division by zero."""

_POWER = (("output", 5.0),)

FAULTS: tuple[FaultRow, ...] = (
    FaultRow("resistor", "open", 2e-3, "a joint that was not soldered; an emitter resistor that burned",
             _scale("", OPEN_FACTOR), (("emitter", 2.0),)),
    FaultRow("resistor", "short", 5e-4, "a solder bridge", _short),
    FaultRow("resistor", "ten times high", 1e-3, "a decade misread in the colour code", _scale("", 10.0)),
    FaultRow("resistor", "ten times low", 1e-3, "a decade misread in the colour code", _scale("", 0.1)),
    FaultRow("resistor", "swapped", 2e-3, "two resistors of one spreader in each other's place", _swapped,
             roles=("spreader.upper",)),
    FaultRow("trimmer", "wiper open", 4e-3, "dirt or wear under the wiper, or its joint", _wiper_open),
    FaultRow("transistor", "open", 1.5e-3, "the base's joint or lead", _lift("RB")),
    FaultRow("transistor", "collector open", 1e-3, "the collector's joint, or a missing screw", _lift("RC")),
    FaultRow("transistor", "emitter open", 1e-3, "the emitter's joint, or a bond wire that fused", _lift("RE")),
    FaultRow("transistor", "collector-emitter short", 4e-4, "second breakdown: how power devices die",
             _parallel("ce", SHORT_OHM), _POWER),
    FaultRow("transistor", "base-emitter short", 4e-4, "a solder bridge, or a junction that was overloaded",
             _parallel("be", SHORT_OHM)),
    FaultRow("transistor", "base-collector short", 4e-4, "a solder bridge, or a device that died hot",
             _parallel("bc", SHORT_OHM), (("output", 2.0),)),
    FaultRow("transistor", "leaky", 5e-4, "a device that was overheated; flux residue",
             _parallel("ce", LEAK_OHM), (("output", 2.0),)),
    FaultRow("transistor", "reversed", 1e-3, "collector and emitter swapped: another pinout", _reversed,
             (("output", 0.2),)),
    FaultRow("transistor", "wrong polarity", 1.5e-3, "npn and pnp of one family in each other's place",
             _scale(".polarity", -1.0)),
    FaultRow("transistor", "missing", 5e-4, "forgotten, or all three joints dry", _lift("RB", "RC", "RE")),
    FaultRow("transistor", "collector to heatsink", 3e-4, "a burr or a pierced washer under the tab",
             _parallel("sink", SHORT_OHM), _POWER),
    FaultRow("source", "dead", 2e-3, "its reference or its transistor is open", _scale(".amps", 0.0)),
    FaultRow("source", "stuck high", 1e-3, "its sense resistor is low, or its reference high",
             _scale(".amps", STUCK_HIGH)),
    FaultRow("source", "stuck low", 1e-3, "its sense resistor is high, or its reference low",
             _scale(".amps", STUCK_LOW)),
    FaultRow("servo", "dead", 2e-3, "an open joint in the front end: no current", _stuck_servo(0.0, 0.0)),
    FaultRow("servo", "stuck high", 2e-3, "feedback open or front end latched: all the current it has",
             _stuck_servo(1.0, 0.0)),
    FaultRow("servo", "stuck low", 1e-3, "front end starved: it takes a fraction of the feed",
             _stuck_servo(0.0, STUCK_LOW)),
)  # fmt: skip
"""Part kind x fault. Shared by suspects, tests and rehearsal."""


def faults_of(design: Design) -> tuple[Fault, ...]:
    """Every single fault that the parts of a design can have, in a fixed order."""
    return tuple(Fault(part.name, row.fault) for part in parts_of(design) for row in _rows(part))


def prior_of(design: Design, fault: Fault) -> float:
    """Prior probability of a fault in a unit of this design."""
    part, row = _look_up(design, fault)
    return row.prior * dict(row.role_factors).get(part.role, 1.0)


def row_of(design: Design, fault: Fault) -> FaultRow:
    """The table's row for a fault of a design."""
    return _look_up(design, fault)[1]


def parse_fault(text: str, design: Design | None = None) -> Fault:
    """Read "emitter.upper.1: open".

    Parameters
    ----------
    text : str
        Part, colon, fault; spaces and capitals don't matter.
    design : Design, optional
        When given, the part must be one of its parts and the fault one that it can have.

    Raises
    ------
    EntryError
        With the nearest names.
    """
    part, colon, fault = (piece.strip() for piece in text.partition(":"))
    part, fault = part.lower(), " ".join(fault.lower().split())
    if not colon or not part or not fault:
        raise EntryError(
            f'"{text}" is no planted fault', 'a part and a fault with a colon between, such as "emitter.upper.1: open"'
        )
    known = tuple(dict.fromkeys(row.fault for row in FAULTS))
    if fault not in known:
        raise EntryError(f'"{fault}" is no fault', "one of " + ", ".join(known))
    if fault == "swapped" and part == "spreader.lower":
        part = "spreader.upper"
    if design is not None:
        _look_up(design, Fault(part, fault))
    return Fault(part, fault)


def apply(values: Values, fault: Fault | Sequence[Fault | None] | None, design: Design) -> None:
    """Put faults into the values of a circuit, in place.

    Parameters
    ----------
    values : mapping of str to arrays of shape (units,)
        Complete values of the stage's netlist, trimmer set.
    fault : Fault, None, or a sequence of one per unit
        None and `HEALTHY` change nothing.

    Raises
    ------
    EntryError
        For a part or a fault that the design doesn't have.
    """
    if fault is None or fault == HEALTHY:
        return
    units = max(array.size for array in values.values())
    if isinstance(fault, Fault):
        _look_up(design, fault)[1].apply(values, fault.part, design, np.ones(units, dtype=np.bool_))
        return
    if len(fault) != units:
        raise ValueError(f"{len(fault)} faults for {units} units")
    number = {one: k for k, one in enumerate(dict.fromkeys(fault))}
    whose = np.array([number[one] for one in fault], dtype=np.intp)
    for one, k in number.items():
        if one is not None and one != HEALTHY:
            _look_up(design, one)[1].apply(values, one.part, design, whose == k)


def healthy_values(part: Part) -> dict[str, float]:
    """Values of the elements beside a healthy part that are there for its faults only."""
    if part.kind == "transistor":
        return {f"{part.name}.{suffix}": ABSENT_OHM for suffix in BESIDE_TRANSISTOR}
    if part.kind == "trimmer":
        return {f"{part.name}.wiper": CONTACT_OHM, f"{part.name}.tie": CONTACT_OHM}
    if part.kind == "servo":
        return {f"{part.name}.stuck.amps": 0.0}
    return {}


def transistor_defaults() -> dict[str, float]:
    """Published defaults of the Gummel-Poon parameters, without polarity and temperature."""
    return {key: value for key, value in TRANSISTOR_DEFAULTS.items() if key not in ("polarity", "kelvin")}


def _rows(part: Part) -> tuple[FaultRow, ...]:
    return tuple(
        row
        for row in FAULTS
        if row.kind == part.kind and (not row.roles or part.role in row.roles or part.name in row.roles)
    )


@lru_cache(maxsize=4096)
def _look_up(design: Design, fault: Fault) -> tuple[Part, FaultRow]:
    parts = {part.name: part for part in parts_of(design)}
    part = parts.get(fault.part)
    if part is None:
        import difflib

        near = difflib.get_close_matches(fault.part, parts, 3)
        hint = f"{' or '.join(near)} perhaps; " if near else ""
        raise EntryError(f'"{fault.part}" is no part of {design.name}', f"{hint}one of {', '.join(parts)}")
    rows = {row.fault: row for row in _rows(part)}
    if fault.fault not in rows:
        raise EntryError(f'"{fault.fault}" is no fault of {fault.part}', "one of " + ", ".join(rows))
    return part, rows[fault.fault]
