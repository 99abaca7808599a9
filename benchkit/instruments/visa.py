"""The only module that imports PyVISA: its libraries, and every exception of theirs turned into an `InstrumentError`.

What is worked around here (pyvisa-py 0.8)
------------------------------------------
* The exceptions are not only VISA's: plain OSError, RuntimeError, TypeError, ValueError, Exception come through.
  `boundary` is the one place where they are caught.
* There is one resource manager for each library in a process; closing one would close every session of it, so that it
  is never closed.
* An opening that fails leaves open sockets behind; they hang on the frames of the exception, where they are closed.
* HiSLIP prints to the standard output, which belongs to others.
"""

from __future__ import annotations

import re
import socket
import threading
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from types import ModuleType
from typing import Any

from benchkit.errors import InstrumentError
from benchkit.instruments.settings import PURE_LIBRARY

_manager_lock = threading.Lock()
_managers: dict[str, Any] = {}

_LEFT_OPEN = ("interface", "sock", "_sync", "_async")


def resource_manager(library: str = PURE_LIBRARY) -> Any:
    """Return the process's one resource manager of a library; importing PyVISA takes 0.2-0.5 s the first time.

    Raises
    ------
    InstrumentError
        ``unsupported`` if there is no such library.
    """
    with _manager_lock:
        if library not in _managers:
            try:
                import pyvisa

                _managers[library] = pyvisa.ResourceManager(library)
            except Exception as error:
                raise _no_library(library, error) from None
            if library == PURE_LIBRARY:
                _silence()
        return _managers[library]


def constants() -> Any:
    """Return PyVISA's constants."""
    import pyvisa.constants

    return pyvisa.constants


@contextmanager
def boundary(address: str, doing: str) -> Iterator[None]:
    """Turn whatever PyVISA raises into an `InstrumentError` with a sentence for the person at the bench."""
    try:
        yield
    except InstrumentError:
        raise
    except Exception as error:
        if doing == "open":
            _close_leftovers(error)
        raise translate(error, address, doing) from None


def translate(error: Exception, address: str, doing: str) -> InstrumentError:
    """Return the `InstrumentError` for an exception that came out of PyVISA while opening, writing or reading."""
    text = _plain(error)
    code = _visa_code(error)
    if isinstance(error, ConnectionRefusedError):
        return InstrumentError(
            "link lost",
            f"{address} refused the connection",
            "an instrument that listens there",
            "Check that it is switched on, its network socket is enabled, and the port is right",
        )
    if isinstance(error, socket.gaierror) or "Name or service not known" in text:
        return InstrumentError(
            "bad address",
            f"Nobody knows the host in {address}",
            "a host name that the network knows, or an IPv4 address",
            "Correct the host, or look whether this computer is on the network",
        )
    if "exclusively lock" in text or code in {"error_resource_busy", "error_resource_locked"}:
        return InstrumentError(
            "refused", f"Another program is using {address} ({text})", "nobody else", "End that program first"
        )
    if isinstance(error, PermissionError) or "Permission denied" in text or "Access denied" in text:
        return InstrumentError(
            "bad address",
            f"The system does not let us use {address} ({text})",
            "the right to read and write it",
            _RIGHTS,
        )
    if isinstance(error, ConnectionError):
        return InstrumentError(
            "link lost", f"The connection to {address} broke ({text})", "", "Check the cable and the instrument"
        )
    if doing == "open":
        return _not_opened(error, text, code, address)
    if code == "error_timeout":
        return InstrumentError(
            "timeout",
            f"{address} did not take or give a message in time",
            "an answer",
            "Check that it is switched on and in remote control",
        )
    if isinstance(error, UnicodeError):
        return InstrumentError("garbled", f"{address} sent bytes that are no text ({text})", "ASCII text")
    if isinstance(error, NotImplementedError):
        return InstrumentError("unsupported", f"The link to {address} can't do this ({text})")
    if isinstance(error, EOFError) or "dropped by server" in text:
        return InstrumentError(
            "link lost",
            f"The instrument at {address} closed the connection",
            "",
            "Check that it is switched on and that no other program uses it",
        )
    return InstrumentError(
        "link lost",
        f"The link to {address} failed: {type(error).__name__}: {text}",
        "",
        "Check the cable and the instrument",
    )


_RIGHTS = (
    "On Linux a serial port wants membership of the group that owns it (often dialout), and a USB instrument a udev "
    "rule for its maker and model numbers; then plug it in again"
)


def _not_opened(error: Exception, text: str, code: str, address: str) -> InstrumentError:
    if isinstance(error, FileNotFoundError) or "No such file or directory" in text:
        return InstrumentError(
            "bad address",
            f"There is no {address}",
            "an instrument that is plugged in",
            "Check the cable, then the address",
        )
    if "could not connect" in text or "creating link" in text or code in {"error_resource_not_found", "error_timeout"}:
        return InstrumentError(
            "link lost",
            f"{address} did not take the connection ({text})",
            "an instrument that answers there",
            "Check that it is switched on, the network and the address",
        )
    if code == "error_invalid_resource_name":
        return InstrumentError(
            "bad address",
            f"{address} is no address for this VISA library ({text})",
            "an address as the library writes it",
            "Correct the address",
        )
    if isinstance(error, ImportError) or "install" in text:
        return InstrumentError(
            "unsupported",
            f"{address} needs something that is not installed ({text})",
            "pyserial for serial lines, pyusb and libusb for USB",
            "Install it beside benchkit, or use the instrument's network socket",
        )
    if "No device found" in text or "devices found" in text:
        return InstrumentError(
            "link lost",
            f"{address} is not there ({text})",
            "one USB instrument with these numbers",
            "Check the cable, then the address",
        )
    kind = "link lost" if isinstance(error, OSError) and not isinstance(error, ValueError) else "bad address"
    return InstrumentError(kind, f"{address} can't be opened ({text})", "", "Check the address")


def _no_library(library: str, error: Exception) -> InstrumentError:
    text = _plain(error)
    if library == PURE_LIBRARY:
        return InstrumentError(
            "unsupported", f"PyVISA can't be used ({text})", "pyvisa and pyvisa-py", "Install benchkit again"
        )
    return InstrumentError(
        "unsupported",
        f"The VISA library {library!r} can't be used ({text})",
        "the path of a VISA library, or one of PyVISA's backends like @py",
        "Correct --visa or the bench file's visa",
    )


def _plain(error: Exception) -> str:
    """Return what an exception says, on one line and fit for a screen."""
    text = " ".join((str(error) or type(error).__name__).split())
    text = _VISA_NUMBER.sub(lambda match: _described(int(match[1])), _VISA_NAME.sub("", text))
    return "".join(letter if " " <= letter <= "~" else ascii(letter)[1:-1] for letter in text)


_VISA_NAME = re.compile(r"VI_ERROR_\w+ \(-?[0-9]+\): ")
_VISA_NUMBER = re.compile(r"(-107380[0-9]{4})\b")


def _described(code: int) -> str:
    """Return in words what VISA's number for an error means; the number where nobody knows."""
    with suppress(ValueError, ImportError):
        return str(constants().StatusCode(code).name).removeprefix("error_").replace("_", " ")
    return str(code)


def _visa_code(error: Exception) -> str:
    """Return the name of VISA's own error, or nothing."""
    code = getattr(error, "error_code", None)
    if code is None:
        return ""
    with suppress(ValueError, ImportError):
        return str(constants().StatusCode(code).name)
    return ""


def _close_leftovers(error: Exception) -> None:
    """Close the sockets that an opening which failed has left on the frames of its exception."""
    seen: BaseException | None = error
    while seen is not None:
        trace = seen.__traceback__
        while trace is not None:
            owner = trace.tb_frame.f_locals.get("self")
            if type(owner).__module__.startswith("pyvisa_py."):
                for held in (owner, getattr(owner, "interface", None)):
                    for name in _LEFT_OPEN:
                        left = getattr(held, name, None)
                        if isinstance(left, socket.socket):
                            left.close()
            trace = trace.tb_next
        seen = seen.__cause__ or seen.__context__


def _silence() -> None:
    """Keep HiSLIP's remark about overlap off the standard output."""
    with suppress(ImportError):
        from pyvisa_py.protocols import hislip

        _put(hislip, "print", lambda *parts, **options: None)


def _put(module: ModuleType, name: str, value: object) -> None:
    vars(module)[name] = value
