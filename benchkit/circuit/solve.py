"""Compile a netlist once; solve it for many units at once.

Rules
-----
* ``compile_netlist`` reads structure only. A compiled circuit can be reused, and pickled for another process.
* Values are numbers, or arrays of one number per unit. An unknown key or a missing value is a `ModelError`.
* The same values give the same digits: nothing is remembered from one solve to the next but structure.
* A unit that did not converge stays in the solution with its last voltages; ``converged`` says so. Who uses the
  solution decides what to do about it.
"""

from __future__ import annotations

import difflib
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit import devices
from benchkit.circuit.devices import Array, Mask
from benchkit.circuit.elimination import Index
from benchkit.circuit.equations import (
    COMPLIANCE_V,
    LEAST_RESISTOR_OHM,
    OHMMETER_KNEE_V,
    SERVO_ERROR_V,
    SUPPLY_KNEE_OHM,
    SUPPLY_LEAK_S,
    Arguments,
    Batch,
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
from benchkit.circuit.newton import Iterations, LinearSolver, first_attempts, rescue
from benchkit.circuit.plan import Plan, Signature
from benchkit.errors import ModelError

Value = float | int | NDArray[Any]

CHUNK_UNITS = 1000
"""Units solved together: enough to outweigh the interpreter's overhead, few enough to stay in the cache."""
_PILOT_FROM = 32
_START_VBE_V = 0.6
_START_VBC_V = -1.0

_KEYS: dict[type, tuple[str, ...]] = {
    Resistor: ("",),
    Supply: (".volts", ".limit_a"),
    Source: (".amps",),
    Servo: (".rest_v", ".max_a"),
    Unknown: (".volts",),
    Ohmmeter: (".amps", ".compliance_v"),
}


def compile_netlist(netlist: Netlist) -> Compiled:
    """Prepare a netlist for solving.

    Raises
    ------
    ModelError
        When the netlist has no node.
    """
    return Compiled(netlist)


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


class Compiled:
    """A circuit's structure, ready for values."""

    def __init__(self, netlist: Netlist) -> None:
        if not netlist.nodes():
            raise ModelError("the circuit has no node", "at least one element")
        self.netlist = Netlist()
        self.netlist.elements = dict(netlist.elements)
        self.keys: dict[str, float | None] = {}
        for element in netlist.elements.values():
            if isinstance(element, Transistor):
                self.keys.update({f"{element.name}.{k}": v for k, v in TRANSISTOR_DEFAULTS.items()})
            else:
                self.keys.update(dict.fromkeys(element.name + key for key in _KEYS[type(element)]))
        self._plans: dict[Signature, Plan] = {}

    def solve(
        self,
        values: Mapping[str, Value],
        units: int = 1,
        start: Mapping[str, Value] | Solution | None = None,
        initial: Mapping[str, Value] | None = None,
    ) -> Solution:
        """Find every unit's operating point.

        Parameters
        ----------
        values : mapping
            ``"name"`` or ``"name.key"`` to a number or an array of shape (units,).
        units : int
            How many units.
        start : mapping or Solution, optional
            Node voltages [V] to start from: by node name, or a solution (of this or a like circuit) of one unit or of
            as many units.
        initial : mapping, optional
            Rest voltages [V] of nodes for a cold start; without, supply terminals stand at their set voltage and
            others at 0 V.

        Returns
        -------
        Solution

        Raises
        ------
        ModelError
            When a value is missing, unknown, not finite where it must be, or of the wrong shape.
        """
        given = self._check(values, units)
        plan = self._plan(given)
        rest = _checked_nodes(initial or {}, units)
        guess = self._guess(plan, start, units)
        solver = LinearSolver(plan.structure)
        iterations: Iterations = np.zeros(units, np.int64)
        converged: Mask = np.zeros(units, np.bool_)
        residual = np.empty(units)
        x = np.empty((plan.size, units))
        if guess is None and units >= _PILOT_FROM:
            guess = self._pilot(plan, given, rest)
        for low in range(0, units, CHUNK_UNITS):
            part = slice(low, min(low + CHUNK_UNITS, units))
            batch, cold = _batch(plan, given, part, part.stop - low), _Cold(plan, _parts(rest, part))
            first = (
                None if guess is None else np.array(np.broadcast_to(_columns(guess, part), (plan.size, batch.units)))
            )
            outcome = first_attempts(batch, solver, first, cold)
            x[:, part], converged[part] = outcome.x, outcome.done
            iterations[part], residual[part] = outcome.iterations, outcome.residual_a
        failed = np.flatnonzero(~converged)
        for low in range(0, len(failed), CHUNK_UNITS):
            some = failed[low : low + CHUNK_UNITS]
            outcome = rescue(_batch(plan, given, some, len(some)), solver, _Cold(plan, _parts(rest, some)))
            x[:, some], converged[some] = outcome.x, outcome.done
            iterations[some] += outcome.iterations
            residual[some] = outcome.residual_a
        return Solution(self, plan, given, x, converged, iterations, residual)

    def _check(self, values: Mapping[str, Value], units: int) -> dict[str, Array]:
        if units < 1:
            raise ModelError(f"{units} units were asked for", "at least one")
        result: dict[str, Array] = {}
        for key, value in values.items():
            if key not in self.keys:
                near = difflib.get_close_matches(key, self.keys, 1)
                raise ModelError(f"the circuit has no value {key!r}", near[0] if near else "a name of its elements")
            array = np.asarray(value, dtype=np.float64).reshape(-1)
            if len(array) not in (1, units):
                raise ModelError(f"{key} has {len(array)} values", f"one, or one for each of the {units} units")
            if np.isnan(array).any():
                raise ModelError(f"{key} is not a number in {int(np.isnan(array).sum())} units", "a number")
            result[key] = array
        for key, default in self.keys.items():
            if key not in result:
                if default is None:
                    raise ModelError(f"the circuit's value {key!r} is missing", "a value for every element")
                result[key] = np.array([default])
        return result

    def _plan(self, values: Mapping[str, Array]) -> Plan:
        def made(name: str) -> tuple[bool, bool, bool]:
            collector, base, emitter = (bool((values[f"{name}.{key}"] > 0.0).any()) for key in ("RC", "RB", "RE"))
            return collector, base, emitter

        signature = tuple(made(e.name) for e in self.netlist.elements.values() if isinstance(e, Transistor))
        if signature not in self._plans:
            self._plans[signature] = Plan(self.netlist, signature)
        return self._plans[signature]

    def _guess(self, plan: Plan, start: Mapping[str, Value] | Solution | None, units: int) -> Array | None:
        if start is None:
            return None
        if isinstance(start, Solution):
            if start.units not in (1, units):
                raise ModelError(f"the start has {start.units} units", f"one, or {units}")
            if start.plan.names == plan.names:
                return start.x
            start = {name: start.x[k] for name, k in start.plan.index.items() if k < start.plan.size}
        known = _checked_nodes(start, units)
        guess = np.zeros((plan.size, units))
        for name, k in plan.index.items():
            if k < plan.size and name in known:
                guess[k] = known[name]
        for row, (name, parameter, outside) in enumerate(plan.internal, plan.nodes - len(plan.internal)):
            if f"{name}\x00{parameter}" not in known and outside >= 0:
                guess[row] = guess[outside]
        return guess

    def _pilot(self, plan: Plan, values: Mapping[str, Array], rest: Mapping[str, Array]) -> Array | None:
        """Solve a unit of median values, for the others to start from."""
        batch = Batch(plan, {key: np.array([np.median(v)]) for key, v in values.items()}, 1)
        cold = _Cold(plan, {key: np.array([np.median(v)]) for key, v in rest.items()})
        outcome = first_attempts(batch, LinearSolver(plan.structure), None, cold)
        return outcome.x if outcome.done[0] else None


def _parts(arrays: Mapping[str, Array], part: slice | Index) -> dict[str, Array]:
    return {key: array if len(array) == 1 else array[part] for key, array in arrays.items()}


def _batch(plan: Plan, values: Mapping[str, Array], part: slice | Index, units: int) -> Batch:
    return Batch(plan, _parts(values, part), units)


def _columns(array: Array, part: slice | Index) -> Array:
    return array if array.shape[1] == 1 else array[:, part]


def _checked_nodes(volts: Mapping[str, Value], units: int) -> dict[str, Array]:
    result = {name: np.asarray(v, dtype=np.float64).reshape(-1) for name, v in volts.items()}
    for name, array in result.items():
        if len(array) not in (1, units):
            raise ModelError(f"the start of node {name!r} has {len(array)} values", f"one, or {units}")
    return result


class _Cold:
    """Where a batch starts when nothing better is known."""

    def __init__(self, plan: Plan, rest: Mapping[str, Array]) -> None:
        self._plan = plan
        self._rest = rest

    def __call__(self, batch: Batch) -> tuple[Array, Arguments]:
        plan = self._plan
        x = np.zeros((plan.size, batch.units))
        for name, volts in self._rest.items():
            k = plan.index.get(name, plan.size)
            if k < plan.size and len(volts) in (1, batch.units):
                x[k] = volts
        for row, element in enumerate(plan.sigmoids):
            if isinstance(element, Supply):
                plus, minus = plan.index[element.plus], plan.index[element.minus]
                if element.minus == GROUND:
                    x[plus] = batch.zero[row]
                elif element.plus == GROUND:
                    x[minus] = -batch.zero[row]
        for row, (_, _, outside) in enumerate(plan.internal, plan.nodes - len(plan.internal)):
            if outside >= 0:
                x[row] = x[outside]
        arguments = batch.arguments(x)
        arguments.vbe[:] = _START_VBE_V
        arguments.vbc[:] = _START_VBC_V
        return x, arguments


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
        compiled: Compiled,
        plan: Plan,
        values: dict[str, Array],
        x: Array,
        converged: Mask,
        iterations: Iterations,
        residual_a: Array,
    ) -> None:
        self.compiled = compiled
        self.plan = plan
        self.values = values
        self.x = x
        self.units = x.shape[1]
        self.converged = converged
        self.iterations = iterations
        self.residual_a = residual_a

    def voltage(self, node: str) -> Array:
        """Voltage [V] of a node to the reference, shape (units,)."""
        if node == GROUND:
            return np.zeros(self.units)
        if node not in self.plan.index:
            raise ModelError(f"the circuit has no node {node!r}", "one of " + ", ".join(self.compiled.netlist.nodes()))
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
        with np.errstate(all="ignore"):
            g = devices.gummel_poon(
                polarity * (base - full[self.plan.te[k]]),
                polarity * (base - full[self.plan.tc[k]]),
                devices.junctions_at_temperature(parameters),
            )
        vbe = polarity * self.between(e.base, e.emitter)
        vce = polarity * self.between(e.collector, e.emitter)
        return Operating(g.ic, g.ib, g.ic + g.ib, vbe, vce, vce * g.ic + vbe * g.ib)

    def _element(self, name: str) -> Element:
        try:
            return self.compiled.netlist.elements[name]
        except KeyError:
            raise ModelError(f"the circuit has no element {name!r}", "one of its elements") from None
