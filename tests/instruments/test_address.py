"""Addresses: sockets are taken, other kinds recognised, mistakes refused."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchkit.errors import InstrumentError
from benchkit.instruments.address import parse_address


@pytest.mark.parametrize(
    ("text", "host", "port"),
    [
        ("TCPIP::127.0.0.1::5025::SOCKET", "127.0.0.1", 5025),
        (" tcpip0::meter.local::1::socket ", "meter.local", 1),
        ("TCPIP2::h::65535::SOCKET", "h", 65535),
    ],
)
def test_sockets(text: str, host: str, port: int) -> None:
    address = parse_address(text)
    assert (address.host, address.port, address.text) == (host, port, text.strip())


@pytest.mark.parametrize(
    ("text", "kind"),
    [
        ("TCPIP::h::0::SOCKET", "bad address"),
        ("TCPIP::h::65536::SOCKET", "bad address"),
        ("TCPIP::::5025::SOCKET", "unsupported"),
        ("192.168.1.20:5025", "bad address"),
        ("", "bad address"),
        ("TCPIP::a b::5025::SOCKET", "bad address"),
        ("TCPIP::10.0.0.1::inst0::INSTR", "unsupported"),
        ("ASRL/dev/ttyUSB0::INSTR", "unsupported"),
        ("USB0::0x1234::0x5678::S1::INSTR", "unsupported"),
        ("GPIB0::22::INSTR", "unsupported"),
    ],
)
def test_others_say_what_is_wrong(text: str, kind: str) -> None:
    with pytest.raises(InstrumentError) as caught:
        parse_address(text)
    assert caught.value.kind == kind
    assert repr(text) in caught.value.message


@given(text=st.text(max_size=40))
def test_any_text_is_an_address_or_refused(text: str) -> None:
    try:
        port = parse_address(text).port
    except InstrumentError:
        port = 1
    assert 1 <= port <= 65535
