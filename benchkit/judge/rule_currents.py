"""Rules that compare currents: emitter symmetry, feed symmetry, pair sharing, idle against driven current."""

from __future__ import annotations

import math

from benchkit.judge.rule_base import (
    Cause,
    Current,
    Resistance,
    RuleFacts,
    RuleResult,
    all_same_gain,
    decide,
    missing,
    nothing_to_judge,
    percent,
    relative_difference,
    resistance,
)
from benchkit.measure.readings import Reading
from benchkit.measure.uncertainty import combine, coverage_factor, relative_uncertainty_of_ratio
from benchkit.quantities import show
from benchkit.stage.design import Design

POOR_OHMS_BELOW = 10.0
"""Below this resistance (ohm) a 2-wire measurement says more about the leads than about the part."""


def emitter_points(design: Design) -> tuple[str, ...]:
    """All emitter drops of a design, upper half first."""
    numbers = range(1, design.output.pairs + 1)
    return (*(f"emitter.upper.{n}" for n in numbers), *(f"emitter.lower.{n}" for n in numbers))


def emitter_symmetry(number: float, facts: RuleFacts) -> tuple[RuleResult, ...]:
    """Symmetry of the emitter currents of the two halves.

    |I_upper - I_lower| / mean ≤ number, I = drop (V) / emitter resistor (ohm) as measured cold, summed over the pairs.
    Usual number: 0.01 (1 %). Source: common practice.

    A drop alone says nothing finer than its resistor: two unmeasured 1 % resistors make up to 2 % of difference out of
    equal currents. So it stays undecided on unmeasured parts until the difference is beyond what they explain.
    """
    rule = "emitter symmetry"
    points = emitter_points(facts.design)
    subject = f"{points[0]} to {points[-1]}" if len(points) > 2 else f"{points[0]} and {points[1]}"
    lacking = missing(facts, points)
    if lacking:
        return (nothing_to_judge(rule, subject, number, "", why=lacking, needs=f"Read {', '.join(points)}"),)
    currents = [
        Current(point, facts.readings[point], resistance(facts, point, facts.design.output.emitter_resistor))
        for point in points
    ]
    half = len(currents) // 2
    difference, u = relative_difference(currents[:half], currents[half:])
    if difference is None:
        why = "No current flows through the emitter resistors."
        return (nothing_to_judge(rule, subject, number, "", why=why, needs="Read it with the stage biased"),)
    parts = sum(max(current.resistance.tolerance for current in side) for side in (currents[:half], currents[half:]))
    return (
        _symmetry(
            rule, subject, number, facts, currents, difference=difference, u=u, parts=parts, what="emitter currents"
        ),
    )


def feed_symmetry(number: float, facts: RuleFacts) -> tuple[RuleResult, ...]:
    """Symmetry of the drops across the two feeds.

    |V_upper - V_lower| / mean ≤ number, from the drops (V). Usual number: 0.01 (1 %). Source: common practice.

    Drops that agree pass as they are. Drops that differ fail only beyond what explains them: the tolerances of feed
    resistors that nobody measured (once measured, the currents are compared instead), and rails that are unequal.
    """
    rule, subject = "feed symmetry", "feed.upper and feed.lower"
    points = ("feed.upper", "feed.lower")
    feed = facts.design.feed
    if feed.upper.kind != "resistor" or feed.lower.kind != "resistor":
        why = "The design's feeds are not two resistors."
        return (
            nothing_to_judge(rule, subject, number, "", why=why, needs="Nothing: the rule doesn't fit this design"),
        )
    lacking = missing(facts, points)
    if lacking:
        return (nothing_to_judge(rule, subject, number, "", why=lacking, needs="Read feed.upper and feed.lower"),)
    known = [resistance(facts, "feed.upper", feed.upper.value), resistance(facts, "feed.lower", feed.lower.value)]
    measured = all(one.reading is not None for one in known)
    # Both measured: compare currents. Otherwise compare the drops: equal resistances of one ohm say just that.
    currents = [
        Current(point, facts.readings[point], one if measured else Resistance(1.0, one.tolerance))
        for point, one in zip(points, known, strict=True)
    ]
    difference, u = relative_difference(currents[:1], currents[1:])
    if difference is None:
        why = "No current flows through the feeds."
        return (nothing_to_judge(rule, subject, number, "", why=why, needs="Read it with the rails up"),)
    decided = decide(difference, u, 0.0, low=-number, high=number, coverage=facts.coverage)
    if decided.verdict == "pass":
        parts = 0.0
    else:
        parts = sum(current.resistance.tolerance for current in currents) + _rails_explain(facts)
        if not measured and feed.upper.value.value != feed.lower.value.value:
            parts += abs(math.log(feed.upper.value.value / feed.lower.value.value))
    what = "feed currents" if measured else "feed drops"
    return (_symmetry(rule, subject, number, facts, currents, difference=difference, u=u, parts=parts, what=what),)


def pair_sharing(number: float, facts: RuleFacts) -> tuple[RuleResult, ...]:
    """How evenly the output devices of one half share its current: one result for each half.

    |I_n - mean| / mean of the half ≤ number, I = drop (V) / emitter resistor (ohm). Usual number: 0.10 for matched
    devices, otherwise the model's spread. Source: common practice.
    """
    rule = "pair sharing"
    results = []
    pairs = facts.design.output.pairs
    for side in ("upper", "lower"):
        points = [f"emitter.{side}.{n}" for n in range(1, pairs + 1)]
        subject = f"the {side} half"
        if pairs < 2:
            why, needs = "The design has one pair: nothing is shared.", "Nothing: the rule doesn't fit this design"
            return (nothing_to_judge(rule, "", number, "", why=why, needs=needs),)
        lacking = missing(facts, points)
        if lacking:
            results.append(nothing_to_judge(rule, subject, number, "", why=lacking, needs=f"Read {', '.join(points)}"))
            continue
        currents = [
            Current(point, facts.readings[point], resistance(facts, point, facts.design.output.emitter_resistor))
            for point in points
        ]
        results.append(_sharing(rule, subject, number, facts, currents))
    return tuple(results)


def idle_against_driven(number: float, facts: RuleFacts) -> tuple[RuleResult, ...]:
    """Supply current at rest against the same with the stage driven: one result for each rail.

    I_rest / I_driven < number; a class-AB stage draws less at rest than when driven. Usual number: 1. Source: common
    practice.
    """
    rule = "idle against driven"
    results = []
    for point in ("rail+.current",) if facts.design.single_supply else ("rail+.current", "rail-.current"):
        rest, driven = facts.readings.get(point), facts.driven.get(point)
        if rest is None or driven is None or not rest.value or not driven.value or driven.value <= 0:
            why = f"There are not two currents of {point} to compare."
            needs = f"Read {point} at rest and with the stage driven"
            results.append(nothing_to_judge(rule, point, number, "", why=why, needs=needs))
            continue
        ratio = rest.value / driven.value
        relative = relative_uncertainty_of_ratio(rest, driven)
        u = None if relative is None else abs(ratio) * relative
        decided = decide(ratio, u, 0.0, low=None, high=number, coverage=facts.coverage)
        results.append(
            RuleResult(
                rule=rule,
                subject=point,
                value=ratio,
                limit=number,
                unit="",
                verdict=decided.verdict,
                why=f"At rest {point} is {show(rest.value, 'A')}, driven {show(driven.value, 'A')}.",
                would_decide="Drive the stage further" if decided.verdict == "undecided" else "",
                cause=decided.cause,
                conformance_probability=decided.conformance_probability,
            )
        )
    return tuple(results)


def _symmetry(
    rule: str,
    subject: str,
    number: float,
    facts: RuleFacts,
    currents: list[Current],
    *,
    difference: float,
    u: float | None,
    parts: float,
    what: str,
) -> RuleResult:
    decided = decide(difference, u, parts, low=-number, high=number, coverage=facts.coverage)
    doubt = "" if u is None else f" ± {percent(coverage_factor(facts.coverage) * u, 2)} by the meter"
    if u is None:
        doubt = ", by a meter whose uncertainty is not known"
    explained = f", and tolerances explain up to {percent(parts, 2)}" if parts else ""
    return RuleResult(
        rule=rule,
        subject=subject,
        value=abs(difference),
        limit=number,
        unit="",
        verdict=decided.verdict,
        why=f"The {what} differ by {percent(abs(difference))}{doubt}{explained}; the rule allows {percent(number, 2)}.",
        would_decide=_would_decide(decided.cause, number, facts, currents, difference)
        if decided.verdict == "undecided"
        else "",
        cause=decided.cause,
        conformance_probability=decided.conformance_probability,
    )


def _would_decide(cause: Cause, number: float, facts: RuleFacts, currents: list[Current], difference: float) -> str:
    advice = []
    unmeasured = [current.point for current in currents if current.resistance.tolerance > 0]
    if "parts" in cause and unmeasured:
        low = facts.design.output.emitter_resistor.value < POOR_OHMS_BELOW and unmeasured[0].startswith("emitter")
        how = "4-wire or with a forced current, " if low else ""
        advice.append(f"Measure {' and '.join(unmeasured)} {how}with the power off")
    elif "parts" in cause:
        advice.append("Make the rails equal")
    poor = [
        current.point
        for current in currents
        if current.resistance.reading is not None
        and current.resistance.reading.function == "ohms"
        and current.resistance.ohm < POOR_OHMS_BELOW
    ]
    if "meter" in cause and poor:
        advice.append(f"Measure {' and '.join(poor)} 4-wire or with a forced current: two wires can't tell")
    elif "meter" in cause:
        margin = abs(number - abs(difference))
        drop = sum(abs(current.drop.value or 0.0) for current in currents) / len(currents)
        needed = margin * drop / (math.sqrt(2.0) * coverage_factor(facts.coverage))
        if needed > 0:
            advice.append(
                f"Use a meter that is good for {show(needed, 'V', 1)} between two readings on one range, or read a "
                "larger drop"
            )
        else:
            advice.append("Read a larger drop")
    return "; ".join(advice)


def _rails_explain(facts: RuleFacts) -> float:
    """Relative difference of the feeds' drops that unequal rails explain."""
    upper, lower = facts.readings["feed.upper"].value, facts.readings["feed.lower"].value
    rails: list[float] = []
    for point, given, of_design in (
        ("rail+", facts.positive_v, facts.design.rails.positive_v),
        ("rail-", facts.negative_v, facts.design.rails.negative_v),
    ):
        reading = facts.readings.get(point)
        if reading is not None and reading.value is not None:
            rails.append(reading.value)
        else:
            rails.append(of_design if given is None else given)
    above, below = rails[0] - facts.rest_v, facts.rest_v - rails[1]
    mean = (abs(upper or 0.0) + abs(lower or 0.0)) / 2.0
    return abs(above - below) / mean if mean > 0 else 0.0


def _sharing(rule: str, subject: str, number: float, facts: RuleFacts, currents: list[Current]) -> RuleResult:
    count = len(currents)
    amps = [current.amps for current in currents]
    mean = math.fsum(amps) / count
    if mean <= 0:
        why = "No current flows through the emitter resistors."
        return nothing_to_judge(rule, subject, number, "", why=why, needs="Read it with the stage biased")
    at = max(range(count), key=lambda index: abs(amps[index] - mean))
    deviation = amps[at] / mean - 1.0
    drops: list[Reading | None] = [current.drop for current in currents]
    ohms = [current.resistance.reading for current in currents]
    us = [current.uncertainty(all_same_gain(drops), all_same_gain(ohms)) for current in currents]
    u: float | None = None
    if all(one is not None for one in us):
        # d = I_k/mean - 1: the share of each current's uncertainty in it.
        u = combine(
            [
                (one or 0.0) / mean * ((1.0 if index == at else 0.0) - amps[at] / (count * mean))
                for index, one in enumerate(us)
            ]
        )
    tolerance = max(current.resistance.tolerance for current in currents)
    parts = 2.0 * tolerance * (count - 1) / count * (1.0 + abs(deviation))
    decided = decide(deviation, u, parts, low=-number, high=number, coverage=facts.coverage)
    return RuleResult(
        rule=rule,
        subject=subject,
        value=abs(deviation),
        limit=number,
        unit="",
        verdict=decided.verdict,
        why=f"{currents[at].point} carries {show(amps[at], 'A')}, {percent(deviation)} from the mean of its half.",
        would_decide=_would_decide(decided.cause, number, facts, currents, deviation)
        if decided.verdict == "undecided"
        else "",
        cause=decided.cause,
        conformance_probability=decided.conformance_probability,
    )
