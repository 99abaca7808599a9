"""A bench is tried: readings, the supply into open circuit, and off on every way out."""

from __future__ import annotations

import os
import signal
import socket
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from contextlib import ExitStack, contextmanager, suppress
from pathlib import Path
from typing import Any

import pytest

from benchkit.events import SupplyState
from benchkit.instruments import open_circuit
from benchkit.instruments.bench import parse_bench
from benchkit.instruments.checking import Checked, FunctionChecked, SupplyChecked, check_bench, doubts
from benchkit.instruments.open_circuit import judge_open_circuit
from tests.instruments.personalities import Host, Line, PlainSupply, SelectSupply, TwoRails
from tests.instruments.server import TestMeter, TestSupply

OPEN_OHM = 1e9


class At:
    """A test bench: servers, and the bench file that names them."""

    def __init__(self, folder: Path, stack: ExitStack) -> None:
        self.meter = stack.enter_context(TestMeter())
        self.supply = stack.enter_context(TestSupply(load_ohm=OPEN_OHM))
        times = "[timing]\npower_line_cycles = 0.1\nsettling_s = 0.0\nac_settling_s = 0.0\nautorange_s = 0.0\n"
        link = "[link]\ntimeout_s = 3.0\nopen_timeout_s = 10.0\n"
        (folder / "meter.toml").write_text(f'based_on = "scpi-meter"\n{link}{times}')
        (folder / "supply.toml").write_text(f'based_on = "scpi-supply"\n{link}')
        self.path = folder / "bench.toml"
        self.serials = {"meter": "M-1", "supply": "S-1"}
        self.write()

    def write(self) -> None:
        lines = ["[bench]", "format = 1", 'name = "tried"']
        for kind, server in (("meter", self.meter), ("supply", self.supply)):
            lines += [f"[{kind}]", f'address = "{server.address}"', f'profile = "{kind}.toml"']
            lines += [f'serial = "{self.serials[kind]}"']
        self.path.write_text("\n".join([*lines, ""]))

    def check(self, *, yes: bool = True) -> Checked:
        self.asked: list[SupplyChecked] = []

        def answer(found: SupplyChecked) -> bool:
            self.asked.append(found)
            return yes

        return check_bench(parse_bench(self.path.read_text(), str(self.path)), yes=answer)


@pytest.fixture
def at(tmp_path: Path) -> Iterator[At]:
    with ExitStack() as stack:
        yield At(tmp_path, stack)


def test_all_works_and_the_supply_was_on_for_a_moment_only(at: At) -> None:
    waited: list[tuple[str, float]] = []
    bench = parse_bench(at.path.read_text(), str(at.path))
    checked = check_bench(bench, yes=lambda found: True, progress=lambda what, left_s: waited.append((what, left_s)))
    assert (checked.problems, checked.stopped, checked.exit_status) == ([], "", 0)
    assert checked.meter is not None
    assert [one.value for one in checked.meter.readings] == [0.012345] * 7
    assert all(one.took_s < 5 for one in checked.meter.readings)
    assert {"dc volts", "ohms"} < {what for what, _ in waited}
    assert all(left_s >= 0 for _, left_s in waited)
    supply = checked.supply
    assert supply is not None
    assert supply.powered is not None
    assert (supply.powered.positive_v, supply.powered.negative_v, supply.powered.limit_a) == (1.0, -1.0, 0.01)
    assert supply.off is not None
    assert supply.off.confirmed
    assert [on for _, on in at.supply.on_at if on] == [True]
    assert not at.supply.is_on
    assert (at.supply.volts, at.supply.limit) == ({1: 1.0, 2: 1.0}, {1: 0.01, 2: 0.01})


def test_readings_that_open_leads_cannot_give_are_cautions(at: At) -> None:
    checked = at.check()
    said = " ".join(checked.cautions)
    assert "on ohms with nothing connected. Expected overload, or at least 1.0 Mohm." in said
    assert "The meter gave the same number, 0.012345, on dc volts, " in said
    assert "was not switched on" not in said


@pytest.mark.parametrize(
    ("readings", "words"),
    [
        ({"ohms": None, "dc volts": 0.002, "dc current": 1e-9, "diode": None, "temperature": 23.0}, ()),
        ({"ohms": 2e7, "diode": 2.6}, ()),
        ({"dc volts": 0.0, "ac volts": 0.0, "dc current": 0.0}, ()),
        ({"ohms": 0.01}, ("0.01000 ohm on ohms",)),
        ({"dc volts": -12.0}, ("-12.00 V on dc volts",)),
        ({"diode": 0.6}, ("600.0 mV on diode",)),
        ({"temperature": 0.5, "dc volts": 0.5, "ac volts": 0.5}, ("0.5, on temperature, dc volts, ac volts",)),
    ],
)
def test_what_is_doubted(readings: dict[str, float | None], words: tuple[str, ...]) -> None:
    read = [
        FunctionChecked(function=function, took_s=0.1, value=value, overload=value is None)
        for function, value in readings.items()
    ]
    said = doubts(read)
    assert len(said) == len(words)
    assert all(word in one for one, word in zip(said, words, strict=True))


def test_limit_and_volts_are_in_the_supply_before_it_is_on(at: At) -> None:
    at.check()
    messages = at.supply.messages()
    first_on = next(number for number, message in enumerate(messages) if message.startswith("OUTP ON"))
    before = messages[:first_on]
    assert any(message.startswith("CURR 0.01") for message in before)
    assert any("VOLT 1.0" in message for message in before)


def test_protection_is_set_low_and_read_back(at: At) -> None:
    checked = at.check()
    assert checked.supply is not None
    assert checked.supply.powered is not None
    assert checked.supply.powered.protection_positive_v == pytest.approx(2.1)
    assert checked.supply.powered.protection_negative_v == pytest.approx(2.1)
    assert at.supply.over_volts == {1: pytest.approx(2.1), 2: pytest.approx(2.1)}
    assert not any("protection" in caution for caution in checked.cautions)


def test_without_a_yes_nothing_is_set(at: At) -> None:
    checked = at.check(yes=False)
    assert checked.exit_status == 0
    assert checked.supply is not None
    assert checked.supply.not_powered == "Nobody said yes"
    assert any("The supply was not switched on" in caution for caution in checked.cautions)
    assert (at.supply.on_at, at.supply.volts) == ([], {1: 0.0, 2: 0.0})


def test_nothing_is_switched_on_when_nobody_can_be_asked(at: At) -> None:
    checked = check_bench(parse_bench(at.path.read_text(), str(at.path)))
    assert checked.supply is not None
    assert checked.supply.not_powered
    assert at.supply.on_at == []


def test_an_output_that_is_on_already_is_not_touched(at: At) -> None:
    at.supply.on = {1: True, 2: True}
    checked = at.check()
    assert at.asked == []
    assert checked.supply is not None
    assert "on already" in checked.supply.not_powered
    assert at.supply.is_on


def test_an_output_that_comes_on_while_a_person_thinks_is_not_touched(at: At) -> None:
    def answer(found: SupplyChecked) -> bool:
        at.supply.on = {1: True, 2: True}
        return True

    checked = check_bench(parse_bench(at.path.read_text(), str(at.path)), yes=answer)
    assert checked.supply is not None
    assert "meanwhile" in checked.supply.not_powered
    assert at.supply.is_on
    assert at.supply.volts == {1: 0.0, 2: 0.0}


@pytest.mark.parametrize(
    ("rails", "host", "profile"), [(SelectSupply, Host, "select-supply"), (PlainSupply, Line, "plain-supply")]
)
def test_other_dialects_are_on_for_less_than_two_seconds(
    rails: type[TwoRails], host: type[Host | Line], profile: str
) -> None:
    supply = rails(OPEN_OHM)
    with host(supply) as served:
        text = f'[bench]\nformat = 1\nname = "b"\n[supply]\naddress = "{served.address}"\nprofile = "{profile}"\n'
        checked = check_bench(parse_bench(text, "bench.toml"), yes=lambda found: True)
    assert checked.problems == []
    assert checked.supply is not None
    assert checked.supply.off is not None
    assert checked.supply.off.confirmed
    assert supply.switched_at
    assert supply.on == {1: False, 2: False}
    assert 0.0 < checked.supply.on_s < 2.0
    said = any("no over-voltage protection" in caution for caution in checked.cautions)
    assert said == (profile == "plain-supply")


def test_a_supply_that_does_not_say_whether_it_is_on_is_not_touched(at: At) -> None:
    (at.path.parent / "supply.toml").write_text('based_on = "scpi-supply"\n[questions]\noutput = ""\n')
    checked = at.check()
    assert checked.supply is not None
    assert checked.supply.not_powered == "It does not say whether it is on: it was not touched"
    assert at.supply.on_at == []


def test_something_connected_is_found_and_off_follows(at: At) -> None:
    at.supply.load_ohm = 8.0
    checked = at.check()
    assert checked.exit_status == 3
    assert (
        "The positive output is held by its current limit; 10.0 mA flow. Expected open circuit." in checked.problems[0]
    )
    assert not at.supply.is_on


def test_a_supply_that_does_not_go_off_is_said_in_words(at: At) -> None:
    at.supply.fault = lambda connection, message: message.startswith("OUTP OFF")
    checked = at.check()
    assert checked.exit_status == 3
    assert any("Output state unknown: switch it off by hand" in text for text in checked.problems)


def test_a_supply_that_breaks_the_link_while_it_is_on_is_switched_off(at: At) -> None:
    broken: list[str] = []

    def fault(connection: socket.socket, message: str) -> bool:
        if at.supply.is_on and not broken and "MEAS" in message:
            broken.append(message)
            connection.shutdown(socket.SHUT_RDWR)
            return True
        return False

    at.supply.fault = fault
    checked = at.check()
    assert broken
    assert at.supply.wait_off(5)
    assert checked.supply is not None
    assert checked.supply.off is not None
    assert checked.supply.off.confirmed


def test_a_supply_that_answers_slowly_when_on_is_cut_short(at: At, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(open_circuit, "MOST_ON_S", 0.5)
    stop = threading.Event()

    def fault(connection: socket.socket, message: str) -> bool:
        if at.supply.is_on and "MEAS" in message:
            stop.wait(1.5)
            return True
        return False

    at.supply.fault = fault
    checked = at.check()
    stop.set()
    assert checked.exit_status == 3
    assert at.supply.wait_off(5)


def test_an_error_of_our_own_while_it_is_on_ends_in_off(at: At, monkeypatch: pytest.MonkeyPatch) -> None:
    def broken(state: SupplyState) -> list[str]:
        assert at.supply.is_on
        raise ZeroDivisionError

    monkeypatch.setattr(open_circuit, "judge_open_circuit", broken)
    with pytest.raises(ZeroDivisionError):
        at.check()
    assert not at.supply.is_on


def test_another_serial_number_stops_before_anything_is_asked(at: At) -> None:
    at.serials = {"meter": "M-2", "supply": "S-2"}
    at.write()
    checked = at.check()
    assert checked.exit_status == 3
    assert len(checked.problems) == 2
    assert "'M-2'" in checked.problems[0]
    assert "'S-2'" in checked.problems[1]
    assert not any("MEAS" in message for message in (*at.meter.messages(), *at.supply.messages()))


@pytest.mark.parametrize(("start", "status"), [("MEAS:DIOD", 0), ("MEAS:VOLT:DC", 3)])
def test_a_function_that_a_walk_needs_is_trouble_and_another_is_a_caution(at: At, start: str, status: int) -> None:
    at.meter.fault = lambda connection, message: message.startswith(start)
    checked = at.check(yes=False)
    assert checked.exit_status == status
    said = checked.problems if status else checked.cautions
    assert any(text.startswith("The meter gave no reading of") for text in said)


def test_an_overload_is_no_number_and_no_problem(at: At) -> None:
    at.meter.reading = "9.9E37"
    checked = at.check(yes=False)
    assert checked.problems == []
    assert checked.meter is not None
    assert {(one.value, one.overload) for one in checked.meter.readings} == {(None, True)}


def test_a_meter_that_is_away_does_not_keep_the_supply_from_being_tried(at: At) -> None:
    at.meter.close()
    checked = at.check()
    assert checked.exit_status == 3
    assert len(checked.problems) == 1
    assert checked.supply is not None
    assert checked.supply.powered is not None


@pytest.mark.parametrize(
    ("changed", "words"),
    [
        ({}, []),
        ({"positive_a": 0.006}, ["The positive output is loaded; 6.0 mA flow"]),
        ({"negative_in_limit": True}, ["The negative output is held by its current limit"]),
        ({"positive_v": 0.2}, ["The positive output reads 0.200 V. Expected 1 V"]),
        ({"negative_v": 1.0}, ["The negative output reads 1.000 V. Expected -1 V"]),
        ({"positive_v": None}, ["The positive output reads nothing"]),
    ],
)
def test_what_open_circuit_looks_like(changed: dict[str, float | bool | None], words: list[str]) -> None:
    good = {"positive_v": 1.0, "negative_v": -1.0, "positive_a": 0.0, "negative_a": 0.0}
    problems = judge_open_circuit(SupplyState(output_on=True, **{**good, **changed}))  # type: ignore[arg-type]
    assert len(problems) == len(words)
    assert all(text.startswith(word) for text, word in zip(problems, words, strict=True))


# -- the whole program is ended while the supply is on --------------------------------------------------------------


def slow_when_on(at: At) -> None:
    """Let the supply take its time as long as it is on, so that something can happen meanwhile."""

    def fault(connection: socket.socket, message: str) -> bool:
        if at.supply.is_on and "MEAS" in message:
            time.sleep(0.4)
        return False

    at.supply.fault = fault


def wait_on(at: At, program: subprocess.Popen[Any]) -> None:
    end_s = time.monotonic() + 30
    while not at.supply.is_on and program.poll() is None and time.monotonic() < end_s:
        time.sleep(0.002)
    assert at.supply.is_on


def started(at: At) -> subprocess.Popen[str]:
    """The command in a session of its own, with the yes already typed, and a supply that holds it up when it is on."""
    slow_when_on(at)
    program = subprocess.Popen(
        [sys.executable, "-m", "benchkit", "instruments", "check", "--bench", str(at.path)],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        start_new_session=True,
    )
    assert program.stdin is not None
    program.stdin.write("yes\n")
    program.stdin.flush()
    wait_on(at, program)
    return program


ON_A_TERMINAL = """
import fcntl, os, sys, termios
fcntl.ioctl(0, termios.TIOCSCTTY, 0)
os.execv(sys.executable, [sys.executable, "-m", "benchkit", "instruments", "check", "--bench", sys.argv[1]])
"""


@contextmanager
def on_a_terminal(at: At) -> Iterator[tuple[subprocess.Popen[bytes], int]]:
    """The command on a terminal of its own, with the supply on; gives the program and the terminal's other side."""
    slow_when_on(at)
    master, slave = os.openpty()
    program = subprocess.Popen(
        [sys.executable, "-c", ON_A_TERMINAL, str(at.path)],
        stdin=slave, stdout=slave, stderr=slave, start_new_session=True,
    )  # fmt: skip
    os.close(slave)
    os.write(master, b"yes\n")
    try:
        wait_on(at, program)
        yield program, master
    finally:
        program.kill()
        program.wait(30)
        with suppress(OSError):
            os.close(master)


@pytest.mark.parametrize("name", ["SIGINT", "SIGTERM", "SIGHUP", "SIGQUIT"])
def test_a_signal_while_it_is_on_ends_in_off_confirmed_and_status_4(at: At, name: str) -> None:
    program = started(at)
    os.kill(program.pid, getattr(signal, name))
    out, err = program.communicate(timeout=30)
    assert not at.supply.is_on
    assert program.returncode == 4, out + err
    assert f"Stopped early ({name})" in out
    assert "confirmed" in out
    assert "Traceback" not in err


def test_killed_outright_it_leaves_no_more_than_1_v_and_10_ma(at: At) -> None:
    program = started(at)
    os.kill(program.pid, signal.SIGKILL)
    program.communicate(timeout=30)
    assert at.supply.volts == {1: 1.0, 2: 1.0}
    assert at.supply.limit == {1: 0.01, 2: 0.01}


def test_ctrl_c_on_a_terminal_ends_in_off(at: At) -> None:
    with on_a_terminal(at) as (program, master):
        os.write(master, b"\x03")
        assert program.wait(30) == 4
        assert not at.supply.is_on


def test_ctrl_z_on_a_terminal_can_not_leave_it_on(at: At) -> None:
    with on_a_terminal(at) as (program, master):
        os.write(master, b"\x1a")
        # On a busy computer it may have been cut short.
        assert program.wait(30) in {0, 3}
        assert not at.supply.is_on


def test_a_closed_terminal_ends_in_off(at: At) -> None:
    with on_a_terminal(at) as (program, master):
        os.close(master)
        program.wait(30)
        assert not at.supply.is_on
