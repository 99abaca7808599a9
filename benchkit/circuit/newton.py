"""Newton's method for a batch of units, and what is tried on the units that it fails on.

The recipe, in the order in which a unit meets it
-------------------------------------------------
1. Newton's method, at most 40 iterations. Junction voltages are limited; a sigmoid whose argument changes sign in a
   step is linearised at its centre.
2. Every linear solution is checked: a relative residual above 1e-9 is refined once, then the failing units are solved
   again with another pivot order (at most 6 are kept, each chosen on a failing unit), the rest densely.
3. A unit that fails starts again from its set voltages and typical junction voltages.
4. Then with softened knees: servo and supplies start a million times (the supplies 4,000 times) less sharp, and sharpen
   by half a decade at a time, a third of that step after a failure.
5. Then with a conductance from every node: from zero volts, 0.1 S, a decade less each time, a third of that step after
   a failure, and a last solve without. (What step 4 can't begin on, it begins on so.)
6. Then by pseudo-transient continuation: 0.01 S from every node to its last accepted voltage, a quarter of that after a
   success, four times that after a failure, a dozen failures at most, and a last solve without.
7. Then as in step 4 from knees of other widths and in other steps: which of them a unit finds its way by is a matter of
   luck.

A solution counts only when every law was linearised where it is evaluated, and each node's currents add up to less than
1e-7 of the sum of their magnitudes + 10 pA. Units are done one by one; those that are done leave the batch. An accepted
unit still goes on until it passes with 0.01 pA in place of 10 pA and a step moves no node by more than `_FINAL_STEP_V`,
or by next to nothing: 10 pA are millivolts at a node that hardly anything holds. After `_MOST_POLISHING` short steps,
or `_MOST_WANDERING` longer ones, it is left as it is; one that strayed to where it doesn't pass counts as failed.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import partial

import numpy as np
from numpy.typing import NDArray

from benchkit.circuit.devices import Array, Mask
from benchkit.circuit.elimination import (
    LINEAR_TOLERANCE,
    Factors,
    Index,
    Order,
    Structure,
    choose_order,
    linear_residual,
    solve_dense,
)
from benchkit.circuit.equations import Arguments, Batch, Linearised

MOST_ITERATIONS = 40
MOST_ORDERS = 6
CURRENT_TOLERANCE = 1e-7
CURRENT_FLOOR_A = 10e-12
CONDITION_TOLERANCE_V = 1e-9
DENSE_UP_TO = 40
"""Batches of so few units are solved densely: the interpreter's overhead outweighs the elimination's economy."""
EXACT_SHARE = 1e-3
"""A unit that passes the test this many times better is left as it is; another gets one more step."""
FINE_FLOOR_A = 1e-14
EXACT_FLOOR_A = 1e-17
"""What counts as no current there: 10 uV across the 1e-12 S that may be all that holds a node."""
_SAMPLES = 12
_MOST_ROUNDS = 200
_MOST_STEPS = 40
_LAST_EXPONENT = -12.0
_LEAST_STEP = 0.03
_OTHER_SOFTENINGS = ((5.0, 1.0), (4.5, 1.5), (7.0, 0.25), (5.5, 2.0), (6.5, 0.5))
_INNER_ITERATIONS = 25
_WARM_ITERATIONS = 15
_MOST_SHUNT_S = 1e3
_MOST_FAILURES = 12
_FINAL_STEP_V = 2e-4
_NO_STEP_V = 1e-7
_MOST_POLISHING = 8
_MOST_WANDERING = 32

Iterations = NDArray[np.int64]


class LinearSolver:
    """Solves batches of linear equations of one structure, keeping the pivot orders that it has met."""

    def __init__(self, structure: Structure) -> None:
        self._structure = structure
        self.orders: list[Order] = []

    def solve(self, values: Array, right: Array) -> Array:
        """Solve A x = b for matrices (slots, units) and right-hand sides (size, units); not a number where singular."""
        units = values.shape[1]
        if units <= DENSE_UP_TO:
            return solve_dense(self._structure, values, right)
        if not self.orders:
            self.orders.append(choose_order(self._structure, values[:, :: -(-units // _SAMPLES)]))
        result, bad = self._try(self.orders[0], values, right)
        tried = 1
        while len(bad) > DENSE_UP_TO and tried < MOST_ORDERS:
            if tried == len(self.orders):
                self.orders.append(choose_order(self._structure, values[:, bad[len(bad) // 2]][:, None]))
            again, still = self._try(self.orders[tried], values[:, bad], right[:, bad])
            result[:, bad] = again
            bad = bad[still]
            tried += 1
        if len(bad):
            result[:, bad] = solve_dense(self._structure, values[:, bad], right[:, bad])
        return result

    def _try(self, order: Order, values: Array, right: Array) -> tuple[Array, Index]:
        factors = Factors(order, values)
        result = factors.solve(right)
        residual, scale = linear_residual(self._structure, values, result, right)
        bad = self._bad(residual, scale)
        if bad.any():
            refined = result + factors.solve(residual)
            residual, scale = linear_residual(self._structure, values[:, bad], refined[:, bad], right[:, bad])
            result[:, bad] = refined[:, bad]
            bad[bad] = self._bad(residual, scale)
        return result, np.flatnonzero(bad)

    @staticmethod
    def _bad(residual: Array, scale: Array) -> Mask:
        return np.asarray(~(np.abs(residual) <= LINEAR_TOLERANCE * scale).all(axis=0))


@dataclass
class Outcome:
    """What an attempt came to, per unit: x of shape (size, units), the rest of shape (units,).

    ``residual_a`` is the largest current left over at a node when the unit was last looked at.
    """

    x: Array
    done: Mask
    iterations: Iterations
    residual_a: Array


def iterate(
    batch: Batch,
    solver: LinearSolver,
    x: Array,
    arguments: Arguments | None = None,
    shunt: Array | None = None,
    anchor: Array | None = None,
    most: int = MOST_ITERATIONS,
) -> Outcome:
    """Newton's method on a batch.

    Parameters
    ----------
    x : array, shape (size, units)
        Where to start.
    arguments : Arguments, optional
        What to linearise at in the first step; None: at x.
    shunt, anchor : arrays, shape (units,) and (size, units), optional
        A conductance [S] from every node to that node's voltage in ``anchor``.
    """
    plan, units = batch.plan, batch.units
    outcome = Outcome(x.copy(), np.zeros(units, np.bool_), np.zeros(units, np.int64), np.full(units, np.inf))
    live: Index = np.arange(units)
    spent = np.zeros(units, np.int64)  # on a unit since it was first accepted
    strays = np.zeros(units, np.bool_)
    for iteration in range(most + 1 + _MOST_WANDERING):
        linear = batch.evaluate(x, arguments, start=iteration == 0)
        residual = plan.sum_currents(linear.currents, x, batch.volts)
        if shunt is not None and anchor is not None:
            residual[: plan.nodes] += shunt * (x[: plan.nodes] - anchor[: plan.nodes])
        done, fine, exact = _accepted(batch, linear, x, residual)
        outcome.iterations[live] = iteration
        strays[live] |= outcome.done[live] & ~done
        kept = done | ~outcome.done[live]
        outcome.residual_a[live[kept]] = np.abs(residual[: plan.nodes, kept]).max(axis=0)
        outcome.done[live] |= done
        outcome.x[:, live[kept]] = x[:, kept]
        if exact.all() or (iteration >= most and not outcome.done[live].any()):
            break
        if exact.any():
            index = np.flatnonzero(~exact)
            live, x, residual, done, fine, batch = (
                live[index],
                x[:, index],
                residual[:, index],
                done[index],
                fine[index],
                batch.take(index),
            )
            linear = linear.take(index)
            shunt = None if shunt is None else shunt[index]
            anchor = None if anchor is None else anchor[:, index]
        step = solver.solve(batch.matrix(linear, shunt), -residual)
        finite = np.isfinite(step).all(axis=0)
        x = x + step
        longest_v = np.abs(step[: plan.nodes]).max(axis=0)
        polished = done & finite & (longest_v < _FINAL_STEP_V)
        outcome.x[:, live[polished]] = x[:, polished]
        strays[live[polished]] = False
        spent[live] += outcome.done[live] * np.where(polished, _MOST_WANDERING // _MOST_POLISHING, 1)
        stays = finite & ~(polished & (fine | (longest_v < _NO_STEP_V))) & (spent[live] < _MOST_WANDERING)
        index = np.flatnonzero(stays if iteration < most else stays & outcome.done[live])
        if not len(index):
            break
        arguments = linear.arguments
        if len(index) < len(live):
            live, x, batch, arguments = live[index], x[:, index], batch.take(index), arguments.take(index)
            shunt = None if shunt is None else shunt[index]
            anchor = None if anchor is None else anchor[:, index]
    outcome.done &= ~strays
    return outcome


def _accepted(batch: Batch, linear: Linearised, x: Array, residual: Array) -> tuple[Mask, Mask, Mask]:
    """Which units pass the test, which do at nodes without current too, and to which a step has nothing to add."""
    plan = batch.plan
    done = ~linear.held
    fine, exact = np.zeros_like(done), np.zeros_like(done)
    free = np.flatnonzero(done)
    if not len(free):
        return done, fine, exact
    left = np.abs(residual[:, free])
    scale = plan.sum_currents(linear.currents[:, free], x[:, free], batch.volts[:, free], magnitudes=True)
    floor = np.full((plan.size, 1), CURRENT_FLOOR_A)
    floor[plan.nodes :] = CONDITION_TOLERANCE_V
    done[free] = (left <= CURRENT_TOLERANCE * scale + floor).all(axis=0)
    floor[: plan.nodes] = FINE_FLOOR_A
    fine[free] = (left <= CURRENT_TOLERANCE * scale + floor).all(axis=0)
    floor[: plan.nodes] = EXACT_FLOOR_A / EXACT_SHARE
    exact[free] = (left <= EXACT_SHARE * (CURRENT_TOLERANCE * scale + floor)).all(axis=0)
    return done, fine, exact


def solve_by_softening(
    batch: Batch, solver: LinearSolver, cold: ColdStart, softest: float = 6.0, step: float = 0.5
) -> Outcome:  # fmt: skip
    """Start each unit with knees of servos and supplies that are 10**softest times as wide, and let them narrow."""
    soft = batch.softened(np.full(batch.units, 10.0**softest))
    begun = iterate(soft, solver, *cold(soft), most=_INNER_ITERATIONS)
    _retry(soft, begun, lambda part: solve_by_gmin(part, solver))

    def attempt(part: Batch, x: Array, exponent: Array) -> Outcome:
        return iterate(part.softened(10.0**exponent), solver, x, most=_INNER_ITERATIONS)

    return _continue(batch, attempt, begun, softest, last=0.0, step=step)


def solve_by_gmin(batch: Batch, solver: LinearSolver) -> Outcome:
    """Let a conductance from every node of each unit go from 0.1 S to nothing, from zero volts."""
    zero = np.zeros((batch.plan.size, batch.units))

    def attempt(part: Batch, x: Array, exponent: Array) -> Outcome:
        shunt = np.where(exponent > _LAST_EXPONENT, 10.0**exponent, 0.0)
        return iterate(part, solver, x, None, shunt, zero[:, : part.units], most=_INNER_ITERATIONS)

    first = -1.0
    begun = attempt(batch, zero, np.full(batch.units, first))
    return _continue(batch, attempt, begun, first, last=_LAST_EXPONENT, step=1.0)


def _continue(
    batch: Batch,
    attempt: Callable[[Batch, Array, Array], Outcome],
    begun: Outcome,
    first: float,
    last: float,
    step: float,
) -> Outcome:
    """Lower an exponent from ``first`` to ``last``, per unit: ``step`` at a time, a third of it after a failure."""
    total = Outcome(begun.x, np.zeros(batch.units, np.bool_), begun.iterations, begun.residual_a)
    reached = np.full(batch.units, first)
    steps = np.full(batch.units, step)
    live = np.flatnonzero(begun.done)
    for _ in range(_MOST_STEPS):
        if not len(live):
            break
        aimed = np.maximum(reached[live] - steps[live], last)
        outcome = attempt(batch.take(live), total.x[:, live], aimed)
        total.iterations[live] += outcome.iterations
        good, failed = live[outcome.done], live[~outcome.done]
        total.x[:, good] = outcome.x[:, outcome.done]
        total.residual_a[good] = outcome.residual_a[outcome.done]
        reached[good] = aimed[outcome.done]
        total.done[good] = reached[good] <= last
        steps[good] = np.minimum(steps[good] * 1.5, step)
        steps[failed] /= 3.0
        live = live[~total.done[live] & (steps[live] > step * _LEAST_STEP)]
    return total


def solve_by_pseudo_transient(batch: Batch, solver: LinearSolver) -> Outcome:
    """Let each unit creep: a conductance from every node to that node's last accepted voltage."""
    plan, units = batch.plan, batch.units
    total = _nothing(plan.size, units)
    shunt = np.full(units, 0.01)
    failures = np.zeros(units, np.int64)
    live: Index = np.arange(units)
    for _ in range(_MOST_ROUNDS):
        if not len(live):
            break
        last = shunt[live] < 10.0**_LAST_EXPONENT
        best = total.x[:, live]
        at = np.where(last, 0.0, shunt[live])
        outcome = iterate(batch.take(live), solver, best, None, at, best, most=_INNER_ITERATIONS)
        total.iterations[live] += outcome.iterations
        good, failed = live[outcome.done], live[~outcome.done]
        total.x[:, good] = outcome.x[:, outcome.done]
        total.residual_a[good] = outcome.residual_a[outcome.done]
        total.done[good] = last[outcome.done]
        shunt[good] /= 4.0
        shunt[failed] *= 4.0
        failures[failed] += 1
        live = live[~total.done[live] & (shunt[live] < _MOST_SHUNT_S) & (failures[live] < _MOST_FAILURES)]
    return total


def _nothing(size: int, units: int) -> Outcome:
    return Outcome(
        np.zeros((size, units)), np.zeros(units, np.bool_), np.zeros(units, np.int64), np.full(units, np.inf)
    )


def _keep(total: Outcome, where: Index, outcome: Outcome, which: Mask) -> None:
    total.x[:, where] = outcome.x[:, which]
    total.done[where] = True
    total.residual_a[where] = outcome.residual_a[which]


def first_attempts(
    batch: Batch, solver: LinearSolver, start: tuple[Array, Arguments | None] | None, cold: ColdStart | None
) -> Outcome:
    """Newton's method from a start, if there is one, and then from a cold start, if there is one.

    ``start`` and ``cold`` (of a batch) are x of shape (size, units) and the first arguments.
    """
    with np.errstate(all="ignore"):
        if start is None:
            return iterate(batch, solver, *cold(batch)) if cold else _nothing(batch.plan.size, batch.units)
        total = iterate(batch, solver, *start, most=_WARM_ITERATIONS)
        if cold:
            _retry(batch, total, lambda part: iterate(part, solver, *cold(part)))
    return total


def rescue(batch: Batch, solver: LinearSolver, cold: ColdStart) -> Outcome:
    """Take units that Newton's method failed on through the rest of the recipe."""
    with np.errstate(all="ignore"):
        total = solve_by_softening(batch, solver, cold)
        _retry(batch, total, lambda part: solve_by_gmin(part, solver))
        _retry(batch, total, lambda part: solve_by_pseudo_transient(part, solver))
        for softest, step in _OTHER_SOFTENINGS:
            _retry(batch, total, partial(solve_by_softening, solver=solver, cold=cold, softest=softest, step=step))
    return total


def _retry(batch: Batch, total: Outcome, attempt: Callable[[Batch], Outcome]) -> None:
    left = np.flatnonzero(~total.done)
    if len(left):
        outcome = attempt(batch.take(left))
        total.iterations[left] += outcome.iterations
        _keep(total, left[outcome.done], outcome, outcome.done)


ColdStart = Callable[[Batch], tuple[Array, Arguments]]
