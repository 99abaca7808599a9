"""The table that ``benchkit judge`` prints, as lines of text at most 80 columns wide."""

from __future__ import annotations

import math
import textwrap
from collections.abc import Iterator, Sequence

from benchkit.judge.table import Table
from benchkit.quantities import show
from benchkit.stage.conditions import Condition, Unpowered
from benchkit.stage.faults import HEALTHY, Fault
from benchkit.stage.suspicion import Probe, Suspect

WIDTH = 80
_SHOWN_SUSPECTS = 5
_LEAST_SHOWN = 5e-4


def judged_text(table: Table, name: str) -> str:
    """All that was found about one file of readings."""
    lines = [f"{name}: {table.verdict.upper()}", ""]
    lines += _conditions(table)
    lines += ["", f"{'test point':24s} {'value':>12s} {'lowest':>12s} {'highest':>12s}  verdict"]
    for judged in table.readings:
        reading, limits = judged.entry.reading, judged.limits
        low, high = (None, None) if limits is None else (limits.low, limits.high)
        cells = ["-" if value is None else show(value, reading.unit) for value in (low, high)]
        value = show(reading.measured, reading.unit)
        verdict = judged.judgement.verdict
        lines.append(f"{reading.point:24s} {value:>12s} {cells[0]:>12s} {cells[1]:>12s}  {verdict}")
    for rule in table.rules:
        lines += ["", *_wrapped(f"{rule.rule}: {rule.verdict}. {rule.why}", "  ")]
        if rule.would_decide:
            lines += _wrapped(f"  What would decide it: {rule.would_decide}.", "  ")
    if table.contradictions:
        lines += ["", *_wrapped(
            f"Read more than once under the same condition, with values that contradict each other:"
            f" {', '.join(table.contradictions)}. The suspects below rest on the mean.", "  ",
        )]  # fmt: skip
    lines += ["", *suspect_lines(table.suspicion.suspects, table.suspicion.explained)]
    lines += probe_lines(table.suspicion.probe_next)
    lines += unseen_lines(table.suspicion.unseen)
    lines += ["", *_wrapped(f"Readings without an uncertainty were taken to be by: {table.accuracy.name}.", "  ")]
    return "\n".join(lines)


def _conditions(table: Table) -> list[str]:
    """What the readings were taken under, as it was stated or taken for granted."""
    seen = dict.fromkeys(judged.entry.condition for judged in table.readings)
    lines = dict.fromkeys(condition_words(condition) for condition in seen)
    return [line for words in lines for line in _wrapped(f"Taken under: {words}.", "  ")]


def condition_words(condition: Condition | Unpowered) -> str:
    """A condition in words."""
    trimmer = condition.trimmer
    if isinstance(trimmer, str):
        where = {
            "least": "trimmer at its least-bias end", "most": "trimmer at its most-bias end",
            "target": "trimmer at the target", "unknown": "trimmer anywhere",
        }[trimmer]  # fmt: skip
    else:
        where = f"trimmer at {trimmer:.1%} of its travel from the least-bias end"
    if isinstance(condition, Unpowered):
        return f"unpowered, {where}"
    rails = show(condition.positive_v, "V", 3)
    if condition.negative_v:
        rails += f" and {show(condition.negative_v, 'V', 3)}"
    limit = "no current limit" if condition.limit_a is None else f"current limit {show(condition.limit_a, 'A', 3)}"
    return f"rails {rails}, {limit}, {where}, {condition.when}"


def suspect_lines(suspects: Sequence[Suspect], explained: bool = True) -> list[str]:
    """The few likeliest suspects, with what speaks for each."""
    lines = ["What would explain these readings, if one part is at fault at most:"]
    if not explained:
        lines = _wrapped(
            "Nothing that the model knows explains these readings, neither a single fault nor none: look for more than"
            " one fault, a probe in the wrong place, or a condition that was not as stated. What comes nearest, and"
            " does not fit either:",
            "  ",
        )
    shown = [one for one in suspects[:_SHOWN_SUSPECTS] if one.probability >= _LEAST_SHOWN] or list(suspects[:1])
    for one in shown:
        share = _share(one.probability) if explained else ""  # among bad explanations a share is no probability
        lines += _wrapped(f"  {share:>6s}  {_name(one.fault)}", " " * 10)
        if one.alike:
            names = ", ".join(_name(other) for other in one.alike)
            lines += _wrapped(f"{'':10s}these readings can't tell it from: {names}", " " * 12)
        for evidence in one.evidence:
            unit = "ohm" if evidence.point.startswith("ohm.") else "A" if evidence.point.endswith(".current") else "V"
            unit = "degC" if evidence.point == "heatsink" else unit
            lines += _wrapped(
                f"{'':10s}{evidence.point} reads {_reading(evidence.read, unit)}; with this fault"
                f" {_reading(evidence.expected, unit)}, healthy {_reading(evidence.healthy, unit)}",
                " " * 12,
            )
    return lines


def probe_lines(probes: Sequence[Probe]) -> Iterator[str]:
    """The readings that would tell most."""
    if not probes:
        return
    yield ""
    yield "What to read next:"
    for probe in probes[:3]:
        yield from _wrapped(f"  {probe.point} ({condition_words(probe.conditions[0])}): {probe.why}", "    ")


def unseen_lines(unseen: Sequence[Fault]) -> list[str]:
    """The faults that the readings could not have shown, part by part."""
    if not unseen:
        words = "Every single fault of the table would have shown in these readings. Not tested: faults that are not in"
        return ["", *_wrapped(f"{words} the table, two faults at once, and what no d.c. reading shows.", "  ")]
    parts: dict[str, list[str]] = {}
    for fault in unseen:
        parts.setdefault(fault.part, []).append(fault.fault)
    names = "; ".join(f"{part}: {', '.join(faults)}" for part, faults in parts.items())
    return ["", *_wrapped(f"Not tested ({len(unseen)} faults these readings could not have shown): {names}.", "  ")]


def _reading(value: float, unit: str) -> str:
    return show(value, unit, 4) if math.isfinite(value) else "overload"


def _share(probability: float) -> str:
    """A probability in percent; nothing that was worked out from readings is certain."""
    return ">99.9%" if probability >= 1.0 - _LEAST_SHOWN else f"{probability:.1%}"


def _name(fault: Fault) -> str:
    return "a healthy unit" if fault == HEALTHY else f"{fault.part} {fault.fault}"


def _wrapped(text: str, indent: str) -> list[str]:
    return textwrap.wrap(text, WIDTH, subsequent_indent=indent, drop_whitespace=True, break_long_words=False) or [""]
