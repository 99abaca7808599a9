"""The pipe's language: errors come out as they went in; the first answer waits for no library."""

from __future__ import annotations

import subprocess
import sys

import pytest
from hypothesis import given
from hypothesis import strategies as st

from benchkit import errors
from benchkit.errors import BenchkitError
from benchkit.keeper.protocol import decode, encode, error_from_wire, error_to_wire

ERRORS = [
    errors.EntryError("came", "expected", "next"),
    errors.FileError("a.toml", "meter.address", "found 3", "a text"),
    errors.RecordError("r.jsonl", "", "torn"),
    errors.InstrumentError("timeout", "nothing came", partial=b"\x00\xff1.2"),
    errors.ModelError("no answer"),
    errors.IllegalEvent("no"),
    errors.BenchkitError("base"),
]


@pytest.mark.parametrize("error", ERRORS, ids=lambda error: type(error).__name__)
def test_errors_cross_as_what_they_are(error: BenchkitError) -> None:
    again = error_from_wire(decode(encode(error_to_wire(error))))
    assert type(again) is type(error)
    assert vars(again) == vars(error)
    assert str(again) == str(error)


def test_a_mistake_of_our_own_crosses_in_words() -> None:
    again = error_from_wire(error_to_wire(ZeroDivisionError("by zero")))
    assert type(again) is BenchkitError
    assert "ZeroDivisionError: by zero" in str(again)


def test_an_unknown_kind_is_still_an_error() -> None:
    wire = error_to_wire(errors.EntryError("came"))
    for kind in ("NoSuchError", "annotations", "ClassVar"):
        assert type(error_from_wire({**wire, "kind": kind})) is BenchkitError


@given(text=st.text(), number=st.floats(allow_nan=False, allow_infinity=False))
def test_a_message_is_one_line_of_ascii(text: str, number: float) -> None:
    line = encode({"text": text, "number": number})
    assert line.endswith(b"\n")
    assert line.count(b"\n") == 1
    assert line.isascii()
    assert decode(line) == {"text": text, "number": number}


@pytest.mark.parametrize("number", [float("nan"), float("inf")])
def test_numbers_that_are_none_never_cross(number: float) -> None:
    with pytest.raises(ValueError, match="JSON"):
        encode({"x": number})


def test_hello_needs_no_heavy_import() -> None:
    """The first answer comes before PyVISA, numpy or pydantic are looked at, or the screen's first frame would wait."""
    code = (
        "import sys; import benchkit.keeper.process; "
        "print(sorted({'pyvisa', 'numpy', 'pydantic', 'serial', 'quantiphy'} & set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"
