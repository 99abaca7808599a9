"""``benchkit instruments``: from two addresses to a bench file by typing what is printed, and every way to fail."""

from __future__ import annotations

import io
import json
import shlex
import socket
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from benchkit import cli
from benchkit.instruments import discovery
from benchkit.instruments.bench import load_bench
from benchkit.instruments.discovery import Findings, Found
from benchkit.ui import launch
from tests.instruments.fault_bench import FaultMeter, SerialServer
from tests.instruments.server import TestMeter, TestSupply

Run = Callable[..., tuple[int, str, str]]


@pytest.fixture
def run(capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch) -> Run:
    def call(*arguments: object, typed: str = "") -> tuple[int, str, str]:
        monkeypatch.setattr("sys.stdin", io.StringIO(typed))
        with pytest.raises(SystemExit) as caught:
            cli.main(["instruments", *[str(argument) for argument in arguments]])
        out, err = capsys.readouterr()
        assert isinstance(caught.value.code, int)
        assert "Traceback" not in err
        return caught.value.code, out, err

    return call


@pytest.fixture
def meter() -> Iterator[TestMeter]:
    with TestMeter() as server:
        yield server


@pytest.fixture
def supply() -> Iterator[TestSupply]:
    with TestSupply(load_ohm=1e9) as server:
        yield server


def next_command(out: str) -> list[str]:
    """Return the words of the last line that can be typed, without ``benchkit instruments``."""
    line = [line.strip() for line in out.splitlines() if line.strip().startswith("benchkit instruments ")][-1]
    return shlex.split(line)[2:]


def test_from_nothing_to_a_bench_file_by_typing_what_is_printed(
    run: Run, meter: TestMeter, supply: TestSupply, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    found = [Found(address=server.address, kind="network", what="answered") for server in (supply, meter)]
    monkeypatch.setattr(discovery, "network_list", lambda wait_s: Findings(found=found))
    monkeypatch.setattr(discovery, "serial_ports", Findings)
    status, out, _ = run("find", "--network")
    assert status == 0
    status, out, err = run(*next_command(out))
    assert status == 0
    assert "trying the questions of the profile" in err
    status, out, _ = run(*next_command(out))
    assert status == 0
    bench = load_bench(tmp_path / "bench.toml")
    assert bench.meter is not None
    assert bench.supply is not None
    assert (bench.meter.address, bench.meter.serial) == (meter.address, "M-1")
    assert (bench.supply.address, bench.supply.serial) == (supply.address, "S-1")
    status, out, err = run(*next_command(out), typed="yes\n")
    assert status == 0, out
    assert "Type yes to switch it on" in err
    assert "confirmed" in out
    assert "benchkit walk --design my-stage.toml --bench bench.toml" in out
    # This meter says 0.012345 whatever it is asked.
    said = " ".join(out.split())
    assert "The meter reads 0.01235 ohm on ohms with nothing connected" in said
    assert "All that was tried worked" not in said
    assert [on for _, on in supply.on_at if on] == [True]
    assert not supply.is_on


def test_a_meter_on_a_serial_cable_and_a_supply_on_the_network(run: Run, supply: TestSupply, tmp_path: Path) -> None:
    path = tmp_path / "bench.toml"
    with SerialServer(FaultMeter()) as served:
        status, out, _ = run("identify", served.path, "--profile", "scpi-meter", "--baud", "19200")
        assert status == 0
        assert "answers at 19200 baud" in out
        words = ("--meter", served.path, "--supply", supply.address, "--baud", "19200")
        status, out, _ = run("write", path, *words)
        assert status == 0
        bench = load_bench(path)
        assert bench.meter is not None
        assert bench.meter.address == f"ASRL{served.path}::INSTR"
        assert bench.meter.profile["link"]["line"]["baud"] == 19200
        status, out, _ = run(*next_command(out), typed="yes\n")
    assert status == 0, out
    assert "Meter: Own,Fault Meter" in out
    assert not supply.is_on


# -- find -----------------------------------------------------------------------------------------------------------


def test_find_prints_what_stands_in_the_way_and_the_cure(run: Run, monkeypatch: pytest.MonkeyPatch) -> None:
    port = Found(address="ASRL/dev/ttyUSB0::INSTR", kind="serial", what="a cable", problem="no right", cure=("do so",))
    monkeypatch.setattr(discovery, "serial_ports", lambda: Findings(found=[port], notes=["a note"]))
    status, out, err = run("find")
    assert (status, err) == (0, "")
    for words in ("ASRL/dev/ttyUSB0::INSTR", "can't be used yet: no right", "do so", "Note: a note", "--network"):
        assert words in out
    # What can't be opened is not offered as the next thing to ask.
    assert "identify ASRL" not in out


def test_find_nothing_says_that_an_address_can_be_typed(run: Run, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(discovery, "serial_ports", Findings)
    monkeypatch.setattr(discovery, "usb_instruments", Findings)
    status, out, _ = run("find")
    assert status == 0
    assert "Nothing was found." in out
    assert "TCPIP::192.168.1.20::5025::SOCKET" in out


def test_find_for_programs(run: Run, monkeypatch: pytest.MonkeyPatch) -> None:
    port = Found(address="ASRL1::INSTR", kind="serial", what="a cable")
    monkeypatch.setattr(discovery, "serial_ports", lambda: Findings(found=[port]))
    status, out, err = run("find", "--json")
    assert (status, err) == (0, "")
    assert json.loads(out)["found"][0]["address"] == "ASRL1::INSTR"


# -- identify -------------------------------------------------------------------------------------------------------


def test_identify_for_programs(run: Run, meter: TestMeter, supply: TestSupply) -> None:
    status, out, _ = run("identify", meter.address, supply.address, "--json")
    assert status == 0
    first, second = [json.loads(line) for line in out.splitlines()]
    assert (first["name"], first["serial"], first["problem"]) == ("Own,Test Meter,M-1,1.0", "M-1", None)
    assert second["fits"][0] == {
        "profile": "scpi-supply",
        "kind": "supply",
        "complete": True,
        "answered": ["settings, outputs and readings of both outputs"],
        "unanswered": [],
    }


def test_identify_nobody_is_instrument_trouble_and_the_others_are_asked(run: Run, meter: TestMeter) -> None:
    with socket.create_server(("127.0.0.1", 0)) as free:
        port = free.getsockname()[1]
    status, out, _ = run("identify", f"TCPIP::127.0.0.1::{port}::SOCKET", meter.address)
    assert status == 3
    assert "refused the connection" in out
    assert "Own,Test Meter,M-1,1.0" in out


@pytest.mark.parametrize("word", ["my meter", "10.0.0.1:5025"])
def test_identify_what_can_name_nothing_is_wrong_input(run: Run, word: str) -> None:
    status, out, err = run("identify", word)
    assert (status, out) == (2, "")
    assert err.startswith("benchkit: ")
    assert len(err.splitlines()) == 1


def test_identify_one_that_answers_no_profile_is_instrument_trouble_and_says_what_came(
    run: Run, meter: TestMeter, tmp_path: Path
) -> None:
    profile = tmp_path / "odd.toml"
    profile.write_text('format = 1\nkind = "meter"\n[link]\ntimeout_s = 0.3\n[functions]\nohms = "*IDN?"\n')
    status, out, _ = run("identify", meter.address, "--profile", profile)
    assert status == 3
    said = " ".join(out.split())
    assert "Own,Test Meter,M-1,1.0" in said
    # Which question, what came, what was expected.
    assert (
        f"ohms: The instrument at {meter.address} answered *IDN?: the reply was 'Own,Test Meter,M-1,1.0'; expected "
        in said
    )


@pytest.mark.parametrize("word", ["TCPIP::foo", "TCPIP::no-such-host.invalid::5025::SOCKET"])
def test_identify_speaks_of_the_address_and_of_no_bench_file(run: Run, word: str) -> None:
    status, out, _ = run("identify", word, "--profile", "scpi-meter")
    assert status == 3
    assert "bench file" not in out


def test_identify_with_a_profile_that_is_not_there(run: Run) -> None:
    status, _, err = run("identify", "10.0.0.1", "--profile", "no-such.toml")
    assert status == 2
    assert "no-such.toml" in err


# -- write ----------------------------------------------------------------------------------------------------------


def test_write_never_overwrites_unless_told_to(run: Run, meter: TestMeter, tmp_path: Path) -> None:
    path = tmp_path / "bench.toml"
    path.write_text("mine")
    status, _, err = run("write", path, "--meter", meter.address)
    assert status == 2
    assert "it is there already" in err
    assert path.read_text() == "mine"
    assert meter.connections == 0
    status, _, _ = run("write", path, "--meter", meter.address, "--force", "--name", 'bench "2"')
    assert status == 0
    assert load_bench(path).name == 'bench "2"'
    assert [one.name for one in tmp_path.iterdir()] == ["bench.toml"]


def test_write_needs_an_address(run: Run, tmp_path: Path) -> None:
    status, _, err = run("write", tmp_path / "bench.toml")
    assert status == 2
    assert "Neither --meter nor --supply came" in err


def test_write_into_no_folder(run: Run, meter: TestMeter, tmp_path: Path) -> None:
    status, _, err = run("write", tmp_path / "none" / "bench.toml", "--meter", meter.address)
    assert status == 2
    assert "there is no folder" in err


def test_write_with_nobody_there_writes_nothing(run: Run, tmp_path: Path) -> None:
    with socket.create_server(("127.0.0.1", 0)) as free:
        port = free.getsockname()[1]
    status, _, err = run("write", tmp_path / "bench.toml", "--meter", f"TCPIP::127.0.0.1::{port}::SOCKET")
    assert status == 3
    assert "refused the connection" in err
    assert not list(tmp_path.iterdir())


def test_write_with_the_addresses_the_wrong_way_round(run: Run, meter: TestMeter, tmp_path: Path) -> None:
    status, _, err = run("write", tmp_path / "bench.toml", "--supply", meter.address, "--profile", "scpi-supply")
    assert status == 3
    assert "look whether the addresses are the right way round" in err
    assert not list(tmp_path.iterdir())


# -- another library for a walk -------------------------------------------------------------------------------------


def test_a_walk_takes_the_library_of_its_option(run: Run, monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    got: dict[str, object] = {}

    def walk(**options: object) -> int:
        got.update(options)
        return 0

    monkeypatch.setattr(launch, "walk", walk)
    with pytest.raises(SystemExit):
        cli.main(["walk", "--visa", "bench.yaml@sim", "--bench", str(tmp_path / "b.toml")])
    assert got["visa"] == "bench.yaml@sim"
    text = '[bench]\nformat = 1\nname = "b"\n[meter]\naddress = "GPIB0::3::INSTR"\n'
    assert launch._bench_parts(text, "b.toml", "bench.yaml@sim")["setup"]["meter"]["library"] == "bench.yaml@sim"


# -- check ----------------------------------------------------------------------------------------------------------


@pytest.fixture
def bench_path(run: Run, meter: TestMeter, supply: TestSupply, tmp_path: Path) -> Path:
    path = tmp_path / "bench.toml"
    status, _, err = run("write", path, "--meter", meter.address, "--supply", supply.address)
    assert status == 0, err
    return path


@pytest.mark.parametrize("typed", ["", "\n", "y\n", "no\n", "yes please\n"])
def test_check_switches_nothing_on_without_the_whole_word(
    run: Run, bench_path: Path, supply: TestSupply, typed: str
) -> None:
    status, out, _ = run("check", "--bench", bench_path, typed=typed)
    assert status == 0
    assert "Not switched on: nobody said yes." in out
    assert supply.on_at == []


def test_check_without_power_asks_nothing(run: Run, bench_path: Path, supply: TestSupply) -> None:
    status, _, err = run("check", "--bench", bench_path, "--no-power", typed="yes\n")
    assert status == 0
    assert "Type yes" not in err
    assert supply.on_at == []


def test_check_for_programs(run: Run, bench_path: Path, supply: TestSupply) -> None:
    status, out, _ = run("check", "--bench", bench_path, "--json", typed="yes\n")
    found = json.loads(out)
    assert status == 0
    assert found["supply"]["off_confirmed"] is True
    assert found["supply"]["into_open_circuit"]["positive_v"] == 1.0
    assert {one["function"] for one in found["meter"]["readings"]} >= {"dc volts", "ohms"}
    assert found["problems"] == []


def test_check_says_what_is_not_confirmed_and_ends_with_3(run: Run, bench_path: Path, supply: TestSupply) -> None:
    supply.fault = lambda connection, message: message.startswith("OUTP OFF")
    status, out, _ = run("check", "--bench", bench_path, typed="yes\n")
    assert status == 3
    assert "OFF IS NOT CONFIRMED: output state unknown: switch it off by hand" in out
    assert "All that was tried worked" not in out


def test_check_an_overdue_calibration_is_a_caution(run: Run, bench_path: Path) -> None:
    text = bench_path.read_text().replace("# calibration_due = 2031-05-01", "calibration_due = 2001-05-01", 1)
    bench_path.write_text(text)
    status, out, _ = run("check", "--bench", bench_path, "--no-power")
    assert status == 0
    assert "2001-05-01" in out


def test_check_a_bench_file_that_is_not_there(run: Run, tmp_path: Path) -> None:
    status, _, err = run("check", "--bench", tmp_path / "none.toml")
    assert status == 2
    assert "none.toml" in err
