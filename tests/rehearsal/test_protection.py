"""A channel's own protection: when it trips, and what clears it."""

from __future__ import annotations

import math

import pytest

from benchkit.rehearsal.protection import DELAY_S, LOOK_S, Protection
from tests.rehearsal.test_supply import error, supply_with


def test_over_voltage_acts_at_once() -> None:
    protection = Protection(16.0)
    assert protection.look(15.9, False, 1.0) == ""
    assert protection.look(16.1, False, 0.0) == "over-voltage"
    protection.clear()
    assert protection.look(15.9, False, 1.0) == ""


def test_over_current_waits_for_its_delay() -> None:
    protection = Protection(110.0, current_on=True, delay_s=0.5)
    assert protection.patience_s() == 0.5
    assert protection.look(1.0, True, 0.3) == ""
    assert protection.patience_s() == pytest.approx(0.2)
    assert protection.look(15.0, False, 0.1) == "", "out of the limit the time begins again"
    assert protection.look(1.0, True, 0.4) == ""
    assert protection.look(1.0, True, 0.1) == "over-current"


def test_without_a_delay_it_still_lets_time_pass() -> None:
    protection = Protection(110.0, current_on=True, delay_s=0.0)
    assert protection.patience_s() == LOOK_S
    assert protection.look(15.0, False, 1.0) == ""
    assert protection.look(15.0, True, 0.0) == "over-current"


def test_over_current_is_off_until_it_is_switched_on() -> None:
    protection = Protection(110.0)
    assert protection.look(0.0, True, 1e6) == ""
    assert protection.patience_s() == math.inf


def test_settings_are_read_back_by_channel() -> None:
    supply, _ = supply_with()
    assert supply.handle("VOLT:PROT? (@1,2)") == "+1.10000000E+02,+1.10000000E+02"
    assert supply.handle("VOLT:PROT 17.5,(@1);:SOUR:VOLT:PROT:LEV 18,(@2);:CURR:PROT:STAT ON,(@2)") is None
    assert supply.handle("VOLT:PROT? (@1,2);:CURR:PROT:STAT? (@1,2)") == "+1.75000000E+01,+1.80000000E+01;0,1"
    assert supply.handle("CURR:PROT:DEL 0.2,(@1);:CURR:PROT:DEL? (@1,2)") == f"+2.00000000E-01,{DELAY_S:+.8E}"
    assert supply.handle("*ESE 60;*ESE?;:OUTP? (@1,2)") == "60;0,0"


def test_a_level_below_the_terminals_takes_that_output_off_and_keeps_it_off() -> None:
    supply, leads = supply_with()
    leads.state[2].in_limit = False
    supply.handle("VOLT 15,(@1,2);:OUTP ON,(@1,2);:VOLT:PROT 12,(@2)")
    assert supply.handle("OUTP? (@1,2);:VOLT:PROT:TRIP? (@1,2);:CURR:PROT:TRIP? (@1,2)") == "1,0;0,1;0,0"
    assert leads.programmed[2][2] is False
    assert supply.handle("OUTP ON,(@1,2)") is None
    assert error(supply) == "-221"
    assert supply.handle("OUTP? (@1,2)") == "1,0"
    supply.handle("VOLT:PROT 20,(@2);:OUTP:PROT:CLE (@1,2);:OUTP ON,(@1,2)")
    assert error(supply) == "0"
    assert supply.handle("OUTP? (@1,2);:VOLT:PROT:TRIP? (@1,2)") == "1,1;0,0"


def test_a_cleared_trip_comes_again_while_its_cause_is_there() -> None:
    supply, _ = supply_with()
    supply.handle("VOLT:PROT 12,(@1);:OUTP ON,(@1)")
    assert supply.handle("OUTP? (@1)") == "0"
    supply.handle("OUTP:PROT:CLE (@1);:OUTP ON,(@1)")
    assert supply.handle("OUTP? (@1);:VOLT:PROT:TRIP? (@1)") == "0;1"


def test_a_held_channel_trips_when_its_time_is_over() -> None:
    supply, leads = supply_with()  # channel 2 is held by its limit
    supply.handle("CURR:PROT:STAT ON,(@1,2);:CURR:PROT:DEL 0.5,(@1,2);:OUTP ON,(@1,2)")
    assert supply.patience_s() == 0.5
    supply.mind(0.4)
    assert supply.handle("OUTP? (@1,2)") == "1,1"
    supply.mind(0.1)
    assert supply.handle("OUTP? (@1,2);:CURR:PROT:TRIP? (@1,2)") == "1,0;0,1"
    assert leads.programmed[2][2] is False


@pytest.mark.parametrize("message", ["VOLT:PROT -1,(@1)", "VOLT:PROT 200,(@1)", "CURR:PROT:DEL 11,(@1)"])
def test_nonsense_is_refused(message: str) -> None:
    supply, _ = supply_with()
    supply.handle(message)
    assert error(supply) == "-222"


def test_reset_forgets_trips_and_levels() -> None:
    supply, _ = supply_with()
    supply.handle("VOLT:PROT 12,(@1);:OUTP ON,(@1);*RST")
    assert supply.handle("VOLT:PROT? (@1);:VOLT:PROT:TRIP? (@1)") == "+1.10000000E+02;0"
