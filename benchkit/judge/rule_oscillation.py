"""The rule about oscillation: a person looks, readings only hint."""

from __future__ import annotations

import math

from benchkit.judge.rule_base import RuleFacts, RuleResult, nothing_to_judge, number_of
from benchkit.judge.rule_currents import emitter_points
from benchkit.quantities import show

LOOK = (
    "Look with an oscilloscope of 50 MHz or more, times-ten probe, its ground at the star point, before the bias is "
    "raised and again at the target"
)


def oscillation(number: float, facts: RuleFacts) -> tuple[RuleResult, ...]:
    """Whether the stage is free of oscillation, as a person with an oscilloscope saw it.

    The number of times that an oscillation was seen (0 or 1), below `number`. Usual number: 1 (none seen). Source:
    common practice: an oscilloscope of 50 MHz or more, times-ten probe, ground at the star point, before the bias is
    raised and again at the target; a meter's a.c. range does not see MHz.

    Readings never decide it, they hint: a rail current (A) above the model's limit while no emitter drop that was read
    is above its own. With such a hint "none seen" is undecided.
    """
    rule, subject = "oscillation", "output"
    hints = _hints(facts)
    told = f" {' '.join(hints)} That is a sign of oscillation." if hints else ""
    seen = facts.seen.get(rule)
    if seen is None:
        why = f"Nobody has looked.{told}"
        return (nothing_to_judge(rule, subject, number, "", why=why, needs=LOOK),)
    value = 1.0 if seen else 0.0
    if value >= number:
        return (
            RuleResult(
                rule=rule, subject=subject, value=value, limit=number, unit="", verdict="fail",
                why=f"An oscillation was seen.{told}",
            ),
        )  # fmt: skip
    if hints:
        return (
            RuleResult(
                rule=rule, subject=subject, value=value, limit=number, unit="", verdict="undecided", cause="meter",
                why=f"None was seen, but {hints[0]} That is a sign of one.",
                would_decide=f"{LOOK}; feel the output network for warmth, see whether a hand nearby moves a reading",
            ),
        )  # fmt: skip
    return (
        RuleResult(
            rule=rule, subject=subject, value=value, limit=number, unit="", verdict="pass", why="None was seen."
        ),
    )  # fmt: skip


def _hints(facts: RuleFacts) -> list[str]:
    """Rail currents that are too high while no emitter drop is."""
    drops = [point for point in emitter_points(facts.design) if number_of(facts, point) is not None]
    if not drops or any(_above(facts, point) for point in drops):
        return []
    hints = []
    for point in ("rail+.current", "rail-.current"):
        if _above(facts, point):
            reading, limits = facts.readings[point], facts.limits[point]
            assert reading.value is not None
            assert limits.high is not None
            hints.append(
                f"{point} is {show(reading.value, 'A')}, above the {show(limits.high, 'A')} that the emitter currents "
                "leave room for."
            )
    return hints


def _above(facts: RuleFacts, point: str) -> bool:
    reading, limits = number_of(facts, point), facts.limits.get(point)
    if reading is None or reading.value is None or limits is None or limits.high is None:
        return False
    return math.isfinite(limits.high) and reading.value > limits.high
