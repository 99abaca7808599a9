"""What is found: serial ports and USB instruments of made-up systems, libraries in another process, no hanging."""

from __future__ import annotations

import sys
import threading
import time
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import pytest

from benchkit.instruments import discovery
from benchkit.instruments.address import parse_address
from benchkit.instruments.discovery import Findings, Found


def port(device: str, **more: Any) -> SimpleNamespace:
    """A port as pyserial's ``comports()`` gives it."""
    return SimpleNamespace(**{"device": device, "vid": None, "pid": None, "description": "n/a", "hwid": "n/a", **more})


USB_PORT = port("/dev/ttyUSB0", vid=0x0403, pid=0x6001, description="FT232R USB UART", hwid="USB VID:PID=0403:6001")
BUILT_IN = port("/dev/ttyS0", description="ttyS0", hwid="PNP0501")
EMPTY = [port(f"/dev/ttyS{number}") for number in range(1, 32)]


def everybody(path: str) -> bool:
    return True


def nobody(path: str) -> bool:
    return False


# -- serial ports ---------------------------------------------------------------------------------------------------


def test_usb_ports_come_first_and_ports_with_nothing_behind_them_are_hidden(tmp_path: Path) -> None:
    findings = discovery.serial_ports([*EMPTY, BUILT_IN, USB_PORT], by_id=tmp_path, allowed=everybody)
    assert [one.address for one in findings.found] == ["ASRL/dev/ttyUSB0::INSTR", "ASRL/dev/ttyS0::INSTR"]
    assert findings.found[0].what == "FT232R USB UART (USB 0403:6001)"
    assert findings.notes == ["31 built-in serial ports with nothing behind them are not shown."]


def test_one_hidden_port_is_one(tmp_path: Path) -> None:
    findings = discovery.serial_ports([EMPTY[0]], by_id=tmp_path, allowed=everybody)
    assert findings.notes == ["1 built-in serial port with nothing behind it is not shown."]


def test_a_port_is_called_by_its_lasting_name(tmp_path: Path) -> None:
    device = tmp_path / "ttyUSB7"
    device.touch()
    names = tmp_path / "by-id"
    names.mkdir()
    (names / "usb-Maker_Cable_A1-if00-port0").symlink_to(device)
    made = port(str(device), vid=0x1A86, pid=0x7523, description="USB Serial")
    (found,) = discovery.serial_ports([made], by_id=names, allowed=everybody).found
    assert found.address == f"ASRL{names}/usb-Maker_Cable_A1-if00-port0::INSTR"
    assert str(device) in found.what


def test_a_port_that_may_not_be_opened_says_which_group_to_join(tmp_path: Path) -> None:
    (found,) = discovery.serial_ports([USB_PORT], by_id=tmp_path, allowed=nobody).found
    assert found.problem.startswith("this user may not open /dev/ttyUSB0")
    assert found.cure == ('sudo usermod -a -G dialout "$USER"', "then log out and in again")


def test_a_description_can_not_move_the_cursor(tmp_path: Path) -> None:
    made = port("/dev/ttyACM0", vid=1, pid=2, description="Meter\x1b[2J\x07")
    (found,) = discovery.serial_ports([made], by_id=tmp_path, allowed=everybody).found
    assert found.what.isprintable()


@pytest.mark.parametrize(
    ("name", "address"),
    [
        ("/dev/ttyACM1", "ASRL/dev/ttyACM1::INSTR"),
        ("COM3", "ASRL3::INSTR"),
        ("com12", "ASRL12::INSTR"),
        ("/dev/cu.usbserial-10", "ASRL/dev/cu.usbserial-10::INSTR"),
    ],
)
def test_addresses_of_serial_ports(name: str, address: str) -> None:
    assert discovery.serial_address(name) == address


def test_without_pyserial_the_note_says_how_to_get_it(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setitem(sys.modules, "serial.tools.list_ports", None)
    findings = discovery.serial_ports()
    assert findings.found == []
    assert findings.notes == ["Serial ports need the package pyserial: pip install pyserial."]


# -- USB instruments ------------------------------------------------------------------------------------------------


def usb_device(root: Path, name: str, interface: tuple[str, str], **texts: str) -> None:
    """A USB device as the Linux kernel shows it."""
    folder = root / name
    part = folder / f"{name}:1.0"
    part.mkdir(parents=True)
    (part / "bInterfaceClass").write_text(interface[0] + "\n")
    (part / "bInterfaceSubClass").write_text(interface[1] + "\n")
    for key, text in texts.items():
        (folder / key).write_text(text + "\n")


METER = {
    "idVendor": "2A8D",
    "idProduct": "1301",
    "manufacturer": "Own",
    "product": "Meter",
    "busnum": "1",
    "devnum": "7",
}


def test_usb_instruments_are_found_by_their_class(tmp_path: Path) -> None:
    usb_device(tmp_path, "1-2", ("fe", "03"), **METER, serial="MY123")
    usb_device(tmp_path, "1-3", ("08", "06"), idVendor="abcd", idProduct="0001", serial="disk")
    (tmp_path / "usb1").mkdir()
    (found,) = discovery.usb_instruments(tmp_path, allowed=everybody).found
    assert found.address == "USB0::0x2a8d::0x1301::MY123::INSTR"
    assert found.what == "Own Meter (USB 2a8d:1301)"
    assert (found.problem, found.cure) == ("", ())


def test_access_denied_prints_the_rule_with_the_vendor_and_product_found(tmp_path: Path) -> None:
    usb_device(tmp_path, "1-2", ("fe", "03"), **METER, serial="MY123")
    asked: list[str] = []

    def refuse(path: str) -> bool:
        asked.append(path)
        return False

    (found,) = discovery.usb_instruments(tmp_path, Path("/dev/bus/usb"), allowed=refuse).found
    assert asked == ["/dev/bus/usb/001/007"]
    assert found.problem == "this user may not open /dev/bus/usb/001/007"
    assert 'SUBSYSTEM=="usb", ATTR{idVendor}=="2a8d", ATTR{idProduct}=="1301"' in found.cure[0]
    assert any("udevadm control --reload" in line for line in found.cure)


@pytest.mark.parametrize("serial", ["", "\0\0", "A:B", "é"])
def test_a_serial_number_that_fits_no_address_is_said(tmp_path: Path, serial: str) -> None:
    usb_device(tmp_path, "1-2", ("fe", "03"), **METER, serial=serial)
    (found,) = discovery.usb_instruments(tmp_path, allowed=everybody).found
    assert found.address == ""
    assert "type the address" in found.problem


def test_a_system_that_shows_no_usb_devices_is_no_error(tmp_path: Path) -> None:
    assert discovery.usb_instruments(tmp_path / "none").found == []


# -- never hanging, every error caught ------------------------------------------------------------------------------


def test_a_place_that_hangs_or_fails_leaves_the_others() -> None:
    stop = threading.Event()

    def hangs() -> Findings:
        stop.wait(30)
        return Findings()

    def fails() -> Findings:
        raise TypeError("no fileno")

    def works() -> Findings:
        return Findings(found=[Found(address="ASRL1::INSTR", kind="serial", what="a port")])

    begin = time.monotonic()
    findings = discovery.look({"slow ports": hangs, "broken ports": fails, "good ports": works}, 0.3)
    took = time.monotonic() - begin
    stop.set()
    assert took < 5
    assert [one.address for one in findings.found] == ["ASRL1::INSTR"]
    assert findings.notes == [
        "Looking for slow ports took more than 0.3 s and was given up.",
        "Looking for broken ports failed: TypeError: no fileno.",
    ]


def test_the_same_address_from_two_places_is_shown_once() -> None:
    def one(what: str) -> discovery.Place:
        return lambda: Findings(found=[Found(address="ASRL1::INSTR", kind="serial", what=what)])

    assert [found.what for found in discovery.look({"a": one("a"), "b": one("b")}, 5).found] == ["a"]


def test_a_library_is_asked_in_another_process(tmp_path: Path) -> None:
    text = """spec: "1.1"
devices:
  meter:
    eom:
      TCPIP SOCKET: {q: "\\n", r: "\\n"}
    dialogues:
      - {q: "*IDN?", r: "Own,Meter,1,1"}
resources:
  TCPIP0::meter::5025::SOCKET: {device: meter}
"""
    path = tmp_path / "bench.yaml"
    path.write_text(text)
    findings = discovery.library_list(f"{path}@sim", 20)
    assert [(one.address, one.kind) for one in findings.found] == [("TCPIP0::meter::5025::SOCKET", "library")]
    assert findings.notes == []


def test_a_library_that_is_not_there_is_a_note() -> None:
    findings = discovery.library_list("/no/such/library.so", 20)
    assert findings.found == []
    (note,) = findings.notes
    assert note.startswith("The VISA library /no/such/library.so: ")


def test_a_library_that_hangs_is_given_up() -> None:
    findings = discovery.library_list("@py", 0.0)
    assert findings.notes == [
        "Asking the VISA library @py took too long and was given up. --wait 10 gives it more time."
    ]


def test_the_socket_of_a_host_that_answers_at_the_usual_port_comes_first() -> None:
    asked: list[str] = []

    def knock(host: str) -> bool:
        asked.append(host)
        return host == "192.168.1.20"

    addresses = ["TCPIP::192.168.1.20::INSTR", "TCPIP::192.168.1.20::hislip0,4880::INSTR", "TCPIP::10.0.0.3::INSTR"]
    came = Findings(found=[Found(address=address, kind="network", what="answered") for address in addresses])
    found = discovery.with_sockets(came, knock).found
    assert [one.address for one in found] == ["TCPIP::192.168.1.20::5025::SOCKET", *addresses]
    assert asked == ["192.168.1.20", "10.0.0.3"]


def test_the_network_is_asked_only_on_request(monkeypatch: pytest.MonkeyPatch) -> None:
    asked: list[str] = []

    def network(wait_s: float) -> Findings:
        asked.append("network")
        return Findings()

    monkeypatch.setattr(discovery, "network_list", network)
    discovery.discover()
    assert asked == []
    discovery.discover(network=True)
    assert asked == ["network"]


def test_findings_are_a_plain_table() -> None:
    found = Found(address="ASRL1::INSTR", kind="serial", what="a port", problem="no right", cure=("do this",))
    assert Findings(found=[found], notes=["a note"]).as_json() == {
        "format": 1,
        "found": [
            {"address": "ASRL1::INSTR", "kind": "serial", "what": "a port", "problem": "no right", "cure": ["do this"]}
        ],
        "notes": ["a note"],
    }


@pytest.mark.parametrize(
    "address",
    [
        discovery.serial_address("/dev/serial/by-id/usb-FTDI_FT232R_USB_UART_A50285BI-if00-port0"),
        discovery.serial_address("COM3"),
        "USB0::0x2a8d::0x1301::MY123::INSTR",
        "TCPIP::192.168.1.20::INSTR",
        "TCPIP::192.168.1.20::hislip0,4880::INSTR",
        "TCPIP::192.168.1.20::5025::SOCKET",
        "USB0::4660::22136::MY123::0::INSTR",
    ],
)
def test_what_is_found_can_be_opened_by_the_same_words(address: str) -> None:
    assert parse_address(address).kind != "other"
