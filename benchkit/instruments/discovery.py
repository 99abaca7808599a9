"""What instruments can be found: serial ports, USB instruments, and on the network when that is asked for.

Rules
-----
* Looking is a help and never a condition: an address that somebody types always works.
* Nothing is opened and nothing is sent to an instrument, but for `network`, which asks the local network who speaks
  VXI-11 or HiSLIP and then knocks at the usual socket port of those that answered.
* Each place is looked at by a worker of its own with a time of its own.  A VISA library is asked in another process
  (`benchkit.instruments.listing`), because one that hangs can't be stopped in ours, and because libraries print.
* Whatever goes wrong at one place becomes a note; the others are looked at all the same.
* What can't be opened for want of a right is shown with the exact lines that give the right.

USB instruments are found by the class of their interface (USB Test and Measurement Class: class FE, subclass 03), in
what the Linux kernel shows of them.  On other systems they are found by the VISA library that ``--visa`` names.
"""

from __future__ import annotations

import importlib
import importlib.util
import json
import math
import os
import re
import socket
import subprocess
import sys
import threading
from collections.abc import Callable, Iterable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from benchkit.instruments.numbers import visible
from benchkit.quantities import printable

SOCKET_PORT = 5025
"""The TCP port that is registered for SCPI over a raw socket (IANA: scpi-raw)."""

BY_ID = Path("/dev/serial/by-id")
USB_DEVICES = Path("/sys/bus/usb/devices")
USB_NODES = Path("/dev/bus/usb")
UDEV_FILE = "/etc/udev/rules.d/70-instruments.rules"

_KNOCK_S = 0.5
_NO_DEVICE = re.compile(r"ttyS[0-9]+")


@dataclass(frozen=True, kw_only=True)
class Found:
    """One thing that may be an instrument.

    Parameters
    ----------
    address : str
        To type or to put into a bench file; empty when none can be made of what the system says.
    kind : str
        ``serial``, ``usb``, ``network`` or ``library``.
    what : str
        What the system says that it is.
    problem : str
        Why it can't be opened as things are; empty if nothing is known to stand in the way.
    cure : tuple of str
        Lines to type, or a file's text, that take the problem away.
    """

    address: str
    kind: str
    what: str
    problem: str = ""
    cure: tuple[str, ...] = ()

    def as_json(self) -> dict[str, Any]:
        """Return it as a plain table."""
        return {
            "address": self.address,
            "kind": self.kind,
            "what": self.what,
            "problem": self.problem,
            "cure": list(self.cure),
        }


@dataclass
class Findings:
    """What was found, and what there is to say about the looking."""

    found: list[Found] = field(default_factory=list)
    notes: list[str] = field(default_factory=list)

    def as_json(self) -> dict[str, Any]:
        """Return them as a plain table, format 1."""
        return {"format": 1, "found": [one.as_json() for one in self.found], "notes": self.notes}


Place = Callable[[], Findings]


def discover(*, network: bool = False, library: str = "@py", wait_s: float = 8.0) -> Findings:
    """Look at all places at once; never raises, and returns after `wait_s` at the latest (one second more in a crowd).

    Parameters
    ----------
    network : bool
        Ask the local network too.
    library : str
        The VISA library; any but ``@py`` is asked for what it lists.
    wait_s : float
        How long each place may take, s.
    """
    places: dict[str, Place] = {"serial ports": serial_ports, "USB instruments": usb_instruments}
    if library != "@py":
        places[f"the VISA library {library}"] = lambda: library_list(library, wait_s)
    if network:
        places["the network"] = lambda: network_list(wait_s)
    return look(places, wait_s)


def look(places: dict[str, Place], wait_s: float) -> Findings:
    """Let each place be looked at by a thread of its own, and gather what came in time, in the places' order."""
    came: dict[str, Findings] = {}

    def work(name: str, place: Place) -> None:
        try:
            came[name] = place()
        except Exception as error:
            came[name] = Findings(notes=[f"Looking for {name} failed: {type(error).__name__}: {error}."])

    threads = {
        name: threading.Thread(target=work, args=(name, place), name=f"looks for {name}", daemon=True)
        for name, place in places.items()
    }
    for thread in threads.values():
        thread.start()
    whole = Findings()
    for name, thread in threads.items():
        thread.join(wait_s + 1.0 if name in {"the network"} or name.startswith("the VISA") else wait_s)
        one = came.get(name)
        if one is None:
            whole.notes.append(f"Looking for {name} took more than {wait_s:g} s and was given up.")
            continue
        known = {found.address for found in whole.found if found.address}
        whole.found += [found for found in one.found if found.address not in known]
        whole.notes += one.notes
    return whole


def serial_ports(
    ports: Iterable[Any] | None = None,
    *,
    by_id: Path = BY_ID,
    allowed: Callable[[str], bool] | None = None,
) -> Findings:
    """Find serial ports: those with a USB device behind them first, under names that stay the same.

    Parameters
    ----------
    ports : iterable, optional
        As pyserial's ``comports()`` gives them; asked for if left out.
    by_id : Path
        The folder in which Linux keeps lasting names.
    allowed : callable, optional
        Tells whether a port's file may be read and written.
    """
    findings = Findings()
    if ports is None:
        try:
            ports = importlib.import_module("serial.tools.list_ports").comports()
        except ImportError:
            findings.notes.append("Serial ports need the package pyserial: pip install pyserial.")
            return findings
    allowed = allowed or _may_use
    lasting = _lasting_names(by_id)
    hidden = 0
    shown: list[tuple[bool, str, Found]] = []
    for port in ports:
        device = str(port.device)
        usb = port.vid is not None
        if not usb and _NO_DEVICE.fullmatch(Path(device).name) and str(port.hwid or "n/a") == "n/a":
            hidden += 1
            continue
        name = lasting.get(os.path.realpath(device), device)
        what = printable(" ".join(str(port.description or "").replace("n/a", "").split()) or "serial port")
        if usb:
            what += f" (USB {port.vid:04x}:{port.pid or 0:04x})"
        if name != device:
            what += f", now {device}"
        problem, cure = ("", ()) if allowed(device) else _no_right_to_port(device)
        one = Found(address=serial_address(name), kind="serial", what=what, problem=problem, cure=cure)
        shown.append((not usb, device, one))
    findings.found = [one for _, _, one in sorted(shown, key=lambda item: item[:2])]
    if hidden:
        ports_are = "port with nothing behind it is" if hidden == 1 else "ports with nothing behind them are"
        findings.notes.append(f"{hidden} built-in serial {ports_are} not shown.")
    return findings


def serial_address(port: str) -> str:
    """Return the VISA address of a serial port: ``ASRL/dev/ttyUSB0::INSTR``, on Windows ``ASRL3::INSTR`` for COM3."""
    number = re.fullmatch(r"COM([0-9]+)", port, re.IGNORECASE)
    return f"ASRL{number[1] if number else port}::INSTR"


def usb_instruments(
    devices: Path = USB_DEVICES, nodes: Path = USB_NODES, *, allowed: Callable[[str], bool] | None = None
) -> Findings:
    """Find USB instruments in what the Linux kernel shows."""
    findings = Findings()
    if not devices.is_dir():
        if sys.platform != "linux":
            findings.notes.append("USB instruments are looked for on Linux only; --visa LIBRARY asks that library.")
        return findings
    allowed = allowed or _may_use
    for folder in sorted(devices.iterdir()):
        vendor, product = _text(folder / "idVendor").lower(), _text(folder / "idProduct").lower()
        if not vendor or not product or not _is_instrument(folder):
            continue
        serial = _text(folder / "serial")
        words = [_text(folder / "manufacturer"), _text(folder / "product")]
        what = printable(" ".join(word for word in words if word) or "USB instrument")
        what = f"{what} (USB {vendor}:{product})"
        # A serial number that is empty or no plain text can't be put into an address.
        plain = bool(re.fullmatch(r"[\x21-\x39\x3b-\x7e]+", serial))
        address = f"USB0::0x{vendor}::0x{product}::{serial}::INSTR" if plain else ""
        problem: str = ""
        cure: tuple[str, ...] = ()
        node = _node(folder, nodes)
        if not plain:
            problem = f"its serial number reads {visible(serial)}: type the address that its manual gives"
        elif node is not None and not allowed(str(node)):
            problem, cure = f"this user may not open {node}", udev_lines(vendor, product)
        findings.found.append(Found(address=address, kind="usb", what=what, problem=problem, cure=cure))
    if findings.found and importlib.util.find_spec("usb") is None:
        findings.notes.append("USB instruments need the package pyusb and the library libusb: pip install pyusb.")
    return findings


def udev_lines(vendor: str, product: str) -> tuple[str, ...]:
    """Return what lets the person at the screen open one USB instrument: the rule, and how it comes into force."""
    rule = (
        f'SUBSYSTEM=="usb", ATTR{{idVendor}}=="{vendor}", ATTR{{idProduct}}=="{product}", MODE="0660", TAG+="uaccess"'
    )
    return (
        f"echo '{rule}' | sudo tee -a {UDEV_FILE}",
        "sudo udevadm control --reload && sudo udevadm trigger",
        "then pull the USB plug and put it in again",
    )


def library_list(library: str, wait_s: float) -> Findings:
    """Ask a VISA library, in another process, for what it lists."""
    return _asked(library, ["every"], "library", "listed by the VISA library", wait_s)


def network_list(wait_s: float, knock: Callable[[str], bool] | None = None) -> Findings:
    """Ask the local network for instruments that speak VXI-11 or HiSLIP, in another process.

    Those that answer are then tried at `SOCKET_PORT`: nothing announces a raw socket.
    """
    findings = _asked("@py", ["network"], "network", "answered on the network", wait_s - 2.0 * _KNOCK_S)
    return with_sockets(findings, knock or _answers_at_socket)


def with_sockets(findings: Findings, knock: Callable[[str], bool]) -> Findings:
    """Put the raw socket of each host that has one before the other addresses of that host."""
    hosts: dict[str, bool] = {}
    found: list[Found] = []
    for one in findings.found:
        match = re.match(r"TCPIP[0-9]*::([^:]+)::", one.address, re.IGNORECASE)
        host = match[1].partition(",")[0] if match else ""
        if host and host not in hosts:
            hosts[host] = knock(host)
            if hosts[host]:
                address = f"TCPIP::{host}::{SOCKET_PORT}::SOCKET"
                found.append(Found(address=address, kind="network", what=f"takes connections at port {SOCKET_PORT}"))
        found.append(one)
    return Findings(found=found, notes=findings.notes)


def _asked(library: str, words: list[str], kind: str, what: str, wait_s: float) -> Findings:
    command = [sys.executable, "-m", "benchkit.instruments.listing", library, *words]
    name = "the network" if kind == "network" else f"the VISA library {library}"
    try:
        done = subprocess.run(
            command, stdin=subprocess.DEVNULL, capture_output=True, timeout=max(wait_s, 0.1), check=False
        )
        answer = json.loads(done.stdout.decode("utf-8", "replace").strip().splitlines()[-1])
        addresses, remarks = [str(one) for one in answer["found"]], [str(one) for one in answer["remarks"]]
    except subprocess.TimeoutExpired:
        return Findings(notes=[f"Asking {name} took too long and was given up. {_more_time(wait_s)}"])
    except (OSError, ValueError, IndexError, KeyError, TypeError) as error:
        return Findings(notes=[f"Asking {name} failed ({type(error).__name__}: {error})."])
    return Findings(
        found=[Found(address=printable(one), kind=kind, what=what) for one in addresses],
        notes=[f"{name[0].upper()}{name[1:]}: {remark}" for remark in remarks],
    )


def _more_time(wait_s: float) -> str:
    most_s = 60.0
    if wait_s >= most_s - 1.0:
        return "An address can always be typed."
    return f"--wait {min(most_s, max(10.0, math.ceil(2.0 * wait_s))):g} gives it more time."


def _answers_at_socket(host: str) -> bool:
    try:
        with socket.create_connection((host, SOCKET_PORT), timeout=_KNOCK_S):
            return True
    except OSError:
        return False


def _may_use(path: str) -> bool:
    return not path.startswith("/") or not Path(path).exists() or os.access(path, os.R_OK | os.W_OK)


def _no_right_to_port(device: str) -> tuple[str, tuple[str, ...]]:
    group = "dialout"
    try:
        import grp

        group = grp.getgrgid(Path(device).stat().st_gid).gr_name
    except (ImportError, OSError, KeyError):
        pass
    if group == "root":
        return f"this user may not open {device}, which belongs to root alone", (f"ls -l {device}",)
    cure = (f'sudo usermod -a -G {group} "$USER"', "then log out and in again")
    return f"this user may not open {device}: it belongs to the group {group}", cure


def _lasting_names(by_id: Path) -> dict[str, str]:
    try:
        return {os.path.realpath(name): str(name) for name in sorted(by_id.iterdir())}
    except OSError:
        return {}


def _is_instrument(folder: Path) -> bool:
    return any(
        _text(part / "bInterfaceClass").lower() == "fe" and _text(part / "bInterfaceSubClass") == "03"
        for part in folder.glob(f"{folder.name}:*")
    )


def _node(folder: Path, nodes: Path) -> Path | None:
    bus, device = _text(folder / "busnum"), _text(folder / "devnum")
    return nodes / f"{int(bus):03d}" / f"{int(device):03d}" if bus.isdigit() and device.isdigit() else None


def _text(path: Path) -> str:
    try:
        return path.read_text("utf-8", "replace").strip().strip("\0").strip()
    except OSError:
        return ""
