"""Rules about the bias itself: junction drop, offset before load, quiescent target, optimum bias, hum at rest."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace

from benchkit.errors import ModelError
from benchkit.judge.limits import Limits
from benchkit.judge.rare import widened
from benchkit.judge.rule_base import (
    Current,
    Resistance,
    RuleFacts,
    RuleResult,
    all_same_gain,
    decide,
    missing,
    nothing_to_judge,
    number_of,
    percent,
    resistance,
)
from benchkit.judge.rule_currents import emitter_points
from benchkit.judge.verdicts import judge, judge_reading
from benchkit.measure.readings import Reading
from benchkit.measure.uncertainty import combine
from benchkit.quantities import show
from benchkit.stage.crossover import least_ripple_drop_v, ohmic_ohm, oliver_current_a, setting_at
from benchkit.stage.design import ZERO_CELSIUS_K, Design, target_drop_v

JUNCTION_BELOW_V, JUNCTION_ABOVE_V = 0.35, 0.2
"""How far a conducting silicon junction may read below and above the usual 0.7 V when the model was not asked.

Wide on purpose: a power device at a milliampere shows 0.4 V to 0.55 V and a driver at full current 0.8 V; a short shows
nothing and an open junction volts (common practice)."""
JUNCTION_TEMPERATURE_DOUBT_K = 15.0
"""How far the junctions of output devices may be from the temperature that a rule assumes."""


def junction_drop(number: float, facts: RuleFacts) -> tuple[RuleResult, ...]:
    """Whether each transistor's base-emitter junction shows what a conducting one shows: one result a junction.

    VBE (V) within the model's limits at its current, widened by what is rare (`benchkit.judge.rare`), where they are
    given, otherwise about `number` (0.35 V below to 0.2 V above). Usual number: 0.7 V. Source: the model; without it
    common practice.
    """
    rule = "junction drop"
    points = [point for point in facts.readings if point.endswith(".vbe")]
    if not points:
        why = "No junction was read."
        return (nothing_to_judge(rule, "", number, "V", why=why, needs="Read a transistor's base-emitter voltage"),)
    results = []
    for point in points:
        limits = facts.limits.get(point)
        by_model = limits is not None
        if limits is None:
            limits = Limits(
                number - JUNCTION_BELOW_V, number + JUNCTION_ABOVE_V, number, "V", "common practice for silicon"
            )
        else:
            limits = widened(limits)  # the reading itself has been judged; what is rare there is no failure here
        judged = judge_reading(facts.readings[point], limits, coverage=facts.coverage)
        advice = "A better meter, or more current" if by_model else "The model's limits at this junction's current"
        results.append(
            RuleResult(
                rule=rule,
                subject=point,
                value=facts.readings[point].value,
                limit=None if limits.low is None or limits.high is None else (limits.low, limits.high),
                unit="V",
                verdict=judged.verdict,
                why=f"{point}: {judged.why} Limits from {limits.source}.",
                would_decide=advice if judged.verdict == "undecided" else "",
                cause="meter" if judged.verdict == "undecided" else "",
                conformance_probability=judged.conformance_probability,
            )
        )
    return tuple(results)


def offset_before_load(number: float, facts: RuleFacts) -> tuple[RuleResult, ...]:
    """Whether the output rests close enough for a load to be connected. Nobody overrides this one.

    |output - rest| ≤ number (V). Usual number: 0.05 V. Source: common practice.
    """
    rule, subject = "offset before load", "output"
    reading = facts.readings.get("output")
    if reading is None:
        return (nothing_to_judge(rule, subject, number, "V", why="The output was not read.", needs="Read output"),)
    rest = facts.rest_v
    judged = judge_reading(reading, Limits(rest - number, rest + number, rest, "V", rule), coverage=facts.coverage)
    undecided = judged.verdict == "undecided"
    return (
        RuleResult(
            rule=rule,
            subject=subject,
            value=None if reading.value is None else abs(reading.value - rest),
            limit=number,
            unit="V",
            verdict=judged.verdict,
            why=judged.why,
            would_decide="Read output with a better meter" if undecided else "",
            cause="meter" if undecided else "",
            conformance_probability=judged.conformance_probability,
        ),
    )


def quiescent_target(number: float, facts: RuleFacts) -> tuple[RuleResult, ...]:
    """Whether the bias is at the design's target.

    Where the target is a drop: |mean emitter drop (V) / target - 1| ≤ number. Where it is a current or the optimum,
    the same for the mean of drop / emitter resistor (A), so that a resistor that nobody measured adds its tolerance to
    the doubt. Usual number: the design's tolerance. Source: the design.
    """
    rule = "quiescent target"
    design = facts.design
    found = _emitter_readings(facts)
    if not found:
        lacking = missing(facts, emitter_points(design)[:1]) or "No emitter drop was read."
        return (nothing_to_judge(rule, "", number, "", why=lacking, needs=f"Read {emitter_points(design)[0]}"),)
    subject = " and ".join(current.point for current in found)
    target_v = target_drop_v(design)
    as_current = design.target.emitter_drop_v is None
    marked = design.output.emitter_resistor
    wanted = target_v / marked.value if as_current else target_v
    shared = all_same_gain([current.drop for current in found])
    values, own, common, tolerances = [], [], [], []
    known = True
    for current in found:
        scale = 1.0 / current.resistance.ohm if as_current else 1.0
        assert current.drop.value is not None
        values.append(current.drop.value * scale)
        u = current.drop.standard_uncertainty
        u_ohm = current.resistance.uncertainty(shared=False)
        known = known and u is not None and u_ohm is not None
        u_own = current.drop.own_uncertainty if shared else u
        gain = math.sqrt(max(0.0, (u or 0.0) ** 2 - (u_own or 0.0) ** 2))
        part = values[-1] * (u_ohm or 0.0) / current.resistance.ohm if as_current else 0.0
        own.append(math.hypot((u_own or 0.0) * scale, part))
        common.append(gain * scale)
        tolerances.append(current.resistance.tolerance if as_current else 0.0)
    count = len(values)
    mean = math.fsum(values) / count
    u_mean = math.hypot(combine(own) / count, math.fsum(common) / count) if known else None
    deviation = mean / wanted - 1.0
    relative_u = None if u_mean is None else u_mean / wanted
    parts = max(tolerances) * mean / wanted
    decided = decide(deviation, relative_u, abs(parts), low=-number, high=number, coverage=facts.coverage)
    unit = "A" if as_current else "V"
    advice = {
        "": "",
        "parts": f"Measure the resistors of {subject} 4-wire or with a forced current, with the power off",
        "meter": f"Read {subject} with a better meter",
        "parts and meter": f"Measure the resistors of {subject} with the power off, or read with a better meter",
        "nothing to judge": "",
    }
    return (
        RuleResult(
            rule=rule,
            subject=subject,
            value=mean,
            limit=(wanted * (1.0 - number), wanted * (1.0 + number)),
            unit=unit,
            verdict=decided.verdict,
            why=f"{show(mean, unit)} is {percent(deviation)} from the target of {show(wanted, unit)}, "
            f"which allows {percent(number)}.",
            would_decide=advice[decided.cause],
            cause=decided.cause,
            conformance_probability=decided.conformance_probability,
        ),
    )


def optimum_bias(number: float, facts: RuleFacts) -> tuple[RuleResult, ...]:
    """Whether the stage idles where its gain ripples least.

    Emitter followers: |I_Q·(R_E + re + rb/hFE) / VT - 1| ≤ number; I_Q in A from the emitter drops, R_E the emitter
    resistor, re and rb/hFE the output devices' own ohmic resistances (ohm, the mean of both halves), VT = kT/q (V).
    Feedback pair: |I_Q / (the model's current of least gain ripple) - 1| ≤ number. Usual number: 0.20. Source: B. M.
    Oliver, Distortion in Complementary Pair Class B Amplifiers, Hewlett-Packard Journal, February 1971; the model.

    T is the heat sink's reading, otherwise the design's ambient, and may be 15 K off.
    """
    rule = "optimum bias"
    design = facts.design
    found = _emitter_readings(facts)
    if not found:
        return (
            nothing_to_judge(rule, "", number, "", why="No emitter drop was read.", needs="Read the emitter drops"),
        )
    sink = number_of(facts, "heatsink")
    celsius = design.thermal.ambient_c if sink is None or sink.value is None else sink.value
    kelvin = celsius + ZERO_CELSIUS_K
    feedback = design.output.topology == "complementary-feedback-pair"
    marked_ohm = design.output.emitter_resistor.value
    try:
        best_a = least_ripple_drop_v(design, setting_at(design, round(celsius, 1))) / marked_ohm if feedback else 0.0
    except ModelError as error:
        why = f"The model has no answer: {error.came}."
        return (nothing_to_judge(rule, "", number, "", why=why, needs=error.next_step),)
    extra = ohmic_ohm(design)
    ratios, us, doubts = [], [], []
    for current in found:
        wanted_a = best_a if feedback else oliver_current_a(kelvin, current.resistance.ohm, extra)
        ratios.append(current.amps / wanted_a)
        u = current.uncertainty(drop_shared=False, resistance_shared=False)
        us.append(None if u is None else u / wanted_a)
        doubts.append(current.resistance.tolerance + JUNCTION_TEMPERATURE_DOUBT_K / kelvin)
    ratio = math.fsum(ratios) / len(ratios)
    # The meter's gain is common to all of them: the mean is no better known than one.
    u_ratio = None if any(u is None for u in us) else max(u for u in us if u is not None)
    told = (
        f"The current is {ratio:.3f} of the {show(best_a, 'A', 3)} at which the gain ripples least by the model,"
        if feedback
        else f"I_Q·(R_E + re + rb/hFE) is {ratio:.3f} of VT"
    )
    decided = decide(ratio - 1.0, u_ratio, ratio * max(doubts), low=-number, high=number, coverage=facts.coverage)
    return (
        RuleResult(
            rule=rule,
            subject=" and ".join(current.point for current in found),
            value=ratio,
            limit=(1.0 - number, 1.0 + number),
            unit="",
            verdict=decided.verdict,
            why=f"{told} at {show(celsius, 'degC', 3)}.",
            would_decide="Measure the emitter resistors cold, and the heat sink's temperature"
            if decided.verdict == "undecided"
            else "",
            cause=decided.cause,
            conformance_probability=decided.conformance_probability,
        ),
    )


def hum_at_rest(number: float, facts: RuleFacts) -> tuple[RuleResult, ...]:
    """Whether the output is quiet with the input shorted.

    `output.ac` ≤ number (V r.m.s.). Usual number: none; the procedure states it. Source: common practice.
    """
    rule, subject = "hum at rest", "output.ac"
    reading = facts.readings.get(subject)
    if reading is None:
        return (nothing_to_judge(rule, subject, number, "V", why="output.ac was not read.", needs="Read output.ac"),)
    judged = judge(
        reading.measured,
        reading.standard_uncertainty,
        Limits(None, number, None, "V", rule),
        coverage=facts.coverage,
    )
    undecided = judged.verdict == "undecided"
    return (
        RuleResult(
            rule=rule,
            subject=subject,
            value=reading.value,
            limit=number,
            unit="V",
            verdict=judged.verdict,
            why=judged.why,
            would_decide="Read output.ac with a better meter" if undecided else "",
            cause="meter" if undecided else "",
            conformance_probability=judged.conformance_probability,
        ),
    )


def target_tolerance(design: Design) -> float:
    """Tolerance of the design's target, as a fraction."""
    return float(design.target.tolerance)


def _emitter_readings(facts: RuleFacts) -> Sequence[Current]:
    """All emitter drops that were read; a drop across both resistors of a pair counts once, by half."""
    marked = facts.design.output.emitter_resistor
    found = [
        Current(point, reading, resistance(facts, point, marked))
        for point in emitter_points(facts.design)
        if (reading := number_of(facts, point)) is not None
    ]
    for number in range(1, facts.design.output.pairs + 1):
        names = (f"emitter.upper.{number}", f"emitter.lower.{number}")
        both = number_of(facts, f"emitter.pair.{number}")
        if both is None or both.value is None or any(current.point in names for current in found):
            continue
        found.append(_half(both, *(resistance(facts, name, marked) for name in names)))
    return found


def _half(both: Reading, upper: Resistance, lower: Resistance) -> Current:
    assert both.value is not None
    halved = replace(
        both,
        value=both.value / 2.0,
        standard_uncertainty=None if both.standard_uncertainty is None else both.standard_uncertainty / 2.0,
        own_uncertainty=None if both.own_uncertainty is None else both.own_uncertainty / 2.0,
    )
    mean = Resistance(
        (upper.ohm + lower.ohm) / 2.0,
        (upper.tolerance + lower.tolerance) / 2.0,
        upper.reading if lower.reading is not None else None,
    )
    return Current(both.point, halved, mean)
