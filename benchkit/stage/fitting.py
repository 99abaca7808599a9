"""Fitting hypotheses to readings: the likeliest unit that each one allows, and how well it explains what was read.

For a hypothesis the readings y of a unit at z are f(z) with the reading's own uncertainty, and z is standard normal
before anything was read. The best z minimises J = |z|^2 + sum ((y - f(z))/u)^2; a Gauss-Newton step from a z with slope
S is z' = S^T (S S^T + R)^-1 (y - f + S z), with R = diag(u^2), the step of an iterated extended Kalman filter (B. M.
Bell, F. W. Cathey, IEEE Transactions on Automatic Control 38 (1993), 294-297, from memory). Steps are halved until J
falls. The evidence is Laplace's approximation at the best z,

    log p(y) = -J/2 - log det(S S^T + R)/2 - (readings/2) log(2 pi),

so that no ensemble limits how finely readings are weighed: thirty of them at 0.03 % are taken at their worth.

A rail that came into its current limit is an event too: near the limit a reading bends from steep to flat, and the
determinant of either side would be wrong for the other.

A reading beyond the meter's range says only that f lies beyond it: it has no part in J while f does. It is an event and
no number, so that it has no density and no part in the determinant of R either.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from benchkit.circuit.solution import Solution
from benchkit.circuit.solve import Effort
from benchkit.stage.draws import Array
from benchkit.stage.faults import Fault
from benchkit.stage.readouts import Index, Mask, Matrix
from benchkit.stage.unit_model import Joint, UnitModel

MOST_STEPS = 12
FARTHEST = 4.5
"""No coordinate is moved farther out than this: beyond lies less than one unit in 100,000."""
ENOUGH = 0.2
"""A step that would lower J by less than this is not taken."""
OVERLOAD_SHARE = 0.01
"""Standard uncertainty of where an overload begins, as a share of it."""
UNREAD = 1e6
STEEPEST = 1e6
MODEL_SHARE = 1e-5
MODEL_FLOOR = 2e-6
"""What the solver itself may be off, as a share and at least (in the reading's unit)."""


@dataclass(frozen=True)
class Data:
    """Readings to explain; arrays of shape (units, readings).

    Attributes
    ----------
    y : array
        Values; infinite for overloads.
    u : array
        Standard uncertainties.
    rails_v : array of shape (units, entries of the layout, 2), optional
        Where rails are held at their readings; see `UnitModel.at`.
    event : array of bool of shape (units, readings), optional
        What is an event and no number, so that it has no part in the determinant.
    """

    y: Matrix
    u: Matrix
    rails_v: Matrix | None = None
    event: Mask | None = None

    def take(self, index: Index) -> Data:
        """Return some of the units."""
        return Data(
            self.y[index], self.u[index], None if self.rails_v is None else self.rails_v[index],
            None if self.event is None else self.event[index],
        )  # fmt: skip


@dataclass
class Fit:
    """The best z of each unit that was looked at; leading axis: units.

    Attributes
    ----------
    z : array of shape (coordinates, units)
    joint : Joint
        Readings there.
    cost : array of shape (units,)
        J there; infinite where nothing could be solved.
    log_evidence : array of shape (units,)
    """

    z: Array
    joint: Joint
    cost: Array
    log_evidence: Array


def residual(data: Data, joint: Joint, most: Array) -> tuple[Matrix, Matrix]:
    """What the model leaves of the readings, and the standard uncertainties that count.

    An overload is taken as a reading at the range's end while f lies below it, and as no reading otherwise.
    """
    f = joint.f
    over = ~np.isfinite(data.y)
    left = np.where(over, 0.0, data.y) - f
    u = np.sqrt(data.u**2 + joint.doubt**2 + (MODEL_SHARE * np.abs(f) + MODEL_FLOOR) ** 2)
    if over.any():
        ends = np.broadcast_to(np.where(np.isfinite(most), most, 0.0), f.shape)
        short = over & np.isfinite(most) & (data.y > 0.0) & (f < ends)
        left = np.where(over, np.where(short, ends - f, 0.0), left)
        u = np.where(over, np.where(short, OVERLOAD_SHARE * ends, UNREAD * (1.0 + np.abs(f))), u)
    return left, u


def cost_of(data: Data, z: Array, joint: Joint, most: Array) -> Array:
    """J of units at z; infinite where they have no readings."""
    left, u = residual(data, joint, most)
    return np.where(joint.good, (z**2).sum(axis=0) + ((left / u) ** 2).sum(axis=1), np.inf)


def in_uncertainties(slope: Matrix, u: Matrix) -> Matrix:
    """Slopes in units of the readings' uncertainties.

    They are held below a million, as where a supply is just about to let go of a rail: beyond it a first order means
    nothing, and the matrices could not be told from singular ones.
    """
    return np.clip(slope / u[:, :, None], -STEEPEST, STEEPEST)


def step_from(data: Data, z: Array, joint: Joint, most: Array) -> tuple[Array, Array, Array]:
    """Gauss-Newton step of every unit.

    Returns
    -------
    z : array of shape (coordinates, units)
    cost : array of shape (units,)
        J there, as far as the slopes hold.
    log_determinant : array of shape (units,)
        Of S S^T + R.
    """
    left, u = residual(data, joint, most)
    scaled = in_uncertainties(joint.slope, u)
    gram = scaled @ np.swapaxes(scaled, 1, 2)
    gram[:, range(gram.shape[1]), range(gram.shape[1])] += 1.0
    aim = (left + np.einsum("urk,ku->ur", joint.slope, z)) / u
    solved = np.linalg.solve(gram, aim[:, :, None])[:, :, 0]
    moved = np.einsum("urk,ur->ku", scaled, solved)
    number = np.isfinite(data.y)
    if data.event is not None:
        number &= ~data.event
        gram[data.event] = 0.0
        np.swapaxes(gram, 1, 2)[data.event] = 0.0
        gram[:, range(gram.shape[1]), range(gram.shape[1])] += data.event
    lower = np.linalg.cholesky(gram)
    log_determinant = 2.0 * np.log(np.diagonal(lower, axis1=1, axis2=2)).sum(axis=1) + 2.0 * (np.log(u) * number).sum(
        axis=1
    )
    return moved, (aim * solved).sum(axis=1), log_determinant


def log_evidence(data: Data, z: Array, joint: Joint, most: Array) -> Array:
    """Laplace's approximation at z, without the constant of pi; minus infinity where there are no readings."""
    _, _, log_determinant = step_from(data, z, joint, most)
    return np.asarray(-0.5 * (cost_of(data, z, joint, most) + log_determinant))


def fit(
    model: UnitModel,
    data: Data,
    faults: Sequence[Fault],
    z: Array,
    joint: Joint,
    effort: Effort = "start",
    most_steps: int = MOST_STEPS,
    kin: Index | None = None,
) -> Fit:
    """Find the best z of every unit from where it stands.

    Parameters
    ----------
    data : Data
        Of as many units as z.
    faults : sequence of Fault
        Each unit's hypothesis.
    z, joint : array, Joint
        Where to start and the readings there; the solutions in ``joint`` are taken over and altered.
    effort : "start" or "borrow"
        What the solver does for units that are hard; a step that it can't solve is halved.
    kin : array of int of shape (units,), optional
        Groups within which units may start from each other's solutions.
    """
    most = model.most
    z = z.copy()
    cost = cost_of(data, z, joint, most)
    f, slope, doubt, good = joint.f.copy(), joint.slope.copy(), joint.doubt.copy(), joint.good.copy()
    straight_at = joint.straight_at.copy()
    solutions = joint.solutions
    live = np.flatnonzero(good)
    share = np.ones(len(good))
    for _ in range(most_steps):
        if not len(live):
            break
        here = Joint(f[live], slope[live], doubt[live], good[live], straight_at[:, live], ())
        some = data.take(live)
        aim, promised, _ = step_from(some, z[:, live], here, most)
        aim = np.clip(aim, -FARTHEST, FARTHEST)
        going = (cost[live] - promised > ENOUGH) & (share[live] > 0.02)
        live, aim = live[going], aim[:, going]
        if not len(live):
            break
        trial = z[:, live] + share[live] * (aim - z[:, live])
        start = Joint(f, slope, doubt, good, straight_at, solutions).take(live)
        some, group = data.take(live), None if kin is None else kin[live]
        found = model.at(trial, [faults[k] for k in live.tolist()], start, effort, some.rails_v, group)
        now = cost_of(some, trial, found, most)
        better = now < cost[live]
        won = live[better]
        taken = np.flatnonzero(better)
        z[:, won], cost[won] = trial[:, better], now[better]
        f[won], slope[won], doubt[won] = found.f[taken], found.slope[taken], found.doubt[taken]
        straight_at[:, won] = found.straight_at[:, taken]
        _put(solutions, won, found, taken, len(good))
        share[won] = np.minimum(1.0, share[won] * 2.0)
        share[live[~better]] *= 0.3
    end = Joint(f, slope, doubt, good, straight_at, solutions)
    return Fit(z, end, cost, log_evidence(data, z, end, most))


def _put(solutions: Sequence[Solution], where: Index, found: Joint, which: Index, units: int) -> None:
    for mine, theirs in zip(solutions, found.solutions, strict=True):
        repeats = theirs.units // len(found.good)
        to = np.concatenate([where + k * units for k in range(repeats)])
        of = np.concatenate([which + k * len(found.good) for k in range(repeats)])
        mine.put(to, theirs, of)
