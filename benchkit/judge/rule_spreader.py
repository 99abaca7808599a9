"""Rules about the bias spreader: divider stiffness, spreader ratio, fail-safe trimmer, trimmer authority."""

from __future__ import annotations

import math
from dataclasses import dataclass

from benchkit.errors import ModelError
from benchkit.judge.rule_base import (
    ModelFigure,
    RuleFacts,
    RuleResult,
    decide,
    missing,
    nothing_to_judge,
    number_of,
)
from benchkit.measure.readings import Reading
from benchkit.measure.uncertainty import combine, relative_uncertainty_of_ratio
from benchkit.quantities import show
from benchkit.stage.topologies import tied_divider
from benchkit.stage.trimmer import authority, open_wiper
from benchkit.stage.trimmer_report import trimmer_report

SAME_DROP = 1e-3
"""Relative difference of two predicted drops below which they count as the same."""


@dataclass(frozen=True)
class _Arm:
    """An arm of the spreader: its resistance as known, the hard interval that it is in, and whether that is a value.

    An arm whose trimmer may stand anywhere is not settled.
    """

    ohm: float
    low: float
    high: float
    reading: Reading | None
    settled: bool = True


def divider_stiffness(number: float, facts: RuleFacts) -> tuple[RuleResult, ...]:
    """Whether the spreader's divider carries enough current not to mind the transistor's base current.

    I_L / (I_U - I_L) ≥ number, I_L = V_L/R_L through the base-emitter arm, I_U = V_U/R_U through the collector-base arm
    (V, ohm). Usual number: 10. Source: rule of thumb, common practice.

    The base current is a small difference of two currents: with 1 % resistors that nobody measured it is uncertain by
    as much as itself. Judged as q = I_U/I_L ≤ 1 + 1/number, where a gain error of the meter cancels.
    """
    rule, subject = "divider stiffness", "spread.upper and spread.lower"
    lacking = missing(facts, ("spread.upper", "spread.lower"))
    if lacking:
        return (nothing_to_judge(rule, subject, number, "", why=lacking, needs="Read spread.upper and spread.lower"),)
    upper, lower = facts.readings["spread.upper"], facts.readings["spread.lower"]
    if not (upper.value and lower.value and upper.value > 0 and lower.value > 0):
        why = "No current flows through the divider."
        return (nothing_to_judge(rule, subject, number, "", why=why, needs="Read it with the rails up"),)
    arm_u, arm_l = _arm(facts, "upper"), _arm(facts, "lower")
    volts = upper.value / lower.value
    q = volts * arm_l.ohm / arm_u.ohm
    q_low, q_high = volts * arm_l.low / arm_u.high, volts * arm_l.high / arm_u.low
    relative = _relative(upper, lower, arm_u.reading, arm_l.reading)
    u = None if relative is None else q * relative
    parts = max(q - q_low, q_high - q)
    limit = 1.0 + 1.0 / number
    decided = decide(q, u, parts, low=None, high=limit, coverage=facts.coverage)
    settled = arm_u.settled and arm_l.settled
    stiffness = 1.0 / (q - 1.0) if q > 1.0 and settled else None
    base = f"I_L is {show(lower.value / arm_l.ohm, 'A')} and I_U - I_L {show((q - 1.0) * lower.value / arm_l.ohm, 'A')}"
    why = f"{base}; the rule wants a ratio of {number:g} or more."
    would_decide = ""
    if decided.verdict == "undecided":
        if "parts" in decided.cause:
            why = (
                f"{base}, but arms that nobody measured make that difference uncertain by as much as itself."
                if settled
                else "The trimmer may stand anywhere in its arm, so nobody knows the divider's currents."
            )
            would_decide = "Measure both arms of the spreader, trimmer included, with the power off and one end lifted"
        else:
            would_decide = "Read both arms with a better meter, on one range"
    return (
        RuleResult(
            rule=rule,
            subject=subject,
            value=stiffness,
            limit=number,
            unit="",
            verdict=decided.verdict,
            why=why,
            would_decide=would_decide,
            cause=decided.cause,
            conformance_probability=decided.conformance_probability,
        ),
    )


def spreader_ratio(number: float, facts: RuleFacts) -> tuple[RuleResult, ...]:
    """Whether the spread is what the arms make of the spreader's VBE.

    V_spread = VBE·(1 + R_U/R_L) + I_B·R_U (V, ohm, A), VBE read across the base-emitter arm; I_B anywhere between
    nothing and `number` times the feed current over the device's BF at the low end of its spread. Usual number: 2
    (current gain at the working current down to half of BF). Source: circuit theory.

    Arms that nobody measured are anywhere within their tolerances, the trimmer anywhere on its track.
    """
    rule, subject = "spreader ratio", "spread and spread.lower"
    lacking = missing(facts, ("spread", "spread.lower"))
    if lacking:
        return (nothing_to_judge(rule, subject, None, "V", why=lacking, needs="Read spread and spread.lower"),)
    spread, vbe = facts.readings["spread"], facts.readings["spread.lower"]
    assert spread.value is not None
    assert vbe.value is not None
    if vbe.value <= 0:
        why = "The spreader's base-emitter junction has no forward voltage."
        return (nothing_to_judge(rule, subject, None, "V", why=why, needs="Read it with the rails up"),)
    feed_a = _feed_current(facts)
    arm_u, arm_l = _arm(facts, "upper"), _arm(facts, "lower")
    device = facts.design.device[facts.design.spreader.transistor]
    gain = device.parameters.get("BF", 100.0) / (1.0 + device.spread.get("BF", 0.0))
    base_a = number * feed_a / gain
    low = vbe.value * (1.0 + arm_u.low / arm_l.high)
    high = vbe.value * (1.0 + arm_u.high / arm_l.low) + base_a * arm_u.high
    relative = _relative(spread, vbe, arm_u.reading, arm_l.reading)
    u = None if relative is None else abs(spread.value) * relative
    decided = decide(spread.value, u, 0.0, low=low, high=high, coverage=facts.coverage)
    why = f"The spread is {show(spread.value, 'V')}; its arms make {show(low, 'V')} to {show(high, 'V')} of this VBE."
    if decided.verdict == "fail":
        why += (
            " The collector-base arm is too large, the base-emitter arm too small, or the transistor's gain too low."
            if spread.value > high
            else " The collector-base arm is too small or the base-emitter arm too large."
        )
    return (
        RuleResult(
            rule=rule,
            subject=subject,
            value=spread.value,
            limit=(low, high),
            unit="V",
            verdict=decided.verdict,
            why=why,
            would_decide="Read both with a better meter" if decided.verdict == "undecided" else "",
            cause=decided.cause,
            conformance_probability=decided.conformance_probability,
        ),
    )


def fail_safe_trimmer(number: float, facts: RuleFacts) -> tuple[RuleResult, ...]:
    """Whether a trimmer whose wiper opens lowers the bias.

    The nominal emitter drop (V) with the wiper open over the same now, below `number`; a supply that comes into its
    limit fails too. Usual number: 1 (any rise is a failure). Source: common practice; both drops from the model, at the
    target on full rails unless others are given.
    """
    rule, subject = "fail-safe trimmer", "spreader.trimmer"
    if facts.design.spreader.trimmer is None:
        return (
            RuleResult(
                rule=rule,
                subject=subject,
                value=None,
                limit=number,
                unit="",
                verdict="pass",
                why="The design has no trimmer whose wiper could open.",
            ),
        )
    limited = ""
    try:
        if facts.wiper_open is not None:
            now_v, open_v = facts.wiper_open()
        else:
            opened = open_wiper(facts.design)
            now_v, open_v = opened.before.drop_v, opened.after.drop_v
            limited = f"only the supply's limit of {show(opened.limit_a, 'A', 3)} holds it" if opened.in_limit else ""
    except ModelError as error:
        why = f"The model has no answer for an open wiper: {error.came}"
        return (nothing_to_judge(rule, subject, number, "", why=why, needs=error.next_step),)
    if not (math.isfinite(now_v) and math.isfinite(open_v) and now_v > 0):
        why = "The model has no emitter drop to compare with."
        return (nothing_to_judge(rule, subject, number, "", why=why, needs="Ask at the target's trimmer position"),)
    ratio = open_v / now_v
    told = f"With the wiper open the emitter drop goes from {show(now_v, 'V')} to {show(open_v, 'V')}"
    if abs(ratio - number) <= SAME_DROP and not limited:
        why = f"{told}: no difference at this trimmer position."
        return (nothing_to_judge(rule, subject, number, "", why=why, needs="Ask at the target's trimmer position"),)
    good = ratio < number and not limited
    became = limited or ("the bias falls" if good else "the bias rises, and a bad contact burns devices")
    return (
        RuleResult(
            rule=rule,
            subject=subject,
            value=ratio,
            limit=number,
            unit="",
            verdict="pass" if good else "fail",
            why=f"{told}: {became}.",
        ),
    )


def trimmer_authority(number: float, facts: RuleFacts) -> tuple[RuleResult, ...]:
    """Whether nearly every unit reaches its target with the trimmer away from its ends.

    Share of units whose target lies inside 5 % to 95 % of travel ≥ number. Usual number: 0.99. Source: the model.

    Without a trimmer: share of units whose fixed bias is within the target's tolerance.
    """
    rule, subject = "trimmer authority", "spreader.trimmer"
    told = "reach the target inside 5 % to 95 % of travel"
    figure = facts.figures.get(rule)
    try:
        if figure is None and facts.design.spreader.trimmer is None:
            share = trimmer_report(facts.design).share_at_target
            figure, told = ModelFigure(share or 0.0), "have a fixed bias within the target's tolerance"
        elif figure is None:
            found = authority(facts.design)
            figure = ModelFigure(found.share, found.standard_uncertainty)
    except ModelError as error:
        why = f"The model has no answer: {error.came}."
        return (nothing_to_judge(rule, subject, number, "", why=why, needs=error.next_step),)
    decided = decide(figure.value, figure.standard_uncertainty, 0.0, low=number, high=None, coverage=facts.coverage)
    return (
        RuleResult(
            rule=rule,
            subject=subject,
            value=figure.value,
            limit=number,
            unit="",
            verdict=decided.verdict,
            why=f"{100 * figure.value:.4g} % of units {told}.",
            would_decide="Solve more units" if decided.verdict == "undecided" else "",
            cause=decided.cause,
            conformance_probability=decided.conformance_probability,
        ),
    )


def _arm(facts: RuleFacts, arm: str) -> _Arm:
    """Find one arm with its share of the trimmer: as measured ("spreader.upper", trimmer included), or as marked."""
    reading = facts.cold.get(f"spreader.{arm}")
    if reading is not None and reading.value is not None and reading.value > 0:
        return _Arm(reading.value, reading.value, reading.value, reading)
    spreader = facts.design.spreader
    marked = spreader.upper if arm == "upper" else spreader.lower
    low, high = marked.value * (1.0 - marked.fraction), marked.value * (1.0 + marked.fraction)
    ohm = marked.value
    trimmer = spreader.trimmer
    # A tied divider's upper section is bridged: it works in the lower arm alone.
    works_in = "lower" if tied_divider(facts.design) else None if trimmer is None else trimmer.arm
    if trimmer is not None and works_in in (arm, "between"):
        track, fraction = trimmer.value
        # More bias: less resistance in the lower arm, more in the upper one.
        least, most = 0.0, 1.0
        if facts.travel is not None:
            least = most = facts.travel if arm == "upper" else 1.0 - facts.travel
        low += least * track * (1.0 - fraction)
        high += most * track * (1.0 + fraction) + trimmer.end_resistance_ohm
        ohm += (least + most) / 2.0 * track
        return _Arm(ohm, low, high, None, settled=facts.travel is not None)
    return _Arm(ohm, low, high, None)


def _relative(first: Reading, second: Reading, ohm_first: Reading | None, ohm_second: Reading | None) -> float | None:
    """Relative standard uncertainty of (first/second)·(ohm_second/ohm_first)."""
    parts = [relative_uncertainty_of_ratio(first, second)]
    if ohm_first is not None and ohm_second is not None:
        parts.append(relative_uncertainty_of_ratio(ohm_first, ohm_second))
    else:
        for one in (ohm_first, ohm_second):
            if one is not None:
                u = one.standard_uncertainty
                parts.append(None if u is None or not one.value else u / one.value)
    if any(part is None for part in parts):
        return None
    return combine([part for part in parts if part is not None])


def _feed_current(facts: RuleFacts) -> float:
    """Most current (A) that the upper feed can send."""
    feed = facts.design.feed.upper
    if feed.kind == "source":
        return feed.value.value * (1.0 + feed.value.fraction)
    least_ohm = feed.value.value * (1.0 - feed.value.fraction)
    drop = number_of(facts, "feed.upper")
    if drop is not None and drop.value is not None:
        return abs(drop.value) / least_ohm
    positive = facts.design.rails.positive_v if facts.positive_v is None else facts.positive_v
    return abs(positive - facts.rest_v) / least_ohm
