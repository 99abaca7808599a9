"""Pass, fail or undecided: a value with its uncertainty against limits (JCGM 106:2012).

Guarded acceptance, the usual one: the guard band w is the expanded uncertainty U = k·u, with k from the coverage
that is wanted. Inside the limits by w or more is `pass`; outside them by more than w is `fail`; between the two, where
the uncertainty reaches over a limit, it is `undecided` (the non-binary statement of ILAC-G8:09/2019, 4.2.3).

Simple acceptance, where a procedure asks for it: w = 0, inside is `pass` and outside is `fail`. Its risk at the limit
is one half, so it is only taken while the whole of ±U fits between the limits; a meter that can't resolve them
decides nothing.

Guarded rejection (JCGM 106, 8.3.3), where a procedure looks for wrong parts: only what lies outside by more than U is
rejected, so that a good part at the edge of its tolerance is never called bad; again only while ±U fits.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from statistics import NormalDist
from typing import Final, Literal

from benchkit.judge.limits import Limits
from benchkit.measure.readings import Reading
from benchkit.measure.uncertainty import coverage_factor
from benchkit.quantities import Overload, show, show_within

Verdict = Literal["pass", "fail", "undecided"]
Acceptance = Literal["guarded", "simple", "guarded rejection"]

_SEVERITY: Final[dict[Verdict, int]] = {"pass": 0, "undecided": 1, "fail": 2}


@dataclass(frozen=True)
class Judgement:
    """What came of judging one value.

    Attributes
    ----------
    verdict : Verdict
    conformance_probability : float
        Probability that the true value lies inside the limits, given the reading and its uncertainty (normal), 0 to 1.
    guard_band : float
        Width w given away at each limit, in the value's unit.
    acceptance_low, acceptance_high : float or None
        The interval in which a reading passes; None at an open side. The two may cross: then nothing can pass.
    why : str
        The verdict in a sentence.
    """

    verdict: Verdict
    conformance_probability: float
    guard_band: float
    acceptance_low: float | None
    acceptance_high: float | None
    why: str


def conformance_probability(value: float, u: float, low: float | None, high: float | None) -> float:
    """Probability that the true value lies inside the limits (JCGM 106, 7.2 to 7.4: normal, no prior knowledge).

    Parameters
    ----------
    value, u : float
        The reading and its standard uncertainty, same unit; with u = 0 the answer is 0 or 1.
    low, high : float or None
        The limits; None where open.
    """
    if u == 0.0:
        return float((low is None or value >= low) and (high is None or value <= high))
    below_high = 1.0 if high is None else _normal((high - value) / u)
    below_low = 0.0 if low is None else _normal((low - value) / u)
    if low is not None and below_low > 0.5:
        # Far above the lower limit's mirror image both are close to one; take the small difference from the other end.
        above_low = _normal((value - low) / u)
        above_high = 0.0 if high is None else _normal((value - high) / u)
        return max(0.0, above_low - above_high)
    return max(0.0, below_high - below_low)


def judge(
    value: float | Overload | None,
    u: float | None,
    limits: Limits,
    *,
    acceptance: Acceptance = "guarded",
    coverage: float = 0.95,
    rejection_coverage: float | None = None,
) -> Judgement:
    """Judge a value against limits.

    Parameters
    ----------
    value : float, Overload or None
        In the limits' unit; None when there is no number, which decides nothing.
    u : float or None
        Standard uncertainty; None when it is not known, and then nothing passes or fails.
    limits : Limits
        The interval, in the same unit as the value.
    acceptance : {"guarded", "simple", "guarded rejection"}
        The decision rule.
    coverage : float
        Coverage of the expanded uncertainty, 0 to 1.
    rejection_coverage : float, optional
        Of the one that a guarded rejection keeps away from the limits, where that is another: of dozens of readings of
        a healthy unit whose drops are smaller than the meter's noise, one in twenty would be rejected at 95 %.

    Returns
    -------
    Judgement
    """
    if acceptance not in ("guarded", "simple", "guarded rejection"):
        raise ValueError(f"{acceptance!r} is no decision rule; guarded, simple and guarded rejection are")
    k = coverage_factor(coverage)
    if isinstance(value, Overload):
        return _judge_overload(value, limits)
    if value is None or not math.isfinite(value):
        return Judgement("undecided", 0.0, 0.0, limits.low, limits.high, "There is no number to judge.")
    if u is None:
        why = "The uncertainty of the reading is not known."
        return Judgement("undecided", 0.0, 0.0, limits.low, limits.high, why)
    if not (math.isfinite(u) and u >= 0):
        raise ValueError(f"{u} is no standard uncertainty")
    expanded = k * u
    guard = {"guarded": expanded, "simple": 0.0, "guarded rejection": -expanded}[acceptance]
    accept_low = None if limits.low is None else limits.low + guard
    accept_high = None if limits.high is None else limits.high - guard
    probability = conformance_probability(value, u, limits.low, limits.high)
    inside = (accept_low is None or value >= accept_low) and (accept_high is None or value <= accept_high)
    away = guard
    if rejection_coverage is not None and acceptance == "guarded":
        away = coverage_factor(rejection_coverage) * u
    outside = (limits.low is not None and value < limits.low - away) or (
        limits.high is not None and value > limits.high + away
    )
    shown = f"{show_within(value, limits.unit, expanded)} ± {show(expanded, limits.unit, 2)}"
    verdict: Verdict
    if acceptance != "guarded" and limits.width < 2.0 * expanded:
        verdict, why = "undecided", f"The meter's {shown} is wider than the limits, {limits}."
    elif inside:
        verdict = "pass"
        if limits.hold(value - expanded) and limits.hold(value + expanded):
            why = f"{shown} lies within {limits}."
        elif limits.hold(value):
            why = f"{shown}: the value lies within {limits}; its uncertainty reaches over, which this rule accepts."
        else:
            why = f"{shown} reaches back into {limits}, which this rule accepts."
    elif outside:
        verdict, why = "fail", f"{shown} lies outside {limits}."
    else:
        verdict, why = "undecided", f"{shown} reaches over a limit of {limits}."
    return Judgement(verdict, probability, guard, accept_low, accept_high, why)


def judge_reading(
    reading: Reading,
    limits: Limits,
    *,
    acceptance: Acceptance = "guarded",
    coverage: float = 0.95,
    rejection_coverage: float | None = None,
) -> Judgement:
    """Judge a reading with the uncertainty that it carries; see `judge`.

    Raises
    ------
    ValueError
        When the reading's unit is not that of the limits.
    """
    if reading.unit != limits.unit:
        raise ValueError(f"{reading.point} is in {reading.unit}, its limits in {limits.unit}")
    return judge(
        reading.measured, reading.standard_uncertainty, limits, acceptance=acceptance, coverage=coverage,
        rejection_coverage=rejection_coverage,
    )  # fmt: skip


@dataclass(frozen=True)
class Risks:
    """Global risks of a decision rule for units of a known spread (JCGM 106, 9.5).

    Attributes
    ----------
    consumer : float
        Probability that a unit passes and is outside its limits.
    producer : float
        Probability that a unit doesn't pass and is inside.
    """

    consumer: float
    producer: float


def global_risks(
    mean: float, deviation: float, u: float, limits: Limits, *, guard_band: float = 0.0, steps: int = 4000
) -> Risks:
    """Work out what a guard band costs and saves before anything is measured (JCGM 106:2012, 9.5).

    Parameters
    ----------
    mean, deviation : float
        Of the units made, normal, in the limits' unit.
    u : float
        Standard uncertainty of one measurement, same unit.
    limits : Limits
        The tolerance interval.
    guard_band : float
        Taken off at each limit; negative widens the acceptance.
    steps : int
        Of the integration (Simpson) over ±8 deviations.
    """
    if not (deviation > 0 and u > 0):
        raise ValueError("global risks need a spread of the units and an uncertainty of the meter")
    low = None if limits.low is None else limits.low + guard_band
    high = None if limits.high is None else limits.high - guard_band
    prior = NormalDist(mean, deviation)

    def passing(true: float) -> float:
        if low is not None and high is not None and low > high:
            return 0.0
        return conformance_probability(true, u, low, high)

    def simpson(start: float, end: float, of: Callable[[float], float]) -> float:
        if end <= start:
            return 0.0
        count = 2 * (steps // 2)
        step = (end - start) / count
        weights = (1.0 if i in (0, count) else (4.0 if i % 2 else 2.0) for i in range(count + 1))
        return step / 3.0 * math.fsum(w * of(start + i * step) for i, w in enumerate(weights))

    bottom, top = mean - 8.0 * deviation, mean + 8.0 * deviation
    inside_from = bottom if limits.low is None else max(bottom, limits.low)
    inside_to = top if limits.high is None else min(top, limits.high)
    producer = simpson(inside_from, inside_to, lambda true: prior.pdf(true) * (1.0 - passing(true)))
    consumer = simpson(bottom, min(inside_from, top), lambda true: prior.pdf(true) * passing(true))
    consumer += simpson(max(inside_to, bottom), top, lambda true: prior.pdf(true) * passing(true))
    return Risks(consumer, producer)


def worst(verdicts: Iterable[Verdict]) -> Verdict:
    """Sum up many verdicts: one fail fails, one undecided leaves it undecided.

    Parameters
    ----------
    verdicts : iterable of Verdict
        In any order.

    Returns
    -------
    Verdict
        "undecided" for none at all: nothing tested is nothing passed.
    """
    found = list(verdicts)
    return max(found, key=_SEVERITY.__getitem__) if found else "undecided"


def _normal(z: float) -> float:
    """Distribution function of the standard normal, good far into both tails."""
    return 0.5 * math.erfc(-z / math.sqrt(2.0))


def _judge_overload(value: Overload, limits: Limits) -> Judgement:
    beyond = limits.high if value.positive else limits.low
    end = "above" if value.positive else "below"
    if beyond is None and not (limits.low is None and limits.high is None):
        return Judgement(
            "pass", 1.0, 0.0, limits.low, limits.high, f"The meter reads overload, {end} its range; limits: {limits}."
        )
    if beyond is None:
        return Judgement("undecided", 0.0, 0.0, None, None, "The meter reads overload, and there are no limits.")
    why = f"The meter reads overload, {end} its range, where {limits} is expected."
    return Judgement("fail", 0.0, 0.0, limits.low, limits.high, why)
