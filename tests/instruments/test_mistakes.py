"""Mistakes in bench files and profiles: each is one error with file, key, what was found and what was expected."""

from __future__ import annotations

import datetime
from collections.abc import Iterator
from pathlib import Path

import pytest

from benchkit.errors import FileError
from benchkit.instruments import profile
from benchkit.instruments.bench import load_bench, parse_bench
from benchkit.instruments.dialect import SupplyTalk
from benchkit.instruments.profile import meter_profile, profile_table, supply_profile

BENCH = """
[bench]
format = 1
name = "bench 2"
mains = "50 Hz"

[meter]
address = "ASRL/dev/ttyUSB0::INSTR"
profile = "serial-meter"
serial = "M123"
input_resistance = "10 Mohm"
calibration_due = 2031-05-01

[meter.line]
baud = 19200
parity = "even"

[[meter.accuracy]]
function = "dc volts"
range = "1 V"
percent_of_reading = 0.01
counts = 2
resolution = "1 mV"

[supply]
address = "TCPIP::192.168.1.21::5025::SOCKET"
profile = "mine.toml"
"""

METER = """
format = 1
kind = "meter"
function_question = "FUN?"
[link]
read_termination = "\\r"
timeout_s = 2
[numbers]
overload_from = 1e9
overload_words = ["OL"]
reply = "{any},{value}"
[numbers.units]
mV = "1 mV"
[timing]
mains_hz = 50
autozero = true
[timing.cycles]
"ac volts" = 1
[functions]
"dc volts" = ["FUN DCV", "VAL?"]
[ranged]
"dc volts" = ["FUN DCV", "RNG {range}", "VAL?"]
[function_answers]
"dc volts" = "DCV"
"""

SUPPLY_WHOLE = (Path(profile.__file__).parent / "profiles" / "select-supply.toml").read_text("utf-8")

SUPPLY = """
based_on = "scpi-supply"
volts_tolerance_v = 0.05
in_limit_bits = 3
[outputs]
positive = "1"
negative = "2"
[questions]
amps = "MEAS:CURR? (@1,2)"
"""


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    (tmp_path / "mine.toml").write_text(SUPPLY, encoding="utf-8")
    return tmp_path


def refused(folder: Path, text: str) -> FileError:
    path = folder / "bench.toml"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(FileError) as caught:
        load_bench(path)
    return caught.value


def test_the_files_are_right_before_they_are_spoilt(folder: Path) -> None:
    (folder / "meter.toml").write_text(METER, encoding="utf-8")
    bench = parse_bench(BENCH.replace("serial-meter", "meter.toml"), str(folder / "bench.toml"))
    assert bench.meter is not None
    assert bench.meter.calibration_due == datetime.date(2031, 5, 1)
    assert bench.setup["meter"]["profile"]["link"]["line"] == {"baud": 19200, "parity": "even"}


@pytest.mark.parametrize(
    ("old", "new", "key", "found", "expected"),
    [
        ("format = 1", "format = 2", "bench.format", "2", "1"),
        ("format = 1", 'format = "1"', "bench.format", "'1'", "a whole number without quotes"),
        ("format = 1", "format = true", "bench.format", "true", "a whole number"),
        ("format = 1\n", "", "bench.format", "missing", ""),
        ('name = "bench 2"', "", "bench.name", "missing", ""),
        ('name = "bench 2"', 'name = ""', "bench.name", "''", "at least 1 character"),
        ('name = "bench 2"', "name = 2", "bench.name", "2", "text in quotes"),
        ('name = "bench 2"', 'nmae = "bench 2"', "bench.nmae", "no such key", "'name' perhaps"),
        ('mains = "50 Hz"', "mains = 50", "bench.mains", "50", "50 Hz"),
        ('mains = "50 Hz"', 'mains = "50 V"', "bench.mains", "'50 V'", "a frequency"),
        ('mains = "50 Hz"', 'mains = "5 kHz"', "bench.mains", "'5 kHz'", "40 to 440 Hz"),
        ("[bench]", "[bnech]", "bnech", "no such key", "'bench' perhaps"),
        ("[supply]", "[suply]", "suply", "no such key", "'supply' perhaps"),
        ("[bench]", "[bench", "", "no TOML", "a bench file"),
        ('name = "bench 2"', 'name = bench 2', "", "line 4, column 8", "a bench file"),
        ('name = "bench 2"', 'name = "a"\nname = "b"', "", "Cannot overwrite", "a bench file"),
        ('serial = "M123"', "serial = 123", "meter.serial", "123", "text in quotes"),
        ('serial = "M123"', 'sreial = "M123"', "meter.sreial", "no such key", "'serial' perhaps"),
        ('"ASRL/dev/ttyUSB0::INSTR"', '"192.168.1.20"', "meter.address", "'192.168.1.20'", "an address like"),
        ('"ASRL/dev/ttyUSB0::INSTR"', '"GPIB0::22::INSTR"', "meter.address", "GPIB0", "--visa"),
        ('"ASRL/dev/ttyUSB0::INSTR"', '"TCPIP::h::70000::SOCKET"', "meter.address", "70000", "1 to 65535"),
        ('"ASRL/dev/ttyUSB0::INSTR"', '"TCPIP::h::5::SOCKET"', "meter.line", "no serial port", "ASRL"),
        ('address = "ASRL/dev/ttyUSB0::INSTR"\n', "", "meter.address", "missing", ""),
        ('"10 Mohm"', '"1 V"', "meter.input_resistance", "'1 V'", "a resistance"),
        ('"10 Mohm"', '"0 ohm"', "meter.input_resistance", "'0 ohm'", "10 Mohm"),
        ('"10 Mohm"', "1e7", "meter.input_resistance", "10000000.0", "10 Mohm"),
        ('"10 Mohm"', '"10 mohm"', "meter.input_resistance", "'10 mohm'", "1000 to"),
        ("2031-05-01", '"soon"', "meter.calibration_due", "'soon'", "a date, such as"),
        ("2031-05-01", "20310501", "meter.calibration_due", "20310501", "a date, such as"),
        ("2031-05-01", "2031-05-01T10:00:00", "meter.calibration_due", "2031-05-01T10", "a date, such as"),
        ("2031-05-01", "2031-13-01", "", "line 12", "a bench file"),
        ("baud = 19200", 'baud = "19200"', "meter.line.baud", "'19200'", "a whole number without quotes"),
        ("baud = 19200", "baud = 5", "meter.line.baud", "5", "greater than or equal to 50"),
        ("baud = 19200", "braud = 19200", "meter.line.braud", "no such key", "'baud' perhaps"),
        ('parity = "even"', 'parity = "evn"', "meter.line.parity", "'evn'", "'even'"),
        ('"dc volts"', '"dc bolts"', "meter.accuracy", "dc bolts", "dc volts"),
        ('range = "1 V"', 'range = "1 A"', "meter.accuracy", "1 A", "a voltage"),
        ('resolution = "1 mV"', "", "meter.accuracy", "counts but no resolution", "one step"),
        ("percent_of_reading = 0.01", "percent_of_reeding = 0.01", "meter.accuracy", "reeding", "ing' perhaps"),
        ("percent_of_reading = 0.01", "percent_of_reading = -1", "meter.accuracy", "negative", "not negative"),
        ("[[meter.accuracy]]", "[meter.accuracy]", "meter.accuracy", "a table", "list"),
        ('"serial-meter"', '"scpi-supply"', "the profile scpi-supply, kind", "of a supply", "that of a meter"),
        ('"serial-meter"', '"sreial-meter"', "meter.profile", "'sreial-meter'", "'serial-meter' perhaps"),
        ('"serial-meter"', '"none.toml"', "meter.profile", "'none.toml'", "or a file"),
        ("ASRL/dev/ttyUSB0::INSTR", "TCPIP::192.168.1.21::5025::SOCKET", "meter.line", "no serial port", ""),
    ],
)  # fmt: skip
def test_bench_files(folder: Path, old: str, new: str, key: str, found: str, expected: str) -> None:
    assert old in BENCH
    error = refused(folder, BENCH.replace(old, new, 1))
    assert error.key == key or key in error.message
    assert found in error.came
    assert expected in error.message
    assert "bench.toml" in error.file or "profile" in error.file or folder.name in error.file


@pytest.mark.parametrize(
    ("old", "new", "key", "found", "expected"),
    [
        ('kind = "meter"', 'kind = "mete"', "kind", "'mete'", "'meter'"),
        ('kind = "meter"\n', "", "kind", "missing", ""),
        ("timeout_s = 2", "timeout_s = -1", "link.timeout_s", "-1", "greater than or equal to 0"),
        ("timeout_s = 2", 'timeout_s = "2 s"', "link.timeout_s", "'2 s'", "a number without quotes"),
        ("timeout_s = 2", "timeout_s = inf", "link.timeout_s", "inf", "finite"),
        ("timeout_s = 2", "timeout = 2", "link.timeout", "no such key", "'timeout_s' perhaps"),
        ('read_termination = "\\r"', 'read_termination = "ab"', "link.read_termination", "'ab'", "one character"),
        ('read_termination = "\\r"', 'read_termination = ""', "link.read_termination", "''", "ends_by_idle_s"),
        ('read_termination = "\\r"', 'read_termination = ""\nends_by_idle_s = 0.1', "numbers.unit_needed", "", "half"),
        ('read_termination = "\\r"', 'sync = "*ESE 3"', "link.sync", "'*ESE 3'", "{n}"),
        ('read_termination = "\\r"', 'prepare = ["A\\nB"]', "link.prepare", "'A\\nB'", "printable ASCII"),
        ("overload_from = 1e9", "overload_from = 0", "numbers.overload_from", "0", "greater than 0"),
        ('overload_words = ["OL"]', 'overload_words = "OL"', "numbers.overload_words", "'OL'", "a list"),
        ('overload_words = ["OL"]', "overload_words = [1]", "numbers.overload_words.1", "1", "text in quotes"),
        ('reply = "{any},{value}"', 'reply = "{any}"', "numbers.reply", "'{any}'", "{value} once"),
        ('reply = "{any},{value}"', 'reply = "{nr},{value}"', "numbers.reply", "{nr}", "no other braces"),
        ('mV = "1 mV"', 'mV = "1 millivolt"', "numbers.units", "'1 millivolt'", "a quantity"),
        ('mV = "1 mV"', "mV = 0.001", "numbers.units", "'mV'", "their worth"),
        ('mV = "1 mV"', '"3V" = "1 V"', "numbers.units", "'3V'", "units as they come"),
        ("mains_hz = 50", "mains_hz = 0", "timing.mains_hz", "0", "greater than or equal to 40"),
        ("autozero = true", 'autozero = "yes"', "timing.autozero", "'yes'", "true or false"),
        ("autozero = true", "autozero = 1", "timing.autozero", "1", "true or false"),
        ('"ac volts" = 1', '"ac bolts" = 1', "timing.cycles.ac bolts", "'ac bolts'", "'ac volts' perhaps"),
        ('"dc volts" = ["FUN DCV", "VAL?"]', '"dc volt" = "VAL?"', "functions.dc volt", "'dc volt'", "dc volts'"),
        ('"dc volts" = ["FUN DCV", "VAL?"]', '"dc volts" = []', "functions.dc volts", "''", "can't be left empty"),
        ('"dc volts" = ["FUN DCV", "VAL?"]', '"dc volts" = 5', "functions.dc volts", "5", "a message"),
        ('"dc volts" = ["FUN DCV", "VAL?"]', '"dc volts" = "V? {range}"', "functions.dc volts", "{range}", "[ranged]"),
        ('"RNG {range}"', '"RNG 1"', "ranged.dc volts", "'VAL?'", "{range} in it"),
        ('"dc volts" = "DCV"', "", "function_answers.dc volts", "nothing", "function_question"),
        ("format = 1", "format = 3", "format", "3", "1"),
    ],
)  # fmt: skip
def test_profiles_of_meters(folder: Path, old: str, new: str, key: str, found: str, expected: str) -> None:
    assert old in METER
    (folder / "meter.toml").write_text(METER.replace(old, new, 1), encoding="utf-8")
    error = refused(folder, BENCH.replace("serial-meter", "meter.toml"))
    assert error.key == key
    assert "meter.toml" in error.file
    assert found in error.came
    assert expected in error.message


@pytest.mark.parametrize(
    ("added", "key", "found", "expected"),
    [
        ("[commands]\nlimit = 'CURR 1'", "commands.limit", "'CURR 1'", "{value} in it"),
        ("[commands]\npositive_volts = 'VOLT 1'", "commands.positive_volts", "'VOLT 1'", "{value} in it"),
        ("[commands]\npositive_volts = ''", "commands.positive_volts", "nothing", "a message"),
        ("[commands]\nvolts = 'V{output} {value}'", "commands.volts", "V{output}", "either volts, or"),
        ("[commands]\nover_current_off = ''", "commands.over_current_off", "nothing", "both or none"),
        ("[commands]\non = ''", "commands.on", "''", "can't be left empty"),
        ("[commands]\noff = 'OUTP?'", "commands.off", "'OUTP?'", "a command"),
        ("[commands]\non = 'OUTP {channel}'", "commands.on", "{channel}", "no other braces"),
        ("[commands]\noof = 'OUTP 0'", "commands.oof", "no such key", "'off' perhaps"),
        ("[questions]\nover_voltage = ''", "questions.over_voltage", "nothing", "read back"),
        ("[questions]\noutput = ''\namps = ''", "questions.output", "nothing", "whether an output is on"),
        ("[questions]\noutput = ['A 1', 'B?']", "questions.output", "a list", "joined"),
        ("[questions]\nbetween = ', '", "questions.between", "', '", "at most 1 character"),
        ("[questions]\njoined = false\nshared = ['outptu']", "questions.shared", "'outptu'", "'output' perhaps"),
        ("[questions]\nvolts = 'V? {value}'", "questions.volts", "{value}", "no other braces"),
        ("[answers]\non = ['1']\noff = ['1']", "answers.off", "'1'", "no word that on holds"),
        ("[answers]\nin_limit = ['CC']", "answers.not_in_limit", "nothing", "both"),
        ("in_limit_bits = -1", "in_limit_bits", "-1", "greater than or equal to 0"),
        ("in_limit_bits = 0", "in_limit_bits", "0", "the bits that say so"),
        ("off_current_a = 0", "off_current_a", "0", "greater than 0"),
        ("decimals = 2.5", "decimals", "2.5", "a whole number"),
        ("forms = { amp = '{value}' }", "forms.amp", "'{value}'", "'amps' perhaps"),
        ("outputs = { positive = '1', negative = '1' }", "outputs.negative", "'1'", "another output"),
        ("based_on = 'scpi-suply'", "based_on", "'scpi-suply'", "'scpi-supply' perhaps"),
        ("based_on = 3", "based_on", "3", "scpi-supply"),
        ("based_on = 'scpi-meter'", "kind", "of a meter", "that of a supply"),
    ],
)  # fmt: skip
def test_profiles_of_supplies(folder: Path, added: str, key: str, found: str, expected: str) -> None:
    base = "" if added.startswith("based_on") else 'based_on = "scpi-supply"\n'
    (folder / "mine.toml").write_text(base + added, encoding="utf-8")
    error = refused(folder, BENCH)
    assert error.key == key
    assert "mine.toml" in error.file
    assert found in error.came
    assert expected in error.message


def test_one_address_for_two_instruments(folder: Path) -> None:
    text = BENCH.replace("ASRL/dev/ttyUSB0::INSTR", "TCPIP::192.168.1.21::5025::SOCKET")
    text = text.replace('[meter.line]\nbaud = 19200\nparity = "even"\n', "")
    assert "the meter's too" in refused(folder, text).came


@pytest.mark.parametrize("text", ["\ufeff" + BENCH, BENCH.replace("\n", "\r\n")])
def test_what_editors_leave_behind_is_no_mistake(folder: Path, text: str) -> None:
    path = folder / "bench.toml"
    path.write_bytes(text.encode("utf-8"))
    assert load_bench(path).name == "bench 2"


def test_bytes_that_are_no_text(folder: Path) -> None:
    (folder / "bench.toml").write_bytes(BENCH.replace("bench 2", "b\xe4nk").encode("latin-1"))
    with pytest.raises(FileError, match="no UTF-8 text"):
        load_bench(folder / "bench.toml")


LITERALS = (
    '""', '"x"', '"1"', '"-1"', "0", "-1", "1.5", "1e999", "nan", "-inf", "true", "false", "[]", "[1]", '[""]',
    '["a", "b"]', "[[]]", "{}", "{ a = 1 }", '{ "dc volts" = "V?" }', "2031-05-01", "2031-05-01T00:00:00Z", "07:30:00",
    '"\\u0000"', '"\\u00b5"', '"{value}"', '"{"', "99999999999999999999999", '["V?", 3]', "[{ a = 1 }]",
)  # fmt: skip


def spoilt(text: str) -> Iterator[str]:
    """Yield a text with each value replaced by each literal, and with each line left out."""
    lines = text.strip().splitlines()
    for position, line in enumerate(lines):
        key, equals, _ = line.partition(" = ")
        for literal in LITERALS if equals else ():
            yield "\n".join([*lines[:position], f"{key} = {literal}", *lines[position + 1 :]])
        yield "\n".join([*lines[:position], *lines[position + 1 :]])


@pytest.mark.parametrize("what", ["bench", "meter", "supply"])
def test_any_value_anywhere_is_taken_or_refused_and_never_an_exception_of_another_kind(what: str, folder: Path) -> None:
    file_name = str(folder / "bench.toml")
    base = {"bench": BENCH, "meter": METER, "supply": SUPPLY_WHOLE}[what]
    taken = refused = 0
    for text in spoilt(base):
        (folder / "spoilt.toml").write_text(text, encoding="utf-8")
        try:
            if what == "bench":
                parse_bench(text, file_name)
            elif what == "meter":
                meter = meter_profile(profile_table("spoilt.toml", folder), "spoilt.toml")
                meter.link.settings()
                for function in meter.functions:
                    assert meter.expected_s(function) >= 0.0
                    meter.rules(function)
            else:
                supply = supply_profile(profile_table("spoilt.toml", folder), "spoilt.toml")
                supply.link.settings()
                SupplyTalk(supply)
        except FileError:
            refused += 1
        else:
            taken += 1
    assert refused > 5 * taken > 0
