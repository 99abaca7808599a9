"""The operating points that a solve found, and the questions that can be asked of them.

Currents are worked out when they are asked for, from the node voltages and the element laws.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit import devices
from benchkit.circuit.devices import Array, Mask
from benchkit.circuit.equations import (
    COMPLIANCE_V,
    LEAST_RESISTOR_OHM,
    OHMMETER_KNEE_V,
    SERVO_ERROR_V,
    SUPPLY_KNEE_OHM,
    SUPPLY_LEAK_S,
)
from benchkit.circuit.netlist import (
    GROUND,
    TRANSISTOR_DEFAULTS,
    Element,
    Netlist,
    Ohmmeter,
    Resistor,
    Servo,
    Source,
    Supply,
    Transistor,
    Unknown,
)
from benchkit.circuit.newton import Iterations
from benchkit.circuit.plan import Plan
from benchkit.errors import ModelError


@dataclass(frozen=True)
class Operating:
    """A transistor's operating point, arrays of shape (units,).

    Signs are the device's own, npn and pnp alike: voltages and currents are positive in normal conduction (collector
    current into an npn's collector, out of a pnp's; ``ie_a`` = ``ic_a`` + ``ib_a``). ``vbe_v`` and ``vce_v`` are
    between the external terminals. ``power_w`` is what heats the device.
    """

    ic_a: Array
    ib_a: Array
    ie_a: Array
    vbe_v: Array
    vce_v: Array
    power_w: Array


class Solution:
    """Operating points of all units.

    Attributes
    ----------
    units : int
    converged : array of bool, shape (units,)
    iterations : array of int, shape (units,)
        Newton iterations, those of failed attempts included.
    residual_a : array, shape (units,)
        Largest current left over at a node [A] when the unit was accepted (or given up).
    """

    def __init__(
        self,
        netlist: Netlist,
        plan: Plan,
        values: dict[str, Array],
        x: Array,
        converged: Mask,
        iterations: Iterations,
        residual_a: Array,
    ) -> None:
        self.netlist = netlist
        self.plan = plan
        self.values = values
        self.x = x
        self.units = x.shape[1]
        self.converged = converged
        self.iterations = iterations
        self.residual_a = residual_a

    def take(self, index: NDArray[np.intp]) -> Solution:
        """Return some of the units."""
        values = {key: value if value.size == 1 else value[index] for key, value in self.values.items()}
        return Solution(
            self.netlist, self.plan, values, self.x[:, index], self.converged[index], self.iterations[index],
            self.residual_a[index],
        )  # fmt: skip

    def joined(self, other: Solution) -> Solution:
        """Return the units of this solution and then those of another one of the same circuit."""
        values = {}
        for key, value in self.values.items():
            theirs = other.values[key]
            if value.size == 1 and theirs.size == 1 and value[0] == theirs[0]:
                values[key] = value
            else:
                values[key] = np.concatenate([np.broadcast_to(value, self.units), np.broadcast_to(theirs, other.units)])
        return Solution(
            self.netlist, self.plan, values, np.concatenate([self.x, other.x], axis=1),
            np.concatenate([self.converged, other.converged]), np.concatenate([self.iterations, other.iterations]),
            np.concatenate([self.residual_a, other.residual_a]),
        )  # fmt: skip

    def put(self, where: NDArray[np.intp], other: Solution, which: NDArray[np.intp]) -> None:
        """Take units over from another solution of the same circuit, in place."""
        for key, value in other.values.items():
            mine = self.values[key]
            if value.size > 1 or mine.size > 1 or value[0] != mine[0]:
                if mine.size == 1:
                    mine = np.repeat(mine, self.units)
                self.values[key] = mine = mine.copy() if not mine.flags.writeable else mine
                mine[where] = value[which] if value.size > 1 else value[0]
        for own, theirs in (
            (self.converged, other.converged), (self.iterations, other.iterations), (self.residual_a, other.residual_a),
        ):  # fmt: skip
            own[where] = theirs[which]
        self.x[:, where] = other.x[:, which]

    def voltage(self, node: str) -> Array:
        """Voltage [V] of a node to the reference, shape (units,)."""
        if node == GROUND:
            return np.zeros(self.units)
        if node not in self.plan.index:
            raise ModelError(f"the circuit has no node {node!r}", "one of " + ", ".join(self.netlist.nodes()))
        return np.array(self.x[self.plan.index[node]])

    def between(self, a: str, b: str) -> Array:
        """Voltage [V] from ``b`` to ``a``, shape (units,)."""
        return self.voltage(a) - self.voltage(b)

    def current(self, name: str) -> Array:
        """Current [A] of an element, shape (units,).

        Supply and ohmmeter: delivered out of plus. Source and servo: from ``from_node`` to ``to_node``. Resistor and
        unknown conductance: from ``a`` to ``b``.
        """
        e = self._element(name)
        if isinstance(e, Resistor):
            return self.between(e.a, e.b) / np.maximum(self.values[name], LEAST_RESISTOR_OHM)
        if isinstance(e, Supply):
            lack, limit = self.values[f"{name}.volts"] - self.between(e.plus, e.minus), self.values[f"{name}.limit_a"]
            return np.asarray(limit * np.tanh(lack / (limit * SUPPLY_KNEE_OHM)) + SUPPLY_LEAK_S * lack)
        if isinstance(e, Source):
            return np.asarray(
                self.values[f"{name}.amps"] * np.tanh(self.between(e.from_node, e.to_node) / COMPLIANCE_V)
            )
        if isinstance(e, Servo):
            sign = -1.0 if e.senses == "to" else 1.0
            error = sign * (self.between(e.sense, e.reference) - self.values[f"{name}.rest_v"]) / SERVO_ERROR_V
            left = np.tanh(self.between(e.from_node, e.to_node) / COMPLIANCE_V)
            return np.asarray(self.values[f"{name}.max_a"] * 0.5 * (1.0 + np.tanh(error)) * left)
        if isinstance(e, Ohmmeter):
            lack = self.values[f"{name}.compliance_v"] - self.between(e.plus, e.minus)
            return np.asarray(self.values[f"{name}.amps"] * np.tanh(lack / OHMMETER_KNEE_V))
        if isinstance(e, Unknown):
            return np.array(self.x[self.plan.index[f"{name}\x00current"]])
        raise ModelError(f"{name!r} is a transistor", "an element with two ends", "Ask for transistor(name)")

    def conductance(self, name: str) -> Array:
        """Conductance [S] that an unknown conductance came to, shape (units,); it may be negative."""
        e = self._element(name)
        if not isinstance(e, Unknown):
            raise ModelError(f"{name!r} is no unknown conductance", "the name of one")
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.asarray(self.current(name) / self.between(e.a, e.b))

    def transistor(self, name: str) -> Operating:
        """Operating point of a transistor."""
        e = self._element(name)
        if not isinstance(e, Transistor):
            raise ModelError(f"{name!r} is no transistor", "the name of one")
        parameters = {key: self.values[f"{name}.{key}"] for key in TRANSISTOR_DEFAULTS}
        k = [t.name for t in self.plan.transistors].index(name)
        full = np.concatenate([self.x, np.zeros((1, self.units))])
        base = full[self.plan.tb[k]]
        polarity = parameters["polarity"]
        with np.errstate(all="ignore"):  # a unit without a solution may lie beyond all numbers
            g = devices.gummel_poon(
                polarity * (base - full[self.plan.te[k]]),
                polarity * (base - full[self.plan.tc[k]]),
                devices.junctions_at_temperature(parameters),
            )
            vbe = polarity * self.between(e.base, e.emitter)
            vce = polarity * self.between(e.collector, e.emitter)
            return Operating(g.ic, g.ib, g.ic + g.ib, vbe, vce, vce * g.ic + vbe * g.ib)

    def powers_w(self) -> dict[str, Array]:
        """What heats each transistor [W], by name, shape (units,); those of `transistor`, worked out together."""
        plan, names = self.plan, [t.name for t in self.plan.transistors]
        if not names:
            return {}

        def stack(key: str) -> Array:
            rows = [self.values[f"{name}.{key}"] for name in names]
            wide = max(map(len, rows))
            return np.array([row if len(row) == wide else np.broadcast_to(row, wide) for row in rows])

        def across(upper: list[str], lower: list[str]) -> Array:
            rows = [[plan.index[name] for name in column] for column in (upper, lower)]
            return np.asarray(polarity * (full[rows[0]] - full[rows[1]]))

        parameters = {key: stack(key) for key in TRANSISTOR_DEFAULTS}
        polarity = parameters["polarity"]
        full = np.concatenate([self.x, np.zeros((1, self.units))])
        base = full[plan.tb]
        with np.errstate(all="ignore"):
            g = devices.gummel_poon(
                polarity * (base - full[plan.te]),
                polarity * (base - full[plan.tc]),
                devices.junctions_at_temperature(parameters),
            )
        bases, emitters = [t.base for t in plan.transistors], [t.emitter for t in plan.transistors]
        collectors = [t.collector for t in plan.transistors]
        powers = across(collectors, emitters) * g.ic + across(bases, emitters) * g.ib
        return dict(zip(names, powers, strict=True))

    def _element(self, name: str) -> Element:
        try:
            return self.netlist.elements[name]
        except KeyError:
            raise ModelError(f"the circuit has no element {name!r}", "one of its elements") from None
