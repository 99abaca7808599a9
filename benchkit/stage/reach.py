"""Questions to a whole design: can its target be met, and from which rails does it regulate.

Each answer takes a nominal unit and a small ensemble, a second at most, so that ``check`` and the start of a walk can
afford them. What the trimmer can do stands in `benchkit.stage.trimmer`.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from benchkit.errors import ModelError
from benchkit.quantities import show
from benchkit.stage.design import Design, target_drop_v
from benchkit.stage.draws import Array, Parameters, draw, nominal, seeds
from benchkit.stage.operate import solve_units
from benchkit.stage.runs import Mask
from benchkit.stage.trimmer import LEAST_AUTHORITY, OpenWiper, at_target, authority, full_rails, open_wiper

__all__ = [
    "Finding",
    "check_target",
    "full_rails",
    "least_regulating_rails",
    "open_wiper_lowers_bias",
    "require_target",
]

_RAIL_UNITS = 60
_FULL_FEED = 0.98
_SERVO_SHARE = (0.01, 0.95)


@dataclass(frozen=True, kw_only=True)
class Finding:
    """Something about a design that a person should know.

    Attributes
    ----------
    key : str
        The dotted key of the design file that it hangs on.
    came, expected, next_step : str
        As in every message.
    fatal : bool
        Whether a walk with this design makes no sense.
    """

    key: str
    came: str
    expected: str
    next_step: str
    fatal: bool

    def __str__(self) -> str:
        return f"{self.key}: {self.came}. Expected {self.expected}. {self.next_step}."


def check_target(design: Design) -> list[Finding]:
    """Look whether the design's target can be met.

    Returns
    -------
    list of Finding
        Empty when all is well. A target outside the trimmer's track in the nominal unit is fatal; less than 99 % of
        units within 5 % to 95 % of the travel, and a trimmer that fails unsafe, are not.
    """
    key = "target." + (
        "optimum" if design.target.optimum
        else "emitter_drop" if design.target.emitter_drop_v is not None
        else "quiescent_current"
    )  # fmt: skip
    drop_v = target_drop_v(design)
    if design.spreader.trimmer is None:
        return _fixed_bias(design, key, drop_v)
    findings = []
    try:
        _, travel = at_target(design)
        if not 0.0 <= travel <= 1.0:
            return [_out_of_reach(design, key, drop_v)]
        found = authority(design)
    except ModelError as error:
        return [Finding(key=key, came=error.came, expected="an operating point", next_step=_LOOK, fatal=True)]
    if found.share < LEAST_AUTHORITY:
        findings.append(
            Finding(
                key="spreader.trimmer",
                came=f"{found.share:.1%} of units reach the target within 5 % to 95 % of the travel",
                expected=f"{LEAST_AUTHORITY:.0%} or more",
                next_step="Choose a larger trimmer or other fixed resistors",
                fatal=found.share_in_reach < 0.5,
            )
        )
    findings += _wiper(design)
    return findings


def _wiper(design: Design) -> list[Finding]:
    try:
        opened = open_wiper(design)
    except ModelError as error:
        came = error.came
    else:
        if opened.safe:
            return []
        came = f"an open wiper raises the bias: {_told(opened)}"
    return [
        Finding(
            key="spreader.trimmer.wiring",
            came=came,
            expected="a trimmer whose open wiper lowers it",
            next_step="Put the trimmer into the base-emitter arm, where an open wiper leaves the least spread",
            fatal=False,
        )
    ]


def _told(opened: OpenWiper) -> str:
    before, after = opened.before, opened.after
    told = f"the drop goes from {show(before.drop_v, 'V', 3)} to {show(after.drop_v, 'V', 3)}"
    if opened.in_limit:
        told += f", and only the supply's limit of {show(opened.limit_a, 'A', 3)} holds the current"
    return told


def _out_of_reach(design: Design, key: str, drop_v: float) -> Finding:
    ends_v = []
    for end in ("least", "most"):
        solved = solve_units(design, nominal(design), full_rails(design, trimmer=end, when="cold"), loading="none")
        ends_v.append(float(solved.points["emitter.pair.1"][0]) / 2.0)
    return Finding(
        key=key,
        came=f"a drop of {show(drop_v, 'V')} is out of the trimmer's reach in the nominal unit",
        expected=f"a target within its travel (cold, it goes from {show(ends_v[0], 'V')} to {show(ends_v[1], 'V')})",
        next_step=_LOOK,
        fatal=True,
    )


_LOOK = "Look at the spreader's resistors, its trimmer and the target in the design file"


def require_target(design: Design) -> None:
    """Raise on the first fatal finding of `check_target`.

    Raises
    ------
    ModelError
    """
    for finding in check_target(design):
        if finding.fatal:
            raise ModelError(
                f"{design.file or design.name}, {finding.key}: {finding.came}", finding.expected, finding.next_step
            )


def _fixed_bias(design: Design, key: str, drop_v: float) -> list[Finding]:
    unit = solve_units(design, nominal(design), full_rails(design), loading="none")
    reads_v = float(unit.points["emitter.pair.1"][0]) / 2.0
    low_v, high_v = drop_v * (1.0 - design.target.tolerance), drop_v * (1.0 + design.target.tolerance)
    if unit.converged[0] and low_v <= reads_v <= high_v:
        return []
    came = (
        f"the nominal unit's drop is {show(reads_v, 'V')}" if unit.converged[0] else "the nominal unit has no solution"
    )
    expected = f"{show(low_v, 'V')} to {show(high_v, 'V')}, because there is no trimmer to correct it"
    return [Finding(key=key, came=came, expected=expected, next_step=_LOOK, fatal=True)]


def open_wiper_lowers_bias(design: Design) -> bool:
    """Whether an open wiper lowers the bias of the nominal unit at its target (or there is no trimmer).

    Raises
    ------
    ModelError
        When there is no solution at the target, or none with the wiper open.

    Notes
    -----
    The fail-safe rule is common practice: dirt under a wiper must not burn the output stage.
    """
    return design.spreader.trimmer is None or open_wiper(design).safe


def least_regulating_rails(design: Design) -> tuple[float, float]:
    """Lowest rails (V) from which the stage regulates, in the ratio of the full ones.

    Regulating means, in the nominal unit and in a small ensemble, trimmer at its least-bias end: a source feed sends
    98 % of its current; a servo works (every rail at or above ``works_from``), its current lies between 1 % and 95 % of
    its most, and the output is where it belongs; with resistor feeds the spreader's transistor takes at least as much
    current as its lower arm, and the output lies within a tenth of the span of its rest.

    Returns
    -------
    positive_v, negative_v : float
        On a grid of 0.5 V of the positive rail.

    Raises
    ------
    ModelError
        When it doesn't regulate at full rails either.
    """
    full_v = design.rails.positive_v
    ratio = design.rails.negative_v / full_v
    grid = np.append(np.arange(1.0, full_v, 0.5 if full_v <= 50.0 else 1.0), full_v)
    if design.feed.lower.kind == "servo":
        least = 1.0 if design.single_supply else min(1.0, -ratio)
        grid = grid[grid * least >= (design.feed.works_from_v or 0.0) * (1.0 - 1e-12)]
    units = _RAIL_UNITS + 1
    drawn, unit = draw(design, _RAIL_UNITS, seeds("limits", 0)), nominal(design)
    group: Parameters = {
        key: value if value.ndim == 0 else np.tile(np.append(unit[key], value), grid.size)
        for key, value in drawn.items()
    }
    positive = np.repeat(grid, units)
    negative = positive * ratio
    condition = full_rails(design, trimmer="least", when="cold")
    solved = solve_units(design, group, condition, rails_v=(positive, negative), loading="none")
    good = [solved.converged]
    span_v = positive - negative
    rest_v = np.array([design.rest_v(p, n) for p, n in zip(positive, negative, strict=True)])
    off_v = np.abs(solved.points["output"] - rest_v)
    circuit = solved.solution
    if design.feed.upper.kind == "source":
        good.append(circuit.current("feed.upper") >= _FULL_FEED * group["feed.upper.amps"])
    if design.feed.lower.kind == "servo":
        share = circuit.current("feed.lower") / group["feed.lower.max_a"]
        good.append((share >= _SERVO_SHARE[0]) & (share <= _SERVO_SHARE[1]))
        good.append(off_v <= design.output.offset_v + 1e-3)
    else:
        good.append(off_v <= 0.1 * span_v)
    good.append(_spreader_conducts(solved.points, circuit.transistor("spreader.transistor").ic_a, group, design))
    each = np.all(good, axis=0).reshape(grid.size, units).all(axis=1)
    if not each[-1]:
        raise ModelError(
            f"{design.name} doesn't regulate at its full rails in a nominal unit or a small ensemble",
            "feeds and servo within their currents, the spreader's transistor conducting",
            "Check feeds and spreader in the design file",
        )
    bad = np.flatnonzero(~each)
    first = int(bad[-1]) + 1 if bad.size else 0
    positive_v = float(grid[first])
    return positive_v, positive_v * ratio


def _spreader_conducts(points: dict[str, Array], collector_a: Array, group: Parameters, design: Design) -> Mask:
    arm_ohm = group["spreader.lower"]
    trimmer = design.spreader.trimmer
    if trimmer is not None and trimmer.arm in ("lower", "between"):
        arm_ohm = arm_ohm + group["spreader.trimmer.track"]
    return np.asarray(collector_a >= points["spread.lower"] / arm_ohm)
