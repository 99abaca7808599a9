"""The supply: what it programs together, what it reads back, and that it refuses nonsense whole."""

from __future__ import annotations

import numpy as np
import pytest

from benchkit.rehearsal.supply import READ_AMPS, READ_VOLTS, SET_AMPS, SET_VOLTS, Supply, Terminals


class Leads:
    """Leads that remember what was programmed and answer what a test chooses."""

    def __init__(self) -> None:
        self.programmed: dict[int, tuple[float, float, bool]] = {}
        self.state = {1: Terminals(15.0, 0.03), 2: Terminals(14.9, 0.05, True)}

    def program(self, channel: int, volts: float, limit_a: float, on: bool) -> None:
        self.programmed[channel] = volts, limit_a, on

    def terminals(self, channel: int) -> Terminals:
        return self.state[channel]


def supply_with(seed: int = 0) -> tuple[Supply, Leads]:
    leads = Leads()
    return Supply(leads, np.random.default_rng(seed)), leads


def error(supply: Supply) -> str:
    reply = supply.handle("SYST:ERR?")
    assert reply is not None
    return reply.split(",")[0]


def test_at_first_everything_is_off() -> None:
    supply, leads = supply_with()
    assert leads.programmed == {1: (0.0, leads.programmed[1][1], False), 2: (0.0, leads.programmed[2][1], False)}
    assert supply.handle("OUTP? (@1,2)") == "0,0"
    assert supply.handle("VOLT? (@1,2)") == "+0.00000000E+00,+0.00000000E+00"


def test_both_rails_in_one_message() -> None:
    supply, leads = supply_with()
    assert supply.handle("CURR 0.05,(@1,2);:VOLT 15,(@1);:VOLT 12,(@2);:OUTP ON,(@1,2)") is None
    assert [leads.programmed[channel][2] for channel in (1, 2)] == [True, True]
    assert leads.programmed[1][0] == pytest.approx(15.0, abs=15.0 * SET_VOLTS[0] + SET_VOLTS[1])
    assert leads.programmed[2][0] == pytest.approx(12.0, abs=12.0 * SET_VOLTS[0] + SET_VOLTS[1])
    for channel in (1, 2):
        assert leads.programmed[channel][1] == pytest.approx(0.05, abs=0.05 * SET_AMPS[0] + SET_AMPS[1])
    # Settings read back as they were sent, whatever the errors of the output stage.
    assert supply.handle("VOLT? (@1,2);CURR? (@1,2);:OUTP? (@1,2)") == (
        "+1.50000000E+01,+1.20000000E+01;+5.00000000E-02,+5.00000000E-02;1,1"
    )
    supply.handle("OUTP OFF,(@1,2)")
    assert [leads.programmed[channel][2] for channel in (1, 2)] == [False, False]


def test_without_a_list_channel_one_is_meant() -> None:
    supply, leads = supply_with()
    supply.handle("VOLT 3;OUTP ON")
    assert [leads.programmed[channel][2] for channel in (1, 2)] == [True, False]
    assert leads.programmed[2][0] == 0.0


def test_reading_back_is_close_and_noisy() -> None:
    supply, leads = supply_with(2)
    volts = np.array([[float(v) for v in str(supply.handle("MEAS:VOLT? (@1,2)")).split(",")] for _ in range(50)])
    amps = np.array([[float(v) for v in str(supply.handle("MEAS:CURR? (@1,2)")).split(",")] for _ in range(50)])
    for channel in (1, 2):
        state = leads.state[channel]
        assert volts[:, channel - 1] == pytest.approx(
            state.volts, abs=state.volts * READ_VOLTS[0] + READ_VOLTS[1] + 0.002
        )
        assert amps[:, channel - 1] == pytest.approx(state.amps, abs=state.amps * READ_AMPS[0] + READ_AMPS[1] + 2e-4)
    assert volts.std() > 0.0


def test_the_limit_bit_is_each_channels_own() -> None:
    supply, _ = supply_with()
    assert supply.handle("STAT:QUES:COND? (@1,2)") == "0,0"  # both off
    supply.handle("OUTP ON,(@1,2)")
    assert supply.handle("STAT:QUES:COND? (@1,2)") == "0,1"
    assert supply.handle("STAT:QUES:COND? (@2)") == "1"


@pytest.mark.parametrize(
    ("message", "code"),
    [("VOLT 101,(@1,2)", "-222"), ("VOLT -5,(@2)", "-222"), ("CURR 11,(@1)", "-222"), ("VOLT 5,(@1,3)", "-222"),
     ("OUTP MAYBE,(@1,2)", "-224"), ("OUTP (@1,2)", "-109"), ("VOLT 5 A,(@1)", "-131"), ("VOLT? 1", "-108")],
)  # fmt: skip
def test_nonsense_is_refused_whole(message: str, code: str) -> None:
    supply, leads = supply_with()
    before = dict(leads.programmed)
    assert supply.handle(message) is None
    assert error(supply) == code
    assert leads.programmed == before


def test_reset_switches_off() -> None:
    supply, leads = supply_with()
    supply.handle("VOLT 5,(@1,2);:OUTP ON,(@1,2);*RST")
    assert [leads.programmed[channel][2] for channel in (1, 2)] == [False, False]
    assert supply.handle("VOLT? (@1,2)") == "+0.00000000E+00,+0.00000000E+00"
