"""Bench files: what is read from them, and the key that each mistake is reported at."""

from __future__ import annotations

import datetime
import json
import re
from pathlib import Path

import pytest

from benchkit.errors import FileError
from benchkit.instruments.bench import link_settings, load_bench, parse_bench
from benchkit.instruments.profile import meter_profile
from benchkit.measure.accuracy import STATED_DEFAULT, SUPPLY_READOUT

TODAY = datetime.date(2031, 1, 1)

GOOD = """
[bench]
format = 1
name = "bench 2"

[meter]
address = "TCPIP::192.168.1.20::5025::SOCKET"
profile = "scpi-meter"
serial = "MY123"
input_resistance = "1 Mohm"
calibration_due = 2031-05-01

[[meter.accuracy]]
function = "dc volts"
range = "1 V"
percent_of_reading = 0.01
percent_of_range = 0.001

[supply]
address = "TCPIP::192.168.1.21::5025::SOCKET"
calibration_due = 2030-12-31
"""


def test_a_good_one(tmp_path: Path) -> None:
    path = tmp_path / "bench.toml"
    path.write_text(GOOD, encoding="utf-8")
    bench = load_bench(path)
    assert bench.text == GOOD
    assert bench.meter is not None
    assert bench.meter.input_resistance_ohm == 1e6
    assert bench.accuracy.standard_uncertainty("dc volts", 0.5) == pytest.approx((0.5e-4 + 1e-5) / 3**0.5)
    assert bench.supply_accuracy is SUPPLY_READOUT
    setup = bench.setup
    assert setup["meter"]["address"] == "TCPIP::192.168.1.20::5025::SOCKET"
    assert setup["meter"]["serial"] == "MY123"
    assert setup["supply"]["profile"]["kind"] == "supply"
    assert setup["supply"]["library"] == "@py"
    assert json.loads(json.dumps(setup)) == setup


def test_cautions_say_what_is_assumed_or_overdue() -> None:
    cautions = parse_bench(GOOD, "bench.toml", today=TODAY).cautions
    assert [caution for caution in cautions if "2030-12-31" in caution]
    assert [caution for caution in cautions if "no accuracy for the supply" in caution]
    assert len(cautions) == 2


def test_a_bench_without_instruments_is_by_hand() -> None:
    bench = parse_bench('[bench]\nformat = 1\nname = "hands"\n', "bench.toml")
    assert bench.setup == {"meter": None, "supply": None}
    assert bench.accuracy is bench.supply_accuracy is STATED_DEFAULT


def test_a_meter_that_a_person_reads_has_an_accuracy_and_no_address() -> None:
    rows = '[[meter.accuracy]]\nfunction = "ohms 4-wire"\nrange = "100 ohm"\npercent_of_reading = 0.01\n'
    text = f'[bench]\nformat = 1\nname = "hand"\n[meter]\ncalibration_due = 2030-05-01\n{rows}'
    bench = parse_bench(text, "bench.toml", today=TODAY)
    assert bench.setup == {"meter": None, "supply": None}
    assert bench.accuracy.standard_uncertainty("ohms 4-wire", 4.66) == pytest.approx(4.66e-4 / 3**0.5)
    assert bench.accuracy.rows["dc volts"] == STATED_DEFAULT.rows["dc volts"]
    assert [caution for caution in bench.cautions if "dc volts" in caution]
    assert [caution for caution in bench.cautions if "2030-05-01" in caution]
    for table in ("[meter]", '[meter]\nprofile = "scpi-meter"\n' + rows):
        with pytest.raises(FileError, match=re.escape("meter.address: this key is missing")):
            parse_bench(f'[bench]\nformat = 1\nname = "hand"\n{table}', "bench.toml")


@pytest.mark.parametrize(
    ("old", "new", "key"),
    [
        ("format = 1", "format = 2", "bench.format"),
        ('name = "bench 2"', "", "bench.name"),
        ('serial = "MY123"', "serial = 123", "meter.serial"),
        ('serial = "MY123"', 'sreial = "MY123"', "meter.sreial"),
        ("TCPIP::192.168.1.20::5025::SOCKET", "192.168.1.20", "meter.address"),
        ("TCPIP::192.168.1.21::5025::SOCKET", "GPIB0::5::INSTR", "supply.address"),
        ('"1 Mohm"', '"1 V"', "meter.input_resistance"),
        ('"1 Mohm"', '"0 ohm"', "meter.input_resistance"),
        ("2031-05-01", '"soon"', "meter.calibration_due"),
        ('function = "dc volts"', 'function = "dc bolts"', "meter.accuracy"),
        ('"scpi-meter"', '"scpi-supply"', "the profile scpi-supply"),
        ('"scpi-meter"', '"mine.toml"', "mine.toml"),
        ("[bench]", "[bench", "no TOML"),
    ],
)
def test_each_mistake_names_its_key(old: str, new: str, key: str) -> None:
    with pytest.raises(FileError, match=re.escape(key)):
        parse_bench(GOOD.replace(old, new), "bench.toml")


def test_a_profile_of_ones_own_stands_beside_the_bench_file(tmp_path: Path) -> None:
    (tmp_path / "mine.toml").write_text(
        'based_on = "scpi-meter"\n[functions]\n"dc volts" = "VAL1?"\n', encoding="utf-8"
    )
    path = tmp_path / "bench.toml"
    path.write_text(GOOD.replace('"scpi-meter"', '"mine.toml"'), encoding="utf-8")
    functions = load_bench(path).setup["meter"]["profile"]["functions"]
    assert functions["dc volts"] == "VAL1?"
    assert functions["ohms"] == "MEAS:RES?"


def test_mains_and_line_go_into_the_profile_and_the_profile_file_stays_as_it_is() -> None:
    text = GOOD.replace('name = "bench 2"', 'name = "bench 2"\nmains = "60 Hz"\nvisa = "bench.yaml@sim"')
    text = text.replace("TCPIP::192.168.1.20::5025::SOCKET", "ASRL3::INSTR").replace('"scpi-meter"', '"serial-meter"')
    text = text.replace("[[meter.accuracy]]", "[meter.line]\nbaud = 2400\n\n[[meter.accuracy]]")
    bench = parse_bench(text, "bench.toml", today=TODAY)
    setup = bench.setup["meter"]
    assert setup["library"] == bench.setup["supply"]["library"] == "bench.yaml@sim"
    profile = meter_profile(setup["profile"])
    assert profile.timing.mains_hz == 60.0
    settings = link_settings(profile, setup)
    assert (settings.line.baud, settings.line.stop_bits, settings.line.flow) == (2400, 2, "dtr/dsr")
    assert (settings.library, settings.prepare, settings.sync) == ("bench.yaml@sim", ("SYST:REM",), "")
    assert meter_profile("serial-meter").link.line.baud == 9600


def test_another_library_takes_addresses_of_its_own_and_the_command_line_wins() -> None:
    text = GOOD.replace("TCPIP::192.168.1.20::5025::SOCKET", "GPIB0::22::INSTR")
    with pytest.raises(FileError, match=re.escape("meter.address")):
        parse_bench(text, "bench.toml")
    bench = parse_bench(text, "bench.toml", visa="/opt/maker/libvisa.so")
    assert bench.setup["meter"]["library"] == "/opt/maker/libvisa.so"
    named = text.replace('name = "bench 2"', 'name = "bench 2"\nvisa = "first@sim"')
    assert parse_bench(named, "bench.toml", visa="second@sim").setup["meter"]["library"] == "second@sim"


def test_a_supply_without_protection_is_a_caution(tmp_path: Path) -> None:
    path = tmp_path / "bench.toml"
    path.write_text('[bench]\nformat = 1\nname = "b"\n[supply]\naddress = "ASRL3::INSTR"\nprofile = "plain-supply"\n')
    assert any("no over-voltage protection" in caution for caution in load_bench(path).cautions)
    assert not any("protection" in caution for caution in parse_bench(GOOD, "bench.toml").cautions)


def test_a_missing_file(tmp_path: Path) -> None:
    with pytest.raises(FileError, match="can't be read"):
        load_bench(tmp_path / "none.toml")


def test_a_supply_without_stated_accuracy_is_not_taken_for_a_meter() -> None:
    text = (
        '[bench]\nformat = 1\nname = "b"\n'
        '[supply]\naddress = "TCPIP::192.0.2.1::5025::SOCKET"\nprofile = "scpi-supply"\n'
    )
    bench = parse_bench(text, "bench.toml")
    assert bench.supply_accuracy is SUPPLY_READOUT
    assert bench.supply_accuracy.row("dc current", 0.1).half_width(0.1) == pytest.approx(0.006)
    (caution,) = [one for one in bench.cautions if "accuracy" in one]
    assert caution == "The bench file states no accuracy for the supply; taken as: a supply's own readout, 1 % + 5 mA."
