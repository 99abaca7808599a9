"""A meter or a supply of the fault bench with a link of ours to it, as the tables use them."""

from __future__ import annotations

from collections.abc import Mapping
from concurrent.futures import Future
from types import TracebackType
from typing import Any, Self

from benchkit.errors import InstrumentError
from benchkit.instruments.conversation import Conversation
from benchkit.instruments.link import Link
from benchkit.instruments.meter import Meter
from benchkit.instruments.numbers import NumberRules, parse_number
from benchkit.instruments.profile import meter_profile, shipped, supply_profile
from benchkit.instruments.supply import Supply
from benchkit.instruments.traffic import TrafficLog
from benchkit.instruments.visa import resource_manager
from tests.instruments.fault_bench.hislip import HislipServer
from tests.instruments.fault_bench.instrument import FaultInstrument, FaultMeter, FaultSupply
from tests.instruments.fault_bench.serial_line import SerialServer
from tests.instruments.fault_bench.server import FaultServer
from tests.instruments.fault_bench.tcp import SocketServer
from tests.instruments.fault_bench.vxi11 import Vxi11Server

VARIANTS: dict[str, tuple[type[FaultServer], dict[str, bool]]] = {
    "socket": (SocketServer, {}),
    "serial": (SerialServer, {}),
    "vxi-11": (Vxi11Server, {}),
    "hislip": (HislipServer, {}),
    "vxi-11, keeps what is unread": (Vxi11Server, {"keeps_unread": True}),
    "vxi-11, one output for all links": (Vxi11Server, {"shared_output": True}),
    "hislip, answers without number": (HislipServer, {"anonymous": True}),
}
"""The four links, and the kinds of instrument on them that are hardest to stay in step with."""

RULES = NumberRules()
TIMEOUT_S = 0.3
OPEN_TIMEOUT_S = 1.2

resource_manager()  # loading PyVISA takes longer than these time-outs on a loaded machine


def serve(variant: str, instrument: FaultInstrument, *, mute: bool = False) -> FaultServer:
    """Put an instrument on one of `VARIANTS`."""
    server, options = VARIANTS[variant]
    return server(instrument, mute=mute, **options)


def table_of(name: str, link: Mapping[str, Any] | None = None) -> dict[str, Any]:
    """Return a shipped profile's table with short times."""
    table = shipped(name)
    assert table is not None
    table = {**table, "link": {"timeout_s": TIMEOUT_S, "open_timeout_s": OPEN_TIMEOUT_S, **(link or {})}}
    if table["kind"] == "meter":
        table["timing"] = {
            "power_line_cycles": 0.01, "settling_s": 0.0, "ac_settling_s": 0.0, "autorange_s": 0.0
        }  # fmt: skip
    return table


class MeterBench:
    """A link to a meter.

    Parameters
    ----------
    address : str
    link : mapping, optional
        Keys of the profile's ``[link]`` that differ.
    """

    def __init__(self, address: str, link: Mapping[str, Any] | None = None) -> None:
        self.log = TrafficLog()
        self.profile = meter_profile(table_of("scpi-meter", link))
        self.link = Link("the meter", address, self.profile.link.settings(), self.log)
        self.meter = Meter(self.link, self.profile)

    def start(self, number: float, timeout_s: float, *, repeats: bool) -> Future[Any]:
        """Ask for a number, which is what the fault meter then reads."""

        def job(talk: Conversation) -> Any:
            question = f"MEAS:VOLT:DC? {number:g}"
            if repeats:
                return talk.ask(question, lambda text: parse_number(text, RULES), timeout_s=timeout_s)
            with talk.impatient(timeout_s, repeats=False):
                return talk.ask(question, lambda text: parse_number(text, RULES), timeout_s=timeout_s)

        return self.link.submit(job)

    def ask_once(self, number: float, timeout_s: float = TIMEOUT_S) -> Any:
        """Ask for a number without a second try."""
        return self.start(number, timeout_s, repeats=False).result(60)

    def error(self, number: float, timeout_s: float = TIMEOUT_S) -> InstrumentError | None:
        """Return what asking for a number failed with."""
        try:
            self.ask_once(number, timeout_s)
        except InstrumentError as error:
            return error
        return None

    def read(self, number: float) -> float | None:
        """Take a reading on the range `number` through `Meter`, as a walk does."""
        return self.meter.read("dc volts", range=number).result(60).value

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.link.close(5.0)


class SupplyBench:
    """A link to a supply."""

    def __init__(self, address: str, link: Mapping[str, Any] | None = None) -> None:
        self.log = TrafficLog()
        self.profile = supply_profile(table_of("scpi-supply", link))
        self.link = Link("the supply", address, self.profile.link.settings(), self.log)
        self.supply = Supply(self.link, self.profile)

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.link.close(5.0)


def fault_meter(variant: str) -> tuple[FaultMeter, FaultServer]:
    """Return a meter and its server."""
    meter = FaultMeter()
    return meter, serve(variant, meter)


def fault_supply(variant: str, load_ohm: float = 1000.0) -> tuple[FaultSupply, FaultServer]:
    """Return a supply and its server."""
    supply = FaultSupply(load_ohm=load_ohm)
    return supply, serve(variant, supply)
