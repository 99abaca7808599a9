from __future__ import annotations

import dataclasses
from typing import get_args

import pytest

from benchkit.procedure.state import PHASES, POWERED_PHASES, Phase, State
from tests.procedure.driver import begun, judged, small


def test_phases_are_those_of_the_type() -> None:
    assert get_args(Phase) == PHASES
    assert set(PHASES) >= POWERED_PHASES
    assert not POWERED_PHASES & {"unopened", "closing", "closed", "switching off", "by hand off", "securing"}


def test_a_state_is_frozen() -> None:
    with pytest.raises(dataclasses.FrozenInstanceError):
        State().index = 3  # type: ignore[misc]


def test_result_is_the_standing_one() -> None:
    state = State(results=(judged("a", "pass"), judged("b", "fail")))
    found = state.result("b")
    assert found is not None
    assert found.verdict == "fail"
    assert state.result("c") is None


def test_an_item_has_one_standing_result_however_often_it_is_tried() -> None:
    drive = begun(small()).until("power.offset")
    for verdict in ("fail", "undecided", "fail"):
        drive.tell(judged("power.offset", verdict))
        drive.well()
    drive.tell(judged("power.offset", "pass"))
    assert [result.verdict for result in drive.state.results if result.item == "power.offset"] == ["pass"]
    assert drive.state.attempts["power.offset"] == 4


def test_the_highest_rail_is_remembered() -> None:
    drive = begun(small()).until("bias.clip.off")
    assert drive.state.highest_v == 10.0
    drive.to_end()
    assert drive.state.highest_v == 10.0


def test_the_supply_may_be_on_only_in_powered_phases() -> None:
    drive = begun(small())
    while drive.state.closed is None:
        drive.well()
        if drive.state.energised == "on":
            assert drive.state.phase in POWERED_PHASES | {"switching off"}
