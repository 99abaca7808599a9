"""All about a design's trimmer in one object, for a screen, a file or a check."""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np

from benchkit.errors import ModelError
from benchkit.stage.design import Design, target_drop_v
from benchkit.stage.draws import draw, nominal, seeds
from benchkit.stage.operate import solve_units
from benchkit.stage.trimmer import (
    REPORT_UNITS,
    Authority,
    ColdToWarm,
    OpenWiper,
    Span,
    at_target,
    authority,
    cold_to_warm,
    drop_v,
    full_rails,
    open_wiper,
    span_of,
)
from benchkit.stage.trimmer_slope import Slope, slope


@dataclass(frozen=True, kw_only=True)
class TrimmerReport:
    """All about a design's trimmer; every part is None where the design has none, or the model no answer.

    Attributes
    ----------
    target_v : float
        Emitter drop at the target.
    present : bool
        Whether there is a trimmer.
    authority, slope, open_wiper, cold_to_warm
    fixed_v : Span or None
        Without a trimmer: the emitter drop that the parts alone make.
    share_at_target : float or None
        Without a trimmer: share of units within the target's tolerance.
    """

    target_v: float
    present: bool
    authority: Authority | None = None
    slope: Slope | None = None
    open_wiper: OpenWiper | None = None
    cold_to_warm: ColdToWarm | None = None
    fixed_v: Span | None = None
    share_at_target: float | None = None


@lru_cache(maxsize=16)
def trimmer_report(design: Design, units: int = REPORT_UNITS, seed: int = 0) -> TrimmerReport:
    """Collect all about a design's trimmer; what the model has no answer to is None. Cached.

    Raises
    ------
    ModelError
        When the nominal unit has no operating point at its target.
    """
    target_v = target_drop_v(design)
    if design.spreader.trimmer is None:
        return _fixed(design, target_v, units, seed)
    at_target(design)
    report = TrimmerReport(target_v=target_v, present=True)
    for part in ("authority", "slope", "open_wiper", "cold_to_warm"):
        try:
            if part == "authority":
                report = replace(report, authority=authority(design, units, seed))
            elif part == "slope":
                report = replace(report, slope=slope(design))
            elif part == "open_wiper":
                report = replace(report, open_wiper=open_wiper(design))
            else:
                report = replace(report, cold_to_warm=cold_to_warm(design, units, seed))
        except ModelError:
            continue
    return report


def _fixed(design: Design, target_v: float, units: int, seed: int) -> TrimmerReport:
    condition = full_rails(design)
    unit = solve_units(design, nominal(design), condition, loading="none")
    if not unit.converged[0]:
        raise ModelError(f"{design.name} has no operating point at full rails", "one", "Check the design file")
    drawn = solve_units(design, draw(design, units, seeds("limits", seed)), condition, start=unit, loading="none")
    drops = drop_v(drawn)
    within = drawn.converged & (np.abs(drops - target_v) <= design.target.tolerance * target_v)
    return TrimmerReport(
        target_v=target_v,
        present=False,
        fixed_v=span_of(float(drop_v(unit)[0]), drops[drawn.converged]),
        share_at_target=float(np.mean(within)),
    )
