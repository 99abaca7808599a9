"""Setting a supply from off to on while the link breaks, or a message is lost, at each message there is.

Whatever breaks: no voltage stands at an output whose limit and protection are not the wanted ones, no setting is sent
twice, and what failed on the way to on ends with both outputs off.
"""

from __future__ import annotations

import socket
from collections import Counter
from collections.abc import Callable

import pytest

from benchkit.errors import InstrumentError
from benchkit.instruments.link import Link
from benchkit.instruments.profile import shipped, supply_profile
from benchkit.instruments.supply import Supply
from benchkit.instruments.traffic import TrafficLog
from tests.instruments.personalities import Host, SelectSupply
from tests.instruments.server import TestSupply

MESSAGES = 19


class Watched(TestSupply):
    """Notes every moment at which an output has voltage without the wanted limit or protection."""

    __test__ = False

    def __init__(self) -> None:
        self.wrong: list[str] = []
        super().__init__()

    def answer(self, message: str) -> str | None:
        reply = super().answer(message)
        for channel in (1, 2):
            bare = (self.limit[channel], self.over_volts[channel]) != (0.05, 17.5)
            if self.on[channel] and self.volts[channel] > 0.0 and bare:
                self.wrong.append(f"output {channel} after {message}")
        return reply


class Broken:
    """Breaks at one message: before the supply has heard it, or after, so that only its answer is lost."""

    def __init__(self, server: Watched, at: int, how: str) -> None:
        self.server, self.at, self.how = server, at, how
        self.count = 0
        self.broke = ""

    def __call__(self, connection: socket.socket, message: str) -> bool:
        self.count += 1
        if self.count - 1 != self.at:
            return False
        self.broke = message
        if self.how == "answer lost":
            with self.server.lock:
                self.server.reply(message)
        if self.how != "message lost":
            self.server.drop_connections()
        return True


def test_there_are_so_many_messages() -> None:
    supply, server, link = made()
    try:
        supply.set(15.0, -14.0, 0.05, True).result(10)
        assert len(server.messages()) == MESSAGES
        assert server.wrong == []
    finally:
        link.close()
        server.close()


@pytest.mark.parametrize("how", ["link broken", "answer lost", "message lost"])
@pytest.mark.parametrize("at", range(MESSAGES))
def test_broken_at(at: int, how: str) -> None:
    supply, server, link = made()
    try:
        broken = server.fault = Broken(server, at, how)
        try:
            sample = supply.set(15.0, -14.0, 0.05, True).result(20)
        except InstrumentError:
            assert not server.is_on
        else:
            assert sample.outputs == (True, True)
            assert (server.volts, server.limit) == ({1: 15.0, 2: 14.0}, {1: 0.05, 2: 0.05})
        assert broken.broke
        assert server.wrong == []
        sent = Counter(
            message for message in server.messages() if "?" not in message and not message.startswith("OUTP OFF")
        )
        assert all(count == 1 for count in sent.values()), sent
    finally:
        link.close()
        server.close()


class ForgetfulSupply(SelectSupply):
    """Selects its first output again when a link ends, and counts what it hears."""

    def __init__(self) -> None:
        super().__init__()
        self.break_at = -1
        self.hang_up: Callable[[], None] = self.heard.clear
        self.wrong: list[str] = []

    def handle(self, message: str) -> str | None:
        if len(self.heard) == self.break_at:
            self.heard.append(f"broken at {message}")
            self.selected = 1
            self.hang_up()
            return None
        reply = super().handle(message)
        for channel, volts in ((1, 15.0), (2, 14.0)):
            if self.volts[channel] not in {0.0, volts}:
                self.wrong.append(f"output {channel} at {self.volts[channel]} V after {message}")
            if self.on[channel] and self.volts[channel] and self.limit[channel] != 0.05:
                self.wrong.append(f"output {channel} without its limit after {message}")
        return reply


@pytest.mark.parametrize("at", [-1, *range(1, 60, 4)])
def test_an_output_that_is_selected_first_broken_at(at: int) -> None:
    rails = ForgetfulSupply()
    with Host(rails) as host:
        rails.hang_up = host.hang_up
        table = shipped("select-supply")
        assert table is not None
        profile = supply_profile({**table, "link": {"timeout_s": 0.25, "open_timeout_s": 3.0, "gap_s": 0.001}})
        link = Link("the supply", host.address, profile.link.settings(), TrafficLog())
        supply = Supply(link, profile)
        supply.identify().result(10)
        rails.heard.clear()
        rails.break_at = at
        try:
            sample = supply.set(15.0, -14.0, 0.05, True).result(20)
        except InstrumentError:
            assert not any(rails.on.values())
        else:
            assert (sample.state.set_positive_v, sample.state.set_negative_v) == (15.0, -14.0)
            assert rails.volts == {1: 15.0, 2: 14.0}
        link.close()
        assert rails.wrong == []
        assert (at == -1) != any(message.startswith("broken at") for message in rails.heard)


def made() -> tuple[Supply, Watched, Link]:
    server = Watched()
    table = shipped("scpi-supply")
    assert table is not None
    profile = supply_profile({**table, "link": {"timeout_s": 0.25, "open_timeout_s": 3.0}})
    link = Link("the supply", server.address, profile.link.settings(), TrafficLog())
    supply = Supply(link, profile)
    supply.identify().result(10)
    server.heard.clear()
    return supply, server, link
