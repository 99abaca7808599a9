"""A peer that others wrote: readings and settings through a pyvisa-sim bench, by the library's name and nothing else.

It answers exact strings, answers twice to a message with a semicolon, and can't be cleared.  What it can't do (delays,
broken links, a supply that feeds a meter) the fault bench does.
"""

from __future__ import annotations

import shutil
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner

from benchkit.cli import cli
from benchkit.errors import InstrumentError
from benchkit.instruments.bench import link_settings, load_bench
from benchkit.instruments.link import Link
from benchkit.instruments.meter import Meter
from benchkit.instruments.profile import meter_profile, shipped, supply_profile
from benchkit.instruments.supply import Supply
from benchkit.instruments.traffic import TrafficLog

pytest.importorskip("pyvisa_sim")

BENCH = Path(__file__).parent / "third_party" / "bench.yaml"

METERS = (
    "TCPIP0::meter.example::inst0::INSTR",
    "TCPIP0::meter.example::5025::SOCKET",
    "GPIB0::22::INSTR",
    "ASRL1::INSTR",
    "USB0::0x1234::0x5678::TPM1::INSTR",
)
SUPPLIES = ("GPIB0::5::INSTR", "TCPIP0::supply.example::inst0::INSTR")

SUPPLY: dict[str, Any] = {
    "format": 1,
    "kind": "supply",
    "title": "a dialect without channel lists",
    "commands": {
        "volts": "VOLT{output} {value}",
        "limit": "CURR{output} {value}",
        "on": "OUTP{output} 1",
        "off": "OUTP{output} 0",
        "joiner": "",
    },
    "questions": {
        "set_volts": "VOLT{output}?",
        "limits": "CURR{output}?",
        "output": "OUTP{output}?",
        "volts": "MEAS{output}:VOLT?",
        "amps": "MEAS{output}:CURR?",
        "error": "SYST:ERR?",
    },
}


@pytest.fixture
def library(tmp_path: Path) -> str:
    """The name of a library with a bench of its own: what one test sets, the next doesn't find."""
    copy = tmp_path / "bench.yaml"
    shutil.copy(BENCH, copy)
    return f"{copy}@sim"


def quick_meter() -> dict[str, Any]:
    table = shipped("scpi-meter")
    assert table is not None
    timing = {"power_line_cycles": 0.01, "settling_s": 0.0, "ac_settling_s": 0.0, "autorange_s": 0.0}
    return {**table, "link": {"timeout_s": 0.4, "open_timeout_s": 1.0}, "timing": timing}


@pytest.fixture(params=METERS)
def meter(request: pytest.FixtureRequest, library: str) -> Iterator[Meter]:
    profile = meter_profile(quick_meter())
    link = Link("the meter", request.param, profile.link.settings(library), TrafficLog())
    yield Meter(link, profile)
    link.close(5.0)


def test_readings(meter: Meter) -> None:
    assert meter.identify().result(20) == "Third Party,Meter,TPM-1,1.0"
    reading = meter.read("dc volts", samples=3).result(20)
    assert reading.value == 0.02047
    assert reading.values == (0.02047,) * 3
    assert reading.meter == "Third Party,Meter,TPM-1,1.0"
    assert meter.read("ac volts").result(20).value == 0.001
    overload = meter.read("ohms").result(20)
    assert (overload.value, overload.overload) == (None, True)


def test_an_answer_that_is_no_number_and_the_next_that_is(meter: Meter) -> None:
    for function, said in (("diode", "no number"), ("dc current", "ERROR")):
        with pytest.raises(InstrumentError, match=said) as caught:
            meter.read(function).result(20)
        assert caught.value.kind == "garbled"
        assert meter.read("dc volts").result(20).value == 0.02047


def test_no_answer_and_the_next_that_is_right(meter: Meter) -> None:
    assert meter.read("dc volts").result(20).value == 0.02047
    began = time.monotonic()
    with pytest.raises(InstrumentError) as caught:
        meter.read("temperature").result(60)
    assert caught.value.kind == "timeout"
    assert time.monotonic() - began < 15.0
    assert meter.read("dc volts").result(20).value == 0.02047


@pytest.mark.parametrize("address", SUPPLIES)
def test_a_supply_is_set_and_switched_off(address: str, library: str) -> None:
    profile = supply_profile(SUPPLY)
    link = Link("the supply", address, profile.link.settings(library), TrafficLog())
    supply = Supply(link, profile)
    assert supply.identify().result(20) == "Third Party,Supply,TPS-1,1.0"
    sample = supply.set(5.0, -5.0, 0.05, True).result(20)
    assert sample.outputs == (True, True)
    assert (sample.state.set_positive_v, sample.state.set_negative_v, sample.state.limit_a) == (5.0, -5.0, 0.05)
    assert (sample.state.positive_v, sample.state.negative_v) == (5.0, -5.0)
    assert (sample.state.positive_a, sample.state.negative_a) == (0.0012, 0.0011)
    outcome = supply.off().result(20)
    assert outcome.confirmed, outcome.how
    assert supply.sample().result(20).outputs == (False, False)
    link.close(5.0)


@pytest.mark.parametrize(
    ("library", "said"),
    [("no-such-file.yaml@sim", "no-such-file.yaml"), ("@no-such-backend", "no-such-backend")],
    indirect=False,
)
def test_a_library_that_is_not_there_is_named(library: str, said: str) -> None:
    profile = meter_profile(quick_meter())
    link = Link("the meter", METERS[0], profile.link.settings(library), TrafficLog())
    error = Meter(link, profile).identify().exception(20)
    link.close(5.0)
    assert isinstance(error, InstrumentError), error
    assert error.kind in {"unsupported", "bad address"}
    assert said in error.message
    assert error.next_step


def test_an_instrument_that_the_bench_does_not_have(library: str) -> None:
    """pyvisa-sim opens it all the same and answers nothing: a name has to be proven."""
    profile = meter_profile(quick_meter())
    link = Link("the meter", "GPIB0::9::INSTR", profile.link.settings(library), TrafficLog())
    error = Meter(link, profile).identify().exception(20)
    link.close(5.0)
    assert isinstance(error, InstrumentError), error


FILE = """
[bench]
format = 1
name = "a bench that others play"

[meter]
address = "GPIB0::22::INSTR"
profile = "scpi-meter"

[supply]
address = "GPIB0::5::INSTR"
profile = "channels.toml"
"""

PROFILE = """
format = 1
kind = "supply"
[commands]
volts = "VOLT{output} {value}"
limit = "CURR{output} {value}"
on = "OUTP{output} 1"
off = "OUTP{output} 0"
joiner = ""
[questions]
set_volts = "VOLT{output}?"
limits = "CURR{output}?"
output = "OUTP{output}?"
volts = "MEAS{output}:VOLT?"
amps = "MEAS{output}:CURR?"
error = "SYST:ERR?"
"""


@pytest.mark.parametrize("where", ["file", "option"])
def test_a_bench_file_over_another_library(where: str, library: str, tmp_path: Path) -> None:
    """From the files that a person writes to a reading: the library stands in the file, or is named at the start."""
    (tmp_path / "channels.toml").write_text(PROFILE)
    file = tmp_path / "bench.toml"
    file.write_text(FILE.replace("name =", f"visa = '{library}'\nname =") if where == "file" else FILE)
    bench = load_bench(file, visa="" if where == "file" else library)
    assert bench.meter is not None
    assert bench.supply is not None
    meter_table, supply_table = bench.meter.setup, bench.supply.setup
    assert meter_table["library"] == supply_table["library"] == library
    meter_dialect = meter_profile(meter_table["profile"])
    supply_dialect = supply_profile(supply_table["profile"])
    meter_link = Link("the meter", meter_table["address"], link_settings(meter_dialect, meter_table), TrafficLog())
    supply_link = Link("the supply", supply_table["address"], link_settings(supply_dialect, supply_table), TrafficLog())
    supply = Supply(supply_link, supply_dialect)
    assert Meter(meter_link, meter_dialect).read("dc volts").result(30).value == 0.02047
    assert supply.set(2.0, -3.0, 0.05, True).result(30).outputs == (True, True)
    assert supply.off().result(30).confirmed
    meter_link.close(5.0)
    supply_link.close(5.0)


def test_the_option_of_the_command(library: str) -> None:
    done = CliRunner().invoke(
        cli, ["instruments", "identify", "GPIB0::22::INSTR", "--profile", "scpi-meter", "--visa", library, "--json"]
    )
    assert done.exit_code == 0, done.output
    assert "Third Party,Meter,TPM-1,1.0" in done.output
