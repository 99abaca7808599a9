"""What the trimmer can do: reach, open wiper, cold to warm."""

from __future__ import annotations

import math

import numpy as np
import pytest

from benchkit.errors import ModelError
from benchkit.stage.design import Design, parse_design, target_drop_v
from benchkit.stage.draws import nominal
from benchkit.stage.operate import solve_units
from benchkit.stage.trimmer import at_target, authority, cold_to_warm, drop_v, full_rails, least_share, open_wiper
from benchkit.stage.trimmer_report import trimmer_report
from tests.stage.catalogue import Wanted, text
from tests.stage.designs import BREADBOARD, TERN, breadboard, changed, tern


def arms(arm: str, wiring: str, topology: str = "double-emitter-follower") -> Design:
    wanted = Wanted(topology=topology, feed="source servo", trimmer=arm, wiring=wiring)
    return parse_design(text(wanted), wanted.name)


def without_trimmer() -> Design:
    whole = TERN.read_text(encoding="utf-8")
    return parse_design(whole[: whole.index("[spreader.trimmer]")] + whole[whole.index("[output]") :])


EVERY = [(arm, wiring) for arm in ("lower", "upper", "between") for wiring in ("series", "tied")]


@pytest.mark.parametrize(("arm", "wiring"), EVERY)
def test_the_target_lies_where_a_solve_there_meets_it(arm: str, wiring: str) -> None:
    design = arms(arm, wiring)
    unit, travel = at_target(design)
    there = solve_units(
        design, nominal(design), full_rails(design, trimmer=travel), temperatures_c=unit.temperatures_c, loading="none"
    )
    assert drop_v(there)[0] == pytest.approx(target_drop_v(design), rel=1e-3)


@pytest.mark.parametrize("design", [tern(), breadboard()], ids=lambda d: d.name)
def test_authority_of_the_demonstrations(design: Design) -> None:
    found = authority(design)
    assert found.share >= 0.99
    assert found.share_in_reach >= found.share
    assert 0.05 < found.travel.low < found.travel.nominal < found.travel.high < 0.95
    assert 0.0 < found.standard_uncertainty < 0.01


def test_a_small_trimmer_has_less_authority() -> None:
    small = changed(TERN, ('value = "500 ohm 10 %"', 'value = "50 ohm 10 %"'), ('"560 ohm 1 %"', '"787 ohm 1 %"'))
    found, usual = authority(small), authority(tern())
    assert found.share < found.share_in_reach < 0.99
    assert found.travel.high - found.travel.low > 5.0 * (usual.travel.high - usual.travel.low)


def test_the_span_of_the_travel_holds_nine_tenths() -> None:
    """Fresh units of the same design: about 5 % lie below and above."""
    from benchkit.stage.draws import draw, seeds

    found = authority(tern(), units=400, seed=3)
    fresh = solve_units(tern(), draw(tern(), 400, seeds("unit", 8)), full_rails(tern()), loading="none")
    assert fresh.unclipped is not None
    inside = (fresh.unclipped >= found.travel.low) & (fresh.unclipped <= found.travel.high)
    assert 0.84 < float(np.mean(inside)) < 0.95


SAFE = {
    ("lower", "series"): True,
    ("lower", "tied"): True,
    ("upper", "series"): False,
    ("upper", "tied"): False,
    ("between", "series"): False,
    ("between", "tied"): True,
}


@pytest.mark.parametrize(("arm", "wiring"), EVERY)
def test_open_wiper(arm: str, wiring: str) -> None:
    """Circuit theory: only what leaves the base-emitter arm larger or open lowers the spread."""
    found = open_wiper(arms(arm, wiring))
    assert found.safe is SAFE[arm, wiring]
    assert found.before.drop_v == pytest.approx(0.02, rel=1e-3)
    if found.safe:
        assert found.after.spread_v < found.before.spread_v
        assert found.after.drop_v < 0.5 * found.before.drop_v
        assert not found.in_limit
    else:
        assert found.after.drop_v > found.before.drop_v or found.in_limit


def test_an_unsafe_wiper_is_held_by_the_limit_alone() -> None:
    design = arms("upper", "series")
    found = open_wiper(design)
    assert found.in_limit
    assert found.after.supply_a == pytest.approx(found.limit_a, rel=0.02)
    assert found.after.positive_v < 0.9 * found.before.positive_v
    assert open_wiper(design, limit_a=0.1).limit_a == 0.1


def test_the_cold_preset_is_what_a_cold_unit_reads_there() -> None:
    found = cold_to_warm(tern())
    assert found.warm_v.nominal == found.warm_v.low == found.warm_v.high == pytest.approx(0.022)
    _, travel = at_target(tern())
    cold = solve_units(tern(), nominal(tern()), full_rails(tern(), trimmer=travel, when="cold"), loading="none")
    assert found.cold_v.nominal == pytest.approx(float(drop_v(cold)[0]), rel=1e-6)
    assert found.cold_v.low < found.cold_v.nominal < found.cold_v.high < 0.022
    assert found.share_without == 0.0
    # Set cold to that, the same unit comes to the target when it is warm.
    warm = solve_units(tern(), nominal(tern()), full_rails(tern(), trimmer=travel, when="warm"), loading="none")
    assert drop_v(warm)[0] == pytest.approx(0.022, rel=1e-3)


def test_a_target_that_is_set_cold_moves_when_warm() -> None:
    design = changed(TERN, ('emitter_drop = "22 mV"', 'emitter_drop = "12 mV"'), ('when = "warm"', 'when = "cold"'))
    found = cold_to_warm(design)
    assert found.held == "cold"
    assert found.cold_v.nominal == pytest.approx(0.012)
    assert found.warm_v.low < found.warm_v.nominal < found.warm_v.high
    assert 0.018 < found.warm_v.nominal < 0.026


def test_a_design_that_runs_away_has_no_cold_preset() -> None:
    design = changed(
        TERN, ("spreader_tracking = 0.7", "spreader_tracking = 0.0"), ('heatsink = "1.2', 'heatsink = "8'),
        ('when = "warm"', 'when = "cold"'),
    )  # fmt: skip
    with pytest.raises(ModelError, match="no warm state"):
        cold_to_warm(design)
    report = trimmer_report(design)
    assert report.cold_to_warm is None
    assert report.slope is not None


def test_a_target_out_of_reach_is_told_with_its_travel() -> None:
    design = changed(BREADBOARD, ('quiescent_current = "10 mA"', 'quiescent_current = "60 mA"'))
    found = authority(design)
    assert found.travel.nominal > 1.0
    assert found.share == 0.0
    with pytest.raises(ModelError, match="out of the trimmer's reach"):
        cold_to_warm(design)
    report = trimmer_report(design)
    assert report.cold_to_warm is None
    assert report.slope is None or math.isfinite(report.slope.drop_v_per_turn)


@pytest.mark.parametrize(
    "design",
    [breadboard(), tern(), arms("between", "tied")],
    ids=["breadboard", "tern-40", "between"],
)
def test_the_least_bias_is_what_is_left_at_the_end_of_the_travel(design: Design) -> None:
    share = least_share(design)
    assert 0.0 <= share < 0.5
    at_least = solve_units(
        design, nominal(design) | {"spreader.trimmer.position": np.asarray(0.0)},
        full_rails(design, trimmer="unknown", when="cold"), loading="none",
    )  # fmt: skip
    assert share * target_drop_v(design) == pytest.approx(float(drop_v(at_least)[0]), rel=1e-9)


def test_without_a_trimmer_all_of_the_bias_is_there_from_the_first_moment() -> None:
    assert least_share(without_trimmer()) == 1.0
