"""What fitted hypotheses have to say: posterior probabilities, what is alike, what stays unseen, what to probe next.

`benchkit.stage.suspects` says what the words mean; this is how they are worked out: from the fits, and to first order
around them. Around its fit a hypothesis k expects readings y ~ N(m_k, G_k) before anything was read, with m_k = f_k -
S_k z_k and G_k = S_k S_k^T + R. From the likeliest unit of i, readings f_i + n with fresh noise n ~ N(0, R) are
expected; the expected evidence of k for them is

    E_i[log p_k] = -(f_i - m_k)^T G_k^-1 (f_i - m_k)/2 - tr(G_k^-1 R)/2 - log det(G_k)/2,

and D_ik = E_i[log p_i] - E_i[log p_k] is the logarithm of the expected Bayes factor. i and k are alike when it is below
log 3 both ways.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from statistics import NormalDist

import numpy as np

from benchkit.errors import ModelError
from benchkit.quantities import show
from benchkit.stage.draws import Array
from benchkit.stage.faults import HEALTHY, Fault
from benchkit.stage.fitting import OVERLOAD_SHARE, UNREAD, Data, in_uncertainties, residual
from benchkit.stage.hypotheses import Fitted, Library, fit_hypotheses
from benchkit.stage.observations import Conditions
from benchkit.stage.points import find_point
from benchkit.stage.readouts import Index, Matrix
from benchkit.stage.suspicion import Evidence, Probe, Suspect, Suspicion
from benchkit.stage.unit_model import Joint, UnitModel, layout_of, own

BAYES_FACTOR = 3.0
"""Below this expected Bayes factor two hypotheses can't be told apart."""
MOST_ALIKE = 3
MOST_COMPARED = 16
LEAST_COMPARED = 1e-5
"""Hypotheses of at least this probability are compared with each other."""
WELL_REFUTED = 3.0
"""A fault is not unseen when the readings speak against it by more than this (nats)."""
SURELY_HEALTHY = 0.9
WELL_EXPLAINED = 3.0
"""A best fit that costs more than so many times what it should explains the readings badly."""
MOST_PROBES = 5
LEAST_GAIN_BITS = 0.01
PROBED_HYPOTHESES = 10
TYPICAL_HYPOTHESES = 6
MOST_EVIDENCE = 3

PROBE_SHARE = 5e-4
PROBE_FLOOR = {"V": 50e-6, "A": 50e-6, "ohm": 0.02, "degC": 0.5}
"""Standard uncertainty assumed of a reading that was not taken yet: a share of it, and at least so much."""

_SLICES = 32
_ENDS = [NormalDist().inv_cdf(k / _SLICES) for k in range(1, _SLICES)]
_DENSITIES = np.array([0.0, *(NormalDist().pdf(end) for end in _ENDS), 0.0])
_NODES = _SLICES * (_DENSITIES[:-1] - _DENSITIES[1:])
"""Means of slices of equal probability of the standard normal distribution."""


@dataclass
class _Views:
    """Hypotheses linearised around some units, against readings of the uncertainties u; leading axis: hypotheses."""

    f: Matrix
    mean: Matrix
    inverse: Matrix
    log_determinant: Array
    noise: Array

    @classmethod
    def of(cls, f: Matrix, slope: Matrix, z: Array, u: Matrix) -> _Views:
        scaled = in_uncertainties(slope, u)
        gram = scaled @ np.swapaxes(scaled, 1, 2)
        gram[:, range(gram.shape[1]), range(gram.shape[1])] += 1.0
        inverse = np.asarray(np.linalg.inv(gram), dtype=np.float64)
        _, log_determinant = np.linalg.slogdet(gram)
        return cls(
            f=f / u, mean=(f - np.einsum("hrk,kh->hr", slope, z)) / u, inverse=inverse,
            log_determinant=log_determinant, noise=np.trace(inverse, axis1=1, axis2=2),
        )  # fmt: skip

    def over_the_first(self) -> Array:
        """Logarithm of the expected Bayes factor of each hypothesis, were it true, against the first one."""
        own, other = self.f - self.mean, self.f - self.mean[0]
        mine = np.einsum("ks,kst,kt->k", own, self.inverse, own) + self.noise + self.log_determinant
        first = np.einsum("ks,st,kt->k", other, self.inverse[0], other) + self.noise[0] + self.log_determinant[0]
        return np.asarray(0.5 * (first - mine))

    def expected(self, readings: Matrix) -> Matrix:
        """E[log p_k] for readings (scaled, of shape (units, readings)) with fresh noise; shape (units, hypotheses)."""
        off = readings[:, None, :] - self.mean[None]
        square = np.einsum("iks,kst,ikt->ik", off, self.inverse, off)
        return np.asarray(-0.5 * (square + self.noise + self.log_determinant))


class Report:
    """Everything that is said about some units that were read in the same way."""

    def __init__(
        self,
        lib: Library,
        data: Data,
        candidates: Sequence[tuple[Conditions, str]],
        original: Mapping[Conditions, Conditions] | None = None,
        shown: Matrix | None = None,
    ) -> None:
        self.shown = data.y if shown is None else shown
        self.lib, self.data, self.candidates = lib, data, tuple(candidates)
        self.original = original or {}
        self._nominal: tuple[Array, Array] | None = None
        self.solved = np.array([bool(lib.joint.good[lib.whose == k].any()) for k in range(len(lib.faults))])
        if not self.solved.any():
            raise ModelError(
                f"{lib.model.design.name}: no hypothesis has a solution under these conditions", "an operating point",
                "Check rails, limit and trimmer of the readings",
            )  # fmt: skip
        self.fitted = fit_hypotheses(lib, data)
        self.probability = np.exp(self.fitted.log_posterior)
        self.probability[:, ~self.solved] = 0.0
        self.probability /= self.probability.sum(axis=1, keepdims=True)

    def suspicions(self) -> list[Suspicion]:
        """Give one answer a set of readings."""
        typical: tuple[Probe, ...] | None = None
        answers = []
        for number in range(len(self.data.y)):
            if self.probability[number, 0] > SURELY_HEALTHY and self.lib.model.stated:
                # What would tell most about a healthy unit hardly hangs on its readings: worked out once for all.
                typical = self._typical_probes() if typical is None else typical
                probes = typical
            else:
                probes = self._probes(number)
            answers.append(self._one(number, self._hidden(self.data.take(np.array([number]))), probes))
        return answers

    def _one(self, number: int, hidden: Array, probes: tuple[Probe, ...]) -> Suspicion:
        faults, probability = self.lib.faults, self.probability[number]
        order = np.lexsort((np.arange(len(faults)), -probability))
        alike = self._alike(number, order)
        suspects = []
        for place, k in enumerate(order.tolist()):
            evidence = self._evidence(number, k) if k and place < 6 else ()
            others = tuple(faults[j] for j in alike.get(k, ()))
            suspects.append(
                Suspect(fault=faults[k], probability=float(probability[k]), alike=others, evidence=evidence)
            )
        log_posterior = self.fitted.log_posterior[number] - self.lib.log_prior
        # against a unit that can't be healthy, nothing can be said about what healthy would be told from
        refuted = (log_posterior[0] - log_posterior > WELL_REFUTED) & (probability[0] > LEAST_COMPARED)
        unseen = tuple(
            faults[k]
            for k in range(1, len(faults))
            if hidden[k] and not refuted[k] and k != order[0] and self.solved[k]
        )
        unsolved = tuple(faults[k] for k in np.flatnonzero(~self.solved))
        return Suspicion(
            suspects=tuple(suspects), probe_next=probes, unseen=unseen, hypotheses=len(faults), unsolved=unsolved,
            seconds=0.0, explained=self._explained(number),
        )  # fmt: skip

    def _explained(self, number: int) -> bool:
        """Whether the best hypothesis fits, and no reading under power is beyond every number."""
        beyond = ~np.isfinite(self.data.y[number]) & ~np.isfinite(self.lib.model.most)
        return bool(self.fitted.misfit[number] <= WELL_EXPLAINED) and not beyond.any()

    def _compared(self, number: int, order: Index, most: int) -> list[int]:
        """Fitted hypotheses that are probable enough to compare, likeliest first."""
        probability, row = self.probability[number], self.fitted.row[number]
        top = [k for k in order.tolist()[:most] if row[k] >= 0 and probability[k] >= LEAST_COMPARED]
        return [k for k in top if np.isfinite(self.fitted.fit.cost[row[k]])]

    def _views(self, number: int, which: list[int]) -> _Views:
        fit, rows = self.fitted.fit, self.fitted.row[number][which]
        _, u = residual(self.data.take(np.full(len(rows), number)), fit.joint.take(rows), self.lib.model.most)
        f, slope = self._within(fit.joint.f[rows], fit.joint.slope[rows])
        return _Views.of(f, slope, fit.z[:, rows], u.mean(axis=0, keepdims=True))

    def _within(self, f: Matrix, slope: Matrix) -> tuple[Matrix, Matrix]:
        """Readings as far as the meter shows them: beyond its range they all look alike."""
        over = f >= self.lib.model.most
        return np.minimum(f, self.lib.model.most), np.where(over[:, :, None], 0.0, slope)

    def _alike(self, number: int, order: Index) -> dict[int, list[int]]:
        """Faults that can't be told from each other, nearest first, at most three each, both ways."""
        top = self._compared(number, order, MOST_COMPARED)
        if len(top) < 2:
            return {}
        views = self._views(number, top)
        expected = views.expected(views.f)
        factor = np.diag(expected)[:, None] - expected
        worst = np.maximum(factor, factor.T)
        pairs = [(worst[i, j], i, j) for i in range(len(top)) for j in range(i)]
        result: dict[int, list[int]] = {}
        for far, i, j in sorted(pairs):
            if far >= np.log(BAYES_FACTOR):
                break
            first, second = result.setdefault(top[i], []), result.setdefault(top[j], [])
            if len(first) < MOST_ALIKE and len(second) < MOST_ALIKE:
                first.append(top[j])
                second.append(top[i])
        return result

    def _hidden(self, data: Data) -> Array:
        """Which faults one unit's readings can't show: the median over the members of the library."""
        lib = self.lib
        many = len(lib.faults)
        ends = np.where(np.isfinite(lib.model.most), OVERLOAD_SHARE * lib.model.most, UNREAD)
        u = np.where(np.isfinite(data.y[0]), data.u[0], ends)
        factors = []
        for low in range(0, len(lib.whose), many):
            part = slice(low, low + many)
            joint_f, good = lib.joint.f[part], lib.joint.good[part]
            if not good[0]:
                continue
            views = _Views.of(*self._within(joint_f, lib.joint.slope[part]), lib.z[:, part], u[None])
            factors.append(np.where(good, views.over_the_first(), np.nan))
        if not factors:
            return np.zeros(many, dtype=np.bool_)
        far = np.median(np.nan_to_num(np.array(factors), nan=np.inf), axis=0)
        return np.asarray(far < np.log(BAYES_FACTOR))

    def _stated(self, conditions: Conditions) -> Conditions:
        return self.original.get(conditions, conditions)

    def _healthy(self) -> tuple[Array, Array]:
        """What the nominal healthy unit reads under the conditions that were stated, and how far units spread."""
        joint = self.lib.joint
        if self.original:
            if self._nominal is None:
                stated = [(self._stated(conditions), point) for conditions, point in self.lib.model.readings]
                model = UnitModel(self.lib.model.design, layout_of(stated))
                found = model.at(np.zeros((len(model.coordinates), 1)), [HEALTHY], effort="full")
                at = {key: column for column, key in enumerate(model.readings)}
                columns = [at[key] for key in stated]
                self._nominal = found.f[0, columns], np.sqrt((found.slope[0, columns] ** 2).sum(axis=1))
            return self._nominal
        return joint.f[0], np.sqrt((joint.slope[0] ** 2).sum(axis=1))

    def _evidence(self, number: int, k: int) -> tuple[Evidence, ...]:
        """What speaks most for a suspect, reading by reading."""
        row = self.fitted.row[number, k]
        if row < 0 or not self.lib.joint.good[0]:
            return ()
        y, u = self.data.y[number], self.data.u[number]
        most = np.minimum(self.lib.model.most, 1e30)
        read = np.where(np.isfinite(y), y, most)
        healthy, spread = self._healthy()
        healthy = np.minimum(healthy, most)
        spread = np.hypot(spread, u)
        mine = np.minimum(self.fitted.fit.joint.f[row], most)
        error = np.hypot(u, 1e-4 * np.abs(mine))
        weight = 0.5 * (((read - healthy) / spread) ** 2 - np.minimum(((read - mine) / error) ** 2, 50.0))
        # an overload where no range ends says nothing
        weight[np.isinf(y) & np.isinf(self.lib.model.most)] = 0.0
        best = [int(r) for r in np.argsort(-weight)[:MOST_EVIDENCE] if weight[r] > 0.5]
        return tuple(
            Evidence(
                point=self.lib.model.readings[r][1],
                conditions=self._stated(self.lib.model.readings[r][0]), read=float(self.shown[number, r]),
                expected=_shown(mine[r], most[r]), healthy=_shown(healthy[r], most[r]), weight=float(weight[r]),
            )
            for r in best
        )  # fmt: skip

    def _probes(self, number: int) -> tuple[Probe, ...]:
        """The readings that are expected to tell most about one unit, of those that could still be taken."""
        probability = self.probability[number]
        top = self._compared(number, np.argsort(-probability, kind="stable"), PROBED_HYPOTHESES)
        z = self.fitted.fit.z[:, self.fitted.row[number][top]]
        return self._most_telling(top, z, probability[top], self.data.take(np.full(len(top), number)))

    def _typical_probes(self) -> tuple[Probe, ...]:
        """The same for a nominal healthy unit: what tells it from the likeliest of the faults that are not seen yet."""
        lib = self.lib
        f = np.minimum(lib.joint.f[0], lib.model.most)
        floor = np.array([PROBE_FLOOR[find_point(lib.model.design, point).unit] for _, point in lib.model.readings])
        data = Data(f[None], np.hypot(PROBE_SHARE * np.abs(f), floor)[None])
        hidden = self._hidden(data)
        order = np.argsort(-lib.log_prior, kind="stable")
        top = [0, *(k for k in order.tolist() if k and hidden[k] and self.solved[k])][:TYPICAL_HYPOTHESES]
        z = np.zeros((len(lib.model.coordinates), len(top)))
        return self._most_telling(top, z, np.exp(lib.log_prior[top]), data.take(np.zeros(len(top), np.intp)))

    def _most_telling(self, top: list[int], fitted_z: Array, probability: Array, data: Data) -> tuple[Probe, ...]:
        """The readings that tell most about which of some hypotheses holds, each with its unit and its readings."""
        lib = self.lib
        if not self.candidates or len(top) < 2:
            return ()
        known = len(lib.model.readings)
        held = {stated: now for now, stated in self.original.items()}
        candidates = list(dict.fromkeys(
            (own(held.get(conditions, conditions), point), point) for conditions, point in self.candidates
        ))  # fmt: skip
        model = wider(lib, candidates)
        z = np.zeros((len(model.coordinates), len(top)))
        z[: len(lib.model.coordinates)] = fitted_z
        faults = [lib.faults[k] for k in top]
        there = model.at(z, faults)
        usable = there.good
        if np.count_nonzero(usable) < 2:
            return ()
        at = {key: column for column, key in enumerate(model.readings)}
        columns = [at[key] for key in lib.model.readings]
        wanted = [at[key] for key in candidates if key in at and at[key] not in columns]
        read = Joint(there.f[:, columns], there.slope[:, columns], there.doubt[:, columns], usable, z, ())
        _, u = residual(data, read, lib.model.most)
        scaled = in_uncertainties(there.slope[:, columns], u)
        gram = scaled @ np.swapaxes(scaled, 1, 2)
        gram[:, range(known), range(known)] += 1.0
        slope = there.slope[:, wanted]
        solved = np.linalg.solve(gram, scaled @ np.swapaxes(slope, 1, 2))
        across = np.einsum("hqk,hrk,hrq->hq", slope, scaled, solved)
        variance = np.maximum((slope**2).sum(axis=2) - across, 0.0)
        most = model.most[wanted]
        units = [find_point(model.design, model.readings[column][1]).unit for column in wanted]
        floor = np.array([PROBE_FLOOR[unit] for unit in units])
        mean = np.minimum(there.f[:, wanted], most)
        sd = np.sqrt(variance + np.hypot(PROBE_SHARE * np.abs(mean), floor) ** 2)
        weight = probability * usable
        gains = information_bits(weight / weight.sum(), mean, sd)
        probes = []
        for q in np.argsort(-gains, kind="stable")[:MOST_PROBES].tolist():
            if gains[q] < LEAST_GAIN_BITS:
                break
            conditions, point = model.readings[wanted[q]]
            why = _why(faults, weight / weight.sum(), mean[:, q], sd[:, q], most[q], units[q])
            probes.append(Probe(point=point, conditions=self._stated(conditions), gain_bits=float(gains[q]), why=why))
        return tuple(probes)


def _shown(value: float, most: float) -> float:
    return float("inf") if value >= most else float(value)


def wider(lib: Library, candidates: Sequence[tuple[Conditions, str]]) -> UnitModel:
    """The model of a layout with further readings; kept."""
    key = tuple(candidates)
    if key not in lib.wider:
        lib.wider[key] = UnitModel(lib.model.design, layout_of((*lib.model.readings, *key)))
    return lib.wider[key]


def information_bits(probability: Array, mean: Matrix, sd: Matrix) -> Array:
    """Expected information of each reading about which hypothesis holds.

    Parameters
    ----------
    probability : array of shape (hypotheses,)
    mean, sd : arrays of shape (hypotheses, readings)
        What each hypothesis expects, normally distributed.

    Returns
    -------
    array of shape (readings,)
        Mutual information in bits, by an average over slices of equal probability under each hypothesis: within 0.1,
        however much the widths differ (Gauss's nodes fail where a narrow hypothesis lies inside a wide one). Hypotheses
        of probability 0 have no part.
    """
    held = probability > 0.0
    probability, mean, sd = probability[held], mean[held], sd[held]
    at = mean[:, None, :] + sd[:, None, :] * _NODES[None, :, None]
    off = (at[:, :, None, :] - mean[None, None]) / sd[None, None]
    log_density = -0.5 * off**2 - np.log(sd)[None, None]
    mine = np.einsum("hkhq->hkq", log_density)
    top = log_density.max(axis=2)
    mixture = top + np.log(np.einsum("j,hkjq->hkq", probability, np.exp(log_density - top[:, :, None])))
    return np.asarray(np.einsum("h,hkq->q", probability, mine - mixture) / (_SLICES * np.log(2.0)))


def _why(faults: Sequence[Fault], weight: Array, mean: Array, sd: Array, most: float, unit: str) -> str:
    """In words what a reading would tell: what the likeliest hypothesis and the ones that differ from it would read."""

    def words(k: int) -> str:
        shown = "overload" if mean[k] >= most else show(float(mean[k]), unit, 3)
        name = "a healthy unit" if faults[k] == HEALTHY else f"{faults[k].part} {faults[k].fault}"
        return f"{name} would read {shown}"

    order = np.argsort(-weight, kind="stable")
    first = int(order[0])
    apart = np.abs(mean - mean[first]) / np.hypot(sd, sd[first])
    others = [int(k) for k in order[1:] if apart[k] > 2.0][:2]
    return "; ".join(words(k) for k in (first, *others))


__all__ = ["Fitted", "Report", "information_bits"]
