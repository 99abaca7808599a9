from __future__ import annotations

import inspect
import pickle

import pytest

from benchkit import errors
from benchkit.errors import (
    BenchkitError,
    EntryError,
    FileError,
    IllegalEvent,
    InstrumentError,
    ModelError,
    RecordError,
    TakenError,
)

ALL = [
    BenchkitError("came", "expected", "next"),
    EntryError("came", "expected", "next"),
    FileError("a.toml", "rails.positive", "came", "expected", "next"),
    InstrumentError("timeout", "came", "expected", "next", partial=b"+1.2"),
    ModelError("came", "expected", "next"),
    RecordError("a.jsonl", "line 3", "came", "expected", "next"),
    TakenError("a.jsonl", "", "came", "expected", "next"),
    IllegalEvent("came", "expected", "next"),
]


def test_the_list_above_is_whole() -> None:
    kinds = {kind for kind in vars(errors).values() if inspect.isclass(kind) and issubclass(kind, BenchkitError)}
    assert kinds == {type(error) for error in ALL}


@pytest.mark.parametrize("error", ALL, ids=lambda error: type(error).__name__)
def test_a_message_says_what_came_what_was_expected_and_what_next(error: BenchkitError) -> None:
    assert str(error) == error.message
    assert str(error).endswith("came. Expected expected. next.")


@pytest.mark.parametrize("error", ALL, ids=lambda error: type(error).__name__)
def test_an_error_survives_a_pickle(error: BenchkitError) -> None:
    copy = pickle.loads(pickle.dumps(error))
    assert type(copy) is type(error)
    assert str(copy) == str(error)
    assert vars(copy) == vars(error)


@pytest.mark.parametrize(
    ("parts", "text"),
    [
        (("came",), "came."),
        (("came!", "", ""), "came!"),
        (("Is it on?", "yes"), "Is it on? Expected yes."),
        (("  came  ", "", " look "), "came. look."),
        (("came", "", "next."), "came. next."),
    ],
)
def test_parts_that_are_empty_leave_no_trace(parts: tuple[str, ...], text: str) -> None:
    assert str(BenchkitError(*parts)) == text


def test_a_file_error_names_file_and_key() -> None:
    assert str(FileError("a.toml", "rails.positive", "found '0 V'")) == "a.toml, rails.positive: found '0 V'."
    assert str(FileError("a.toml", "", "is empty")) == "a.toml: is empty."


@pytest.mark.parametrize(
    ("kind", "status"),
    [(BenchkitError, 5), (EntryError, 2), (FileError, 2), (InstrumentError, 3), (ModelError, 2), (RecordError, 2),
     (IllegalEvent, 5)],
)  # fmt: skip
def test_exit_statuses(kind: type[BenchkitError], status: int) -> None:
    assert kind.exit_status == status


@pytest.mark.parametrize("kind", InstrumentError.KINDS)
def test_kinds_of_instrument_trouble(kind: str) -> None:
    error = InstrumentError(kind, "came", partial=b"12")
    assert (error.kind, error.partial) == (kind, b"12")


def test_no_other_kind() -> None:
    with pytest.raises(ValueError, match="'sulking'"):
        InstrumentError("sulking", "came")
