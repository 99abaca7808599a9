"""Hypotheses about units: every fault of the table, solved for a layout of readings and fitted to them.

A `Library` holds, for one layout, each hypothesis's nominal unit and a few drawn ones with their readings and slopes.
It is made once and serves every unit that is read in the same way. A unit's readings start each hypothesis from the
member that comes nearest; hypotheses that are hopeless even to first order are not pursued, unless nothing else
explains the readings.

Where rails are held at their readings (`benchkit.stage.forcing`), every unit's hypotheses stand at rails of its own: a
`Library` for such units is solved for all of them in one batch, and each has rows of its own there.

What is said of a unit doesn't hang on which others are worked out beside it: nothing here passes from one set of
readings to another, and the solver lends solutions within one set only.
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
from benchkit.stage.readouts import Index, Mask, Matrix
from benchkit.stage.unit_model import Joint, Layout, UnitModel

DRAWN = 1
"""Units drawn for each hypothesis, beside its nominal one, to start from."""
LIBRARY_SEED = 20261


class Library:
    """Every hypothesis's nominal unit and a few drawn ones, solved for one layout.

    Parameters
    ----------
    design : Design
    layout : Layout
    rails_v : array of shape (sets, entries of the layout, 2), optional
        For sets of readings with held rails: where they are held in each set (`UnitModel.at`).

    Attributes
    ----------
    faults : tuple of Fault
        `HEALTHY` and all faults of the design.
    log_prior : array of shape (hypotheses,)
    z : array of shape (coordinates, members * hypotheses)
        Member after member; the first one nominal. With held rails the same again for every set.
    whose : array of int
        Number of each one's hypothesis.
    joint : Joint
        Their readings.
    """

    def __init__(self, design: Design, layout: Layout, rails_v: Matrix | None = None) -> None:
        self.model = UnitModel(design, layout)
        self.wider: dict[object, UnitModel] = {}
        self.faults = (HEALTHY, *faults_of(design))
        priors = np.array([1.0, *(prior_of(design, fault) for fault in self.faults[1:])])
        priors[1:] /= 1.0 - priors[1:]
        self.log_prior = np.log(priors / priors.sum())
        many, sets = len(self.faults), 1 if rails_v is None else len(rails_v)
        count, members = len(self.model.coordinates), DRAWN + 1
        self._each = 0 if rails_v is None else many * members
        """How many rows further the next set's begin."""
        z = np.zeros((count, members, many))
        z[:, 1:] = np.random.default_rng(LIBRARY_SEED).standard_normal((count, DRAWN))[:, :, None]
        self.z = np.tile(z.reshape(count, -1), sets)
        self.whose = np.tile(np.arange(many), members * sets)
        which_set = np.repeat(np.arange(sets), many * members)
        member = np.tile(np.repeat(np.arange(members), many), sets)
        nominal, drawn = np.flatnonzero(member == 0), np.flatnonzero(member > 0)

        def solved(rows: Index, start: Joint | None, effort: Effort = "borrow") -> Joint:
            own_v, kin = None if rails_v is None else rails_v[which_set[rows]], which_set[rows]
            faults = [self.faults[k] for k in self.whose[rows]]
            return self.model.at(self.z[:, rows], faults, start, effort, rails_v=own_v, kin=kin)

        first = solved(nominal, None)
        again = np.flatnonzero(~first.good)
        # the nominal unit of each drawn one's set and hypothesis
        near = (which_set * many + self.whose)[drawn]
        rest = solved(np.concatenate([drawn, nominal[again]]), first.take(np.concatenate([near, again])))
        first = _replaced(first, again, rest.take(np.arange(len(drawn), len(drawn) + len(again))))
        left = np.flatnonzero(~first.good)
        if len(left):  # a hypothesis without a unit is no hypothesis: the whole recipe for those few
            first = _replaced(first, left, solved(nominal[left], None, "full"))
        order = np.argsort(np.concatenate([nominal, drawn]))
        self.joint = joined(first, rest.take(np.arange(len(drawn)))).take(order)

    def rows(self, number: int) -> slice:
        """Where the hypotheses of a set of readings stand."""
        low = number * self._each
        return slice(low, low + (self._each or len(self.whose)))

    def view(self, number: int) -> tuple[Array, Joint]:
        """Give the hypotheses of a set of readings, z and readings, the solutions left out."""
        part, joint = self.rows(number), self.joint
        return self.z[:, part], Joint(
            joint.f[part], joint.slope[part], joint.doubt[part], joint.good[part], joint.straight_at[:, part], ()
        )


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
        Rows of the library, the one first from which the unit would have the least far to go for the least that is
        left then.
    promised, evidence : arrays of shape (sets, hypotheses)
        Cost and log evidence that the first one of them promises.
    """
    sets, many = len(data.y), len(lib.faults)
    members = lib.rows(0).stop // many
    starts = np.empty((sets, members, many), np.intp)
    promised, evidence = np.empty((sets, many)), np.empty((sets, many))
    for number in range(sets):
        z, joint = lib.view(number)
        one = data.take(np.full(many * members, number))
        aim, cost, log_determinant = step_from(one, z, joint, lib.model.most)
        away = ((np.clip(aim, -6.0, 6.0) - z) ** 2).sum(axis=0)
        score = np.where(joint.good, cost + away, np.inf).reshape(members, many)
        order = score.argsort(axis=0, kind="stable") * many + np.arange(many)
        first = order[0]
        promised[number] = np.where(joint.good[first], cost[first], np.inf)
        evidence[number] = -0.5 * (promised[number] + log_determinant[first])
        starts[number] = lib.rows(number).start + order
    return starts, promised, evidence


def _fit(lib: Library, data: Data, start: Index, pursue: Mask, effort: Effort = "start") -> tuple[Fit, Index, Index]:
    which_set, which = np.nonzero(pursue)
    index = start[which_set, which]
    faults = [lib.faults[k] for k in which]
    found = fit(lib.model, data.take(which_set), faults, lib.z[:, index], lib.joint.take(index), effort, kin=which_set)
    return found, which_set, which
