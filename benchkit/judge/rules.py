"""The named rules: one table, from a rule's name to its formula, its usual number and where that comes from.

A procedure names a rule and may give a number of its own; it never holds a formula. Each rule's function carries in its
docstring the formula, the units, the usual number and the source. How a value is decided stands in
`benchkit.judge.rule_base`.
"""

from __future__ import annotations

import difflib
import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

from benchkit.errors import EntryError
from benchkit.judge import rule_bias, rule_currents, rule_heat, rule_oscillation, rule_spreader
from benchkit.judge.rule_base import ModelFigure, RuleFacts, RuleResult
from benchkit.quantities import quoted
from benchkit.stage.design import Design

__all__ = ["RULES", "ModelFigure", "Rule", "RuleFacts", "RuleResult", "evaluate", "evaluate_each", "find_rule"]

Check = Callable[[float, RuleFacts], tuple[RuleResult, ...]]


@dataclass(frozen=True, kw_only=True)
class Rule:
    """One named rule.

    Attributes
    ----------
    name : str
        As a procedure names it.
    title : str
        For a screen.
    number : float or callable or None
        The usual number; a callable takes it from the design (and may give None); None: the procedure must state it.
    unit : str
        Of the number, "" for a ratio.
    source : str
        Where formula and number come from.
    needs : callable
        Gives, for a design, the test points that must be read.
    check : callable
        The rule itself.
    override : bool
        Whether a person may go on against it.
    """

    name: str
    title: str
    number: float | Callable[[Design], float | None] | None
    unit: str
    source: str
    needs: Callable[[Design], tuple[str, ...]]
    check: Check
    override: bool = True

    def number_for(self, design: Design) -> float | None:
        """Give the usual number for a design, or None when there is none."""
        return self.number(design) if callable(self.number) else self.number


def _points(*names: str) -> Callable[[Design], tuple[str, ...]]:
    return lambda design: names


_TABLE: Final = (
    Rule(
        name="emitter symmetry",
        title="Both halves carry the same current",
        number=0.01,
        unit="",
        source="common practice",
        needs=rule_currents.emitter_points,
        check=rule_currents.emitter_symmetry,
    ),
    Rule(
        name="feed symmetry",
        title="Both feeds drop the same",
        number=0.01,
        unit="",
        source="common practice",
        needs=_points("feed.upper", "feed.lower"),
        check=rule_currents.feed_symmetry,
    ),
    Rule(
        name="divider stiffness",
        title="The spreader's divider doesn't mind the base current",
        number=10.0,
        unit="",
        source="rule of thumb, common practice",
        needs=_points("spread.upper", "spread.lower"),
        check=rule_spreader.divider_stiffness,
    ),
    Rule(
        name="spreader ratio",
        title="The spread is what the arms make of it",
        number=2.0,
        unit="",
        source="circuit theory",
        needs=_points("spread", "spread.lower"),
        check=rule_spreader.spreader_ratio,
    ),
    Rule(
        name="junction drop",
        title="Each junction conducts as it should",
        number=0.7,
        unit="V",
        source="the model; without it common practice",
        needs=_points(),
        check=rule_bias.junction_drop,
    ),
    Rule(
        name="offset before load",
        title="No d.c. at the output before a load is connected",
        number=0.05,
        unit="V",
        source="common practice",
        needs=_points("output"),
        check=rule_bias.offset_before_load,
        override=False,
    ),
    Rule(
        name="quiescent target",
        title="The bias is at the target",
        number=rule_bias.target_tolerance,
        unit="",
        source="the design",
        needs=lambda design: rule_currents.emitter_points(design)[:1],
        check=rule_bias.quiescent_target,
    ),
    Rule(
        name="optimum bias",
        title="The bias is where the gain ripples least",
        number=0.20,
        unit="",
        source="B. M. Oliver, Hewlett-Packard Journal, February 1971; for a feedback pair the model",
        needs=lambda design: rule_currents.emitter_points(design)[:1],
        check=rule_bias.optimum_bias,
    ),
    Rule(
        name="pair sharing",
        title="The pairs share the current",
        number=0.10,
        unit="",
        source="common practice for matched devices",
        needs=rule_currents.emitter_points,
        check=rule_currents.pair_sharing,
    ),
    Rule(
        name="fail-safe trimmer",
        title="An open wiper lowers the bias",
        number=1.0,
        unit="",
        source="common practice, from the model",
        needs=_points(),
        check=rule_spreader.fail_safe_trimmer,
    ),
    Rule(
        name="trimmer authority",
        title="Nearly every unit reaches the target",
        number=0.99,
        unit="",
        source="the model",
        needs=_points(),
        check=rule_spreader.trimmer_authority,
    ),
    Rule(
        name="resistor dissipation",
        title="The emitter resistors stay within their rating",
        number=rule_heat.emitter_rating_w,
        unit="W",
        source="data sheet",
        needs=lambda design: rule_currents.emitter_points(design)[:1],
        check=rule_heat.resistor_dissipation,
    ),
    Rule(
        name="device dissipation",
        title="The output devices stay within their rating",
        number=rule_heat.output_rating_w,
        unit="W",
        source="data sheet",
        needs=_points(),
        check=rule_heat.device_dissipation,
    ),
    Rule(
        name="heat-sink rise",
        title="The heat sink stays cool enough",
        number=rule_heat.allowed_rise_k,
        unit="K",
        source="the design",
        needs=_points("heatsink"),
        check=rule_heat.heatsink_rise,
    ),
    Rule(
        name="runaway margin",
        title="The stage is thermally stable",
        number=0.5,
        unit="",
        source="criterion of thermal stability",
        needs=_points(),
        check=rule_heat.runaway_margin,
    ),
    Rule(
        name="idle against driven",
        title="The stage draws less at rest than when driven",
        number=1.0,
        unit="",
        source="common practice",
        needs=_points("rail+.current", "rail-.current"),
        check=rule_currents.idle_against_driven,
    ),
    Rule(
        name="hum at rest",
        title="The output is quiet",
        number=None,
        unit="V",
        source="common practice; the procedure states the number",
        needs=_points("output.ac"),
        check=rule_bias.hum_at_rest,
    ),
    Rule(
        name="oscillation",
        title="Nobody sees an oscillation",
        number=1.0,
        unit="",
        source="common practice",
        needs=_points(),
        check=rule_oscillation.oscillation,
    ),
)

RULES: Final[dict[str, Rule]] = {rule.name: rule for rule in _TABLE}
"""All rules by name."""


def find_rule(name: str) -> Rule:
    """Look up a rule.

    Raises
    ------
    EntryError
        For a name that is no rule; the nearest ones are named.
    """
    if name in RULES:
        return RULES[name]
    near = difflib.get_close_matches(name, RULES, 2)
    hint = f", perhaps {' or '.join(near)}" if near else f": {', '.join(RULES)}"
    raise EntryError(f"{quoted(name)} is no rule", f"one of the named rules{hint}")


def evaluate_each(rule_name: str, number: float | None, facts: RuleFacts) -> tuple[RuleResult, ...]:
    """Ask a rule, one result for each thing that it judges (each junction, each half).

    Parameters
    ----------
    rule_name : str
        One of `RULES`.
    number : float or None
        The rule's number in its unit; None for the usual one.
    facts : RuleFacts
        What is known.

    Returns
    -------
    tuple of RuleResult
        At least one.

    Raises
    ------
    EntryError
        For an unknown rule, a number that is not finite and above zero, or a rule that has no usual number.
    """
    rule = find_rule(rule_name)
    chosen = rule.number_for(facts.design) if number is None else number
    if chosen is None:
        raise EntryError(
            f'The rule "{rule.name}" has no usual number for this design', f"a number, {rule.unit or 'a ratio'}"
        )
    if not (math.isfinite(chosen) and chosen > 0):
        raise EntryError(f'The rule "{rule.name}" was given {chosen!r}', "a finite number above zero")
    return rule.check(chosen, facts)


def evaluate(rule_name: str, number: float | None, facts: RuleFacts) -> RuleResult:
    """Ask a rule for its one result: the worst of `evaluate_each`, whose parameters and errors these are."""
    order = {"pass": 0, "undecided": 1, "fail": 2}
    return max(evaluate_each(rule_name, number, facts), key=lambda result: order[result.verdict])
