"""What to probe next: the readings that are expected to tell most about which of some hypotheses holds.

For every unit in question the likeliest hypotheses stand at their likeliest units. What each would read at the points
that could still be probed, and how uncertain that is once the readings are known, gives the expected information of
each probe. The hypotheses of several units are solved as one batch, and lend each other nothing.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from statistics import NormalDist

import numpy as np

from benchkit.quantities import show
from benchkit.stage.draws import Array
from benchkit.stage.faults import HEALTHY, Fault
from benchkit.stage.fitting import Data, in_uncertainties, residual
from benchkit.stage.hypotheses import Library
from benchkit.stage.observations import Conditions
from benchkit.stage.points import find_point
from benchkit.stage.readouts import Matrix
from benchkit.stage.suspicion import Probe
from benchkit.stage.unit_model import Joint, UnitModel, layout_of, own

MOST_PROBES = 5
LEAST_GAIN_BITS = 0.01
PROBE_SHARE = 5e-4
PROBE_FLOOR = {"V": 50e-6, "A": 50e-6, "ohm": 0.02, "degC": 0.5}
"""Standard uncertainty assumed of a reading that was not taken yet: a share of it, and at least so much."""
TOGETHER = 64
"""So many units' questions are solved as one batch."""

_SLICES = 32
_ENDS = [NormalDist().inv_cdf(k / _SLICES) for k in range(1, _SLICES)]
_DENSITIES = np.array([0.0, *(NormalDist().pdf(end) for end in _ENDS), 0.0])
_NODES = _SLICES * (_DENSITIES[:-1] - _DENSITIES[1:])
"""Means of slices of equal probability of the standard normal distribution."""


@dataclass(frozen=True)
class Question:
    """What is known of one unit.

    Attributes
    ----------
    top : list of int
        Numbers of the hypotheses to tell apart, at most some ten.
    z : array of shape (coordinates, hypotheses)
        Each one's likeliest unit.
    probability : array of shape (hypotheses,)
    data : Data
        The readings, one row a hypothesis.
    """

    top: list[int]
    z: Array
    probability: Array
    data: Data


def most_telling(
    lib: Library,
    candidates: Sequence[tuple[Conditions, str]],
    original: Mapping[Conditions, Conditions],
    questions: Sequence[Question],
) -> list[tuple[Probe, ...]]:
    """Give for each question the readings that tell most, the most telling first.

    Parameters
    ----------
    lib : Library
    candidates : sequence of (Conditions, str)
        Readings that could still be taken, under conditions as they were stated.
    original : mapping
        Conditions with held rails to those that were stated.
    questions : sequence of Question
    """
    answers: list[tuple[Probe, ...]] = [()] * len(questions)
    open_ones = [number for number, one in enumerate(questions) if len(one.top) > 1]
    if not candidates or not open_ones:
        return answers
    held = {stated: now for now, stated in original.items()}
    wanted = list(dict.fromkeys(
        (own(held.get(conditions, conditions), point), point) for conditions, point in candidates
    ))  # fmt: skip
    model = wider(lib, wanted)
    for low in range(0, len(open_ones), TOGETHER):
        some = [questions[number] for number in open_ones[low : low + TOGETHER]]
        ends = np.cumsum([len(one.top) for one in some])
        z = np.zeros((len(model.coordinates), int(ends[-1])))
        z[: len(lib.model.coordinates)] = np.concatenate([one.z for one in some], axis=1)
        faults = [lib.faults[k] for one in some for k in one.top]
        held_v = [one.data.rails_v for one in some if one.data.rails_v is not None]
        kin = np.repeat(np.arange(len(some)), [len(one.top) for one in some])
        there = model.at(z, faults, rails_v=np.concatenate(held_v) if held_v else None, kin=kin)
        for number, one, end in zip(open_ones[low : low + TOGETHER], some, ends.tolist(), strict=True):
            part = slice(end - len(one.top), end)
            own_there = Joint(
                there.f[part], there.slope[part], there.doubt[part], there.good[part], z[:, part], ()
            )  # fmt: skip
            answers[number] = _answer(lib, model, wanted, original, one, own_there)
    return answers


def _answer(
    lib: Library,
    model: UnitModel,
    candidates: Sequence[tuple[Conditions, str]],
    original: Mapping[Conditions, Conditions],
    question: Question,
    there: Joint,
) -> tuple[Probe, ...]:
    """The readings that tell most about one unit, from what its hypotheses would read."""
    usable = there.good
    if np.count_nonzero(usable) < 2:
        return ()
    at = {key: column for column, key in enumerate(model.readings)}
    columns = [at[key] for key in lib.model.readings]
    wanted = [at[key] for key in candidates if key in at and at[key] not in columns]
    read = Joint(there.f[:, columns], there.slope[:, columns], there.doubt[:, columns], usable, there.straight_at, ())
    _, u = residual(question.data, read, lib.model.most)
    scaled = in_uncertainties(there.slope[:, columns], u)
    gram = scaled @ np.swapaxes(scaled, 1, 2)
    gram[:, range(len(columns)), range(len(columns))] += 1.0
    slope = there.slope[:, wanted]
    solved = np.linalg.solve(gram, scaled @ np.swapaxes(slope, 1, 2))
    across = np.einsum("hqk,hrk,hrq->hq", slope, scaled, solved)
    variance = np.maximum((slope**2).sum(axis=2) - across, 0.0)
    most = model.most[wanted]
    units = [find_point(model.design, model.readings[column][1]).unit for column in wanted]
    floor = np.array([PROBE_FLOOR[unit] for unit in units])
    mean = np.minimum(there.f[:, wanted], most)
    sd = np.sqrt(variance + np.hypot(PROBE_SHARE * np.abs(mean), floor) ** 2)
    weight = question.probability * usable
    gains = information_bits(weight / weight.sum(), mean, sd)
    faults = [lib.faults[k] for k in question.top]
    probes = []
    for q in np.argsort(-gains, kind="stable")[:MOST_PROBES].tolist():
        if gains[q] < LEAST_GAIN_BITS:
            break
        conditions, point = model.readings[wanted[q]]
        why = _why(faults, weight / weight.sum(), mean[:, q], sd[:, q], most[q], units[q])
        probes.append(
            Probe(point=point, conditions=original.get(conditions, conditions), gain_bits=float(gains[q]), why=why)
        )
    return tuple(probes)


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
