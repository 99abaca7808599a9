"""Rules about heat: resistor dissipation, device dissipation, heat-sink rise, runaway margin.

What can be read is judged from readings. What can't (how hot a unit will get, how stable it is) is a figure of the
model, given in the facts or asked for here; the model's figure is that of the worst of many units, so that it carries
no uncertainty of its own.
"""

from __future__ import annotations

import math

import numpy as np

from benchkit.judge.limits import Limits
from benchkit.judge.rule_base import (
    ModelFigure,
    RuleFacts,
    RuleResult,
    decide,
    nothing_to_judge,
    number_of,
    resistance,
)
from benchkit.judge.rule_currents import emitter_points
from benchkit.judge.verdicts import judge_reading
from benchkit.measure.readings import Reading
from benchkit.quantities import show
from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design
from benchkit.stage.warming import WarmReport, warm_report


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
    """Power at idle in each output device whose emitter drop was read; without drops, in the hottest one by the model.

    P = (V - |V_E|)·V_E/R_E ≤ number (W): V from the device's rail to the output (`rail+`, `rail-` and `output` as read,
    otherwise as set and at rest), V_E the emitter drop (V), R_E its resistor (ohm) as measured cold or as marked. The
    model's figure: the hottest output device, warm, of the worst of its units. Usual number: the design's rating of the
    output devices. Source: data sheet of the device.
    """
    rule = "device dissipation"
    results = []
    for point in emitter_points(facts.design):
        reading = number_of(facts, point)
        if reading is not None and reading.value is not None:
            results.append(_device(rule, number, facts, point, reading))
    if results:
        return tuple(results)
    given = facts.figures.get(rule)
    figure: ModelFigure | None = given
    if given is None:
        report = _warm_report(facts)
        figure = None if np.isinf(report.worst_gain) else ModelFigure(float(np.max(report.output_w)))
    return (_figure(rule, number, facts, "W", "The hottest output device takes {}", figure),)


def _device(rule: str, number: float, facts: RuleFacts, point: str, reading: Reading) -> RuleResult:
    """Judge one output device by its emitter drop."""
    assert reading.value is not None
    side = point.split(".")[1]
    rail = number_of(facts, "rail+" if side == "upper" else "rail-")
    output = number_of(facts, "output")
    rails = facts.design.rails
    set_v = (
        (rails.positive_v if facts.positive_v is None else facts.positive_v)
        if side == "upper"
        else (rails.negative_v if facts.negative_v is None else facts.negative_v)
    )
    rail_v = set_v if rail is None or rail.value is None else rail.value
    rest_v = facts.rest_v if output is None or output.value is None else output.value
    volts = abs(rail_v - rest_v) - abs(reading.value)
    known = resistance(facts, point, facts.design.output.emitter_resistor)
    watts = volts * abs(reading.value) / known.ohm
    u_ohm, u = known.uncertainty(shared=False), None
    if reading.standard_uncertainty is not None and u_ohm is not None:
        u = math.hypot(volts * reading.standard_uncertainty / known.ohm, watts * u_ohm / known.ohm)
    decided = decide(watts, u, watts * known.tolerance, low=None, high=number, coverage=facts.coverage)
    device = point.replace("emitter", "output")
    return RuleResult(
        rule=rule,
        subject=device,
        value=watts,
        limit=number,
        unit="W",
        verdict=decided.verdict,
        why=f"{device} takes {show(watts, 'W')} at idle; the rule allows {show(number, 'W')}.",
        would_decide=f"Measure {point} with the power off" if decided.verdict == "undecided" else "",
        cause=decided.cause,
        conformance_probability=decided.conformance_probability,
    )


def runaway_margin(number: float, facts: RuleFacts) -> tuple[RuleResult, ...]:
    """How close the stage is to thermal runaway, from the model.

    θ·dP/dT < number: the loop gain from temperature to power and back, all devices of the stage together, drivers and
    spreader following the heat sink as the design says; at the target, warm, of the worst of the model's units. For one
    device with fixed bias it is θ·V·TC/(VT/I_Q + R_E). Usual number: 0.5; at 1 the stage runs away. Source: the
    criterion of thermal stability, θ·dP/dT < 1.
    """
    rule = "runaway margin"
    figure = facts.figures.get(rule)
    if figure is None:
        report = _warm_report(facts)
        if not report.has_warm_state:
            return (
                RuleResult(
                    rule=rule,
                    value=report.gain if math.isfinite(report.gain) else None,
                    limit=number,
                    unit="",
                    verdict="fail",
                    why=report.sentence,
                ),
            )
        figure = ModelFigure(report.worst_gain)
    return (_figure(rule, number, facts, "", "θ·dP/dT is {}", figure),)


def _warm_report(facts: RuleFacts) -> WarmReport:
    """Ask the model for the warm state at the target, at the rails of the facts."""
    rails = facts.design.rails
    condition = Condition(
        positive_v=rails.positive_v if facts.positive_v is None else facts.positive_v,
        negative_v=rails.negative_v if facts.negative_v is None else facts.negative_v,
        trimmer="target",
        when="warm",
    )
    return warm_report(facts.design, condition)


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


def _figure(rule: str, number: float, facts: RuleFacts, unit: str, told: str, figure: ModelFigure | None) -> RuleResult:
    """Judge a figure of the model against an upper number."""
    if figure is None:
        why = "The model finds no warm state to take it from."
        needs = 'Make the design one that has a warm state: see the rule "runaway margin"'
        return nothing_to_judge(rule, "", number, unit, why=why, needs=needs)
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
