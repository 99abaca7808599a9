"""Suspects: which single fault would explain the readings of a unit, how probable each is, and what to probe next.

How it is done
--------------
1. Hypotheses: the healthy unit and every row of the fault table (`benchkit.stage.faults`), each with its prior.
2. For each, a few units drawn once for the layout of the readings are solved (`Library`); every unit that is judged
   starts from the one whose readings come nearest.
3. Each hypothesis is fitted to the readings (`benchkit.stage.fitting`): its likeliest unit, and the evidence. The
   values of all parts are open within their tolerances, and are the same under every condition.
4. Posterior probability = prior * evidence, normalised over all hypotheses.

Alike: two hypotheses between which readings like these don't decide. From the likeliest unit of each, readings with
fresh noise are expected; the expected Bayes factor against the other one is below 3, both ways round.

Unseen: faults that these readings could not have shown. Units with the fault are expected to give readings whose Bayes
factor against healthy is below 3 (the median over the units of the library).

Probe next: of the readings that could still be taken, the ones with the largest expected information about which
hypothesis holds (mutual information, in bits), from what each hypothesis's likeliest unit would read there and how
uncertain that still is.
"""

from __future__ import annotations

import math
import time
from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from benchkit.stage.conditions import Condition, Unpowered
from benchkit.stage.design import Design, target_drop_v
from benchkit.stage.faults import HEALTHY, faults_of, prior_of
from benchkit.stage.fitting import Data
from benchkit.stage.forcing import Taken, held_at_readings
from benchkit.stage.hypotheses import Library, library
from benchkit.stage.latent import Coordinates
from benchkit.stage.observations import Conditions, Observation
from benchkit.stage.points import points_of
from benchkit.stage.readouts import Matrix
from benchkit.stage.suspicion import Evidence, Probe, Suspect, Suspicion
from benchkit.stage.telling import Report
from benchkit.stage.unit_model import layout_of, own

__all__ = [
    "Evidence", "Observation", "Probe", "Suspect", "Suspicion", "default_candidates", "suspect", "suspect_many",
]  # fmt: skip

HELD_TOGETHER = 32
"""So many units with held rails are worked out as one batch: each has its own solutions of every hypothesis."""
MOST_NUMBERS = 1e7
"""Slopes of a batch's readings, one for each hypothesis and coordinate, are kept to about so many numbers: units that
are too many for it are worked out some at a time."""
PURSUED_SHARE = 4
"""Units without held rails pursue a part of the hypotheses, at most one in so many but for a few units."""


def suspect(
    design: Design, observations: Sequence[Observation], *, candidates: Sequence[tuple[Conditions, str]] = ()
) -> Suspicion:
    """Say which faults would explain the readings of one unit; see `suspect_many`."""
    return suspect_many(design, [observations], candidates=candidates)[0]


def suspect_many(
    design: Design,
    sets: Sequence[Sequence[Observation]],
    *,
    candidates: Sequence[tuple[Conditions, str]] = (),
) -> list[Suspicion]:
    """Say for each of several units which faults would explain its readings.

    Parameters
    ----------
    design : Design
    sets : sequence of sequences of Observation
        Readings of one unit each; of points that the model has an answer for. Units that were read at the same points
        under the same conditions are worked out together.
    candidates : sequence of (Conditions, str)
        Readings that could still be taken, for `Suspicion.probe_next`. Without: the other points of the powered
        conditions that were read under, and the unpowered points.

    Returns
    -------
    list of Suspicion
        In the order of ``sets``. A set without readings gives the priors.

    Raises
    ------
    ModelError
        When no hypothesis has a solution.
    """
    found: list[Suspicion | None] = [None] * len(sets)
    groups: dict[tuple[tuple[Conditions, str], ...], list[int]] = {}
    held = [held_at_readings([*observations, *at_target(design, observations)]) for observations in sets]
    for number, one in enumerate(held):
        keys = dict.fromkeys((reading.conditions, reading.point) for reading in one.observations)
        groups.setdefault(tuple(keys), []).append(number)
    for readings, everyone in groups.items():
        # what is held is solved for each unit: a part of them at a time
        fitting = _together(design, len(readings))
        most = min(HELD_TOGETHER, fitting) if held[everyone[0]].original else PURSUED_SHARE * fitting
        for low in range(0, len(everyone), most):
            members = everyone[low : low + most]
            began = time.perf_counter()
            answers = _group(design, readings, [held[number] for number in members], tuple(candidates))
            each = (time.perf_counter() - began) / len(members)
            for number, answer in zip(members, answers, strict=True):
                found[number] = replace(answer, seconds=each)
    return [one for one in found if one is not None]


def _together(design: Design, readings: int) -> int:
    """How many units with so many readings are worked out as one batch."""
    each = (1 + len(faults_of(design))) * max(1, readings) * len(Coordinates(design, ()))
    return max(1, int(MOST_NUMBERS / each))


def _group(
    design: Design,
    readings: tuple[tuple[Conditions, str], ...],
    sets: Sequence[Taken],
    candidates: tuple[tuple[Conditions, str], ...],
) -> list[Suspicion]:
    """Answer for units that were read alike."""
    if not readings:
        return [_priors_only(design)] * len(sets)
    original, layout = sets[0].original, layout_of(readings)
    stated = [(original.get(conditions, conditions), point) for conditions, point in readings]
    wanted = candidates or default_candidates(design, stated)
    told = tuple(pair for pair in wanted if pair not in stated)
    rails_v = None
    if original:
        nothing = (math.nan, math.nan)
        rails_v = np.array([[one.rails_v.get(conditions, nothing) for conditions, _ in layout] for one in sets])
    # rails that were held at some units' readings will not come again
    lib = library(design, layout) if rails_v is None else Library(design, layout, rails_v)
    data, shown = _data(lib, [one.observations for one in sets])
    return Report(lib, replace(data, rails_v=rails_v), told, original, shown).suspicions()


def at_target(design: Design, observations: Sequence[Observation]) -> list[Observation]:
    """What a condition says that was trimmed to the target, where nobody read the drop: it is within its tolerance."""
    read = {one.conditions for one in observations if one.point.startswith("emitter.") and one.point.endswith(".1")}
    trimmed = [
        conditions
        for conditions in dict.fromkeys(one.conditions for one in observations)
        if isinstance(conditions[0], Condition) and conditions[0].trimmer == "target" and conditions not in read
    ]
    if not trimmed or design.spreader.trimmer is None:
        return []
    drop_v = 2.0 * target_drop_v(design)
    result = []
    for conditions in trimmed:
        first = conditions[0]
        assert isinstance(first, Condition)
        value = drop_v * first.target_share
        u = value * design.target.tolerance / math.sqrt(3.0)
        result.append(Observation(conditions=conditions, point="emitter.pair.1", value=value, standard_uncertainty=u))
    return result


def _priors_only(design: Design) -> Suspicion:
    faults = (HEALTHY, *faults_of(design))
    odds = np.array([1.0, *(prior_of(design, fault) for fault in faults[1:])])
    order = np.argsort(-odds, kind="stable")
    suspects = tuple(Suspect(fault=faults[k], probability=float(odds[k] / odds.sum())) for k in order)
    return Suspicion(
        suspects=suspects, probe_next=(), unseen=faults[1:], hypotheses=len(faults), unsolved=(), seconds=0.0
    )


def default_candidates(
    design: Design, readings: Sequence[tuple[Conditions, str]]
) -> tuple[tuple[Conditions, str], ...]:
    """Readings that could be taken without another set-up: other points of the conditions, and the unpowered ones."""
    result: list[tuple[Conditions, str]] = []
    points = points_of(design)
    for conditions in dict.fromkeys(conditions for conditions, _ in readings):
        first = conditions[0]
        if isinstance(first, Condition):
            drops = ("rail+.drop", "rail-.drop") if first.fuse_ohm is None else ()
            result += [
                (conditions, point.name)
                for point in points
                if point.powered and point.modelled and point.name not in (*drops, "heatsink")
            ]
    trimmers = [conditions[0].trimmer for conditions, _ in readings if isinstance(conditions[0], Unpowered)]
    trimmer = trimmers[0] if trimmers else "unknown"
    ambients = [conditions[0].ambient_c for conditions, _ in readings]
    for point in points:
        if not point.powered:
            result.append(((Unpowered(point=point.name, trimmer=trimmer, ambient_c=ambients[0]),), point.name))
    return tuple(result)


def _data(lib: Library, sets: Sequence[Sequence[Observation]]) -> tuple[Data, Matrix]:
    """Readings of several units, in the order of the library's layout; repeated ones are averaged.

    Returns
    -------
    data : Data
    shown : array of shape (sets, readings)
        The readings as they were, where ``data`` has an overload of the model's range instead.
    """
    shape = (len(sets), len(lib.model.readings))
    y, u, shown = np.empty(shape), np.empty(shape), np.empty(shape)
    event = np.zeros(shape, np.bool_)
    column = {reading: number for number, reading in enumerate(lib.model.readings)}
    for row, observations in enumerate(sets):
        values: dict[int, list[Observation]] = {}
        for one in observations:
            values.setdefault(column[own(one.conditions, one.point), one.point], []).append(one)
        for number, several in values.items():
            read = [one.value for one in several]
            y[row, number] = float(np.mean(read)) if np.isfinite(read).all() else read[-1]
            shown[row, number] = y[row, number]
            if y[row, number] > lib.model.most[number]:
                # A meter that went on to a higher range by itself: on the range of the model this is an overload.
                y[row, number] = np.inf
            u[row, number] = max(several[-1].standard_uncertainty, 1e-12)
            event[row, number] = several[-1].event
    return Data(y, u, event=event if event.any() else None), shown
