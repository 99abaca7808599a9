"""The circuit's equations for a batch of units: every current and its derivatives.

Strategy
--------
`Batch` is a `Plan` with the values of some units; every array ends in the unit axis. `Batch.evaluate` returns the
currents of all branches *linearised at the limited arguments*, so that one Newton step from them is exact where nothing
was limited; and their slopes. `Plan.sum_currents` and `Batch.matrix` gather them.

Rules
-----
* Supplies, sources and ohmmeters are one law: I = amps tanh((v - zero)/width) + leak (v - zero).
* A servo's current is most/2 (1 + tanh(error/10 uV)) tanh(v/0.3 V): where it has hold, the sensed node stands within
  some 30 uV of its rest voltage.
* Resistors are held at or above 1 mohm, the internal resistances of transistors at or above 0.1 mohm.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from benchkit.circuit import devices
from benchkit.circuit.devices import Array, Mask
from benchkit.circuit.elimination import Index
from benchkit.circuit.netlist import TRANSISTOR_DEFAULTS, Source, Supply
from benchkit.circuit.plan import Plan

LEAST_RESISTOR_OHM = 1e-3
LEAST_INTERNAL_OHM = 1e-4
SUPPLY_KNEE_OHM = 10e-3
SUPPLY_LEAK_S = 1e-6
COMPLIANCE_V = 0.3
"""Voltage scale on which a source saturates as the voltage left to it goes to zero."""
SERVO_ERROR_V = 10e-6
"""Voltage error scale over which a servo's current goes from 0 to its most; its inverse is the servo's gain."""
OHMMETER_KNEE_V = 0.05
"""Voltage scale on which a meter's test current gives way at its compliance voltage."""


@dataclass
class Arguments:
    """What the nonlinear laws are linearised at, arrays of shape (devices, units).

    ``vbe`` and ``vbc`` [V] of transistors; ``sigmoid`` of supplies, sources and ohmmeters, ``error`` and ``compliance``
    of servos, all in units of their knee.
    """

    vbe: Array
    vbc: Array
    sigmoid: Array
    error: Array
    compliance: Array

    def take(self, index: Index | Mask) -> Arguments:
        """Return the arguments of some of the units."""
        return Arguments(
            self.vbe[:, index], self.vbc[:, index], self.sigmoid[:, index], self.error[:, index],
            self.compliance[:, index],
        )  # fmt: skip

    def differ(self, other: Arguments) -> Mask:
        """Which units have an argument that differs from the other's by more than rounding."""
        pairs: tuple[tuple[Array, Array], ...] = (
            (self.vbe, other.vbe),
            (self.vbc, other.vbc),
            (self.sigmoid, other.sigmoid),
        )
        pairs += ((self.error, other.error), (self.compliance, other.compliance))
        return np.asarray(np.concatenate([np.abs(a - b) > 1e-9 * (1.0 + np.abs(b)) for a, b in pairs]).any(axis=0))


@dataclass
class Linearised:
    """Branch currents (branches, units) and slopes (slopes, units) at ``arguments``; ``held``: some were limited."""

    currents: Array
    slopes: Array
    arguments: Arguments
    held: Mask

    def take(self, index: Index | Mask) -> Linearised:
        """Return some of the units."""
        return Linearised(self.currents[:, index], self.slopes[:, index], self.arguments.take(index), self.held[index])


def _stack(values: Mapping[str, Array], keys: list[str], units: int) -> Array:
    result = np.empty((len(keys), units))
    for row, key in zip(result, keys, strict=True):
        row[:] = values[key]
    return result


class Saturating:
    """The supplies, sources, ohmmeters and servos of some units.

    The first three are brought to one law: I = amps tanh((v - zero)/width) + leak (v - zero).
    """

    def __init__(self, plan: Plan, values: Mapping[str, Array], units: int) -> None:
        self.plan = plan
        self.units = units
        shape = (len(plan.sigmoids), units)
        self.amps, self.inv_width = np.empty(shape), np.empty(shape)
        self.zero, self.leak = np.zeros(shape), np.zeros(shape)
        for k, e in enumerate(plan.sigmoids):
            if isinstance(e, Supply):
                self.amps[k] = values[f"{e.name}.limit_a"]
                self.inv_width[k] = 1.0 / (self.amps[k] * SUPPLY_KNEE_OHM)
                self.zero[k] = values[f"{e.name}.volts"]
                self.leak[k] = SUPPLY_LEAK_S
            elif isinstance(e, Source):
                self.amps[k] = values[f"{e.name}.amps"]
                self.inv_width[k] = 1.0 / COMPLIANCE_V
            else:
                self.amps[k] = values[f"{e.name}.amps"]
                self.inv_width[k] = 1.0 / OHMMETER_KNEE_V
                self.zero[k] = values[f"{e.name}.compliance_v"]
        self.servo_most = _stack(values, [f"{e.name}.max_a" for e in plan.servos], units)
        self.servo_gain = np.repeat(plan.senses / SERVO_ERROR_V, units, axis=1)
        self.servo_rest = _stack(values, [f"{e.name}.rest_v" for e in plan.servos], units)

    def knees(self, full: Array) -> tuple[Array, Array, Array]:
        """Arguments of sigmoids, and of servos their errors and compliances, at an extended x."""
        p = self.plan
        return (
            (full[p.sa] - full[p.sb] - self.zero) * self.inv_width,
            (full[p.vs] - full[p.vr] - self.servo_rest) * self.servo_gain,
            (full[p.va] - full[p.vb]) * (1.0 / COMPLIANCE_V),
        )

    def knees_by_name(self, x: Array) -> dict[str, tuple[Array, ...]]:
        """Arguments of each element at x: one of a supply, source or ohmmeter, two of a servo."""
        sigmoid, error, compliance = self.knees(extended(x))
        found: dict[str, tuple[Array, ...]] = {}
        for e, row in zip(self.plan.sigmoids, sigmoid, strict=True):
            found[e.name] = (row,)
        for servo, one, two in zip(self.plan.servos, error, compliance, strict=True):
            found[servo.name] = (one, two)
        return found


def extended(x: Array) -> Array:
    """Append the reference node's zeros to x."""
    return np.concatenate([x, np.zeros((1, x.shape[1]))])


class Batch(Saturating):
    """A plan with the values of some units.

    Parameters
    ----------
    values : mapping
        Name or ``name.key`` to an array of shape (units,) or (1,).
    """

    def __init__(self, plan: Plan, values: Mapping[str, Array], units: int) -> None:
        super().__init__(plan, values, units)

        def stack(keys: list[str]) -> Array:
            return _stack(values, keys, units)

        outside = np.maximum(stack([e.name for e in plan.resistors]), LEAST_RESISTOR_OHM)
        inside = np.maximum(stack([f"{name}.{parameter}" for name, parameter, _ in plan.internal]), LEAST_INTERNAL_OHM)
        self.conductance = 1.0 / np.concatenate([outside, inside])
        self.volts = stack([f"{e.name}.volts" for e in plan.unknowns])
        parameters = {key: stack([f"{e.name}.{key}" for e in plan.transistors]) for key in TRANSISTOR_DEFAULTS}
        self.polarity = parameters["polarity"]
        self.junctions = devices.junctions_at_temperature(parameters)
        self.critical_e = devices.critical_voltage(self.junctions.is_a, self.junctions.inv_nf_vt)
        self.critical_c = devices.critical_voltage(self.junctions.is_a, self.junctions.inv_nr_vt)
        if units == 1:
            self.fixed = plan.always[:, None] + plan.by_resistor @ self.conductance
        else:
            self.fixed = np.zeros((plan.structure.slots, units))
            for slot, resistor, value in plan.fixed_terms:
                self.fixed[slot] += value if resistor < 0 else value * self.conductance[resistor]

    def take(self, index: Index | Mask | slice) -> Batch:
        """Return the batch of some of the units."""
        part = Batch.__new__(Batch)
        part.plan = self.plan
        for name, value in vars(self).items():
            if isinstance(value, np.ndarray):
                setattr(part, name, value[:, index])
        part.junctions = self.junctions.map(lambda a: a[:, index])
        part.units = part.fixed.shape[1]
        return part

    def softened(self, softness: Array) -> Batch:
        """Return the batch with wider knees, by ``softness`` of shape (units,).

        A servo's error gets that much wider, a supply's knee by the 0.6th power of it.
        """
        part = self.take(slice(None))
        part.servo_gain = self.servo_gain / softness
        supplies = np.array([isinstance(e, Supply) for e in self.plan.sigmoids], dtype=np.bool_)
        part.inv_width = np.where(supplies[:, None], self.inv_width / softness**0.6, self.inv_width)
        return part

    def arguments(self, x: Array) -> Arguments:
        """Return the arguments of the nonlinear laws at x, of shape (size, units)."""
        return self._arguments(extended(x))

    def _arguments(self, full: Array) -> Arguments:
        base = full[self.plan.tb]
        return Arguments(
            self.polarity * (base - full[self.plan.te]),
            self.polarity * (base - full[self.plan.tc]),
            *self.knees(full),
        )

    def evaluate(self, x: Array, previous: Arguments | None, start: bool = False) -> Linearised:
        """Linearise every branch.

        Parameters
        ----------
        x : array, shape (size, units)
        previous : Arguments, optional
            What was linearised at in the step before: arguments are limited against it. None: nothing is limited.
        start : bool
            Linearise at ``previous`` itself.
        """
        p, full = self.plan, extended(x)
        actual = self._arguments(full)
        at = actual
        held = np.zeros(self.units, dtype=np.bool_)
        if start and previous is not None:
            at = previous
            held = actual.differ(at)
        elif previous is not None:
            at, held = self._limit(actual, previous)
        currents = np.empty((p.branches, self.units))
        slopes = np.empty((p.slopes, self.units))
        b = p.branch_starts
        np.multiply(full[p.ra] - full[p.rb], self.conductance, out=currents[: b[1]])

        _, s, k, _, t = p.counts
        if s:
            value, slope = devices.saturating(at.sigmoid)
            value += slope * (actual.sigmoid - at.sigmoid)
            currents[b[1] : b[2]] = self.amps * value + self.leak * (full[p.sa] - full[p.sb] - self.zero)
            slopes[:s] = self.amps * self.inv_width * slope + self.leak
        if k:
            self._servo(currents[b[2] : b[3]], slopes[s : s + 2 * k], actual, at)
        if len(p.uk):
            currents[b[3] : b[4]] = full[p.uk]
        if t:
            self._transistors(currents[b[4] :], slopes[s + 2 * k :], actual, at)
        return Linearised(currents, slopes, at, held)

    def _servo(self, currents: Array, slopes: Array, actual: Arguments, at: Arguments) -> None:
        k = len(currents)
        grip, grip_slope = devices.saturating(at.error)
        grip = 0.5 * (1.0 + grip)
        left, left_slope = devices.saturating(at.compliance)
        by_error = self.servo_most * 0.5 * grip_slope * left
        by_compliance = self.servo_most * grip * left_slope
        currents[:] = self.servo_most * grip * left
        currents += by_error * (actual.error - at.error)
        currents += by_compliance * (actual.compliance - at.compliance)
        slopes[:k] = by_compliance / COMPLIANCE_V
        slopes[k:] = by_error * self.servo_gain

    def _transistors(self, currents: Array, slopes: Array, actual: Arguments, at: Arguments) -> None:
        t = len(self.plan.tc)
        g = devices.gummel_poon(at.vbe, at.vbc, self.junctions)
        ic, ib, ie = currents[:t], currents[t : 2 * t], currents[2 * t :]
        ic[:], ib[:] = g.ic, g.ib
        if at is not actual:
            e, c = actual.vbe - at.vbe, actual.vbc - at.vbc
            ic += g.ic_vbe * e
            ic += g.ic_vbc * c
            ib += g.ib_vbe * e
            ib += g.ib_vbc * c
        ic *= self.polarity
        ib *= self.polarity
        np.add(ic, ib, out=ie)
        np.negative(ie, out=ie)
        m = slopes.reshape(3, 3, t, -1)
        np.add(g.ic_vbe, g.ic_vbc, out=m[0, 1])
        np.negative(g.ic_vbc, out=m[0, 0])
        np.negative(g.ic_vbe, out=m[0, 2])
        np.add(g.ib_vbe, g.ib_vbc, out=m[1, 1])
        np.negative(g.ib_vbc, out=m[1, 0])
        np.negative(g.ib_vbe, out=m[1, 2])
        np.add(m[0], m[1], out=m[2])
        np.negative(m[2], out=m[2])

    def _limit(self, actual: Arguments, previous: Arguments) -> tuple[Arguments, Mask]:
        j = self.junctions
        vbe, e = devices.limit_junction(actual.vbe, previous.vbe, j.inv_nf_vt, self.critical_e)
        vbc, c = devices.limit_junction(actual.vbc, previous.vbc, j.inv_nr_vt, self.critical_c)
        sigmoid, s = devices.centre(actual.sigmoid, previous.sigmoid)
        error, r = devices.centre(actual.error, previous.error)
        compliance, v = devices.centre(actual.compliance, previous.compliance)
        held = np.concatenate([e, c, s, r, v]).any(axis=0)
        return Arguments(vbe, vbc, sigmoid, error, compliance), np.asarray(held)

    def matrix(self, linearised: Linearised, shunt: Array | None) -> Array:
        """Return the derivatives' slots, shape (slots, units); ``shunt`` [S] per unit from each node."""
        if self.units == 1:
            values = self.fixed + self.plan.into_slots @ linearised.slopes
        else:
            values = self.fixed.copy()
            slots, slopes = list(values), list(linearised.slopes)
            for slot, which, minus in self.plan.slope_terms:
                if minus:
                    slots[slot] -= slopes[which]
                else:
                    slots[slot] += slopes[which]
        if shunt is not None:
            values[self.plan.diagonal] += shunt
        return values
