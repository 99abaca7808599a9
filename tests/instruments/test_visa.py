"""Everything that PyVISA raises becomes one of our kinds, with a sentence and a next step."""

from __future__ import annotations

import gc
import socket
import warnings

import pytest
from pyvisa import constants, errors

from benchkit.errors import InstrumentError
from benchkit.instruments.visa import boundary, resource_manager, translate

AT = "TCPIP::192.0.2.1::5025::SOCKET"
CODE = constants.StatusCode


def visa(code: constants.StatusCode) -> errors.VisaIOError:
    return errors.VisaIOError(code.value)


TABLE = [
    (ConnectionRefusedError(111, "Connection refused"), "write", "link lost", "refused the connection"),
    (ConnectionResetError(104, "Connection reset by peer"), "read", "link lost", "broke"),
    (BrokenPipeError(32, "Broken pipe"), "write", "link lost", "broke"),
    (socket.gaierror(-2, "Name or service not known"), "open", "bad address", "Nobody knows the host"),
    (Exception("could not connect: [Errno -2] Name or service not known"), "open", "bad address", "Nobody knows"),
    (Exception("could not connect: -1073807339"), "open", "link lost", "did not take the connection"),
    (Exception("error creating link: 3"), "open", "link lost", "did not take the connection"),
    (visa(CODE.error_resource_not_found), "open", "link lost", "did not take the connection"),
    (visa(CODE.error_invalid_resource_name), "open", "bad address", "no address for this VISA library"),
    (visa(CODE.error_resource_busy), "open", "refused", "Another program is using"),
    (visa(CODE.error_resource_locked), "read", "refused", "Another program is using"),
    (visa(CODE.error_timeout), "write", "timeout", "in time"),
    (visa(CODE.error_io), "read", "link lost", "failed"),
    (PermissionError(13, "Permission denied"), "open", "bad address", "dialout"),
    (OSError("could not open port /dev/x: [Errno 13] Permission denied: '/dev/x'"), "open", "bad address", "dialout"),
    (OSError("could not open port /dev/x: No such file or directory"), "open", "bad address", "There is no"),
    (OSError("[Errno 11] Could not exclusively lock port /dev/x"), "open", "refused", "Another program is using"),
    (OSError(5, "Input/output error"), "read", "link lost", "Input/output error"),
    (ValueError("Please install PyUSB to use this.\nNo module named 'usb'"), "open", "unsupported", "pyusb"),
    (ImportError("no pyserial"), "open", "unsupported", "pyserial"),
    (ValueError("No device found."), "open", "link lost", "is not there"),
    (ValueError("nonsense"), "open", "bad address", "can't be opened"),
    (RuntimeError("Connection was dropped by server."), "read", "link lost", "closed the connection"),
    (EOFError("the connection ended"), "read", "link lost", "closed the connection"),
    (errors.InvalidSession(), "write", "link lost", "InvalidSession"),
    (TypeError("argument must be an int, or have a fileno() method."), "read", "link lost", "TypeError"),
    (AttributeError("'NoneType' object has no attribute 'recv'"), "read", "link lost", "AttributeError"),
    (NotImplementedError(), "read", "unsupported", "can't do this"),
    (UnicodeDecodeError("ascii", b"\xb5", 0, 1, "ordinal not in range(128)"), "read", "garbled", "no text"),
    (MemoryError(), "read", "link lost", "MemoryError"),
    (Exception("\x1b[2J line\nline"), "read", "link lost", "line line"),
]  # fmt: skip


@pytest.mark.parametrize(("error", "doing", "kind", "said"), TABLE)
def test_each_exception(error: Exception, doing: str, kind: str, said: str) -> None:
    with pytest.raises(InstrumentError) as caught, boundary(AT, doing):
        raise error
    assert caught.value.kind == kind
    assert said in caught.value.message
    assert AT in caught.value.message
    assert caught.value.expected or caught.value.next_step or kind in {"garbled", "unsupported"}
    assert caught.value.message.isprintable()
    # A number of VISA's tells a person nothing, and nobody need have a bench file.
    assert "VI_ERROR" not in caught.value.message
    assert "-10738" not in caught.value.message
    assert "bench file" not in caught.value.message


def test_our_own_errors_pass_as_they_are() -> None:
    ours = InstrumentError("garbled", "This")
    with pytest.raises(InstrumentError) as caught, boundary(AT, "read"):
        raise ours
    assert caught.value is ours


def test_an_interrupt_is_no_error_of_the_link() -> None:
    with pytest.raises(KeyboardInterrupt), boundary(AT, "read"):
        raise KeyboardInterrupt


def test_one_manager_for_each_library() -> None:
    assert resource_manager() is resource_manager("@py")


@pytest.mark.parametrize("library", ["/nowhere/libvisa.so", "@nobody", "/nowhere/bench.yaml@sim"])
def test_a_library_that_is_not_there(library: str) -> None:
    with pytest.raises(InstrumentError, match="can't be used") as caught:
        resource_manager(library)
    assert caught.value.kind == "unsupported"
    assert repr(library) in caught.value.message
    assert "--visa" in caught.value.next_step
    assert caught.value.message.isprintable()


def test_an_opening_that_failed_leaves_no_socket_behind() -> None:
    with socket.create_server(("127.0.0.1", 0)) as listener:
        port = listener.getsockname()[1]
    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("always")
        for address in (f"TCPIP::127.0.0.1::hislip0,{port}::INSTR", f"TCPIP::127.0.0.1,{port}::inst0::INSTR"):
            with pytest.raises(InstrumentError), boundary(address, "open"):
                resource_manager().open_resource(address, open_timeout=500)
        gc.collect()
    assert [str(one.message) for one in caught] == []


def test_what_is_said_about_rights_names_the_address() -> None:
    error = translate(PermissionError(13, "Permission denied"), "ASRL/dev/ttyUSB0::INSTR", "open")
    assert "ASRL/dev/ttyUSB0::INSTR" in error.came
    assert "udev" in error.next_step
