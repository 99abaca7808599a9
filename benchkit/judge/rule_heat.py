"""Rules about heat: resistor dissipation, device dissipation, heat-sink rise, runaway margin."""

from __future__ import annotations

import math

from benchkit.judge.limits import Limits
from benchkit.judge.rule_base import RuleFacts, RuleResult, decide, nothing_to_judge, number_of, resistance
from benchkit.judge.rule_currents import emitter_points
from benchkit.judge.verdicts import judge_reading
from benchkit.quantities import show
from benchkit.stage.design import Design


def resistor_dissipation(number: float, facts: RuleFacts) -> tuple[RuleResult, ...]:
    """Power in each emitter resistor whose drop was read: one result a resistor.

    V²/R ≤ number (W), V the drop, R as measured cold or as marked. Usual number: the design's rating of "emitter".
    Source: data sheet of the part.
    """
    rule = "resistor dissipation"
    results = []
    for point in emitter_points(facts.design):
        reading = number_of(facts, point)
        if reading is None or reading.value is None:
            continue
        known = resistance(facts, point, facts.design.output.emitter_resistor)
        watts = reading.value**2 / known.ohm
        relative = None
        u_ohm = known.uncertainty(shared=False)
        if reading.standard_uncertainty is not None and u_ohm is not None:
            relative = math.hypot(
                2.0 * reading.standard_uncertainty * abs(reading.value) / known.ohm, watts * u_ohm / known.ohm
            )
        decided = decide(watts, relative, watts * known.tolerance, low=None, high=number, coverage=facts.coverage)
        results.append(
            RuleResult(
                rule=rule,
                subject=point,
                value=watts,
                limit=number,
                unit="W",
                verdict=decided.verdict,
                why=f"{point} takes {show(watts, 'W')} of {show(number, 'W')}.",
                would_decide=f"Measure {point} with the power off" if decided.verdict == "undecided" else "",
                cause=decided.cause,
                conformance_probability=decided.conformance_probability,
            )
        )
    if not results:
        return (
            nothing_to_judge(rule, "", number, "W", why="No emitter drop was read.", needs="Read the emitter drops"),
        )
    return tuple(results)


def heatsink_rise(number: float, facts: RuleFacts) -> tuple[RuleResult, ...]:
    """How far the heat sink is above the ambient temperature.

    heatsink - ambient ≤ number (K), the ambient temperature as the design has it. Usual number: the design's
    max_heatsink less its ambient. Source: the design.
    """
    rule, subject = "heat-sink rise", "heatsink"
    ambient = facts.design.thermal.ambient_c
    reading = facts.readings.get(subject)
    if reading is None:
        return (nothing_to_judge(rule, subject, number, "K", why="The heat sink was not read.", needs="Read heatsink"),)
    judged = judge_reading(reading, Limits(None, ambient + number, None, "degC", rule), coverage=facts.coverage)
    undecided = judged.verdict == "undecided"
    return (
        RuleResult(
            rule=rule,
            subject=subject,
            value=None if reading.value is None else reading.value - ambient,
            limit=number,
            unit="K",
            verdict=judged.verdict,
            why=judged.why,
            would_decide="Read the heat sink with a better thermometer" if undecided else "",
            cause="meter" if undecided else "",
            conformance_probability=judged.conformance_probability,
        ),
    )


def device_dissipation(number: float, facts: RuleFacts) -> tuple[RuleResult, ...]:
    """Power in the hottest output device, from the model.

    P ≤ number (W). Usual number: the design's rating of the output devices. Source: data sheet of the device.
    """
    return (_figure("device dissipation", number, facts, "W", "The hottest output device takes {}"),)


def runaway_margin(number: float, facts: RuleFacts) -> tuple[RuleResult, ...]:
    """How close the stage is to thermal runaway, from the model.

    θ·dP/dT ≤ number, summed over the stage. Usual number: 0.5; at 1 the stage runs away. Source: the criterion of
    thermal stability.
    """
    return (_figure("runaway margin", number, facts, "", "θ·dP/dT is {}"),)


def emitter_rating_w(design: Design) -> float | None:
    """Rated power of an emitter resistor (W), if the design gives one."""
    rating = design.ratings.get("emitter")
    return None if rating is None else rating.power_w


def output_rating_w(design: Design) -> float | None:
    """Rated power of the weaker output device (W), if the design gives one."""
    powers = [
        rating.power_w
        for name in ("output", "output.upper", "output.lower")
        if (rating := design.ratings.get(name)) is not None and rating.power_w is not None
    ]
    return min(powers, default=None)


def allowed_rise_k(design: Design) -> float:
    """How far the design lets its heat sink rise (K)."""
    return float(design.thermal.max_heatsink_c - design.thermal.ambient_c)


def _figure(rule: str, number: float, facts: RuleFacts, unit: str, told: str) -> RuleResult:
    """Judge a figure of the model against an upper number."""
    figure = facts.figures.get(rule)
    if figure is None:
        why = "The model was not asked for it."
        return nothing_to_judge(rule, "", number, unit, why=why, needs="Let the model solve the warm state")
    decided = decide(figure.value, figure.standard_uncertainty, 0.0, low=None, high=number, coverage=facts.coverage)
    shown = show(figure.value, unit) if unit else f"{figure.value:.3g}"
    return RuleResult(
        rule=rule,
        value=figure.value,
        limit=number,
        unit=unit,
        verdict=decided.verdict,
        why=f"{told.format(shown)}; the rule allows {show(number, unit) if unit else f'{number:g}'}.",
        would_decide="Solve more units" if decided.verdict == "undecided" else "",
        cause=decided.cause,
        conformance_probability=decided.conformance_probability,
    )
