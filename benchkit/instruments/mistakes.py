"""What is wrong with a file that a person wrote: the file, the key, what was found, what was expected.

One mistake is reported at a time.  A key that nobody knows comes before one that is missing, because a slip of the pen
makes both.
"""

from __future__ import annotations

import difflib
import re
import tomllib
from collections.abc import Mapping
from typing import Any, TypeVar, get_args

from pydantic import BaseModel, ValidationError

from benchkit.errors import FileError
from benchkit.quantities import quoted

M = TypeVar("M", bound=BaseModel)

_SHOWN_LENGTH = 60
_WORDS = {
    "string_type": "text in quotes",
    "float_type": "a number without quotes",
    "float_parsing": "a number without quotes",
    "int_type": "a whole number without quotes",
    "int_parsing": "a whole number without quotes",
    "int_from_float": "a whole number",
    "bool_type": "true or false, without quotes",
    "bool_parsing": "true or false, without quotes",
    "finite_number": "a finite number",
    "model_type": "a table",
    "model_attributes_type": "a table",
    "dict_type": "a table",
    "list_type": "a list in square brackets; a list of tables has two, as in [[meter.accuracy]]",
    "tuple_type": "a list in square brackets; a list of tables has two, as in [[meter.accuracy]]",
    "date_type": "a date, such as 2031-05-01",
    "date_parsing": "a date, such as 2031-05-01",
    "date_from_datetime_parsing": "a date, such as 2031-05-01",
    "date_from_datetime_inexact": "a date without a time, such as 2031-05-01",
}


def read_toml(text: str, file: str, expected: str) -> dict[str, Any]:
    """Return the tables of a TOML text.

    Raises
    ------
    FileError
        With line, column and the line itself.
    """
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        place = re.search(r"line ([0-9]+), column ([0-9]+)", str(error))
        lines = text.splitlines()
        found = ""
        if place is not None and int(place[1]) <= len(lines):
            found = f"; the line is {quoted(lines[int(place[1]) - 1].strip())}"
        raise FileError(file, "", f"it is no TOML ({error}){found}", expected, "Correct it") from None
    except RecursionError:
        raise FileError(file, "", "it is no TOML (nested too deeply)", expected, "Correct it") from None


def checked(kind: type[M], table: Mapping[str, Any], file: str, next_step: str = "Correct it") -> M:
    """Return the checked form of a table.

    Raises
    ------
    FileError
        For its first mistake.
    """
    try:
        return kind.model_validate(dict(table))
    except ValidationError as error:
        errors = error.errors()
        unknown = [one for one in errors if one["type"] == "extra_forbidden"]
        first = (unknown or errors)[0]
        raise _mistake(kind, dict(first), file, next_step) from None


def near(word: str, known: tuple[str, ...]) -> str:
    """Return the known word that was probably meant, or nothing."""
    found = difflib.get_close_matches(word.lower(), [one.lower() for one in known], 1, 0.6)
    return next((one for one in known if found and one.lower() == found[0]), "")


def one_of(words: tuple[str, ...], meant: str = "") -> str:
    """Return what was expected: the word that was probably meant, and all there are."""
    all_of_them = "one of " + ", ".join(words)
    return f"{meant!r} perhaps; {all_of_them}" if meant else all_of_them


def _mistake(kind: type[BaseModel], first: dict[str, Any], file: str, next_step: str) -> FileError:
    place = tuple(first["loc"])
    key = ".".join(str(part + 1) if isinstance(part, int) else str(part) for part in place)
    what = first["type"]
    if what == "extra_forbidden":
        known = _keys(kind, place[:-1])
        return FileError(
            file,
            key,
            f"there is no such key; found {_shown(first['input'])}",
            one_of(known, near(str(place[-1]), known)),
        )
    if what == "missing":
        return FileError(file, key, "this key is missing", "it, because nothing can be assumed for it", next_step)
    expected = _WORDS.get(what)
    if expected is None:
        expected = re.sub(r"^(Input|Value|String|List|Tuple) should (be|have) ", "", str(first["msg"]))
    context = first.get("ctx", {})
    given = context.get("found", first["input"])
    if "key" in context:
        key = ".".join(part for part in (key, context["key"]) if part)
    return FileError(file, key, f"found {_shown(given)}", expected, next_step)


def _keys(kind: type[BaseModel], place: tuple[str | int, ...]) -> tuple[str, ...]:
    """Return the keys that a table may have, found by following `place` through the model."""
    for part in place:
        if isinstance(part, int):
            continue
        field = kind.model_fields.get(part)
        inner = None if field is None else _model_in(field.annotation)
        if inner is None:
            return ()
        kind = inner
    return tuple(kind.model_fields)


def _model_in(annotation: Any) -> type[BaseModel] | None:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return annotation
    return next((found for part in get_args(annotation) if (found := _model_in(part)) is not None), None)


def _shown(value: Any) -> str:
    if isinstance(value, dict):
        return "a table"
    if isinstance(value, bool):
        return "true" if value else "false"
    text = repr(value) if not hasattr(value, "isoformat") else value.isoformat()
    return text if len(text) <= _SHOWN_LENGTH else text[:_SHOWN_LENGTH] + "..."
