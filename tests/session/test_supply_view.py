"""The supply's state in two words and a line: never more certain than the knowledge, and alarming only where it is."""

from __future__ import annotations

from dataclasses import replace

import pytest

from benchkit.events import Answered, BenchFound, BenchMissing, OutputOff, Resumed, StopAsked, SupplyState
from benchkit.procedure.hearing import off_by_word
from benchkit.session.front import SupplyView
from benchkit.session.supply_view import EMERGENCY, supply_view
from tests.procedure.driver import OPENED, Drive, begun, small
from tests.procedure.test_power_off import lamp_walk


def shown(drive: Drive) -> SupplyView:
    walk, state = drive.walk, drive.state
    return supply_view(state, walk.item(state), state.supply, way_out=walk.way_out(state))


def by_hand() -> Drive:
    drive = Drive(small())
    drive.tell(replace(OPENED, supply="manual"))
    drive.tell(BenchFound(meter="m", supply="set by hand", supply_state=None))
    return drive


def test_a_supply_that_has_not_been_asked_is_called_that_and_one_that_does_not_answer_is_an_emergency() -> None:
    drive = begun(small())
    assert (shown(drive).label, shown(drive).calm) == ("SUPPLY NOT ASKED YET", True)
    drive.tell(BenchMissing(problem="no answer"))
    assert (shown(drive).words, shown(drive).calm) == (EMERGENCY, False)


def test_after_going_on_it_has_not_been_asked_until_it_fails_to_answer() -> None:
    drive = begun(small()).until("bias.soak")
    drive.tell(Resumed(operator="Ida"))
    assert (shown(drive).label, shown(drive).calm) == ("SUPPLY NOT ASKED YET", True)
    drive.tell(BenchMissing(problem="no answer"))
    assert (shown(drive).words, shown(drive).calm) == (EMERGENCY, False)


def test_while_it_is_set_and_switched_off_the_emergency_words_are_not_used_and_after_an_off_in_vain_they_are() -> None:
    drive = begun(small()).until("power.full")
    drive.state = replace(drive.state, phase="setting", energised="unknown")
    assert (shown(drive).label, shown(drive).calm) == ("SUPPLY BEING SET", True)
    assert "live" in shown(drive).words
    drive.tell(StopAsked())
    assert (shown(drive).label, shown(drive).calm) == ("SUPPLY GOING OFF", True)
    drive.tell(OutputOff(reason="r", confirmed=False, how="no answer", state=None))
    assert (shown(drive).words, shown(drive).calm) == (EMERGENCY, False)


def test_a_hand_supply_goes_by_what_was_said() -> None:
    drive = by_hand()
    assert (shown(drive).label, shown(drive).hint, shown(drive).never_on) == (
        "SUPPLY IN YOUR HANDS",
        "off BY HAND",
        True,
    )
    drive.state = replace(drive.state, ever_on=True)
    assert (shown(drive).label, shown(drive).never_on) == ("SUPPLY MAY BE ON", False)
    drive.state = replace(drive.state, energised="on", supply=SupplyState(output_on=True))
    assert (shown(drive).label, shown(drive).hint) == ("SUPPLY ON, YOU SAID", "")
    drive.state = off_by_word(drive.state)
    assert (shown(drive).label, shown(drive).hint) == ("SUPPLY OFF, YOU SAID", "off BY HAND")


@pytest.mark.parametrize("answered", [False, True])
def test_mains_on_is_what_somebody_said_and_off_after_it_is_no_read_back(answered: bool) -> None:
    drive = begun(lamp_walk()).until("first.lamp")
    assert shown(drive).label == "MAINS MAY BE ON"
    if answered:
        drive.tell(Answered(item="first.lamp", choice="yes"))
        assert shown(drive).label == "MAINS ON (you said)"
    assert shown(drive).hint == "PULL THE PLUG"
    drive.state = off_by_word(drive.state)
    assert (shown(drive).label, shown(drive).words) == ("SUPPLY OFF, YOU SAID", "SUPPLY OFF (as you said)")


@pytest.mark.parametrize("label_of", [by_hand, lambda: begun(small())])
def test_state_and_way_out_fit_a_narrow_terminal(label_of) -> None:  # type: ignore[no-untyped-def]
    found = shown(label_of())
    assert len(f"## {found.label} {found.hint or 'F9/space: OFF'}") <= 38
