"""What a design's heat gives a person to look at before anybody stands at the bench."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from benchkit.quantities import show
from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design
from benchkit.stage.points import transistors_of
from benchkit.stage.reach import Finding
from benchkit.stage.warming import WANTED_GAIN, WarmReport, rating_of, too_hot, warm_report


def check_heat(design: Design) -> list[Finding]:
    """Look at the design's warm state on full rails, at its target.

    Returns
    -------
    list of Finding
        Empty when all is well: it comes to rest with room to spare, heat sink and junctions stay below what is allowed,
        and no device idles above its rating. None is fatal: a person may have a reason.
    """
    condition = Condition(positive_v=design.rails.positive_v, negative_v=design.rails.negative_v, trimmer="target")
    report = warm_report(design, condition)
    if report.standing != "at rest":
        finding = Finding(
            key="thermal.spreader_tracking",
            came=report.sentence.rstrip("."),
            expected=f"a warm state with a loop gain below {WANTED_GAIN:g}",
            next_step=report.next_step,
            fatal=False,
        )
        return [finding, *(_limits(report) if report.has_warm_state else ())]
    return list(_limits(report))


def _limits(report: WarmReport) -> Iterator[Finding]:
    design, state = report.design, report.nominal
    sink_c = float(state.temperatures_c["heatsink"][0])
    if sink_c > design.thermal.max_heatsink_c:
        yield Finding(
            key="thermal.max_heatsink",
            came=f"the heat sink idles at {show(sink_c, 'degC', 3)}",
            expected=f"{show(design.thermal.max_heatsink_c, 'degC', 3)} at most",
            next_step="Enlarge the heat sink, or ask for less bias",
            fatal=False,
        )
    for part, celsius, allowed_c in too_hot(design, state):
        yield Finding(
            key="ratings",
            came=f"{part} idles at {show(celsius, 'degC', 3)}",
            expected=f"{show(allowed_c, 'degC', 3)} at most",
            next_step="Cool it better, or ask for less bias",
            fatal=False,
        )
    for one in transistors_of(design):
        rating = rating_of(design, one.name, one.role)
        power_w = float(np.asarray(state.powers_w[one.name])[0])
        if rating is not None and rating.power_w is not None and power_w > rating.power_w:
            yield Finding(
                key="ratings",
                came=f"{one.name} idles with {show(power_w, 'W', 3)}",
                expected=f"{show(rating.power_w, 'W', 3)} at most",
                next_step="Choose a larger device, or ask for less bias",
                fatal=False,
            )
