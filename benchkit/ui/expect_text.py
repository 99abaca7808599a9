"""The text of ``benchkit expect``: the table of expected readings, then heat, trimmer, and what a bias error costs.

No line is longer than `COLUMNS`. Everything below the table is about the nominal unit unless it says otherwise. A block
that the model has no answer to says why, and the others stand.
"""

from __future__ import annotations

import textwrap
from collections.abc import Callable, Iterator, Sequence
from typing import Any, Final

from benchkit.errors import ModelError
from benchkit.quantities import show
from benchkit.stage.bias_cost import Bias, BiasReport, bias_report
from benchkit.stage.conditions import Condition
from benchkit.stage.crossover import LOADS_OHM
from benchkit.stage.design import Design
from benchkit.stage.trimmer import OpenWiper, Span
from benchkit.stage.trimmer_report import TrimmerReport, trimmer_report
from benchkit.stage.trimmer_slope import Slope
from benchkit.ui.bias_plot import Curve, plot
from benchkit.ui.heat_text import heat_lines

COLUMNS: Final = 80
_INDENT: Final = 2
_LABEL: Final = 18
_MARKS: Final = (("half", "."), ("double", "+"), ("target", "o"))
"""Biases that are plotted, in the order in which they are drawn."""
_MOST_LOADS: Final = 2
"""Loads that the table has room for."""
_PLOTTED: Final = 8.0
"""How many quiescent currents of the target the plot reaches."""


def expect_lines(
    design: Design, condition: Condition, found: dict[str, Any], loads_ohm: Sequence[float] = LOADS_OHM
) -> list[str]:
    """Write the whole text.

    Parameters
    ----------
    design : Design
    condition : Condition
    found : dict
        What `benchkit.stage.expected.expected_json` made for them.
    loads_ohm : sequence of float
        For the bias block.
    """
    lines = [*_beyond_rails(design, condition), *_cold_target(design, condition), *table_lines(found)]
    if condition.trimmer == "target" and design.spreader.trimmer is not None:
        lines += _wrapped(
            "That is with the trimmer exactly at the target; a real trim may be anywhere within the target's"
            f" tolerance of {design.target.tolerance:.0%}, and judge allows for it."
        )
    lines += ["", *_block("Heat", lambda: heat_lines(design, condition))]
    lines += ["", *_block("Trimmer", lambda: trimmer_lines(design, trimmer_report(design)))]
    lines += ["", *_block(_COST, lambda: bias_lines(bias_report(design, condition, loads_ohm)))]
    return lines


def beyond_the_design(design: Design, condition: Condition) -> str:
    """Return what to know when a rail is higher than the design's; empty when none is."""
    rails = design.rails
    beyond = [
        f"{name} rail of {show(volts, 'V')} (the design's is {show(own_v, 'V')})"
        for name, volts, own_v in (
            ("positive", condition.positive_v, rails.positive_v),
            ("negative", condition.negative_v, rails.negative_v),
        )
        if abs(volts) > abs(own_v) * (1.0 + 1e-9)
    ]
    if not beyond:
        return ""
    return (
        f"CAUTION: the {' and the '.join(beyond)} is beyond what this unit is made for. The figures are those of the"
        " model, which burns nothing: a real unit may not stand it, and no walk goes there."
    )


def _beyond_rails(design: Design, condition: Condition) -> list[str]:
    told = beyond_the_design(design, condition)
    return [*_wrapped(told), ""] if told else []


def _cold_target(design: Design, condition: Condition) -> list[str]:
    """A warning where somebody might set a cold unit to what is meant for a warm one."""
    if condition.trimmer != "target" or condition.when != "cold" or design.target.when != "warm":
        return []
    return [
        *_wrapped(
            "The target of this design is for a WARM unit. The table is about a unit that stands at it while cold: do"
            ' not set a cold unit so; "Set cold" below says what to set. --when warm shows the warm unit.'
        ),
        "",
    ]


_COST: Final = "What a bias error costs"


def _block(title: str, make: Callable[[], list[str]]) -> list[str]:
    try:
        return make()
    except ModelError as error:
        return [title, *_wrapped(f"No answer: {error}")]


def table_lines(found: dict[str, Any]) -> list[str]:
    """Write the table of expected readings."""
    conditions, design = found["conditions"], found["design"]
    rails = f"{show(conditions['positive_v'], 'V')} and {show(conditions['negative_v'], 'V')}"
    trimmer = conditions["trimmer"]
    head = f"{design['name']} {design['revision']}, rails {rails}, trimmer {trimmer}, {conditions['when']}"
    lines = [
        *textwrap.wrap(head, COLUMNS),
        f"{found['solved']} of {found['units']} units solved, seed {found['seed']}",
        "",
        f"{'test point':30s} {'nominal':>12s} {'lowest':>12s} {'highest':>12s}",
    ]
    for point in found["points"]:
        cells = [
            show(point[key], point["unit"]) if point[key] is not None else "-" for key in ("nominal", "low", "high")
        ]
        lines.append(f"{point['point']:30s} {cells[0]:>12s} {cells[1]:>12s} {cells[2]:>12s}")
    return [*lines, "", "99.73 % of healthy units of this design read between lowest and highest."]


def trimmer_lines(design: Design, report: TrimmerReport) -> list[str]:
    """Write what the trimmer can do at full rails."""
    when = design.target.when
    trimmer = design.spreader.trimmer
    if trimmer is None:
        assert report.fixed_v is not None
        return [
            "Trimmer",
            *_wrapped("This design has none: its parts alone make the bias."),
            *_row("Drop", f"{_mv(report.fixed_v.nominal)} {when}, {_units(report.fixed_v, _mv)}"),
            *_row(
                "At the target",
                f"{_share(report.share_at_target)} of units come within "
                f"{100.0 * design.target.tolerance:g} % of the target of {_mv(report.target_v)}",
            ),
        ]
    arm = {"between": "between both arms"}.get(trimmer.arm, f"in the {trimmer.arm} arm")
    tied = "wiper tied to an end" if trimmer.wiring == "tied" else "in series"
    lines = [
        f"Trimmer, at full rails, {show(design.thermal.ambient_c, 'degC', 3)} in the room",
        *_row("Track", f"{show(trimmer.value.value, 'ohm', 3)}, {trimmer.turns:g} turns, {arm}, {tied}"),
        *_row("More bias", f"turn {trimmer.raises_bias}"),
        *_row("Target", f"{_mv(report.target_v)} across an emitter resistor, {when}"),
    ]
    if report.authority is None:
        lines += _row("It lies", "out of reach of any trimmer in this place")
    else:
        found = report.authority
        reach = "" if 0.0 <= found.travel.nominal <= 1.0 else " (out of reach)"
        place = f"{_travel(found.travel.nominal)} of the travel from the least-bias end{reach}"
        lines += _row("It lies at", f"{place}, {_units(found.travel, _travel)}")
        met = f"{_share(found.share)} of {found.units} units meet it between 5 % and 95 % of the travel"
        lines += _row("Reach", f"{met}, {_share(found.share_in_reach)} anywhere on it")
    if report.slope is not None:
        lines += _row("One turn more", _slope(report.slope, when))
    lines += _cold_to_warm(report)
    if report.open_wiper is None:
        lines += _row("Open wiper", "the model has no answer")
    else:
        lines += _row("Open wiper", _open_wiper(report.open_wiper))
    return lines


def _cold_to_warm(report: TrimmerReport) -> list[str]:
    found = report.cold_to_warm
    if found is None:
        return _row("Cold to warm", "the model found no state of rest for both")
    other, span = ("cold", found.cold_v) if found.held == "warm" else ("warm", found.warm_v)
    told = f"{_mv(span.nominal)} {other}, {_units(span, _mv)}: the same trimmer position reads " + (
        f"{_mv(report.target_v)} {found.held}"
    )
    if found.share_without > 0.0:
        told += f"; {_share(found.share_without)} of units find no {other} state"
    return _row("Set cold" if found.held == "warm" else "Goes to", told)


def _slope(found: Slope, when: str) -> str:
    told = f"{_mv(found.drop_v_per_turn)} of drop and {_ma(found.current_a_per_turn)} of quiescent current at once"
    if found.settled_drop_v_per_turn is not None:
        told += f"; {_mv(found.settled_drop_v_per_turn)} and {_ma(found.settled_current_a_per_turn)} when settled"
    elif when == "warm":
        told += "; it never settles: the warm state there is not stable (see Heat)"
    return told


def _open_wiper(found: OpenWiper) -> str:
    before, after = found.before, found.after
    told = (
        f"{'safe' if found.safe else 'NOT SAFE'}: drop {_mv(before.drop_v)} to {_mv(after.drop_v)}, spread "
        f"{show(before.spread_v, 'V', 3)} to {show(after.spread_v, 'V', 3)}, quiescent current "
        f"{_ma(before.quiescent_a)} to {_ma(after.quiescent_a)}"
    )
    if found.in_limit:
        told += (
            f"; the supply comes into its limit of {_ma(found.limit_a)} and the rails fall to "
            f"{show(after.positive_v, 'V', 3)} and {show(after.negative_v, 'V', 3)}"
        )
    return f"{told} (supply limit {_ma(found.limit_a)})" if not found.in_limit else told


def bias_lines(report: BiasReport) -> list[str]:
    """Write what other biases cost, with a plot."""
    loads = [f"{load:g} ohm" for load in report.loads_ohm]
    head = "".join(f" {'ripple ' + load:>12s}" for load in loads[:_MOST_LOADS])
    lines = [
        f"{_COST}, at full rails",
        *_wrapped(
            f"Both halves hand over to each other around rest. Output devices at {report.junction_c:.0f} degC; "
            f"output current within {show(report.regions_a[0], 'A', 2)} either way into {loads[0]}."
        ),
        "",
        f"  {'bias':12s} {'drop':>8s} {'current':>8s} {'heat':>7s} {'at rest':>10s}{head}",
    ]
    lines += [_bias(bias) for bias in report.biases]
    lines += ["", *_wrapped(f"Gain into {loads[0]} against output current: {_key()}"), ""]
    reach = min(report.regions_a[0], _PLOTTED * report["target"].current_a)
    drawn = [Curve(mark, report.sweeps[name].amps, report.sweeps[name].gain) for name, mark in _MARKS]
    lines += [*plot(drawn, reach), ""]
    lines += [line for told in _told(report) for line in _wrapped(told)]
    return lines


def _bias(bias: Bias) -> str:
    ripples = "".join(f" {100.0 * ripple / bias.gain:>10.2f} %" for ripple in bias.ripples[:_MOST_LOADS])
    ohm = f"{bias.output_ohm:.3f} ohm" if bias.output_ohm < 100.0 else show(bias.output_ohm, "ohm", 3)
    cells = f"{_mv(bias.drop_v):>8s} {_ma(bias.current_a):>8s} {show(bias.idle_w, 'W', 3):>7s} {ohm:>10s}"
    return f"  {bias.name:12s} {cells}{ripples}"


def _key() -> str:
    marks = dict(_MARKS)
    return ", ".join(f"{marks[name]} {name}" for name in ("half", "target", "double"))


def _told(report: BiasReport) -> Iterator[str]:
    target = report["target"]
    for name, words in (("half", "Half the target"), ("double", "Twice the target")):
        other = report[name]
        yield (
            f"{words}: {_shape(report, name)} At rest the output resistance is {other.output_ohm:.3f} ohm instead of "
            f"{target.output_ohm:.3f} ohm, the gain {_percent(other.gain / target.gain - 1.0)}, the heat "
            f"{show(other.idle_w, 'W', 3)} instead of {show(target.idle_w, 'W', 3)}. {_verdict(other, target)}"
        )
    if report.regions_a[0] < 2.0 * target.current_a:
        yield "Into this load the current never leaves what both halves conduct at rest: there is no crossover to see."
        return
    best = f"The gain ripples least at a drop of {_mv(report.least_ripple_v)}"
    yield f"{best}, {report.least_ripple_v / report.target_v:.2f} of the target, with all that the model knows."
    if report.oliver_v is not None:
        yield (
            f"Oliver's condition puts it at {_mv(report.oliver_v)}: it is about an ideal pair with the output devices' "
            "own resistances, without base stoppers and drivers, and about any output current."
        )


def _shape(report: BiasReport, name: str) -> str:
    sweep = report.sweeps[name]
    if report[name].gain > 0.5 * float(sweep.gain[0] + sweep.gain[-1]):
        return "a hump in the middle, where both halves work side by side."
    return "a dent in the middle, where one half lets go before the other has taken over."


def _verdict(other: Bias, target: Bias) -> str:
    ratio = other.ripples[0] / target.ripples[0]
    if abs(ratio - 1.0) < 0.05:
        return "The gain ripples about as much."
    return f"The gain ripples {ratio:.1f} times as much." if ratio > 1.0 else f"The gain ripples less ({ratio:.2f})."


def _mv(volts: float | None) -> str:
    """Write a drop in three digits; what barely conducts as such a small figure that nobody reads it."""
    return "0 V" if volts is not None and abs(volts) < 1e-7 else show(volts, "V", 3)


def _ma(amps: float | None) -> str:
    return "0 A" if amps is not None and abs(amps) < 1e-7 else show(amps, "A", 3)


def _travel(share: float) -> str:
    return f"{100.0 * share:.0f} %" if abs(share) < 10.0 else "far beyond"


def _percent(share: float) -> str:
    return f"{100.0 * share:+.2f} %"


def _share(share: float | None) -> str:
    return "an unknown share" if share is None else f"{100.0 * share:.1f} %"


def _units(span: Span, write: Callable[[float], str]) -> str:
    return f"90 % of units {write(span.low)} to {write(span.high)}"


def _row(label: str, text: str) -> list[str]:
    """Write a label and a text that goes on under itself."""
    first = " " * _INDENT + f"{label:{_LABEL - _INDENT}s}"
    return textwrap.wrap(text, COLUMNS, initial_indent=first, subsequent_indent=" " * _LABEL)


def _wrapped(text: str) -> list[str]:
    return textwrap.wrap(text, COLUMNS, initial_indent=" " * _INDENT, subsequent_indent=" " * _INDENT)
