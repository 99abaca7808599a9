"""One line: any JSON there and back, the digest by its written rule, every refusal."""

from __future__ import annotations

import hashlib
import json
import re
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchkit.errors import BenchkitError
from benchkit.journal.line import FIRST_PREV, make_line, parse_line

AT = "2031-04-05T06:07:08.123456Z"

PLAIN: st.SearchStrategy[Any] = st.recursive(
    st.none()
    | st.booleans()
    | st.integers(-(10**30), 10**30)
    | st.floats(allow_nan=False, allow_infinity=False)
    | st.text(),
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(), inner, max_size=4),
    max_leaves=12,
)
PAYLOADS = st.dictionaries(st.text(), PLAIN, max_size=5)


@given(payload=PAYLOADS, name=st.text(), seq=st.integers(1, 10**9))
def test_any_plain_payload_comes_back(payload: dict[str, Any], name: str, seq: int) -> None:
    line = make_line(seq, AT, 1.25, name, payload, prev=FIRST_PREV)
    assert line.raw.count(b"\n") == 1
    again = parse_line(line.raw, seq)
    assert again == line
    assert again.payload == payload


def test_the_digest_follows_the_written_rule() -> None:
    line = make_line(3, AT, 0.5, "noted", {"text": "4.7 Ω"}, prev="a" * 64)
    body = line.raw[:-1]
    assert re.fullmatch(rb',"digest":"[0-9a-f]{64}"}', body[-77:])
    assert hashlib.sha256(body[:-77] + b"}").hexdigest() == line.digest == json.loads(body)["digest"]


def test_half_of_a_surrogate_pair_is_kept() -> None:
    line = make_line(1, AT, 0.0, "noted", {"file": "bad\udcff.toml"}, prev=FIRST_PREV)
    assert parse_line(line.raw, 1).payload == {"file": "bad\udcff.toml"}


@pytest.mark.parametrize(
    ("value", "said"),
    [
        (float("nan"), "payload.x[1]"),
        (float("inf"), "payload.x[1]"),
        (object(), "object"),
        (b"raw", "bytes"),
        ({1: "one"}, "the name 1"),
    ],
)
def test_what_is_not_plain_is_refused(value: object, said: str) -> None:
    with pytest.raises(BenchkitError, match=re.escape(said)):
        make_line(1, AT, 0.0, "noted", {"x": [0, value]}, prev=FIRST_PREV)


@pytest.mark.parametrize("at", ["2031-04-05 06:07:08Z", "2031-04-05T06:07:08", "now", AT + "\n"])
def test_a_time_that_is_not_utc_iso_is_refused(at: str) -> None:
    with pytest.raises(BenchkitError, match="UTC"):
        make_line(1, at, 0.0, "noted", {}, prev=FIRST_PREV)


def _signed(text: str) -> bytes:
    """A line with a right digest over whatever stands in it."""
    head = text.encode()
    return head[:-1] + b',"digest":"' + hashlib.sha256(head).hexdigest().encode() + b'"}\n'


GOOD = f'{{"seq":1,"at":"{AT}","monotonic_s":0.5,"event":"e","payload":{{}},"prev":"{FIRST_PREV}"}}'


@pytest.mark.parametrize(
    ("text", "said"),
    [
        (GOOD.replace('"payload":{}', '"payload":{"a":1,"a":1}'), "stands twice"),
        (GOOD.replace("0.5", "NaN"), "NaN"),
        (GOOD.replace("0.5", "-Infinity"), "-Infinity"),
        (GOOD.replace("0.5", "1e999"), "too large"),
        (GOOD.replace("0.5", "true"), "monotonic_s"),
        (GOOD.replace('"seq":1', '"seq":"1"'), "seq"),
        (GOOD.replace('"seq":1', '"seq":1.0'), "seq"),
        (GOOD.replace('"payload":{}', '"payload":[]'), "payload"),
        (GOOD.replace('"event":"e"', '"event":null'), "event"),
        (GOOD.replace(AT, "yesterday"), "yesterday"),
        (GOOD.replace(FIRST_PREV, "0" * 63), "prev"),
        (GOOD.replace('"event":"e",', ""), "members"),
        (GOOD.replace('"event":"e"', '"event":"e","more":1'), "members"),
        ('{"at":"x","seq":1}', "members"),
        ("[1}", "not JSON"),
        (GOOD.replace('{"seq"', '{{"seq"'), "not JSON"),
        (GOOD.replace('"payload":{}', '"payload":' + "[" * 100_000), "not JSON"),
    ],
)
def test_a_line_with_a_right_digest_is_still_refused_for_its_form(text: str, said: str) -> None:
    with pytest.raises(BenchkitError, match=re.escape(said)) as caught:
        parse_line(_signed(text), 17)
    assert "Line 17" in caught.value.message


def test_the_good_one_of_those_is_taken() -> None:
    assert parse_line(_signed(GOOD), 1).event == "e"


@pytest.mark.parametrize(
    "raw", [b"", b"\n", b"{}\n", GOOD.encode() + b"\n", _signed(GOOD)[:-1], _signed(GOOD)[:-1] + b"\r\n"]
)
def test_no_line_at_all(raw: bytes) -> None:
    with pytest.raises(BenchkitError, match="Line 4"):
        parse_line(raw, 4)


def test_messages_hold_no_control_characters() -> None:
    with pytest.raises(BenchkitError) as caught:
        parse_line(b"\x1b[2J\x07 rubbish \x1b[2J\n", 1)
    assert caught.value.message.isprintable()


@given(data=st.binary(max_size=200))
def test_other_bytes_are_refused_and_never_crash(data: bytes) -> None:
    with pytest.raises(BenchkitError):
        parse_line(data, 1)
