"""What the named rules share: their facts, their results, and how a number with two kinds of doubt is decided.

Two kinds of doubt are kept apart, because different things remove them:

- *meter*: a standard uncertainty u, normal, widened by the coverage factor k;
- *parts*: a resistor that nobody measured is anywhere within its tolerance, a hard half-width h.

A rule's value passes when it is inside its limit by h + k·u and fails when it is outside by more than h + k·u. Between
the two it is undecided, and the result says which kind of doubt is to blame and what would remove it. So a rule never
fails a unit for what its parts' tolerances explain, and never passes what the meter can't resolve.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Literal

from benchkit.judge.limits import Limits
from benchkit.judge.verdicts import Verdict, conformance_probability
from benchkit.measure.readings import Reading
from benchkit.measure.uncertainty import combine, coverage_factor, same_gain
from benchkit.quantities import Tolerance, show
from benchkit.stage.conditions import TrimmerPosition
from benchkit.stage.design import Design

Cause = Literal["", "parts", "meter", "parts and meter", "nothing to judge"]


@dataclass(frozen=True)
class ModelFigure:
    """A figure that the model worked out for this design, with its standard uncertainty (0 for a nominal figure)."""

    value: float
    standard_uncertainty: float = 0.0


@dataclass(frozen=True, kw_only=True)
class RuleFacts:
    """What is known when a rule is asked.

    Parameters
    ----------
    design : Design
    readings : mapping of str to Reading
        By test point, all taken under one condition.
    cold : mapping of str to Reading
        Resistors as measured with the power off, by part ("emitter.upper.1").
    limits : mapping of str to Limits
        The model's limits at this condition, by test point.
    figures : mapping of str to ModelFigure
        Figures from the model for the rules that judge the design itself, by rule; without one
        "trimmer authority", "device dissipation" and "runaway margin" ask the model themselves.
    wiper_open : callable, optional
        Gives the emitter drop (V) now and with the trimmer's wiper open, both of the same nominal unit; without it the
        rule asks the model at the target on full rails.
    positive_v, negative_v : float, optional
        Rails as set (V); the design's when left out.
    trimmer : str or float
        "least", "most", or a travel from 0 (least bias) to 1 where the trimmer's position is known.
    driven : mapping of str to Reading
        Readings with the stage driven, by test point.
    seen : mapping of str to bool
        What a person looked for and saw or did not see, by rule.
    coverage : float
        Coverage of the expanded uncertainty.
    """

    design: Design
    readings: Mapping[str, Reading]
    cold: Mapping[str, Reading] = field(default_factory=dict)
    limits: Mapping[str, Limits] = field(default_factory=dict)
    figures: Mapping[str, ModelFigure] = field(default_factory=dict)
    wiper_open: Callable[[], tuple[float, float]] | None = None
    positive_v: float | None = None
    negative_v: float | None = None
    trimmer: TrimmerPosition = "unknown"
    driven: Mapping[str, Reading] = field(default_factory=dict)
    seen: Mapping[str, bool] = field(default_factory=dict)
    coverage: float = 0.95

    @property
    def travel(self) -> float | None:
        """The trimmer's travel from the least-bias end, 0 to 1, or None where it is not known."""
        if isinstance(self.trimmer, str):
            return {"least": 0.0, "most": 1.0}.get(self.trimmer)
        return float(self.trimmer)

    @property
    def rest_v(self) -> float:
        """Where the output should rest (V)."""
        positive = self.design.rails.positive_v if self.positive_v is None else self.positive_v
        negative = self.design.rails.negative_v if self.negative_v is None else self.negative_v
        return self.design.rest_v(positive, negative)


@dataclass(frozen=True, kw_only=True)
class RuleResult:
    """What came of one rule.

    Attributes
    ----------
    rule : str
    subject : str
        The points or parts it was asked of.
    value : float or None
        In `unit` ("" for a ratio); None where there is none.
    limit : float, tuple of two floats or None
        The number, or the low and high ends of an interval.
    unit : str
    verdict : Verdict
    why : str
        In a sentence.
    would_decide : str
        For an undecided one: which measurement would decide it.
    cause : str
        For an undecided one: "parts", "meter", "parts and meter" or "nothing to judge".
    conformance_probability : float or None
        That the rule is met as far as the meter goes, the parts at the values used.
    """

    rule: str
    subject: str = ""
    value: float | None
    limit: float | tuple[float, float] | None
    unit: str
    verdict: Verdict
    why: str
    would_decide: str = ""
    cause: Cause = ""
    conformance_probability: float | None = None


@dataclass(frozen=True)
class Decision:
    """A verdict with the doubt that kept it open."""

    verdict: Verdict
    cause: Cause
    conformance_probability: float


@dataclass(frozen=True)
class Resistance:
    """A resistor as a rule knows it.

    Attributes
    ----------
    ohm : float
        As measured, otherwise as marked.
    tolerance : float
        Hard relative half-width that remains; 0.0 once measured.
    reading : Reading or None
        The measurement.
    """

    ohm: float
    tolerance: float
    reading: Reading | None = None

    def uncertainty(self, shared: bool) -> float | None:
        """Give the standard uncertainty in ohm; what doesn't cancel, when the gain is `shared`."""
        if self.reading is None:
            return 0.0
        return self.reading.own_uncertainty if shared else self.reading.standard_uncertainty


@dataclass(frozen=True)
class Current:
    """A current through a resistor, from its drop.

    Attributes
    ----------
    point : str
    drop : Reading
    resistance : Resistance
    """

    point: str
    drop: Reading
    resistance: Resistance

    @property
    def amps(self) -> float:
        """The current, at the resistance as known."""
        assert self.drop.value is not None
        return self.drop.value / self.resistance.ohm

    def uncertainty(self, drop_shared: bool, resistance_shared: bool) -> float | None:
        """Give the standard uncertainty from the meters (A), or None when a meter's is not known."""
        u_drop = self.drop.own_uncertainty if drop_shared else self.drop.standard_uncertainty
        u_ohm = self.resistance.uncertainty(resistance_shared)
        if u_drop is None or u_ohm is None:
            return None
        return combine([u_drop / self.resistance.ohm, self.amps * u_ohm / self.resistance.ohm])


def decide(
    value: float, u: float | None, parts: float, *, low: float | None, high: float | None, coverage: float
) -> Decision:
    """Decide a value with both kinds of doubt; see the top of this module.

    Parameters
    ----------
    value : float
        In any unit, signed.
    u : float or None
        Standard uncertainty from the meters, same unit; None when not known, which decides nothing.
    parts : float
        Hard half-width from parts that nobody measured, same unit.
    low, high : float or None
        The limits.
    coverage : float
        Of the expanded uncertainty.
    """
    if u is None:
        return Decision("undecided", "meter", 0.0)
    expanded = coverage_factor(coverage) * u
    probability = conformance_probability(value, u, low, high)
    verdict = _three_way(value, parts + expanded, low, high)
    if verdict != "undecided":
        return Decision(verdict, "", probability)
    with_parts_measured = _three_way(value, expanded, low, high)
    with_a_perfect_meter = _three_way(value, parts, low, high)
    cause: Cause
    if parts > 0 and with_parts_measured != "undecided":
        cause = "parts" if with_a_perfect_meter == "undecided" else "parts and meter"
    elif with_a_perfect_meter != "undecided":
        cause = "meter"
    else:
        cause = "parts and meter" if u > 0 and parts > 0 else ("parts" if parts > 0 else "meter")
    return Decision("undecided", cause, probability)


def _three_way(value: float, guard: float, low: float | None, high: float | None) -> Verdict:
    if (low is not None and value < low - guard) or (high is not None and value > high + guard):
        return "fail"
    if (low is None or value >= low + guard) and (high is None or value <= high - guard):
        return "pass"
    return "undecided"


def resistance(facts: RuleFacts, part: str, marked: Tolerance) -> Resistance:
    """Find a resistor: as measured cold when it was, otherwise as marked with its tolerance."""
    reading = facts.cold.get(part)
    if reading is not None and reading.value is not None and reading.value > 0:
        return Resistance(reading.value, 0.0, reading)
    return Resistance(marked.value, marked.fraction)


def number_of(facts: RuleFacts, point: str) -> Reading | None:
    """Find the reading of a point, if there is one and it is a number."""
    reading = facts.readings.get(point)
    return reading if reading is not None and reading.value is not None else None


def all_same_gain(readings: Sequence[Reading | None]) -> bool:
    """Whether readings all share one gain error; without any reading there is nothing to share."""
    return bool(readings) and all(
        one is not None and readings[0] is not None and same_gain(readings[0], one) for one in readings
    )


def relative_difference(upper: Sequence[Current], lower: Sequence[Current]) -> tuple[float | None, float | None]:
    """Difference of two sums of currents relative to their mean, signed, and its standard uncertainty from the meters.

    d = 2·(a - b)/(a + b), u(d) = 4·√(b²·u(a)² + a²·u(b)²)/(a + b)²; a gain error that all share cancels in it.

    Returns
    -------
    difference, u : float or None
        The first is None when no current flows on the whole, the second when a meter's uncertainty is not known.
    """
    currents = [*upper, *lower]
    drop_shared = all_same_gain([current.drop for current in currents])
    resistance_shared = all_same_gain([current.resistance.reading for current in currents])
    a = math.fsum(current.amps for current in upper)
    b = math.fsum(current.amps for current in lower)
    if a + b <= 0:
        return None, None
    u_a: list[float] = []
    u_b: list[float] = []
    for group, collected in ((upper, u_a), (lower, u_b)):
        for current in group:
            u = current.uncertainty(drop_shared, resistance_shared)
            if u is None:
                return 2.0 * (a - b) / (a + b), None
            collected.append(u)
    u_d = 4.0 * math.hypot(b * combine(u_a), a * combine(u_b)) / (a + b) ** 2
    return 2.0 * (a - b) / (a + b), u_d


def nothing_to_judge(rule: str, subject: str, limit: float | None, unit: str, *, why: str, needs: str) -> RuleResult:
    """Make the result of a rule that lacks a reading or a figure."""
    return RuleResult(
        rule=rule,
        subject=subject,
        value=None,
        limit=limit,
        unit=unit,
        verdict="undecided",
        why=why,
        would_decide=needs,
        cause="nothing to judge",
    )


def missing(facts: RuleFacts, points: Sequence[str]) -> str:
    """Say which of some points have no number: a sentence, or "" when all have."""
    for point in points:
        reading = facts.readings.get(point)
        if reading is not None and reading.value is None:
            return f"{point} reads overload."
    gone = [point for point in points if point not in facts.readings]
    return f"There is no reading of {' and '.join(gone)}." if gone else ""


def percent(fraction: float, digits: int = 3) -> str:
    """Show a fraction as a percentage."""
    return show(100.0 * fraction, "%", digits)
