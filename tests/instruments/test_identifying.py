"""Who answers, and which profile's questions: over loopback links; no output is switched."""

from __future__ import annotations

import socket
from pathlib import Path
from typing import ClassVar

import pytest

from benchkit.errors import EntryError, InstrumentError
from benchkit.instruments.identified import Identified, addresses_for, candidates
from benchkit.instruments.identifying import identify, identify_as
from benchkit.instruments.lockfile import ResourceLock
from tests.instruments.fault_bench import KINDS, FaultMeter, FaultServer, FaultSupply
from tests.instruments.personalities import Host, Line, SelectSupply, SerialMeter
from tests.instruments.server import ScpiServer, TestMeter, TestSupply

STANDARD = ("scpi-supply", "scpi-meter")


class Poor(TestMeter):
    """A meter that knows no temperature."""

    def answer(self, message: str) -> str | None:
        return None if message.startswith("MEAS:TEMP") else super().answer(message)


class Mute(ScpiServer):
    """Says its name and nothing else."""

    def __init__(self) -> None:
        super().__init__("Own,Mute,0,1.0")


class Odd(ScpiServer):
    """A meter of another dialect."""

    def __init__(self) -> None:
        super().__init__("Own,Odd Meter,O-7,1.0")

    def answer(self, message: str) -> str | None:
        return "1.5" if message in {"VAL? V", "VAL? R"} else super().answer(message)


class EveryUnit(SerialMeter):
    """Shows what belongs to the function that it stands on."""

    UNITS: ClassVar = {"DCV": "V", "ACV": "mV", "DCA": "mA", "OHM": "kohm", "DIO": "V", "TMP": "C"}

    def answer(self, message: str) -> str | None:
        self.shows = f"1.25 {self.UNITS[self.function]}"
        return super().answer(message)


ODD = """format = 1
kind = "meter"
[link]
timeout_s = 1.0
open_timeout_s = 5.0
[timing]
power_line_cycles = 0.1
settling_s = 0.0
autorange_s = 0.0
[functions]
"dc volts" = "VAL? V"
ohms = "VAL? R"
"""


def quick(tmp_path: Path, name: str = "scpi-meter", *, open_timeout_s: float = 5.0) -> str:
    """A file with a shipped profile that waits for less long."""
    path = tmp_path / f"quick-{name}.toml"
    times = "[timing]\npower_line_cycles = 0.1\nsettling_s = 0.0\nac_settling_s = 0.0\nautorange_s = 0.0\n"
    link = f"[link]\ntimeout_s = 0.3\nopen_timeout_s = {open_timeout_s}\n"
    path.write_text(f'based_on = "{name}"\n{link}{times if name == "scpi-meter" else ""}')
    return str(path)


def asked(server: ScpiServer | FaultServer, *names: str) -> Identified:
    return identify(server.address, candidates(names or STANDARD))


@pytest.mark.parametrize(
    ("word", "addresses"),
    [
        ("TCPIP::10.0.0.1::5025::SOCKET", ("TCPIP::10.0.0.1::5025::SOCKET",)),
        (
            "10.0.0.1",
            ("TCPIP::10.0.0.1::5025::SOCKET", "TCPIP::10.0.0.1::hislip0::INSTR", "TCPIP::10.0.0.1::inst0::INSTR"),
        ),
        ("/dev/ttyUSB0", ("ASRL/dev/ttyUSB0::INSTR",)),
        ("COM4", ("ASRL4::INSTR",)),
    ],
)
def test_what_may_be_typed(word: str, addresses: tuple[str, ...]) -> None:
    assert addresses_for(word) == addresses


@pytest.mark.parametrize("word", ["", "  ", "my meter", "10.0.0.1:5025", "a/b", "\x1b[2J"])
def test_what_can_name_nothing(word: str) -> None:
    with pytest.raises(EntryError, match=r"address|host"):
        addresses_for(word)


def test_the_standard_profiles_are_tried_first_and_a_supply_before_a_meter() -> None:
    every = candidates()
    assert [one.name for one in every[:2]] == list(STANDARD)
    assert [one.kind for one in every[:2]] == ["supply", "meter"]
    assert len({one.name for one in every}) == len(every)


def test_a_supply_is_known_by_its_answers_and_nothing_is_set() -> None:
    with TestSupply() as server:
        found = asked(server)
        assert (found.name, found.serial, found.problem) == ("Own,Test Supply,S-1,1.0", "S-1", None)
        assert found.best is not None
        assert (found.best.profile, found.best.kind, found.best.complete) == ("scpi-supply", "supply", True)
        assert found.tried == ("scpi-supply",)
        assert not server.is_on
        assert server.on_at == []
        assert (server.volts, server.limit) == ({1: 0.0, 2: 0.0}, {1: 0.1, 2: 0.1})


def test_a_meter_is_known_by_its_answers_and_its_errors_are_cleared() -> None:
    with TestMeter() as server:
        found = asked(server)
        assert found.best is not None
        assert (found.best.profile, found.best.complete) == ("scpi-meter", True)
        assert set(found.best.answered) >= {"dc volts", "ohms", "temperature"}
        assert found.tried == STANDARD
        assert "*CLS" in server.messages()


@pytest.mark.parametrize("kind", KINDS)
def test_over_every_link(kind: str) -> None:
    with KINDS[kind](FaultSupply()) as server:
        found = asked(server)
    assert (found.problem, found.address) == (None, server.address)
    assert found.best is not None
    assert (found.best.profile, found.best.complete) == ("scpi-supply", True)
    with KINDS[kind](FaultMeter()) as server:
        found = asked(server, "scpi-meter")
    assert found.best is not None
    assert (found.best.profile, found.best.complete) == ("scpi-meter", True)


def test_an_output_that_is_selected_first_is_another_dialect() -> None:
    rails = SelectSupply()
    with Host(rails) as served:
        found = identify(served.address, candidates(("scpi-supply", "select-supply")))
    assert found.best is not None
    assert (found.best.profile, found.best.complete) == ("select-supply", True)
    # Nothing was told that sets or switches.
    assert set(rails.told()) <= {"INST:NSEL 1", "INST:NSEL 2", "*CLS"}


def test_what_was_sent_in_vain_does_not_spoil_the_next_dialect(tmp_path: Path) -> None:
    # The standard profile's messages end in LF, this meter's in CR: they wait in the meter as the beginning of a line.
    with Line(EveryUnit()) as served:
        found = identify(served.address, candidates((quick(tmp_path, open_timeout_s=0.5), "serial-meter")))
    assert found.name == "Own,Serial Meter,M-2,1.0"
    assert found.best is not None
    assert (found.best.profile, found.best.complete) == ("serial-meter", True)


def test_on_a_serial_line_several_speeds_are_tried_and_the_one_that_worked_is_kept() -> None:
    with KINDS["serial"](FaultMeter()) as server:
        found = identify(server.address, candidates(("scpi-meter",)), bauds=(19200, 9600))
    # A pseudo-terminal has no speed, so that the first one works.
    assert found.baud == 19200
    assert found.best is not None


def test_through_another_library(tmp_path: Path) -> None:
    lines = ["spec: '1.1'", "devices:", "  meter:", "    eom:", "      TCPIP SOCKET: {q: '\\n', r: '\\n'}"]
    dialogues = {"*IDN?": "Third,Meter,T-1,1", "VAL? V": "+1.5E+00", "VAL? R": "9.9E37"}
    lines += [
        "    dialogues:",
        *(f"      - {{q: '{question}', r: '{reply}'}}" for question, reply in dialogues.items()),
    ]
    lines += ["resources:", "  TCPIP0::meter::5025::SOCKET: {device: meter}", ""]
    (tmp_path / "bench.yaml").write_text("\n".join(lines).replace("'\\n'", '"\\n"'))
    (tmp_path / "odd.toml").write_text(ODD)
    found = identify(
        "TCPIP0::meter::5025::SOCKET",
        candidates((str(tmp_path / "odd.toml"),)),
        library=f"{tmp_path / 'bench.yaml'}@sim",
    )
    assert (found.name, found.serial, found.problem) == ("Third,Meter,T-1,1", "T-1", None)
    assert found.best is not None
    assert found.best.answered == ("dc volts", "ohms")


def test_a_meter_that_lacks_functions_is_said_to_lack_them(tmp_path: Path) -> None:
    with Poor() as server:
        found = asked(server, quick(tmp_path))
        assert found.best is not None
        assert not found.best.complete
        assert [name for name, _ in found.best.unanswered] == ["temperature"]
        (gap,) = found.as_json()["fits"][0]["unanswered"]
        assert gap["question"] == "temperature"
        # What was asked, what came, what was expected.
        assert "did not answer MEAS:TEMP" in gap["what_happened"]
        assert "; expected " in gap["what_happened"]


def test_a_name_alone_fits_no_profile(tmp_path: Path) -> None:
    with Mute() as server:
        found = asked(server, quick(tmp_path, "scpi-supply"), quick(tmp_path))
        assert found.name == "Own,Mute,0,1.0"
        assert found.serial == ""
        assert found.fits == ()
        assert [miss.profile.rpartition("-")[2] for miss in found.misses] == ["supply.toml", "meter.toml"]
        supply, meter = found.as_json()["misses"]
        assert "did not answer OUTP" in supply["unanswered"][0]["what_happened"]
        assert "did not answer MEAS:VOLT:DC?" in meter["unanswered"][0]["what_happened"]
        assert meter["unanswered"][1]["what_happened"] == "not asked"
        # Without an answer to its first question a meter's other functions are not asked.
        assert not any(message.startswith("MEAS:DIOD") for message in server.messages())


def test_another_dialect_needs_a_file_and_no_code(tmp_path: Path) -> None:
    path = tmp_path / "odd.toml"
    path.write_text(ODD)
    with Odd() as server:
        found = asked(server, str(path))
        assert found.best is not None
        assert (found.best.profile, found.best.complete) == (str(path), True)
        assert identify_as("meter", server.address, (str(path),)).best == found.best


def test_nobody_there_is_a_problem_in_words() -> None:
    with socket.create_server(("127.0.0.1", 0)) as free:
        port = free.getsockname()[1]
    found = identify(f"TCPIP::127.0.0.1::{port}::SOCKET", candidates(STANDARD))
    assert found.name == ""
    assert found.problem is not None
    assert found.problem.kind == "link lost"
    assert f"TCPIP::127.0.0.1::{port}::SOCKET refused the connection" in str(found.problem)


def test_one_that_says_nothing_is_a_problem_in_words(tmp_path: Path) -> None:
    with TestMeter() as server:
        server.fault = lambda connection, message: True
        found = asked(server, quick(tmp_path, open_timeout_s=0.5))
        assert found.problem is not None
        assert found.problem.kind == "timeout"
        assert server.address in str(found.problem)


def test_an_address_that_another_process_uses_is_left_alone() -> None:
    with TestMeter() as server:
        lock = ResourceLock(server.address)
        try:
            found = asked(server)
        finally:
            lock.release()
        assert found.problem is not None
        assert found.problem.kind == "refused"
        assert server.connections == 0


def test_a_supply_is_not_taken_for_a_meter(tmp_path: Path) -> None:
    with (
        TestSupply() as server,
        pytest.raises(InstrumentError, match="answers no questions of a meter's profile") as caught,
    ):
        identify_as("meter", server.address, (quick(tmp_path),))
    assert caught.value.kind == "unsupported"
    # The question that had no answer, and what came.
    assert "did not answer MEAS:VOLT:DC?" in str(caught.value)
    assert "quick-scpi-meter.toml: " in str(caught.value)


def test_a_profile_of_the_other_kind_is_refused_before_anything_is_asked() -> None:
    with TestMeter() as server:
        with pytest.raises(EntryError, match="No profile of a meter"):
            identify_as("meter", server.address, ("scpi-supply",))
        assert server.connections == 0
