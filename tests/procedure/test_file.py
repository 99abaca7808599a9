from __future__ import annotations

import hashlib
from pathlib import Path

import hypothesis.strategies as st
import pytest
from hypothesis import given, settings

from benchkit.errors import FileError
from benchkit.procedure.file import load_procedure, parse_procedure
from benchkit.procedure.file_words import POINT
from benchkit.stage.points import points_of
from tests.procedure.driver import SHIPPED, SMALL
from tests.stage.designs import breadboard, tern


def test_the_shipped_procedure_is_good() -> None:
    procedure = load_procedure(SHIPPED)
    assert procedure.head.name == "First power-on"
    assert procedure.sections[-1].name == "made-safe"
    assert procedure.sha256 == hashlib.sha256(SHIPPED.read_bytes()).hexdigest()
    assert procedure.text == SHIPPED.read_text(encoding="utf-8")
    assert len(procedure.head.cautions) >= 4


MODEL = 'limits = "the model"'
OHMS = f'points = ["ohm.rails"]\n{MODEL}'


def changed(old: str, new: str) -> str:
    assert SMALL.count(old) >= 1
    return SMALL.replace(old, new, 1)


CASES = [
    ("= = =", "", "no valid TOML"),
    (changed("format = 1", "format = 2"), "procedure format", "found 2"),
    (changed('purpose = "One step of every kind."', 'purpose = ""'), "procedure purpose", "found ''"),
    (changed('name = "Small"', 'name = "Small"\nauthor = "me"'), "procedure author", "found 'me'"),
    (changed('kind = "confirm"', 'kind = "ask"'), "section 'look' step 'parts' kind", "found 'ask'"),
    (changed('do = "Is everything as drawn?"', ""), "section 'look' step 'parts'", "needs 'do'"),
    (changed('do = "Is everything as drawn?"', 'do = "d"\nseconds = "3 s"'), "step 'parts'", "belongs to steps"),
    (changed('do = "Is everything as drawn?"', 'do = "{who}"'), "step 'parts'", "{who}"),
    (changed('do = "Is everything as drawn?"', 'do = "{design"'), "step 'parts'", "{design"),
    (changed('name = "parts"', 'name = "All Parts"'), "step 'All Parts' name", "All Parts"),
    (changed('name = "end"', 'name = "least"'), "", "two steps of the section 'cold' are named 'least'"),
    (changed('name = "limit"\ntitle', 'name = "cold"\ntitle'), "", "two sections are named 'cold'"),
    (changed('name = "made-safe"', 'name = "the-end"'), "", "it has to be 'made-safe'"),
    (changed('name = "off"\nkind = "off"', 'name = "off"\nkind = "hold"\ndo = "d"'), "", "begin with a step of"),
    (changed("resume = true\n", ""), "", "resume = true"),
    (changed('points = ["ohm.rails"]', "points = []"), "step 'rails'", "needs 'points'"),
    (changed('points = ["ohm.rails"]', 'points = ["ohm.rial+"]'), "step 'rails'", "'ohm.rial+' is no test point"),
    (changed('points = ["ohm.rails"]', 'points = ["ohm.rails; 1"]'), "step 'rails'", "is no test point"),
    (changed('rule = "offset before load"', 'rule = "offset befor load"'), "step 'offset'", "offset before load"),
    (changed('seconds = "60 s"', 'seconds = "60 V"'), "section bias, step soak, seconds", "60 V"),
    (changed('seconds = "60 s"', 'seconds = "-60 s"'), "section bias, step soak, seconds", "more than 0 s"),
    (changed('seconds = "60 s"', 'seconds = "0 s"'), "section bias, step soak, seconds", "more than 0 s"),
    (changed('share = "100 %"', 'share = "150 %"'), "section bias, step trim, share", "at most 100 %"),
    (changed('share = "100 %"', 'share = "50 %"\ntolerance = "-10 %"'), "step trim, tolerance", "more than 0 %"),
    (changed('rails = "2 V"', 'rails = "-2 V"'), "section limit, step check, rails", "more than 0 V"),
    (changed('rails = "full"', 'rails = "101 %"'), "section power, step full, rails", "at most 100 %"),
    (changed('limit = "50 mA"', 'limit = "50 mV"'), "section limit, step check, limit", "50 mV"),
    (changed('limit = "50 mA"', 'limit = "0 A"'), "section limit, step check, limit", "more than 0 A"),
    (changed('rails = "lowest"', 'rails = "low"'), "section power, step on, rails", "low"),
    (changed(OHMS, f'{OHMS[: -len(MODEL)]}limits = "what I like"'), "step 'rails' limits", "what I like"),
    (changed(OHMS, OHMS[: -len(MODEL)] + 'limits = { least = "1 ohm" }'), "step 'rails' limits", ""),
    (changed('title = "Rail to rail"', 'title = "t"\nsamples = 0'), "step 'rails' samples", "found 0"),
    (changed('title = "Rail to rail"', 'title = "t"\noverride = "yes"'), "step 'rails' override", "found 'yes'"),
    (changed('title = "Rail to rail"', 'title = "t"\noverride = 1'), "step 'rails' override", "boolean"),
    (changed('title = "Rail to rail"', 'title = "t"\nresistor = "1 ohm"'), "step 'rails'", "a rail's drop"),
    (changed("resume = true", 'resume = "true"'), "section 'cold' resume", "found 'true'"),
    (changed("format = 1", "format = 1\nunknown_trimmer = 1"), "procedure unknown_trimmer", "found 1"),
    (changed("format = 1", "format = 1\nunknown_trimmer = {}"), "procedure unknown_trimmer", "found a table"),
    (changed('title = "Bias"', 'title = "B"\noptional = ""'), "section 'bias'", "'optional' is empty"),
    (changed('title = "Made safe"', 'title = "M"\noptional = " "'), "section 'made-safe'", "'optional' is empty"),
    (changed('title = "Made safe"', 'title = "M"\noptional = "M?"'), "made-safe", "can't be left out"),
    (changed('title = "Bias"', 'title = "B"\nonly_if = "no parts replaced"'), "'bias'", "has to ask for that"),
    (changed('seconds = "60 s"', 'seconds = "4.1 h"'), "section bias, step soak, seconds", "4.1 h"),
    (changed('seconds = "60 s"', 'seconds = "14401 s"'), "section bias, step soak, seconds", "at most 14400 s"),
    (changed('seconds = "60 s"', 'seconds = "60 s"\nuntil = {}'), "step 'soak' until", "found a table"),
    (changed('seconds = "60 s"', 'seconds = "60 s"\nuntil = "settled"\ndrift = "21 %/min"'), "drift", "at most 20 %"),
    (changed('share = "100 %"', 'share = "50 %"\ntolerance = "61 %"'), "step trim, tolerance", "at most 60 %"),
    (changed('title = "Rail to rail"\n', ""), "step 'rails' title", "it is missing"),
]


@pytest.mark.parametrize(("text", "key", "words"), CASES)
def test_a_wrong_file_is_named_with_its_key(text: str, key: str, words: str) -> None:
    with pytest.raises(FileError) as caught:
        parse_procedure(text, "mine.toml")
    error = caught.value
    assert str(error).startswith("mine.toml")
    assert key in str(error)
    assert words in str(error)
    assert "\n" not in str(error)
    assert "': " not in str(error).replace(f"{key}: ", ""), "no table is printed"
    assert error.exit_status == 2


def test_what_a_key_holds_is_no_formula() -> None:
    with pytest.raises(FileError):
        parse_procedure(changed('seconds = "60 s"', 'seconds = "30 s * 2"'), "mine.toml")


@pytest.mark.parametrize("design", [tern, breadboard])
def test_every_point_of_a_design_can_be_named(design: object) -> None:
    for point in points_of(design()):  # type: ignore[operator]
        assert POINT.fullmatch(point.name), point.name


def test_a_missing_file(tmp_path: Path) -> None:
    with pytest.raises(FileError, match="can't be read: No such file"):
        load_procedure(tmp_path / "none.toml")
    (tmp_path / "folder.toml").mkdir()
    with pytest.raises(FileError, match="can't be read"):
        load_procedure(tmp_path / "folder.toml")


def test_a_file_that_is_no_text(tmp_path: Path) -> None:
    (tmp_path / "x.toml").write_bytes(b"\xff\xfe\x00")
    with pytest.raises(FileError, match="no UTF-8"):
        load_procedure(tmp_path / "x.toml")


def refusal(text: str) -> str:
    """What is said about a text; "" when it is a good procedure.  Any other error comes out."""
    try:
        parse_procedure(text, "mine.toml")
    except FileError as error:
        return str(error)
    return ""


@given(st.text(max_size=200))
def test_any_text_is_a_procedure_or_a_file_error(text: str) -> None:
    assert refusal(text).startswith("mine.toml")  # no such text is a whole procedure


LINES = SMALL.splitlines()


@settings(deadline=None, max_examples=150)
@given(
    st.integers(0, len(LINES) - 1),
    st.sampled_from(["", 'kind = "trim"', "resume = 3", "points = 3", 'limits = ["a"]', "[procedure]", 'x = "y"',
                     'rails = ""', 'share = "%"', "override = 7", "samples = 1e9"]),
)  # fmt: skip
def test_a_line_gone_wrong_is_good_or_a_file_error(number: int, line: str) -> None:
    text = "\n".join([*LINES[:number], line, *LINES[number + 1 :]])
    assert "\n" not in refusal(text)
