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
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit.devices import Array, Mask
from benchkit.circuit.elimination import Index
from benchkit.circuit.equations import Arguments, Batch, Saturating
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
)
from benchkit.circuit.newton import Iterations, LinearSolver, first_attempts, iterate, rescue
from benchkit.circuit.plan import Plan, Signature
from benchkit.circuit.solution import Operating, Solution
from benchkit.errors import ModelError

__all__ = ["Compiled", "Operating", "Solution", "Value", "compile_netlist"]

Value = float | int | Sequence[float] | NDArray[Any]

Effort = Literal["start", "borrow", "full"]

CHUNK_UNITS = 2000
"""Units solved together: enough to outweigh the interpreter's overhead, few enough to stay in the cache."""
_PILOT_FROM = 32
_LENDERS = 4
_NEIGHBOURS = 2
_TURNS = {"start": 0, "borrow": 2, "full": 1}
"""How often units that failed try others' solutions."""
_BORROWERS = 100
_LENT_ITERATIONS = 15
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
        self._defaults = {key: None if v is None else np.array([v]) for key, v in self.keys.items()}
        for default in self._defaults.values():
            if default is not None:
                default.flags.writeable = False  # every solution of this circuit holds the same ones
        self._supplies = [e.name for e in self.netlist.elements.values() if isinstance(e, Supply)]
        self._transistors = [e.name for e in self.netlist.elements.values() if isinstance(e, Transistor)]
        self._plans: dict[Signature, Plan] = {}

    def solve(
        self,
        values: Mapping[str, Value],
        units: int = 1,
        start: Mapping[str, Value] | Solution | None = None,
        initial: Mapping[str, Value] | None = None,
        effort: Effort = "full",
        kin: Index | None = None,
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
        effort : "start", "borrow" or "full"
            What is done for units that are hard: Newton's method from their start and no more; from their start, from
            rest and from other units' solutions; or the whole recipe, which can be slow.
        kin : array of int, shape (units,), optional
            Groups, numbered from 0: units start from solutions of their own group only, so that no group's solutions
            hang on which others are solved with it. Without, all are one group.

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
            guess = self._pilot(plan, given, rest) if kin is None else self._pilots(plan, given, rest, kin)
        for low in range(0, units, CHUNK_UNITS):
            part = slice(low, min(low + CHUNK_UNITS, units))
            batch, cold = _batch(plan, given, part, part.stop - low), _Cold(plan, _parts(rest, part))
            outcome = first_attempts(
                batch, solver, None if guess is None else guess.of(part, batch), None if effort == "start" else cold
            )
            x[:, part], converged[part] = outcome.x, outcome.done
            iterations[part], residual[part] = outcome.iterations, outcome.residual_a
        self._borrow(plan, given, solver, x, converged, iterations, residual, _TURNS[effort], kin)
        failed = np.flatnonzero(~converged & (effort == "full"))
        for low in range(0, len(failed), CHUNK_UNITS):
            some = failed[low : low + CHUNK_UNITS]
            outcome = rescue(_batch(plan, given, some, len(some)), solver, _Cold(plan, _parts(rest, some)))
            x[:, some], converged[some] = outcome.x, outcome.done
            iterations[some] += outcome.iterations
            residual[some] = outcome.residual_a
        return Solution(self.netlist, plan, given, x, converged, iterations, residual)

    def _borrow(
        self, plan: Plan, given: Mapping[str, Array], solver: LinearSolver, x: Array, converged: Mask,
        iterations: Iterations, residual: Array, turns: int, kin: Index | None,
    ) -> None:  # fmt: skip
        """Let units that failed start from the solutions of others, many of them at once; what succeeds is kept.

        Units with different faults stand in different states, and one of those is often near; so may a neighbour be,
        when units of a kind stand beside each other.
        """
        failed = np.flatnonzero(~converged)
        if not turns or not len(failed):
            return
        group = np.zeros(len(converged), np.intp) if kin is None else kin
        solved = {k: np.flatnonzero(converged & (group == k)) for k in np.unique(group[failed]).tolist()}
        failed = failed[[len(solved[k]) > 0 for k in group[failed].tolist()]]
        for turn in range(turns):
            for low in range(0, len(failed), _BORROWERS):
                some = failed[low : low + _BORROWERS]
                lent = [_lenders(solved[int(group[unit])], int(unit), turn, turns) for unit in some]
                whose = np.repeat(np.arange(len(some)), [len(one) for one in lent])
                batch = _batch(plan, given, some[whose], len(whose))
                with np.errstate(all="ignore"):
                    outcome = iterate(batch, solver, x[:, np.concatenate(lent)], most=_LENT_ITERATIONS)
                spent = np.zeros(len(some), np.int64)
                np.maximum.at(spent, whose, outcome.iterations)
                iterations[some] += spent
                done = np.flatnonzero(outcome.done)
                good, first = np.unique(whose[done], return_index=True)
                x[:, some[good]] = outcome.x[:, done[first]]
                residual[some[good]] = outcome.residual_a[done[first]]
                converged[some[good]] = True
            failed = failed[~converged[failed]]
            if not len(failed):
                return

    def _check(self, values: Mapping[str, Value], units: int) -> dict[str, Array]:
        if units < 1:
            raise ModelError(f"{units} units were asked for", "at least one")
        result: dict[str, Array] = {}
        for key, value in values.items():
            if key not in self.keys:
                near = difflib.get_close_matches(key, self.keys, 1)
                raise ModelError(f"the circuit has no value {key!r}", near[0] if near else "a name of its elements")
            array = np.asarray(value, dtype=np.float64).reshape(-1)
            many = len(array)
            if many not in (1, units):
                raise ModelError(f"{key} has {many} values", f"one, or one for each of the {units} units")
            if math.isnan(array.item()) if many == 1 else np.isnan(array).any():
                raise ModelError(f"{key} is not a number in {int(np.isnan(array).sum())} units", "a number")
            result[key] = array
        for name in self._supplies:
            limit = result.get(f"{name}.limit_a")
            if limit is not None and not (limit > 0.0).all():
                raise ModelError(f"{name}.limit_a is {float(limit.min())!r} A", "a current above 0 A")
        for key, default in self._defaults.items():
            if key not in result:
                if default is None:
                    raise ModelError(f"the circuit's value {key!r} is missing", "a value for every element")
                result[key] = default
        return result

    def _plan(self, values: Mapping[str, Array]) -> Plan:
        def made(name: str) -> tuple[bool, bool, bool]:
            collector, base, emitter = (bool((values[f"{name}.{key}"] > 0.0).any()) for key in ("RC", "RB", "RE"))
            return collector, base, emitter

        signature = tuple(made(name) for name in self._transistors)
        if signature not in self._plans:
            self._plans[signature] = Plan(self.netlist, signature)
        return self._plans[signature]

    def _guess(self, plan: Plan, start: Mapping[str, Value] | Solution | None, units: int) -> _Guess | None:
        if start is None:
            return None
        held: dict[str, tuple[Array, ...]] = {}
        if isinstance(start, Solution):
            if start.units not in (1, units):
                raise ModelError(f"the start has {start.units} units", f"one, or {units}")
            held = Saturating(start.plan, start.values, start.units).knees_by_name(start.x)
            if start.plan.names == plan.names:
                return _Guess(start.x, held)
            start = {name: start.x[k] for name, k in start.plan.index.items() if k < start.plan.size}
        known = _checked_nodes(start, units)
        guess = np.zeros((plan.size, units))
        for name, k in plan.index.items():
            if k < plan.size and name in known:
                guess[k] = known[name]
        for row, (name, parameter, outside) in enumerate(plan.internal, plan.nodes - len(plan.internal)):
            if f"{name}\x00{parameter}" not in known and outside >= 0:
                guess[row] = guess[outside]
        return _Guess(guess, held)

    def _pilot(self, plan: Plan, values: Mapping[str, Array], rest: Mapping[str, Array]) -> _Guess | None:
        """Solve a unit of median values, for the others to start from."""
        batch = Batch(plan, {key: np.array([np.median(v)]) for key, v in values.items()}, 1)
        cold = _Cold(plan, {key: np.array([np.median(v)]) for key, v in rest.items()})
        outcome = first_attempts(batch, LinearSolver(plan.structure), None, cold)
        return _Guess(outcome.x, batch.knees_by_name(outcome.x)) if outcome.done[0] else None

    def _pilots(self, plan: Plan, values: Mapping[str, Array], rest: Mapping[str, Array], kin: Index) -> _Guess | None:
        """Solve a unit of median values for each group that is large enough, for the group to start from."""
        sizes = np.bincount(kin)
        large = np.flatnonzero(sizes >= _PILOT_FROM)
        if not len(large):
            return None

        def middles(arrays: Mapping[str, Array]) -> dict[str, Array]:
            return {
                key: array if len(array) == 1 else np.array([np.median(array[kin == k]) for k in large])
                for key, array in arrays.items()
            }

        batch, cold = Batch(plan, middles(values), len(large)), _Cold(plan, middles(rest))
        outcome = first_attempts(batch, LinearSolver(plan.structure), None, cold)
        x = np.full((plan.size, len(sizes)), np.nan)  # from which nothing comes: then the cold start has its turn
        x[:, large] = np.where(outcome.done, outcome.x, np.nan)
        knees = {}
        for name, rows in batch.knees_by_name(outcome.x).items():
            knees[name] = tuple(_spread(row, large, len(sizes))[kin] for row in rows)
        return _Guess(x[:, kin], knees)


def _spread(row: Array, where: Index, many: int) -> Array:
    result = np.full(many, np.nan)
    result[where] = row
    return result


def _lenders(solved: Index, unit: int, turn: int, turns: int) -> Index:
    """Whose solutions a unit tries: each turn some from everywhere, and the nearest units of the rest."""
    step = -(-len(solved) // _LENDERS)
    nearest = solved[np.argsort(np.abs(solved - unit), kind="stable")]
    return np.concatenate([solved[turn * step // turns :: step], nearest[turn::turns][:_NEIGHBOURS]])


def _parts(arrays: Mapping[str, Array], part: slice | Index) -> dict[str, Array]:
    return {key: array if len(array) == 1 else array[part] for key, array in arrays.items()}


def _batch(plan: Plan, values: Mapping[str, Array], part: slice | Index, units: int) -> Batch:
    return Batch(plan, _parts(values, part), units)


@dataclass
class _Guess:
    """Where to start: x of shape (size, 1 or units), and where on its knee each saturating law stood there, if known.

    A servo or a supply starts at the same place on its knee as in the solution that it starts from: at another rest
    voltage or rail its new law, evaluated at the old voltages, has no slope to find the way by.
    """

    x: Array
    knees: dict[str, tuple[Array, ...]]

    def of(self, part: slice, batch: Batch) -> tuple[Array, Arguments | None]:
        """Return the start of some units."""
        one = self.x.shape[1] == 1
        which = np.zeros(batch.units, dtype=np.intp) if one else np.arange(part.start, part.stop)
        x = self.x[:, which]
        if not self.knees:
            return x, None
        at = batch.arguments(x)
        laws = [(e.name, (row,)) for e, row in zip(batch.plan.sigmoids, at.sigmoid, strict=True)]
        servos = zip(batch.plan.servos, at.error, at.compliance, strict=True)
        for name, rows in [*laws, *((e.name, (error, left)) for e, error, left in servos)]:
            for row, known in zip(rows, self.knees.get(name, rows), strict=True):
                row[:] = known if known is row else known[which if len(known) > 1 else 0]
        return x, at


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
