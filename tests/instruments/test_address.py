"""Addresses: each kind is recognised, mistakes are refused with what was expected."""

from __future__ import annotations

from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchkit.errors import InstrumentError
from benchkit.instruments.address import Address, parse_address, plain_address


@pytest.mark.parametrize(
    ("text", "kind", "host", "port", "device"),
    [
        ("TCPIP::127.0.0.1::5025::SOCKET", "socket", "127.0.0.1", 5025, ""),
        (" tcpip0::meter.local::1::socket ", "socket", "meter.local", 1, ""),
        ("TCPIP2::h::65535::SOCKET", "socket", "h", 65535, ""),
        ("TCPIP::10.0.0.1::INSTR", "vxi-11", "10.0.0.1", None, ""),
        ("TCPIP::10.0.0.1::inst0::INSTR", "vxi-11", "10.0.0.1", None, "inst0"),
        ("TCPIP::10.0.0.1,1024::inst0::INSTR", "vxi-11", "10.0.0.1", 1024, "inst0"),
        ("TCPIP::10.0.0.1::gpib0,5::INSTR", "vxi-11", "10.0.0.1", None, "gpib0,5"),
        ("TCPIP::10.0.0.1::hislip0::INSTR", "hislip", "10.0.0.1", None, "hislip0"),
        ("TCPIP::10.0.0.1::HiSLIP0,4881::INSTR", "hislip", "10.0.0.1", 4881, "HiSLIP0"),
        ("ASRL/dev/ttyUSB0::INSTR", "serial", "", None, "/dev/ttyUSB0"),
        ("ASRLCOM3::INSTR", "serial", "", None, "COM3"),
        ("asrl3::instr", "serial", "", None, "3"),
        ("USB0::0x1234::0x5678::S1::INSTR", "usb", "", None, ""),
        ("USB::4660::22136::SN 7/1::0::INSTR", "usb", "", None, ""),
    ],
)
def test_each_kind(text: str, kind: str, host: str, port: int | None, device: str) -> None:
    address = parse_address(text)
    assert (address.kind, address.host, address.port, address.device) == (kind, host, port, device)
    assert address.text == text.strip()


@pytest.mark.parametrize(
    ("text", "kind", "said"),
    [
        ("TCPIP::h::0::SOCKET", "bad address", "port 0"),
        ("TCPIP::h::65536::SOCKET", "bad address", "65535"),
        ("TCPIP::h::hislip0,70000::INSTR", "bad address", "port 70000"),
        ("TCPIP::h,0::inst0::INSTR", "bad address", "port 0"),
        ("TCPIP::::5025::SOCKET", "bad address", "SOCKET"),
        ("TCPIP::fe80::1::5025::SOCKET", "bad address", "IPv6"),
        ("TCPIP::[::1]::5025::SOCKET", "bad address", "IPv6"),
        ("192.168.1.20:5025", "bad address", "an address like"),
        ("", "bad address", "an address like"),
        ("TCPIP::a b::5025::SOCKET", "bad address", "an address like"),
        ("ASRL::INSTR", "bad address", "ASRL/dev/ttyUSB0"),
        ("GPIB0::22::INSTR", "unsupported", "--visa"),
        ("USB0::0x1234::0x5678::S1::RAW", "unsupported", "--visa"),
        ("PXI0::3-18::INSTR", "unsupported", "--visa"),
    ],
)
def test_others_say_what_is_wrong(text: str, kind: str, said: str) -> None:
    with pytest.raises(InstrumentError) as caught:
        parse_address(text)
    assert caught.value.kind == kind
    assert repr(text) in caught.value.message
    assert said in caught.value.message


@pytest.mark.parametrize("text", ["GPIB0::22::INSTR", "PXI0::3-18::INSTR", "my meter", "TCPIP::fe80::1::5025::SOCKET"])
def test_another_librarys_addresses_are_taken_as_they_are(text: str) -> None:
    assert parse_address(text, "bench.yaml@sim") == Address(text, "other")


def test_no_library_takes_an_empty_address() -> None:
    with pytest.raises(InstrumentError):
        parse_address("  ", "@ivi")


@given(text=st.text(max_size=40), library=st.sampled_from(["@py", "@ivi"]))
def test_any_text_is_an_address_or_refused(text: str, library: str) -> None:
    said = ""
    port: int | None = 1
    try:
        port = parse_address(text, library).port
    except InstrumentError as error:
        said = error.message
    assert said.isprintable()
    assert port is None or 1 <= port <= 65535


def test_spellings_of_one_address(tmp_path: Path) -> None:
    assert plain_address("tcpip0::Meter::5025::socket ") == plain_address("TCPIP::meter::5025::SOCKET")
    (tmp_path / "tty").touch()
    (tmp_path / "by-id").symlink_to(tmp_path / "tty")
    assert plain_address(f"ASRL{tmp_path}/by-id::INSTR") == plain_address(f"asrl{tmp_path}/tty::INSTR")


@pytest.mark.parametrize(
    "spellings",
    [
        ("TCPIP::h::7500::SOCKET", "tcpip0::H::07500::socket", "TCPIP3::h::7500::SOCKET"),
        ("TCPIP::h::INSTR", "TCPIP::h", "TCPIP0::h::inst0::INSTR", "TCPIP::h::INST0", "tcpip::h::inst0::instr"),
        ("TCPIP::h,1024::INSTR", "TCPIP::h,01024::inst0::INSTR", "TCPIP::h,1024"),
        ("TCPIP::h::hislip0::INSTR", "TCPIP::h::HiSLIP0,4880::INSTR", "TCPIP::h::hislip0"),
        ("ASRL/dev/ttyNone::INSTR", "asrl/dev/../dev/ttyNone", "ASRL/dev//ttyNone::instr"),
        ("ASRL3::INSTR", "ASRLCOM3", "asrlcom03::INSTR", "ASRL3"),
        ("USB::0x1234::0x5678::S1::INSTR", "usb0::4660::0X5678::S1::0::INSTR", "USB0::0x1234::22136::s1"),
        ("GPIB::5::INSTR", "gpib0::05::INSTR", "GPIB0::5"),
    ],
)
def test_each_spelling_is_one_address(spellings: tuple[str, ...]) -> None:
    assert {plain_address(spelling) for spelling in spellings} == {plain_address(spellings[0])}


def test_different_addresses_stay_different() -> None:
    different = (
        "TCPIP::h::7500::SOCKET", "TCPIP::h::7501::SOCKET", "TCPIP::g::7500::SOCKET", "TCPIP::h::INSTR",
        "TCPIP::h::inst1::INSTR", "TCPIP::h::gpib0,5::INSTR", "TCPIP::h,1024::INSTR", "TCPIP::h::hislip0::INSTR",
        "TCPIP::h::hislip0,4881::INSTR", "TCPIP::h::hislip1::INSTR", "ASRL3::INSTR", "ASRL4::INSTR",
        "ASRL/dev/ttyNone3::INSTR", "USB::0x1234::0x5678::S1::INSTR", "USB::0x1234::0x5678::S1::1::INSTR",
        "USB::0x1234::0x5678::S01::INSTR", "GPIB0::5::INSTR", "GPIB1::5::INSTR", "GPIB0::50::INSTR",
    )  # fmt: skip
    assert len({plain_address(text) for text in different}) == len(different)


def test_the_host_is_named_by_its_number() -> None:
    numbers = {"bench": "192.0.2.7"}
    for form in ("TCPIP::{}::7500::SOCKET", "TCPIP::{},1024::INSTR", "TCPIP::{}::hislip0::INSTR"):
        named = plain_address(form.format("bench"), lambda host: numbers.get(host, host))
        assert named == plain_address(form.format("192.0.2.7"))


@given(text=st.text(max_size=40))
def test_any_text_has_a_plain_form(text: str) -> None:
    assert plain_address(text) == plain_address(f" {text} ")
