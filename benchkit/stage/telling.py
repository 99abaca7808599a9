"""What fitted hypotheses have to say: posterior probabilities, what is alike, what stays unseen.

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

import numpy as np

from benchkit.errors import ModelError
from benchkit.stage.draws import Array
from benchkit.stage.faults import HEALTHY
from benchkit.stage.fitting import OVERLOAD_SHARE, UNREAD, Data, in_uncertainties, residual
from benchkit.stage.hypotheses import Library, fit_hypotheses
from benchkit.stage.observations import Conditions
from benchkit.stage.points import find_point
from benchkit.stage.probing import PROBE_FLOOR, PROBE_SHARE, Question, most_telling
from benchkit.stage.readouts import Index, Matrix
from benchkit.stage.suspicion import Evidence, Probe, Suspect, Suspicion
from benchkit.stage.unit_model import UnitModel, layout_of

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
PROBED_HYPOTHESES = 10
TYPICAL_HYPOTHESES = 6
MOST_EVIDENCE = 3


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
        many = len(lib.faults)
        rows = [lib.rows(number) for number in range(len(data.y))]
        self.solved = np.array([lib.joint.good[part].reshape(-1, many).any(axis=0) for part in rows])
        if not self.solved.any(axis=1).all():
            raise ModelError(
                f"{lib.model.design.name}: no hypothesis has a solution under these conditions", "an operating point",
                "Check rails, limit and trimmer of the readings",
            )  # fmt: skip
        if not self.solved[:, 0].all():
            raise ModelError(
                f"{lib.model.design.name}: a healthy unit has no solution under these conditions, so nothing can be"
                " weighed against it", "an operating point of a healthy unit",
                "Check rails, limit and trimmer of the readings",
            )  # fmt: skip
        self.fitted = fit_hypotheses(lib, data)
        self.probability = np.exp(self.fitted.log_posterior)
        self.probability[~self.solved] = 0.0
        self.probability /= self.probability.sum(axis=1, keepdims=True)

    def suspicions(self) -> list[Suspicion]:
        """Give one answer a set of readings."""
        every = range(len(self.data.y))
        # What would tell most about a healthy unit hardly hangs on its readings: worked out once for all of a library.
        usual = [self.probability[number, 0] > SURELY_HEALTHY and self.lib.model.stated for number in every]
        rows = [self.lib.rows(number).start for number in every]
        asked: dict[tuple[bool, int], Question] = {}
        keys = []
        for number in every:
            key = (True, rows[number]) if usual[number] else (False, number)
            keys.append(key)
            if key not in asked:
                asked[key] = self._typical(number) if usual[number] else self._question(number)
        told = most_telling(self.lib, self.candidates, self.original, list(asked.values()))
        probes = dict(zip(asked, told, strict=True))
        return [
            self._one(number, self._hidden(number, self.data.take(np.array([number]))), probes[keys[number]])
            for number in every
        ]

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
        with np.errstate(invalid="ignore"):  # neither has a solution
            refuted = (log_posterior[0] - log_posterior > WELL_REFUTED) & (probability[0] > LEAST_COMPARED)
        unseen = tuple(
            faults[k]
            for k in range(1, len(faults))
            if hidden[k] and not refuted[k] and k != order[0] and self.solved[number, k]
        )
        unsolved = tuple(faults[k] for k in np.flatnonzero(~self.solved[number]))
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

    def _hidden(self, number: int, data: Data) -> Array:
        """Which faults one unit's readings can't show: the median over the members of the library."""
        lib = self.lib
        many, (z, joint) = len(lib.faults), lib.view(number)
        ends = np.where(np.isfinite(lib.model.most), OVERLOAD_SHARE * lib.model.most, UNREAD)
        u = np.where(np.isfinite(data.y[0]), data.u[0], ends)
        factors = []
        for low in range(0, len(joint.good), many):
            part = slice(low, low + many)
            good = joint.good[part]
            if not good[0]:
                continue
            views = _Views.of(*self._within(joint.f[part], joint.slope[part]), z[:, part], u[None])
            factors.append(np.where(good, views.over_the_first(), np.nan))
        if not factors:
            return np.zeros(many, dtype=np.bool_)
        far = np.median(np.nan_to_num(np.array(factors), nan=np.inf), axis=0)
        return np.asarray(far < np.log(BAYES_FACTOR))

    def _stated(self, conditions: Conditions) -> Conditions:
        return self.original.get(conditions, conditions)

    def _healthy(self) -> tuple[Array, Array]:
        """What the nominal healthy unit reads under the conditions that were stated, and how far units spread."""
        if self.original:
            if self._nominal is None:
                stated = [(self._stated(conditions), point) for conditions, point in self.lib.model.readings]
                model = UnitModel(self.lib.model.design, layout_of(stated))
                found = model.at(np.zeros((len(model.coordinates), 1)), [HEALTHY], effort="full")
                at = {key: column for column, key in enumerate(model.readings)}
                columns = [at[key] for key in stated]
                self._nominal = found.f[0, columns], np.sqrt((found.slope[0, columns] ** 2).sum(axis=1))
            return self._nominal
        return self.lib.joint.f[0], np.sqrt((self.lib.joint.slope[0] ** 2).sum(axis=1))

    def _evidence(self, number: int, k: int) -> tuple[Evidence, ...]:
        """What speaks most for a suspect, reading by reading."""
        row = self.fitted.row[number, k]
        if row < 0 or not self.lib.joint.good[self.lib.rows(number).start]:
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

    def _question(self, number: int) -> Question:
        """What of the readings that could still be taken tells most about one unit."""
        probability = self.probability[number]
        top = self._compared(number, np.argsort(-probability, kind="stable"), PROBED_HYPOTHESES)
        z = self.fitted.fit.z[:, self.fitted.row[number][top]]
        return Question(top, z, probability[top], self.data.take(np.full(len(top), number)))

    def _typical(self, number: int) -> Question:
        """The same for a nominal healthy unit: what tells it from the likeliest of the faults that are not seen yet."""
        lib = self.lib
        f = np.minimum(lib.joint.f[lib.rows(number).start], lib.model.most)
        floor = np.array([PROBE_FLOOR[find_point(lib.model.design, point).unit] for _, point in lib.model.readings])
        rails_v = None if self.data.rails_v is None else self.data.rails_v[[number]]
        data = Data(f[None], np.hypot(PROBE_SHARE * np.abs(f), floor)[None], rails_v)
        hidden = self._hidden(number, data)
        order = np.argsort(-lib.log_prior, kind="stable")
        top = [0, *(k for k in order.tolist() if k and hidden[k] and self.solved[number, k])][:TYPICAL_HYPOTHESES]
        z = np.zeros((len(lib.model.coordinates), len(top)))
        return Question(top, z, np.exp(lib.log_prior[top]), data.take(np.zeros(len(top), np.intp)))


def _shown(value: float, most: float) -> float:
    return float("inf") if value >= most else float(value)
