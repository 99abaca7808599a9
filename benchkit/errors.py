"""What can go wrong, sorted by who must act.

Every message says three things, in this order: what came, what was expected, and what to do next.
Each kind knows the exit status that a command ends with when it reaches the top.
"""

from __future__ import annotations

from typing import ClassVar


class BenchkitError(Exception):
    """Base of every error that benchkit raises on purpose.

    Parameters
    ----------
    came : str
        What was found or what happened, quoting the offending text.
    expected : str
        What would have been right; may be empty.
    next_step : str
        What the person in front of the screen does now; may be empty.
    """

    exit_status: ClassVar[int] = 5

    def __init__(self, came: str, expected: str = "", next_step: str = "") -> None:
        self.came = came
        self.expected = expected
        self.next_step = next_step
        super().__init__(self.message)

    @property
    def message(self) -> str:
        """The whole message as one line of sentences."""
        parts = [_sentence(self.came)]
        if self.expected:
            parts.append(_sentence(f"Expected {self.expected}"))
        if self.next_step:
            parts.append(_sentence(self.next_step))
        return " ".join(parts)

    def __str__(self) -> str:
        return self.message

    def __reduce__(self) -> tuple[object, ...]:
        return (_rebuild, (type(self), dict(self.__dict__)))


class EntryError(BenchkitError):
    """The operator typed something that can't be used (exit status 2)."""

    exit_status: ClassVar[int] = 2


class FileError(BenchkitError):
    """A file can't be used: missing, unreadable, or wrong at a key (exit status 2).

    Parameters
    ----------
    file, key : str
        The file's name as the user gave it, and the dotted key inside it (may be empty).
    """

    exit_status: ClassVar[int] = 2

    def __init__(self, file: str, key: str, came: str, expected: str = "", next_step: str = "") -> None:
        self.file = file
        self.key = key
        where = f"{file}, {key}" if key else file
        super().__init__(f"{where}: {came}", expected, next_step)


class TakenError(FileError):
    """A new file can't have this name, because there is one already; nothing was overwritten (exit status 2)."""


class InstrumentError(BenchkitError):
    """An instrument did not do its part (exit status 3).

    Parameters
    ----------
    kind : str
        One of ``timeout``, ``link lost``, ``garbled``, ``bad address``, ``unsupported``, ``refused``.
    partial : bytes
        What had arrived before it went wrong.
    """

    exit_status: ClassVar[int] = 3
    KINDS: ClassVar[tuple[str, ...]] = ("timeout", "link lost", "garbled", "bad address", "unsupported", "refused")

    def __init__(self, kind: str, came: str, expected: str = "", next_step: str = "", *, partial: bytes = b"") -> None:
        if kind not in self.KINDS:
            raise ValueError(f"{kind!r} is no kind of instrument error")
        self.kind = kind
        self.partial = partial
        super().__init__(came, expected, next_step)


class ModelError(BenchkitError):
    """The circuit model has no trustworthy answer for what was asked (exit status 2)."""

    exit_status: ClassVar[int] = 2


class RecordError(FileError):
    """A record is torn, broken or not a record (exit status 2)."""


class IllegalEvent(BenchkitError):  # noqa: N818 (named for what it is)
    """An event came that the present state of a walk doesn't take; nothing has changed."""


def _sentence(text: str) -> str:
    text = text.strip()
    return text if text.endswith((".", "!", "?")) else text + "."


def _rebuild(kind: type[BenchkitError], attributes: dict[str, object]) -> BenchkitError:
    error = kind.__new__(kind)
    error.__dict__.update(attributes)
    Exception.__init__(error, error.message)
    return error
