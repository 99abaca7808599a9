"""What the design's target is at each point where it can be read, and how fast a reading may still move there.

Rules
-----
* The target is a drop over an emitter resistor.  Over both resistors of a pair it is twice that.
* A rail's current, and its drop over a resistor in the fuse position, are those of the nominal unit with its trimmer
  at the target, and at both ends of the target's tolerance.  They carry the feeds and whatever else hangs on the rail:
  such a reading is as good as those are known, and its limits leave that out.
* A cold pre-set is the drop that the nominal unit shows with its trimmer where the warm target is met while only its
  heat sink is still cold (`benchkit.stage.trimmer.sink_cold_v`), never more than `MOST_PRESET` of the target.
"""

from __future__ import annotations

import re
from dataclasses import replace
from functools import lru_cache
from typing import Final

from benchkit import quantities
from benchkit.errors import BenchkitError, ModelError
from benchkit.judge.limits import Limits
from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design, target_drop_v
from benchkit.stage.draws import nominal
from benchkit.stage.operate import solve_units
from benchkit.stage.points import Point
from benchkit.stage.trimmer import sink_cold_v

MOST_PRESET: Final = 1.25
"""The most that a cold pre-set may be, as a share of the target; our own figure: the limit leaves half more."""

LEAST_PRESET: Final = 0.25
"""The least that it is worth to go for; our own figure."""

USUAL_DRIFT: Final = 0.02
"""How much of the target a settled reading may move in a minute, unless a procedure says otherwise; our own figure."""

_DROP = re.compile(r"emitter\.(upper|lower|pair)\.\d+")
_RAIL = re.compile(r"rail[+-]\.(current|drop)")


def tells_target(point: Point) -> bool:
    """Whether a target is known at a test point."""
    return _DROP.fullmatch(point.name) is not None or _RAIL.fullmatch(point.name) is not None


def target_limits(
    design: Design, point: Point, condition: Condition, *, share: float, tolerance: float | None = None
) -> Limits:
    """Limits of the target, or of a share of it, at a test point.

    Parameters
    ----------
    design : Design
    point : Point
        One for which `tells_target` holds.
    condition : Condition
        Rails, cold or warm, and the resistor in the fuse position, for what only the model knows.
    share : float
        Of the target.
    tolerance : float, optional
        Relative half-width; the design's when left out.

    Raises
    ------
    ModelError
        When the nominal unit has no operating point there, or there is no resistor to read a drop over.
    """
    width = design.target.tolerance if tolerance is None else tolerance
    source = "the target of the design" if share == 1.0 else f"{share:.0%} of the target"
    if _DROP.fullmatch(point.name):
        nominal_v = share * target_drop_v(design) * (2.0 if ".pair." in point.name else 1.0)
        return Limits(nominal_v * (1 - width), nominal_v * (1 + width), nominal_v, point.unit, source)
    if point.name.endswith(".drop") and condition.fuse_ohm is None:
        raise ModelError(f"{point.name} is read over a resistor that nobody has named", "its value")
    low, middle, high = (
        _nominal(design, point.name, replace(condition, trimmer="target", target_share=share * around))
        for around in (1.0 - width, 1.0, 1.0 + width)
    )
    return Limits(low, high, middle, point.unit, f"{source}, by the model of the nominal unit")


@lru_cache(maxsize=64)
def _nominal(design: Design, point: str, condition: Condition) -> float:
    if design.spreader.trimmer is None:
        raise ModelError(f"{design.name} has no trimmer, so that {point} tells nothing of a target", "a trimmer")
    solved = solve_units(design, nominal(design), condition, loading="none")
    if not solved.converged[0]:
        raise ModelError(f"{design.name}: the nominal unit doesn't come to its target", "an operating point")
    return float(solved.points[point][0])


@lru_cache(maxsize=32)
def preset_share(design: Design) -> float:
    """Share of the target that is set cold so that the warm drop is the target; 1 where the model has no answer."""
    if design.target.when == "cold":
        return 1.0
    try:
        share = sink_cold_v(design) / target_drop_v(design)
    except BenchkitError:
        return 1.0
    return min(MOST_PRESET, max(LEAST_PRESET, share))


def drift_per_s(text: str | None, point: Point, target: float) -> float:
    """How fast a settled reading may move, in the point's unit per second.

    Raises
    ------
    EntryError
        When `text` is no amount a minute in a share of the target, or in the point's unit.

    Examples
    --------
    >>> from benchkit.stage.points import Point
    >>> drop = Point(name="emitter.upper.1", unit="V", function="dc volts", red="", black="", powered=True)
    >>> f"{drift_per_s('3 %/min', drop, 0.020):.1e}"
    '1.0e-05'
    >>> f"{drift_per_s('0.6 mV/min', drop, 0.020):.1e}"
    '1.0e-05'
    """
    if text is None:
        return USUAL_DRIFT * abs(target) / 60.0
    amount = text.partition("/")[0].strip()
    if amount.endswith("%"):
        return quantities.parse(amount, "%") / 100.0 * abs(target) / 60.0
    return quantities.parse(amount, point.unit) / 60.0
