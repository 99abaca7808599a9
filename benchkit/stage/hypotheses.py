"""Hypotheses about units: every fault of the table, solved for a layout of readings and fitted to them.

A `Library` holds, for one layout, each hypothesis's nominal unit and a few drawn ones with their readings and slopes. It
is made once and serves every unit that is read in the same way. A unit's readings start each hypothesis from the member
that comes nearest; hypotheses that are hopeless even to first order are not pursued, unless nothing else explains the
readings.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from benchkit.stage.design import Design
from benchkit.stage.draws import Array
from benchkit.stage.faults import HEALTHY, faults_of, prior_of
from benchkit.stage.fitting import Data, Fit, fit, step_from
from benchkit.stage.readouts import Index, Mask
from benchkit.stage.unit_model import Joint, Layout, UnitModel

DRAWN = 3
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
        count = len(self.model.coordinates)
        centre = np.zeros((count, many))
        first = self.model.at(centre, self.faults)
        rng = np.random.default_rng(LIBRARY_SEED)
        drawn = np.repeat(rng.standard_normal((count, DRAWN)), many, axis=1)
        again = np.flatnonzero(~first.good)
        z = np.concatenate([drawn, centre[:, again]], axis=1)
        whose = np.concatenate([np.tile(np.arange(many), DRAWN), again])
        rest = self.model.at(z, [self.faults[k] for k in whose], first.take(whose))
        self.z = np.concatenate([centre, drawn], axis=1)
        nominal = _replaced(first, again, rest.take(np.arange(DRAWN * many, len(whose))))
        self.joint = joined(nominal, rest.take(np.arange(DRAWN * many)))
        self.whose = np.tile(np.arange(many), DRAWN + 1)


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
        np.concatenate([first.good, second.good]), tuple(solutions),
    )  # fmt: skip


def _replaced(joint: Joint, where: Index, other: Joint) -> Joint:
    every = len(joint.good)
    both = joined(joint, other)
    index = np.arange(every)
    index[where] = every + np.arange(len(where))
    return both.take(index)


PURSUED = 16
"""Hypotheses that are fitted in any case: so many of those that, to first order, explain the readings best."""
WITHIN = 50.0
"""Others are fitted when, to first order, they come this near to the best one's cost."""
EXPLAINED = 3.0
"""A cost above so many a reading explains nothing: then the others are fitted too."""


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
    """

    log_posterior: Array
    row: Index
    fit: Fit


def fit_hypotheses(lib: Library, data: Data) -> Fitted:
    """Fit the hypotheses that can matter to every set of readings.

    Parameters
    ----------
    data : Data
        One row a set.
    """
    sets, many = len(data.y), len(lib.faults)
    members = len(lib.whose) // many
    nearest, promised, evidence = np.empty((sets, many), np.intp), np.empty((sets, many)), np.empty((sets, many))
    for number in range(sets):
        # How far the unit would have to go from each member, and what would be left then: the nearest member starts.
        one = data.take(np.full(many * members, number))
        aim, cost, log_determinant = step_from(one, lib.z, lib.joint, lib.model.most)
        away = ((np.clip(aim, -6.0, 6.0) - lib.z) ** 2).sum(axis=0)
        score = np.where(lib.joint.good, cost + away, np.inf).reshape(members, many)
        best = score.argmin(axis=0) * many + np.arange(many)
        nearest[number], promised[number] = best, np.where(lib.joint.good[best], cost[best], np.inf)
        evidence[number] = -0.5 * (promised[number] + log_determinant[best])
    order = promised.argsort(axis=1)
    pursue = promised <= promised.min(axis=1, keepdims=True) + WITHIN
    np.put_along_axis(pursue, order[:, :PURSUED], True, axis=1)
    pursue &= np.isfinite(promised)
    first = _fit(lib, data, nearest, pursue)
    costs = np.full((sets, many), np.inf)
    costs[pursue] = first.cost
    unexplained = costs.min(axis=1) > EXPLAINED * data.y.shape[1]
    rest = ~pursue & unexplained[:, None] & np.isfinite(promised)
    row = np.full((sets, many), -1, np.intp)
    row[pursue] = np.arange(len(first.cost))
    whole = first
    if rest.any():
        second = _fit(lib, data, nearest, rest)
        row[rest] = len(first.cost) + np.arange(len(second.cost))
        whole = Fit(
            np.concatenate([first.z, second.z], axis=1), joined(first.joint, second.joint),
            np.concatenate([first.cost, second.cost]), np.concatenate([first.log_evidence, second.log_evidence]),
        )  # fmt: skip
    evidence[row >= 0] = whole.log_evidence[row[row >= 0]]
    posterior = evidence + lib.log_prior
    return Fitted(posterior - posterior.max(axis=1, keepdims=True), row, whole)


def _fit(lib: Library, data: Data, nearest: Index, pursue: Mask) -> Fit:
    which_set, which = np.nonzero(pursue)
    index = nearest[which_set, which]
    faults = [lib.faults[k] for k in which]
    return fit(lib.model, data.take(which_set), faults, lib.z[:, index], lib.joint.take(index))
