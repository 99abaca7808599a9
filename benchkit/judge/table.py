"""Judging a file of readings: each against the model's limits for its condition, then the rules that apply.

The limits hold what the tolerances of the parts explain. The verdict over all is the worst of the readings, and of the
rules with one exception: a rule that is undecided only because nobody measured certain resistors doesn't lower it. Such
a rule is named with what would decide it, and the limits have already allowed for those tolerances.

Three allowances on top of the model's limits, for what is set by the bench and not by the unit:

- a rail may be off its setting by 1 %, or 0.1 V where that is more (common practice for a bench supply);
- the heat sink's reading may be off by 2 K, and by 10 K where the ambient temperature was not stated;
- with the trimmer at the target the bias may be anywhere within the target's own tolerance: the limits are the widest
  of those at the target and at both ends of its tolerance.

Which rules apply to readings without a procedure:

- offset before load, where the output was read and the model expects the stage to regulate at that condition;
- emitter symmetry and pair sharing, where the model expects a drop of at least a quarter of the target's (at the
  least-bias end the output devices barely conduct, and their microvolts say nothing about symmetry);
- feed symmetry, divider stiffness and spreader ratio, where their points were read;
- quiescent target, where the readings say that the trimmer is at the target, in the state that the target is for.

Then the suspects (`benchkit.stage.suspects`): which single fault would explain the readings, what to probe next, and
what the readings could not show. When every reading passes but some fault is likelier than a healthy unit, the verdict
over all is undecided: the limits of single readings can't see what all of them together say. The same when nothing
explains the readings, or when a point was read twice under one condition with values that contradict each other.

Files of several units are judged together: what was read under the same conditions shares its limits and hypotheses.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any, Final

from benchkit.judge.entries import Entry, parse_entries
from benchkit.judge.limits import Limits
from benchkit.judge.rule_base import RuleFacts, RuleResult
from benchkit.judge.rule_currents import emitter_points
from benchkit.judge.rules import RULES, evaluate_each
from benchkit.judge.verdicts import Judgement, Verdict, judge_reading, worst
from benchkit.measure.accuracy import STATED_DEFAULT, Accuracy
from benchkit.measure.readings import Reading
from benchkit.quantities import show
from benchkit.stage.conditions import Condition, Unpowered
from benchkit.stage.design import Design, target_drop_v
from benchkit.stage.faults import HEALTHY, Fault
from benchkit.stage.observations import Observation
from benchkit.stage.suspicion import Suspicion
from benchkit.stage.unit_model import answers

LEAST_SHARE_OF_TARGET: Final = 0.25
"""Share of the target's emitter drop that the model must expect before rules compare emitter currents."""

SOURCE: Final = "the model"
REJECTION_COVERAGE: Final = 0.9973
"""A reading fails only when it lies outside its limits by its uncertainty at this coverage; nearer, it is undecided."""
DISAGREEING: Final = 5.0
"""Readings of one point under one condition that differ by more than so many standard uncertainties contradict."""
RAIL_ALLOWANCE: Final = 0.01
LEAST_RAIL_ALLOWANCE_V: Final = 0.1
"""How far a rail may be off its setting: a share of it, and at least so many volts."""
HEATSINK_ALLOWANCE_K: Final = 2.0
UNSTATED_AMBIENT_ALLOWANCE_K: Final = 10.0
"""How far a heat sink's reading may be off for the thermometer, and where nobody stated the ambient temperature."""


@dataclass(frozen=True)
class JudgedReading:
    """One reading with its limits and what came of it.

    Attributes
    ----------
    entry : Entry
    limits : Limits or None
        None where the model expects nothing (a.c. readings).
    judgement : Judgement
    """

    entry: Entry
    limits: Limits | None
    judgement: Judgement


@dataclass(frozen=True)
class Table:
    """A judged file of readings.

    Attributes
    ----------
    readings : tuple of JudgedReading
        In the file's order.
    rules : tuple of RuleResult
    accuracy : Accuracy
        What was assumed of a meter where a reading said nothing.
    assumed : int
        How many readings it was assumed for.
    suspicion : Suspicion
        Which faults would explain the readings.
    """

    readings: tuple[JudgedReading, ...]
    rules: tuple[RuleResult, ...]
    accuracy: Accuracy
    assumed: int
    suspicion: Suspicion

    @property
    def verdict(self) -> Verdict:
        """The verdict over all; see the top of this module."""
        verdict = overall([judged.judgement.verdict for judged in self.readings], self.rules)
        sound = self.suspicion.suspects[0].fault == HEALTHY and self.suspicion.explained and not self.contradictions
        return verdict if verdict != "pass" or sound else "undecided"

    @property
    def contradictions(self) -> tuple[str, ...]:
        """Points that were read more than once under the same condition, with values that can't be the same."""
        groups: dict[tuple[object, str], list[Reading]] = {}
        for judged in self.readings:
            groups.setdefault((judged.entry.condition, judged.entry.reading.point), []).append(judged.entry.reading)
        found = []
        for (_, point), several in groups.items():
            values = [one.value for one in several if one.value is not None]
            u = max((one.standard_uncertainty or 0.0) for one in several)
            mixed = bool(values) and len(values) < len(several)
            if mixed or (len(values) > 1 and max(values) - min(values) > DISAGREEING * u):
                found.append(point)
        return tuple(dict.fromkeys(found))

    def as_json(self) -> dict[str, Any]:
        """Give the object that ``benchkit judge --json`` prints; what is no number is None."""
        return {
            "verdict": self.verdict,
            "readings": [
                {
                    "point": judged.entry.reading.point,
                    "value": _number(judged.entry.reading.value),
                    "low": _number(judged.limits.low if judged.limits else None),
                    "high": _number(judged.limits.high if judged.limits else None),
                    "verdict": judged.judgement.verdict,
                }
                for judged in self.readings
            ],
            "rules": [
                {
                    "rule": result.rule,
                    "value": _number(result.value),
                    "limit": [_number(end) for end in result.limit]
                    if isinstance(result.limit, tuple)
                    else _number(result.limit),
                    "verdict": result.verdict,
                }
                for result in self.rules
            ],
            "suspects": [
                _fault(one.fault) | {"probability": one.probability, "alike": [_fault(other) for other in one.alike]}
                for one in self.suspicion.suspects
            ],
            "probe_next": [{"point": probe.point, "why": probe.why} for probe in self.suspicion.probe_next],
            "unseen": [_fault(fault) for fault in self.suspicion.unseen],
        }


def _fault(fault: Fault) -> dict[str, Any]:
    return {"part": fault.part, "fault": fault.fault}


def overall(readings: Sequence[Verdict], rules: Sequence[RuleResult]) -> Verdict:
    """Sum up readings and rules.

    Parameters
    ----------
    readings : sequence of Verdict
    rules : sequence of RuleResult
        One that is undecided because of unmeasured parts, or for want of anything to judge, doesn't count.

    Returns
    -------
    Verdict
        Never "pass" without a reading.
    """
    counted = [result.verdict for result in rules if result.verdict != "undecided" or result.cause == "meter"]
    return worst([*readings, *counted]) if readings else "undecided"


def judge_table(
    design: Design,
    text: str,
    *,
    accuracy: Accuracy | None = None,
    units: int | None = None,
    seed: int = 0,
    file_name: str = "readings",
) -> Table:
    """Judge one file of readings; see `judge_files`."""
    return judge_files(design, [(file_name, text)], accuracy=accuracy, units=units, seed=seed)[0]


def judge_files(
    design: Design,
    files: Sequence[tuple[str, str]],
    *,
    accuracy: Accuracy | None = None,
    units: int | None = None,
    seed: int = 0,
) -> list[Table]:
    """Judge files of readings, one unit each.

    Parameters
    ----------
    design : Design
    files : sequence of (str, str)
        Each file's name, for messages, and its text (`benchkit.judge.entries`).
    accuracy : Accuracy, optional
        Of the meter, for readings without an uncertainty; otherwise `STATED_DEFAULT`.
    units : int, optional
        How many units the limits are made from; otherwise the model's own number.
    seed : int
        Of the draws.

    Returns
    -------
    list of Table
        In the order of the files.

    Raises
    ------
    FileError
        When a file is wrong.
    ModelError
        When the model has no trustworthy answer for one of the conditions.
    """
    from benchkit.stage.suspects import suspect_many

    meter = STATED_DEFAULT if accuracy is None else accuracy
    sets = [parse_entries(text, design, meter, name, assumed=accuracy is None) for name, text in files]
    limits = _limits(design, [entry for entries in sets for entry in entries], units, seed)
    suspicions = suspect_many(design, [observations(design, entries) for entries in sets])
    tables = []
    for entries, suspicion in zip(sets, suspicions, strict=True):
        judged = []
        for entry in entries:
            found = limits.get((entry.condition, entry.point.name))
            if found is None:
                why = f"The model expects nothing in particular of {entry.reading.point}."
                judgement = Judgement("undecided", 0.0, 0.0, None, None, why)
            else:
                judgement = judge_reading(entry.reading, found, rejection_coverage=REJECTION_COVERAGE)
            judged.append(JudgedReading(entry, found, judgement))
        assumed = sum(entry.reading.meter == meter.name and not entry.reading.overload for entry in entries)
        tables.append(Table(tuple(judged), tuple(_rules(design, judged)), meter, assumed, suspicion))
    return tables


def observations(design: Design, entries: Sequence[Entry]) -> list[Observation]:
    """Readings as the model takes them; those that it has no answer for are left out."""
    result = []
    for entry in entries:
        reading, condition = entry.reading, entry.condition
        if not entry.point.modelled or not answers(design, condition, entry.point.name):
            continue
        value = (-math.inf if reading.negative else math.inf) if reading.value is None else reading.value
        u = reading.standard_uncertainty
        result.append(
            Observation(
                conditions=(condition,), point=entry.point.name, value=value,
                standard_uncertainty=0.0 if u is None or not math.isfinite(u) else u,
            )
        )  # fmt: skip
    return result


def _limits(
    design: Design, entries: Sequence[Entry], units: int | None, seed: int
) -> dict[tuple[object, str], Limits | None]:
    """Ask the model once for each condition, with all points that were read under it."""
    from benchkit.stage.expected import DEFAULT_UNITS, expected_unpowered

    many = DEFAULT_UNITS if units is None else units
    groups: dict[Condition | Unpowered, list[Entry]] = {}
    for entry in entries:
        groups.setdefault(entry.condition, []).append(entry)
    found: dict[tuple[object, str], Limits | None] = {}
    for condition, members in groups.items():
        names = list(dict.fromkeys(member.point.name for member in members if member.point.modelled))
        if not names:
            continue
        if isinstance(condition, Condition):
            found |= _powered_limits(design, condition, names, many, seed)
        else:
            answer = expected_unpowered(
                design, names, trimmer=condition.trimmer, units=many, seed=seed, ambient_c=condition.ambient_c
            )
            found |= {(condition, one.point): limits_of(one) for one in answer.points}
    return found


def _powered_limits(
    design: Design, condition: Condition, names: Sequence[str], units: int, seed: int
) -> dict[tuple[object, str], Limits | None]:
    """Ask the model under a powered condition, and add the allowances for what the bench sets."""
    from benchkit.stage.expected import expected

    shares = [condition.target_share]
    if condition.trimmer == "target":
        tolerance = design.target.tolerance
        shares += [condition.target_share * (1.0 - tolerance), condition.target_share * (1.0 + tolerance)]
    widest: dict[tuple[object, str], Limits | None] = {}
    for share in shares:
        answer = expected(design, replace(condition, target_share=share), units=units, seed=seed, points=names)
        for one in answer.points:
            limits = limits_of(one)
            if (condition, one.point) in widest:
                limits = _union(widest[condition, one.point], limits)
            widest[condition, one.point] = limits
    return {key: _with_allowance(limits, key[1], condition) for key, limits in widest.items()}


def _union(first: Limits | None, second: Limits | None) -> Limits | None:
    if first is None or second is None:
        return None
    low = None if first.low is None or second.low is None else min(first.low, second.low)
    high = None if first.high is None or second.high is None else max(first.high, second.high)
    return replace(first, low=low, high=high)


def _with_allowance(limits: Limits | None, point: str, condition: Condition) -> Limits | None:
    """Widen the limits of what the bench sets: the rails, and the heat sink's ambient temperature."""
    if limits is None:
        return None
    if point in ("rail+", "rail-"):
        setting = condition.positive_v if point == "rail+" else condition.negative_v
        allowance = max(RAIL_ALLOWANCE * abs(setting), LEAST_RAIL_ALLOWANCE_V)
        source = f"{SOURCE}, and {show(allowance, 'V', 2)} for the supply's setting"
    elif point == "heatsink":
        allowance = HEATSINK_ALLOWANCE_K if condition.ambient_c is not None else UNSTATED_AMBIENT_ALLOWANCE_K
        source = f"{SOURCE}, and {show(allowance, 'K', 2)} for the thermometer and the room"
    else:
        return limits
    low = None if limits.low is None else limits.low - allowance
    high = None if limits.high is None else limits.high + allowance
    return replace(limits, low=low, high=high, source=source)


def limits_of(predicted: Any) -> Limits | None:
    """Take the limits from a predicted point; None when both ends are missing or not finite.

    Parameters
    ----------
    predicted : PointLimits
        With ``point``, ``unit``, ``nominal``, ``low`` and ``high``.
    """
    low, high = _number(predicted.low), _number(predicted.high)
    if low is None and high is None:
        return None
    return Limits(low, high, _number(predicted.nominal), predicted.unit, SOURCE)


def _rules(design: Design, judged: Sequence[JudgedReading]) -> list[RuleResult]:
    """Ask the rules that apply, condition by condition."""
    cold = {
        one.entry.point.name.removeprefix("ohm."): one.entry.reading
        for one in judged
        if one.entry.point.name.startswith("ohm.emitter.")
    }
    groups: dict[Condition, dict[str, JudgedReading]] = {}
    for one in judged:
        if isinstance(one.entry.condition, Condition):
            groups.setdefault(one.entry.condition, {})[one.entry.point.name] = one
    results: list[RuleResult] = []
    for condition, members in groups.items():
        readings: Mapping[str, Reading] = {name: one.entry.reading for name, one in members.items()}
        facts = RuleFacts(
            design=design,
            readings=readings,
            cold=cold,
            limits={name: one.limits for name, one in members.items() if one.limits is not None},
            positive_v=condition.positive_v,
            negative_v=condition.negative_v,
            trimmer=condition.trimmer,
        )
        for name in _applicable(design, condition, facts):
            results.extend(evaluate_each(name, None, facts))
    return results


def _applicable(design: Design, condition: Condition, facts: RuleFacts) -> list[str]:
    names = []
    output = facts.limits.get("output")
    rule = RULES["offset before load"]
    number = rule.number_for(design)
    if "output" in facts.readings and output is not None and number is not None:
        rest = facts.rest_v
        if (
            output.low is not None
            and output.high is not None
            and rest - number <= output.low <= output.high <= rest + number
        ):
            names.append(rule.name)
    drops = emitter_points(design)
    biased = [
        facts.limits[point].nominal is not None
        and abs(facts.limits[point].nominal or 0.0) >= LEAST_SHARE_OF_TARGET * target_drop_v(design)
        for point in drops
        if point in facts.limits
    ]
    if all(point in facts.readings for point in drops) and biased and all(biased):
        names.append("emitter symmetry")
        if design.output.pairs > 1:
            names.append("pair sharing")
    resistors = design.feed.upper.kind == "resistor" and design.feed.lower.kind == "resistor"
    if resistors and {"feed.upper", "feed.lower"} <= facts.readings.keys():
        names.append("feed symmetry")
    if {"spread.upper", "spread.lower"} <= facts.readings.keys():
        names.append("divider stiffness")
    if {"spread", "spread.lower"} <= facts.readings.keys():
        names.append("spreader ratio")
    at_target = condition.trimmer == "target" and condition.target_share == 1.0 and condition.when == design.target.when
    if at_target and any(point in facts.readings for point in drops):
        names.append("quiescent target")
    return names


def _number(value: float | None) -> float | None:
    """A finite plain number, or None."""
    return None if value is None or not math.isfinite(value) else float(value)
