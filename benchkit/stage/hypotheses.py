"""Hypotheses about units: every fault of the table, solved for a layout of readings and fitted to them.

A `Library` holds, for one layout, each hypothesis's nominal unit and a few drawn ones with their readings and slopes.
It is made once and serves every unit that is read in the same way. A unit's readings start each hypothesis from the
member that comes nearest; hypotheses that are hopeless even to first order are not pursued, unless nothing else
explains the readings.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from benchkit.circuit.solve import Effort
from benchkit.stage.design import Design
from benchkit.stage.draws import Array
from benchkit.stage.faults import HEALTHY, faults_of, prior_of
from benchkit.stage.fitting import Data, Fit, fit, step_from
from benchkit.stage.readouts import Index, Mask
from benchkit.stage.unit_model import Joint, Layout, UnitModel

DRAWN = 1
"""Units drawn for each hypothesis, beside its nominal one, to start from."""
LIBRARY_SEED = 20261


class Library:
    """Every hypothesis's nominal unit and a few drawn ones, solved for one layout.

    Attributes
    ----------
    faults : tuple of Fault
        `HEALTHY` and all faults of the design.
    log_prior : array of shape (hypotheses,)
    z : array of shape (coordinates, members * hypotheses)
        Member after member; the first one nominal.
    joint : Joint
        Their readings.
    """

    def __init__(self, design: Design, layout: Layout) -> None:
        self.model = UnitModel(design, layout)
        self.wider: dict[object, UnitModel] = {}
        self.faults = (HEALTHY, *faults_of(design))
        priors = np.array([1.0, *(prior_of(design, fault) for fault in self.faults[1:])])
        priors[1:] /= 1.0 - priors[1:]
        self.log_prior = np.log(priors / priors.sum())
        many = len(self.faults)
        drawn_units = DRAWN
        count = len(self.model.coordinates)
        centre = np.zeros((count, many))
        first = self.model.at(centre, self.faults)
        rng = np.random.default_rng(LIBRARY_SEED)
        drawn = np.repeat(rng.standard_normal((count, drawn_units)), many, axis=1)
        again = np.flatnonzero(~first.good)
        z = np.concatenate([drawn, centre[:, again]], axis=1)
        whose = np.concatenate([np.tile(np.arange(many), drawn_units), again])
        rest = self.model.at(z, [self.faults[k] for k in whose], first.take(whose))
        self.z = np.concatenate([centre, drawn], axis=1)
        nominal = _replaced(first, again, rest.take(np.arange(drawn_units * many, len(whose))))
        self.joint = joined(nominal, rest.take(np.arange(drawn_units * many)))
        self.whose = np.tile(np.arange(many), drawn_units + 1)


@lru_cache(maxsize=8)
def library(design: Design, layout: Layout) -> Library:
    """The library of a layout; kept for the next unit with the same layout."""
    return Library(design, layout)


def joined(first: Joint, second: Joint) -> Joint:
    """Readings of more units, one set after the other; solutions are kept point after point."""
    a, b = len(first.good), len(second.good)
    solutions = []
    for one, two in zip(first.solutions, second.solutions, strict=True):
        both = one.joined(two)
        repeats = one.units // a
        order = np.concatenate([
            np.concatenate([k * a + np.arange(a), one.units + k * b + np.arange(b)]) for k in range(repeats)
        ])  # fmt: skip
        solutions.append(both.take(order))
    return Joint(
        np.concatenate([first.f, second.f]), np.concatenate([first.slope, second.slope]),
        np.concatenate([first.doubt, second.doubt]),
        np.concatenate([first.good, second.good]),
        np.concatenate([first.straight_at, second.straight_at], axis=1), tuple(solutions),
    )  # fmt: skip


def _replaced(joint: Joint, where: Index, other: Joint) -> Joint:
    every = len(joint.good)
    both = joined(joint, other)
    index = np.arange(every)
    index[where] = every + np.arange(len(where))
    return both.take(index)


PURSUED = 8
"""Hypotheses that are fitted in any case: so many of those that, to first order, explain the readings best."""
WITHIN = 50.0
"""Others are fitted when, to first order, they come this near to the best one's cost."""
AGAIN = 8
"""So many of the best hypotheses are fitted from other members of the library when nothing explains the readings."""
EXPLAINED = 2.0
"""Costs above so many a reading (and 10) explain nothing: then the others are fitted too, and from other members."""


@dataclass
class Fitted:
    """Hypotheses fitted to sets of readings.

    Attributes
    ----------
    log_posterior : array of shape (sets, hypotheses)
        Up to a constant; hypotheses that were not pursued stand where first order puts them.
    row : array of int of shape (sets, hypotheses)
        Where a hypothesis stands in ``fit``; -1 when it was not pursued.
    fit : Fit
    misfit : array of shape (sets,)
        Cost of the best explanation over what it should be at most; 1 when it is no more than that.
    """

    log_posterior: Array
    row: Index
    fit: Fit
    misfit: Array


def fit_hypotheses(lib: Library, data: Data) -> Fitted:
    """Fit the hypotheses that can matter to every set of readings.

    Parameters
    ----------
    data : Data
        One row a set.
    """
    sets, many = len(data.y), len(lib.faults)
    starts, promised, evidence = _first_order(lib, data)
    order = promised.argsort(axis=1)
    pursue = promised <= promised.min(axis=1, keepdims=True) + WITHIN
    np.put_along_axis(pursue, order[:, :PURSUED], True, axis=1)
    best = _Best(np.full((sets, many), np.inf), np.full((sets, many), -1, np.intp), [])
    solvable = np.isfinite(promised)
    best.add(*_fit(lib, data, starts[:, 0], pursue & solvable))
    # a warm state takes ten solves: there only the most promising are tried, and from one member
    for turn in range(1 if lib.model.warm else starts.shape[1]):
        unexplained = best.cost.min(axis=1, keepdims=True) > EXPLAINED * data.y.shape[1] + 10.0
        chosen = solvable & unexplained & lib.joint.good[starts[:, turn]]
        if not turn:
            chosen &= ~pursue
        if turn or lib.model.warm:
            near = np.zeros_like(chosen)
            for measure in (promised, best.cost):
                np.put_along_axis(near, measure.argsort(axis=1)[:, :AGAIN], True, axis=1)
            chosen &= near
        if chosen.any():
            best.add(*_fit(lib, data, starts[:, turn], chosen, "borrow" if turn else "start"))
    whole = best.fit()
    evidence[best.row >= 0] = whole.log_evidence[best.row[best.row >= 0]]
    # When even the best explanation leaves far more than the uncertainties allow, something is not in the model: then
    # all uncertainties are taken to be too small by one factor, as is usual for a fit that is too bad.
    count = data.y.shape[1]
    misfit = np.maximum(best.cost.min(axis=1) / (count + 3.0 * np.sqrt(2.0 * count)), 1.0)
    misfit[~np.isfinite(misfit)] = 1.0
    posterior = evidence / misfit[:, None] + lib.log_prior
    return Fitted(posterior - posterior.max(axis=1, keepdims=True), best.row, whole, misfit)


@dataclass
class _Best:
    """The best fit so far of every hypothesis to every set, among all that were made."""

    cost: Array
    row: Index
    fits: list[Fit]

    def add(self, fit: Fit, which_set: Index, which: Index) -> None:
        """Take over the fits that are better."""
        before = sum(len(one.cost) for one in self.fits)
        better = fit.cost < self.cost[which_set, which]
        self.cost[which_set[better], which[better]] = fit.cost[better]
        self.row[which_set[better], which[better]] = before + np.flatnonzero(better)
        self.fits.append(fit)

    def fit(self) -> Fit:
        """Give all fits in one."""
        whole = self.fits[0]
        for one in self.fits[1:]:
            whole = Fit(
                np.concatenate([whole.z, one.z], axis=1), joined(whole.joint, one.joint),
                np.concatenate([whole.cost, one.cost]), np.concatenate([whole.log_evidence, one.log_evidence]),
            )  # fmt: skip
        return whole


def _first_order(lib: Library, data: Data) -> tuple[Index, Array, Array]:
    """What each member of the library promises.

    Returns
    -------
    starts : array of int of shape (sets, members, hypotheses)
        Members, the one first from which the unit would have the least far to go for the least that is left then.
    promised, evidence : arrays of shape (sets, hypotheses)
        Cost and log evidence that the first one of them promises.
    """
    sets, many = len(data.y), len(lib.faults)
    members = len(lib.whose) // many
    starts = np.empty((sets, members, many), np.intp)
    promised, evidence = np.empty((sets, many)), np.empty((sets, many))
    for number in range(sets):
        one = data.take(np.full(many * members, number))
        aim, cost, log_determinant = step_from(one, lib.z, lib.joint, lib.model.most)
        away = ((np.clip(aim, -6.0, 6.0) - lib.z) ** 2).sum(axis=0)
        score = np.where(lib.joint.good, cost + away, np.inf).reshape(members, many)
        starts[number] = score.argsort(axis=0, kind="stable") * many + np.arange(many)
        first = starts[number, 0]
        promised[number] = np.where(lib.joint.good[first], cost[first], np.inf)
        evidence[number] = -0.5 * (promised[number] + log_determinant[first])
    return starts, promised, evidence


def _fit(lib: Library, data: Data, start: Index, pursue: Mask, effort: Effort = "start") -> tuple[Fit, Index, Index]:
    which_set, which = np.nonzero(pursue)
    index = start[which_set, which]
    faults = [lib.faults[k] for k in which]
    found = fit(lib.model, data.take(which_set), faults, lib.z[:, index], lib.joint.take(index), effort)
    return found, which_set, which
