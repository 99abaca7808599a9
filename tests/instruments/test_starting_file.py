"""The starting bench file: what it says, and that it can be read as it stands."""

from __future__ import annotations

import tomllib
from pathlib import Path

import pytest

from benchkit.errors import FileError
from benchkit.instruments.bench import load_bench, parse_bench
from benchkit.instruments.identified import Fit, Identified
from benchkit.instruments.starting_file import (
    Starting,
    check_place,
    starting_text,
    still_to_fill_in,
    write_starting_file,
)

METER = Identified(
    asked="x",
    address="TCPIP::10.0.0.1::5025::SOCKET",
    name="Own,Meter,M-1,1.0",
    fits=(Fit(profile="scpi-meter", kind="meter", answered=("dc volts", "ohms"), unanswered=(("diode", "silence"),)),),
)
SUPPLY = Identified(
    asked="x",
    address="ASRL/dev/ttyUSB0::INSTR",
    name='Own,"Supply",0,1.0',
    fits=(Fit(profile="scpi-supply", kind="supply", answered=("all",)),),
    baud=19200,
)


def test_what_was_answered_is_filled_in_and_the_rest_is_explained() -> None:
    text = starting_text(Starting(name="bench 2", meter=METER), Path())
    table = tomllib.loads(text)
    assert table == {
        "bench": {"format": 1, "name": "bench 2"},
        "meter": {"address": METER.address, "profile": "scpi-meter", "serial": "M-1"},
    }
    assert "# It answered 2 of 3 questions; not diode." in text
    for key in ("calibration_due", "input_resistance", "meter.accuracy", "percent_of_reading", "# [supply]"):
        assert key in text
    assert parse_bench(text, "x").meter is not None


def test_an_accuracy_that_nobody_stated_can_not_be_switched_on_by_mistake() -> None:
    text = starting_text(Starting(name="b", meter=METER), Path())
    begin = text.index("# [[meter.accuracy]]")
    end = text.index("# [[meter.accuracy]]", begin + 1)
    switched_on = text[:begin] + text[begin:end].replace("# ", "") + text[end:]
    with pytest.raises(FileError, match="TOML"):
        parse_bench(switched_on, "x")


def test_a_serial_line_keeps_the_speed_that_worked() -> None:
    table = tomllib.loads(starting_text(Starting(name="b", supply=SUPPLY), Path()))
    assert table["supply"] == {"address": SUPPLY.address, "profile": "scpi-supply", "line": {"baud": 19200}}


def test_another_library_is_named_once() -> None:
    table = tomllib.loads(starting_text(Starting(name="b", meter=METER, library="/opt/lib visa.so"), Path()))
    assert table["bench"]["visa"] == "/opt/lib visa.so"


def test_what_only_papers_know_is_listed() -> None:
    lacking = still_to_fill_in(Starting(name="b", meter=METER, supply=SUPPLY))
    assert any(text.startswith("meter: accuracy") for text in lacking)
    assert any(text.startswith("supply: serial") for text in lacking)
    assert not any(text.startswith("meter: serial") for text in lacking)


def test_a_profile_of_ones_own_is_named_from_the_files_folder(tmp_path: Path) -> None:
    (tmp_path / "mine.toml").write_text('based_on = "scpi-meter"\n')
    fit = Fit(profile=str(tmp_path / "mine.toml"), kind="meter", answered=("dc volts",))
    one = Identified(asked="x", address="TCPIP::10.0.0.1::5025::SOCKET", name="Own,Meter,M-1,1.0", fits=(fit,))
    (tmp_path / "benches").mkdir()
    path = tmp_path / "benches" / "bench.toml"
    write_starting_file(path, Starting(name="b", meter=one))
    assert tomllib.loads(path.read_text())["meter"]["profile"] == "../mine.toml"
    assert load_bench(path).meter is not None


def test_a_place_that_is_taken_is_refused_twice(tmp_path: Path) -> None:
    path = tmp_path / "bench.toml"
    path.write_text("mine")
    with pytest.raises(FileError, match="it is there already"):
        check_place(path, force=False)
    with pytest.raises(FileError, match="it is there already"):
        write_starting_file(path, Starting(name="b", meter=METER))
    assert path.read_text() == "mine"
    write_starting_file(path, Starting(name="b", meter=METER), force=True)
    assert load_bench(path).name == "b"
    assert list(tmp_path.iterdir()) == [path]


def test_a_folder_that_can_not_be_written_to_is_a_sentence(tmp_path: Path) -> None:
    for force in (False, True):
        with pytest.raises(FileError, match="can't be written"):
            write_starting_file(tmp_path / "none" / "bench.toml", Starting(name="b", meter=METER), force=force)


def test_a_name_with_quotes_and_controls_can_not_break_out_of_its_remark() -> None:
    one = Identified(asked="x", address=METER.address, name="Own\n[bench]\nname = 1", fits=METER.fits)
    assert set(tomllib.loads(starting_text(Starting(name='a "b" \\ \n', meter=one), Path()))) == {"bench", "meter"}
