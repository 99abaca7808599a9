"""The circuit's equations: every current, its derivatives, and where they go.

Strategy
--------
The unknowns x are the node voltages and the currents of unknown conductances; the equations are one sum of currents
[A] per node, and one condition [V] per unknown conductance (modified nodal analysis: C.-W. Ho, A. E. Ruehli,
P. A. Brennan, IEEE Transactions on Circuits and Systems 22 (1975), 504-509).

* `Plan` is the structure: indices only, no values. A transistor's base, emitter or collector resistance gets an
  internal node only if it is not zero in every unit.
* `Batch` is a plan with the values of some units. Every array ends in the unit axis.
* `Batch.evaluate` returns the currents of all branches *linearised at the limited arguments*, so that one Newton step
  from them is exact where nothing was limited; and their slopes. `Plan.sum_currents` and `Plan.matrix` gather them.

Rules
-----
* Row ``plan.size`` of an extended x is the reference node, always 0.
* A branch current is counted positive out of its first node.
* From each node 1e-12 S lead to the reference. An island of nodes that no element ties to the reference is tied there
  by 1 S at one node, which carries no current.
* Resistors are held at or above 1 mohm, the internal resistances of transistors at or above 0.1 mohm.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit import devices
from benchkit.circuit.devices import Array, Junctions, Mask
from benchkit.circuit.elimination import Index, Structure
from benchkit.circuit.netlist import (
    GROUND,
    TRANSISTOR_DEFAULTS,
    Netlist,
    Ohmmeter,
    Resistor,
    Servo,
    Source,
    Supply,
    Transistor,
    Unknown,
    terminals,
)

NODE_GMIN_S = 1e-12
ISLAND_TIE_S = 1.0
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

Signature = tuple[tuple[bool, bool, bool], ...]
"""Per transistor: whether collector, base and emitter have an internal node."""


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


@dataclass
class Linearised:
    """Branch currents (branches, units) and slopes (slopes, units) at ``arguments``; ``held``: some were limited."""

    currents: Array
    slopes: Array
    arguments: Arguments
    held: Mask

    def take(self, index: Index | Mask) -> Linearised:
        """Return some of the units."""
        return Linearised(
            self.currents[:, index], self.slopes[:, index], self.arguments.take(index), self.held[index]
        )


class Plan:
    """The structure of a circuit's equations for one signature of internal nodes."""

    def __init__(self, netlist: Netlist, signature: Signature) -> None:
        elements = list(netlist.elements.values())
        self.signature = signature
        self.resistors = [e for e in elements if isinstance(e, Resistor)]
        self.transistors = [e for e in elements if isinstance(e, Transistor)]
        self.sigmoids = [e for e in elements if isinstance(e, (Supply, Source, Ohmmeter))]
        self.servos = [e for e in elements if isinstance(e, Servo)]
        self.unknowns = [e for e in elements if isinstance(e, Unknown)]

        names = list(netlist.nodes())
        self.internal: list[tuple[str, str, int]] = []  # (transistor, parameter, external node's index)
        node = {name: k for k, name in enumerate(names)}
        inner: list[list[int]] = []
        for transistor, made in zip(self.transistors, signature, strict=True):
            ends = []
            outside = (transistor.collector, transistor.base, transistor.emitter)
            for external, parameter, wanted in zip(outside, ("RC", "RB", "RE"), made, strict=True):
                if wanted:
                    name = f"{transistor.name}\x00{parameter}"
                    node[name] = len(names)
                    names.append(name)
                    self.internal.append((transistor.name, parameter, node.get(external, -1)))
                    ends.append(node[name])
                else:
                    ends.append(node.get(external, -1))
            inner.append(ends)
        self.nodes = len(names)
        self.size = ground = self.nodes + len(self.unknowns)
        self.names = names + [f"{e.name}\x00current" for e in self.unknowns]
        self.index = {name: k for k, name in enumerate(self.names)} | {GROUND: ground}

        def at(*columns: list[str]) -> list[Index]:
            return [np.array([self.index[name] for name in column], dtype=np.intp) for column in columns]

        first = self.nodes - len(self.internal)
        outer = [ground if k < 0 else k for _, _, k in self.internal]
        ra, rb = at([e.a for e in self.resistors], [e.b for e in self.resistors])
        self.ra = np.concatenate([ra, np.array(outer, dtype=np.intp)])
        self.rb = np.concatenate([rb, np.arange(first, self.nodes, dtype=np.intp)])
        self.sa, self.sb = at([terminals(e)[0] for e in self.sigmoids], [terminals(e)[1] for e in self.sigmoids])
        self.va, self.vb, self.vs, self.vr = at(*(list(c) for c in _columns([terminals(e) for e in self.servos], 4)))
        self.ua, self.ub, self.up, self.uq = at(*(list(c) for c in _columns([terminals(e) for e in self.unknowns], 4)))
        self.uk = np.arange(self.nodes, self.size, dtype=np.intp)
        ends_array = np.array(inner, dtype=np.intp).reshape(-1, 3)
        ends_array[ends_array < 0] = ground
        self.tc, self.tb, self.te = (np.ascontiguousarray(ends_array[:, k]) for k in range(3))
        self.senses = np.array([[-1.0 if e.senses == "to" else 1.0] for e in self.servos]).reshape(-1, 1)
        self._lay_out()

    def _lay_out(self) -> None:
        """Number branches and slopes, and list which row or slot each goes to."""
        r, s, k, u, t = len(self.ra), len(self.sa), len(self.va), len(self.ua), len(self.tc)
        self.counts = (r, s, k, u, t)
        starts = np.concatenate([[0], np.cumsum([r, s, k, u, t, t, t])]).tolist()
        self.branch_starts = starts
        self.branches = starts[-1]
        self.current_terms: list[tuple[int, int, bool]] = []  # (row, branch, taken with minus sign)
        pairs = [(self.ra, self.rb), (self.sa, self.sb), (self.va, self.vb), (self.ua, self.ub)]
        for start, (a, b) in zip(starts[:4], pairs, strict=True):
            for j in range(len(a)):
                self._flow(start + j, int(a[j]), int(b[j]))
        for start, ends in zip(starts[4:7], (self.tc, self.tb, self.te), strict=True):
            for j in range(t):
                self._flow(start + j, int(ends[j]), self.size)

        fixed: list[tuple[int, int, int, float]] = []  # (row, column, resistor or -1, sign or value)
        for j in range(r):
            fixed += [(*where, j, sign) for where, sign in self._conductance(int(self.ra[j]), int(self.rb[j]))]
        fixed += [(n, n, -1, NODE_GMIN_S) for n in range(self.nodes)]
        fixed += [(n, n, -1, ISLAND_TIE_S) for n in self._islands()]
        for j in range(u):
            current = int(self.uk[j])
            fixed += [(int(self.ua[j]), current, -1, 1.0), (int(self.ub[j]), current, -1, -1.0)]
            fixed += [(current, int(self.up[j]), -1, 1.0), (current, int(self.uq[j]), -1, -1.0)]
        self.ties = self._islands()

        moving: list[tuple[int, int, int, bool]] = []  # (row, column, slope, taken with minus sign)
        for j in range(s):
            moving += [(*w, j, sign < 0) for w, sign in self._conductance(int(self.sa[j]), int(self.sb[j]))]
        for j in range(k):
            a, b, c, d = (int(n[j]) for n in (self.va, self.vb, self.vs, self.vr))
            moving += [(*w, s + j, sign < 0) for w, sign in self._conductance(a, b)]
            moving += [(a, c, s + k + j, False), (a, d, s + k + j, True)]
            moving += [(b, c, s + k + j, True), (b, d, s + k + j, False)]
        base = s + 2 * k
        for j in range(t):
            rows = (int(self.tc[j]), int(self.tb[j]), int(self.te[j]))
            # slopes per transistor: 3 by 3, rows collector, base, emitter; columns the same
            moving += [
                (row, column, base + (3 * m + n) * t + j, False)
                for m, row in enumerate(rows)
                for n, column in enumerate(rows)
            ]
        self.slopes = base + 9 * t
        inside = [e for e in fixed if e[0] < self.size and e[1] < self.size]
        moving = [e for e in moving if e[0] < self.size and e[1] < self.size]
        self.structure = Structure(self.size, {(e[0], e[1]) for e in inside} | {(e[0], e[1]) for e in moving})
        slot = self.structure.slot
        self.fixed_terms = [(slot[i, j], which, value) for i, j, which, value in inside]
        self.slope_terms = [(slot[i, j], which, minus) for i, j, which, minus in moving]
        self.diagonal: Index = np.array([slot[n, n] for n in range(self.nodes)], dtype=np.intp)

    def _flow(self, branch: int, a: int, b: int) -> None:
        if a < self.size:
            self.current_terms.append((a, branch, False))
        if b < self.size:
            self.current_terms.append((b, branch, True))

    @staticmethod
    def _conductance(a: int, b: int) -> Iterator[tuple[tuple[int, int], float]]:
        yield (a, a), 1.0
        yield (b, b), 1.0
        yield (a, b), -1.0
        yield (b, a), -1.0

    def _islands(self) -> list[int]:
        """One node of each group that nothing ties to the reference."""
        group = list(range(self.size + 1))

        def root(n: int) -> int:
            while group[n] != n:
                n = group[n]
            return n

        pairs = [(self.ra, self.rb), (self.sa, self.sb), (self.va, self.vb), (self.ua, self.ub)]
        pairs += [(self.tc, self.tb), (self.tb, self.te)]
        for a, b in pairs:
            for m, n in zip(a.tolist(), b.tolist(), strict=True):
                group[root(m)] = root(n)
        found: dict[int, int] = {}
        for n in range(self.nodes):
            if root(n) != root(self.size):
                found.setdefault(root(n), n)
        return sorted(found.values())

    def sum_currents(self, linearised: Linearised, x: Array, volts: Array, magnitudes: bool = False) -> Array:
        """Residual of each equation, shape (size, units): currents out of nodes [A], conditions [V].

        With ``magnitudes``, the sum of the magnitudes of the terms instead.
        """
        currents = np.abs(linearised.currents) if magnitudes else linearised.currents
        result = np.zeros((self.size, currents.shape[1]))
        rows, branches = list(result), list(currents)
        for row, branch, minus in self.current_terms:
            if minus and not magnitudes:
                rows[row] -= branches[branch]
            else:
                rows[row] += branches[branch]
        if magnitudes:
            x, volts = np.abs(x), np.abs(volts)
        result[: self.nodes] += NODE_GMIN_S * x[: self.nodes]
        for n in self.ties:
            result[n] += ISLAND_TIE_S * x[n]
        if len(self.uk):
            if magnitudes:
                result[self.uk] = x[self.up] + x[self.uq] + volts
            else:
                result[self.uk] = x[self.up] - x[self.uq] - volts
        return result


def _columns(rows: list[tuple[str, ...]], width: int) -> list[tuple[str, ...]]:
    return list(zip(*rows, strict=True)) if rows else [()] * width


class Batch:
    """A plan with the values of some units.

    Parameters
    ----------
    values : mapping
        Name or ``name.key`` to an array of shape (units,) or (1,).
    """

    def __init__(self, plan: Plan, values: Mapping[str, Array], units: int) -> None:
        self.plan = plan
        self.units = units

        def stack(keys: list[str]) -> Array:
            result = np.empty((len(keys), units))
            for row, key in zip(result, keys, strict=True):
                row[:] = values[key]
            return result

        outside = np.maximum(stack([e.name for e in plan.resistors]), LEAST_RESISTOR_OHM)
        inside = np.maximum(stack([f"{name}.{parameter}" for name, parameter, _ in plan.internal]), LEAST_INTERNAL_OHM)
        self.conductance = 1.0 / np.concatenate([outside, inside])
        self._sigmoids(values)
        self.servo_most = stack([f"{e.name}.max_a" for e in plan.servos])
        self.servo_gain = np.repeat(plan.senses / SERVO_ERROR_V, units, axis=1)
        self.servo_rest = stack([f"{e.name}.rest_v" for e in plan.servos])
        self.volts = stack([f"{e.name}.volts" for e in plan.unknowns])
        parameters = {key: stack([f"{e.name}.{key}" for e in plan.transistors]) for key in TRANSISTOR_DEFAULTS}
        self.polarity = parameters["polarity"]
        self.junctions = devices.junctions_at_temperature(parameters)
        self.critical_e = devices.critical_voltage(self.junctions.is_a, self.junctions.inv_nf_vt)
        self.critical_c = devices.critical_voltage(self.junctions.is_a, self.junctions.inv_nr_vt)
        self.fixed = np.zeros((plan.structure.slots, units))
        for slot, resistor, value in plan.fixed_terms:
            self.fixed[slot] += value if resistor < 0 else value * self.conductance[resistor]

    def _sigmoids(self, values: Mapping[str, Array]) -> None:
        """Bring supplies, sources and ohmmeters to one law: I = amps tanh((v - zero)/width) + leak (v - zero)."""
        shape = (len(self.plan.sigmoids), self.units)
        self.amps, self.inv_width, self.zero, self.leak = np.empty(shape), np.empty(shape), np.empty(shape), np.zeros(shape)
        for k, e in enumerate(self.plan.sigmoids):
            if isinstance(e, Supply):
                self.amps[k] = values[f"{e.name}.limit_a"]
                self.inv_width[k] = 1.0 / (self.amps[k] * SUPPLY_KNEE_OHM)
                self.zero[k] = values[f"{e.name}.volts"]
                self.leak[k] = SUPPLY_LEAK_S
            elif isinstance(e, Source):
                self.amps[k] = values[f"{e.name}.amps"]
                self.inv_width[k] = 1.0 / COMPLIANCE_V
                self.zero[k] = 0.0
            else:
                self.amps[k] = values[f"{e.name}.amps"]
                self.inv_width[k] = 1.0 / OHMMETER_KNEE_V
                self.zero[k] = values[f"{e.name}.compliance_v"]

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
        """Return the batch with wider knees: servos' errors by ``softness``, shape (units,), supplies' by its 0.6th power."""
        part = self.take(slice(None))
        part.servo_gain = self.servo_gain / softness
        supplies = np.array([isinstance(e, Supply) for e in self.plan.sigmoids], dtype=np.bool_)
        part.inv_width = np.where(supplies[:, None], self.inv_width / softness**0.6, self.inv_width)
        return part

    def extend(self, x: Array) -> Array:
        """Append the reference node's zeros to x."""
        return np.concatenate([x, np.zeros((1, x.shape[1]))])

    def arguments(self, x: Array) -> Arguments:
        """Return the arguments of the nonlinear laws at x, of shape (size, units)."""
        return self._arguments(self.extend(x))

    def _arguments(self, full: Array) -> Arguments:
        p = self.plan
        base = full[p.tb]
        return Arguments(
            vbe=self.polarity * (base - full[p.te]),
            vbc=self.polarity * (base - full[p.tc]),
            sigmoid=(full[p.sa] - full[p.sb] - self.zero) * self.inv_width,
            error=(full[p.vs] - full[p.vr] - self.servo_rest) * self.servo_gain,
            compliance=(full[p.va] - full[p.vb]) * (1.0 / COMPLIANCE_V),
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
        p, full = self.plan, self.extend(x)
        actual = self._arguments(full)
        at = actual
        held = np.zeros(self.units, dtype=np.bool_)
        if start and previous is not None:
            at = previous
            held[:] = True
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
        held = e.any(axis=0) | c.any(axis=0) | s.any(axis=0) | r.any(axis=0) | v.any(axis=0)
        return Arguments(vbe, vbc, sigmoid, error, compliance), held

    def matrix(self, linearised: Linearised, shunt: NDArray[np.float64] | None) -> Array:
        """Return the derivatives' slots, shape (slots, units); ``shunt`` [S] per unit from each node."""
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
