"""Which off is under way, and that what was confirmed stays confirmed."""

from __future__ import annotations

from typing import Any

import pytest

from benchkit.keeper.offs import OFF_LIMIT_S, Offs

YES = {"confirmed": True, "how": "both outputs read back as off", "state": {"output_on": False}}
SILENT = {"confirmed": False, "how": "output state unknown: switch it off by hand", "state": None}
CUT = {"confirmed": False, "how": "output state unknown: switch it off by hand", "state": {"output_on": None}}
ON = {"confirmed": False, "how": "the outputs still read back as on", "state": {"output_on": True}}
FLOWS = {"confirmed": False, "how": "0.3 A still flow", "state": {"output_on": False}}


def do(offs: Offs, outcome: dict[str, Any]) -> dict[str, Any]:
    assert offs.begin("because", 0.0)
    finished = offs.finish(outcome)
    assert finished is not None
    return finished[0]


def test_whoever_asks_while_one_is_under_way_gets_the_same_answer() -> None:
    offs = Offs()
    assert offs.begin("first", 1.0, 7)
    assert not offs.begin("second", 1.1, 8)
    assert not offs.begin("third", 1.2)
    assert offs.under_way
    finished = offs.finish(YES)
    assert finished == ({"reason": "first", **YES}, [7, 8])
    assert not offs.under_way
    assert offs.finish(YES) is None
    assert (offs.count, offs.known) == (1, 0)


def test_it_has_a_bounded_time() -> None:
    offs = Offs()
    assert not offs.late(1e9)
    offs.begin("x", 10.0)
    assert not offs.late(10.0 + OFF_LIMIT_S)
    assert offs.late(10.01 + OFF_LIMIT_S)


@pytest.mark.parametrize("later", [SILENT, CUT])
def test_a_confirmed_off_is_not_made_unknown_by_a_supply_that_says_nothing_later(later: dict[str, Any]) -> None:
    offs = Offs()
    assert do(offs, YES)["confirmed"]
    again = do(offs, later)
    assert again["confirmed"]
    assert "confirmed before, and nothing was switched on since: both outputs read back as off" in again["how"]
    assert "did not answer" in again["how"]
    assert do(offs, later)["how"] == again["how"]


@pytest.mark.parametrize("later", [ON, FLOWS])
def test_a_supply_that_says_that_it_is_on_is_believed(later: dict[str, Any]) -> None:
    offs = Offs()
    do(offs, YES)
    assert do(offs, later) == {"reason": "because", **later}
    assert not offs.settled
    assert not do(offs, SILENT)["confirmed"], "and then nothing is proved any more"


def test_what_was_switched_on_since_is_unknown_again() -> None:
    offs = Offs()
    do(offs, YES)
    assert offs.settled
    offs.switching_on()
    assert not offs.settled
    assert not do(offs, SILENT)["confirmed"]


def test_an_output_that_was_seen_on_takes_back_what_was_confirmed() -> None:
    offs = Offs()
    do(offs, YES)
    offs.seen(on=False)
    assert offs.settled
    offs.seen(on=True)
    assert not offs.settled
    assert do(offs, SILENT) == {"reason": "because", **SILENT}


def test_it_may_be_on_until_off_is_confirmed_or_a_failed_setting_ended_in_that() -> None:
    offs = Offs()
    assert not offs.may_be_on
    offs.switching_on()
    offs.switching_on()
    assert offs.may_be_on
    offs.set_on_done(off_confirmed=True)
    assert offs.may_be_on, "the other one is still under way"
    offs.set_on_done(off_confirmed=False)
    assert offs.may_be_on
    do(offs, SILENT)
    assert offs.may_be_on
    do(offs, YES)
    assert not offs.may_be_on
    offs.switching_on()
    offs.set_on_done(off_confirmed=True)
    assert not offs.may_be_on
    offs.switching_on()
    offs.set_on_done(off_confirmed=False)
    offs.set_off_done()
    assert not offs.may_be_on


def test_nothing_is_confirmed_from_nothing() -> None:
    assert not do(Offs(), SILENT)["confirmed"]
