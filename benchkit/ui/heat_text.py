"""What a design's heat comes to, as lines of plain text: where it rests, how far it is from running away, how it warms.

Every line has at most `WIDTH` characters, so that it fits a narrow terminal.
"""

from __future__ import annotations

import textwrap
from collections.abc import Iterator
from typing import Final

import numpy as np

from benchkit.quantities import show
from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design
from benchkit.stage.draws import Array
from benchkit.stage.electrothermal import WarmState
from benchkit.stage.warm_up import warm_up
from benchkit.stage.warming import WANTED_GAIN, WarmReport, output_parts, too_hot, warm_report

WIDTH: Final = 80
_LABEL: Final = 18


def heat_lines(design: Design, condition: Condition) -> list[str]:
    """Say what the heat of a design comes to at some rails, limit and trimmer position.

    Parameters
    ----------
    design : Design
    condition : Condition
        Its `when` does not count: the state is the warm one, and the way there begins cold.

    Returns
    -------
    list of str
        A heading and what stands under it.
    """
    report = warm_report(design, condition)
    lines = [f"Heat ({_where(condition)})"]
    for label, text in _rows(report):
        lines += textwrap.wrap(
            text, WIDTH, initial_indent=f"  {label:{_LABEL}s}", subsequent_indent=" " * (_LABEL + 2)
        )  # fmt: skip
    return lines


def _rows(report: WarmReport) -> Iterator[tuple[str, str]]:
    design, state = report.design, report.nominal
    if report.standing == "no warm state":
        yield "NO WARM STATE", report.sentence.partition(": ")[2]
        yield "", f"{report.next_step}."
    if state.rests[0]:
        yield from _at_rest(report, state)
    yield "warming up", warm_up(design, report.condition, travel=state.travel).told()


def _at_rest(report: WarmReport, state: WarmState) -> Iterator[tuple[str, str]]:
    design = report.design
    output = max(output_parts(design), key=lambda part: float(state.powers_w[part][0]))
    yield (
        "idle dissipation",
        f"{_watts(state.output_w)} in the output devices, at most {_watts(state.powers_w[output])} in one; "
        f"{_watts(state.rails_w)} from the rails",
    )
    sink_c = float(state.temperatures_c["heatsink"][0])
    over = sink_c > design.thermal.max_heatsink_c
    yield (
        "heat sink",
        f"{show(sink_c, 'degC', 3)}, {show(float(state.heatsink_rise_k[0]), 'K', 3)} above the room; the design allows "
        f"{show(design.thermal.max_heatsink_c, 'degC', 3)}{': TOO HOT' if over else ''}",
    )
    part, celsius = state.hottest()
    hot = [
        f"{name} is at {show(at, 'degC', 3)} of {show(most, 'degC', 3)}" for name, at, most in too_hot(design, state)
    ]
    yield "hottest junction", f"{part}, {show(celsius, 'degC', 3)}" + (f"; TOO HOT: {', '.join(hot)}" if hot else "")
    close = " CLOSE TO RUNNING AWAY:" if report.standing == "close" else ""
    worst = f", {report.worst_gain:.2f} in the worst of {report.units} units" if np.isfinite(report.worst_gain) else ""
    yield (
        "runaway margin",
        f"{close} theta*dP/dT is {report.gain:.2f}{worst}; below {WANTED_GAIN:g} is wanted, at 1 the stage runs "
        f"away. With the spreader kept cold it would be {float(state.gain_untracked[0]):.2f}.".strip(),
    )
    if report.standing == "close":
        yield "", f"{report.next_step}."
    room = report.headroom
    if room is not None and room.rise_k is None:
        yield "used up", f"not before the heat sink has risen by {show(room.searched_k, 'K', 3)}"
    elif room is not None and room.rise_k is not None and room.heat_w is not None:
        yield (
            "used up",
            f"at a heat-sink rise of {show(room.rise_k, 'K', 3)}, where driving would have added "
            f"{show(room.heat_w, 'W', 3)} to the heat of idling",
        )


def _watts(of_units: Array) -> str:
    return show(float(of_units[0]), "W", 3)


def _where(condition: Condition) -> str:
    rails = show(condition.positive_v, "V")
    if condition.negative_v != 0.0:
        rails += f" and {show(condition.negative_v, 'V')}"
    trimmer = condition.trimmer if isinstance(condition.trimmer, str) else f"at {condition.trimmer:g} of its travel"
    return f"{rails}, trimmer {trimmer}"
