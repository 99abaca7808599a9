"""Reports on warm states: who is flagged, headroom against brute force, words, speed."""

from __future__ import annotations

import time

import numpy as np
import pytest

from benchkit.errors import EntryError, ModelError
from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design
from benchkit.stage.draws import nominal
from benchkit.stage.electrothermal import Electrothermal
from benchkit.stage.expected import expected
from benchkit.stage.warming import WANTED_GAIN, too_hot, warm_report
from tests.stage.designs import TERN, breadboard, changed, tern

AT_TARGET = Condition(positive_v=35.0, negative_v=-35.0, trimmer="target", when="warm")
AT_06 = Condition(positive_v=35.0, negative_v=-35.0, trimmer=0.6)


def _tracking(share: float, sink: str = "2.2") -> Design:
    return changed(
        TERN, ("spreader_tracking = 0.7", f"spreader_tracking = {share}"), ('heatsink = "1.2', f'heatsink = "{sink}')
    )


def test_good_tracking_is_not_flagged() -> None:
    for design in (tern(), _tracking(0.7)):
        report = warm_report(design, AT_TARGET, 60)
        assert report.has_warm_state
        assert report.standing == "at rest"
        assert report.gain <= report.worst_gain < WANTED_GAIN
        assert report.share_without == 0.0
        assert report.next_step == ""
        assert "comes to rest" in report.sentence


def test_poor_tracking_is_flagged() -> None:
    report = warm_report(_tracking(0.1), AT_TARGET, 60)
    assert report.standing == "close"
    assert report.worst_gain >= WANTED_GAIN
    assert "close to running away" in report.sentence
    assert "spreader's transistor" in report.next_step


def test_no_warm_state_is_named() -> None:
    report = warm_report(_tracking(0.0, "8"), AT_06, 60)
    assert report.standing == "no warm state"
    assert not report.has_warm_state
    assert not report.balanced
    assert report.share_without == 1.0
    assert report.worst_gain == np.inf
    assert "no warm state" in report.sentence
    assert "until something breaks" in report.sentence
    with pytest.raises(ModelError, match="no warm state"):
        raise report.error()


def test_a_balance_that_nothing_stays_at_is_named() -> None:
    report = warm_report(_tracking(0.0, "8"), AT_TARGET, 0)
    assert report.balanced
    assert not report.has_warm_state
    assert "no stable warm state" in report.sentence
    with pytest.raises(ModelError, match="no stable warm state"):
        expected(_tracking(0.0, "8"), AT_TARGET, 50)


def test_some_units_without_a_warm_state_count() -> None:
    """A design whose nominal unit rests and whose worst units don't: the share is named."""
    design = _tracking(0.1)
    condition = Condition(positive_v=35.0, negative_v=-35.0, trimmer=0.45)
    report = warm_report(design, condition, 100)
    assert report.nominal.rests[0]
    assert 0.0 < report.share_without < 1.0
    assert not report.has_warm_state
    assert f"{report.without} of 100 units" in report.sentence


def test_headroom_is_where_more_heat_has_no_rest_any_more() -> None:
    """Brute force: add heat to the sink from outside as a warmer room for it alone, and look where rest ends."""
    design = _tracking(0.1)
    report = warm_report(design, AT_TARGET, 0)
    room = report.headroom
    assert room is not None
    assert room.rise_k is not None
    assert room.heat_w is not None
    theta = design.thermal.heatsink_k_per_w
    assert room.rise_k > report.nominal.heatsink_rise_k[0]
    for share, rests in ((0.8, True), (1.2, False)):
        assert _rests_with(design, report.nominal.travel, share * room.heat_w * theta) == rests


def _rests_with(design: Design, travel: np.ndarray | None, extra_k: float) -> bool:
    """Step the sink's rise with its junctions in balance until it rests or leaves."""
    stage = Electrothermal(design, nominal(design), AT_TARGET, travel, units=1)
    rise_k = np.array([14.0])
    for _ in range(200):
        _, point = stage.held(rise_k)
        if not point.converged[0] or rise_k[0] > 120.0:
            return False
        power_w = point.powers_w[stage.nodes.on_sink].sum(axis=0)
        step_k = extra_k + design.thermal.heatsink_k_per_w * power_w - rise_k
        if abs(step_k[0]) < 0.02:
            return True
        rise_k = rise_k + 4.0 * step_k
    return False


def test_an_untroubled_stage_has_no_end_in_sight() -> None:
    room = warm_report(breadboard(), Condition(positive_v=10.0, negative_v=-10.0, trimmer="target"), 0).headroom
    assert room is not None
    assert room.rise_k is None
    assert room.searched_k == 175.0


def test_a_target_that_is_set_cold() -> None:
    """Trimmed cold to its target, the unit warms up to more."""
    design = changed(TERN, ('when = "warm"', 'when = "cold"'))
    report = warm_report(design, AT_TARGET, 0)
    assert report.nominal.drop_v[0] > 0.023
    assert warm_report(tern(), AT_TARGET, 0).nominal.drop_v[0] == pytest.approx(0.022, rel=1e-6)


def test_ratings_are_watched() -> None:
    assert too_hot(tern(), warm_report(tern(), AT_TARGET, 0).nominal) == ()
    tender = changed(
        TERN, ('"output" = { power = "130 W", junction = "150 degC" }', '"output" = { junction = "38 degC" }')
    )
    found = too_hot(tender, warm_report(tender, AT_TARGET, 0).nominal)
    assert {part for part, _, _ in found} == {"output.upper.1", "output.lower.1"}
    assert all(celsius > allowed_c == 38.0 for _, celsius, allowed_c in found)


def test_a_number_of_units_below_zero_is_refused() -> None:
    with pytest.raises(EntryError, match="0 or more"):
        warm_report(tern(), AT_TARGET, -1)


def test_the_nominal_report_is_quick() -> None:
    """Margin and warm state of the nominal unit: some dozens of milliseconds of processor time."""
    warm_report.__wrapped__(tern(), AT_TARGET, 0)
    taken = []
    for _ in range(5):
        began = time.process_time()
        warm_report.__wrapped__(tern(), AT_TARGET, 0)
        taken.append(time.process_time() - began)
    assert min(taken) < 0.2
