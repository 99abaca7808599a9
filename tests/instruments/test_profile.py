"""Profiles: the shipped ones are whole, mistakes name their key, time-outs follow from the measurement."""

from __future__ import annotations

import re
import tomllib
from pathlib import Path
from typing import Any

import pytest

from benchkit.errors import FileError
from benchkit.instruments.profile import (
    meter_profile,
    profile_table,
    shipped,
    shipped_names,
    supply_profile,
)
from benchkit.instruments.profile_parts import TimingPart
from benchkit.measure.readings import FUNCTIONS


def test_the_shipped_ones_are_taken_and_cover_every_function() -> None:
    assert shipped_names() == ("plain-supply", "scpi-meter", "scpi-supply", "select-supply", "serial-meter")
    assert set(meter_profile("scpi-meter").functions) == set(FUNCTIONS)
    assert supply_profile("scpi-supply").commands.off == ("OUTP OFF,(@1,2)",)
    for name in shipped_names():
        table = shipped(name)
        assert table is not None
        (meter_profile if table["kind"] == "meter" else supply_profile)(name)


OLD_SUPPLY = """
format = 1
kind = "supply"
title = "two-output supply, SCPI with channel lists"
negative_programmed_positive = true
in_limit_bits = 1
[commands]
positive_volts = "VOLT {value},(@1)"
negative_volts = "VOLT {value},(@2)"
limit = "CURR {value},(@1,2)"
on = "OUTP ON,(@1,2)"
off = "OUTP OFF,(@1,2)"
joiner = ";:"
[questions]
joined = true
set_volts = "VOLT? (@1,2)"
limits = "CURR? (@1,2)"
output = "OUTP? (@1,2)"
volts = "MEAS:VOLT? (@1,2)"
amps = "MEAS:CURR? (@1,2)"
in_limit = "STAT:QUES:COND? (@1,2)"
error = "SYST:ERR?"
"""


def test_a_profile_of_the_first_version_is_still_taken_and_its_lack_of_protection_named() -> None:
    profile = supply_profile(tomllib.loads(OLD_SUPPLY))
    assert profile.commands.positive_volts == ("VOLT {value},(@1)",)
    assert profile.cautions == ("The supply has no over-voltage protection of its own that this profile knows.",)
    assert supply_profile("scpi-supply").cautions == ()
    meter = meter_profile({"format": 1, "kind": "meter", "functions": {"ohms": "R?"}, "numbers": {"units": ["OHM"]}})
    assert meter.rules("ohms").read("4.7 OHM") == 4.7


def test_what_a_supply_lacks_is_said() -> None:
    table = shipped("scpi-supply")
    assert table is not None
    table["questions"] |= {"set_volts": "", "limits": "", "amps": "", "in_limit": ""}
    assert len(supply_profile(table).cautions) == 2
    table["questions"] |= {"output": "", "amps": "I?"}
    assert [caution.split(";")[0] for caution in supply_profile(table).cautions] == [
        "The supply does not tell whether its outputs are on",
        "The supply does not read back its settings",
        "The supply does not say when its limit holds it",
    ]


def changed(name: str, path: str, value: object) -> dict[str, Any]:
    table = shipped(name)
    assert table is not None
    *parts, last = path.split("/")
    place = table
    for part in parts:
        place = place.setdefault(part, {})
    place[last] = value
    return table


@pytest.mark.parametrize(
    ("path", "value", "key"),
    [
        ("functions/dc bolts", "X?", "functions.dc bolts"),
        ("functions/ohms", "", "functions.ohms"),
        ("functions/ohms", "A\nB", "functions.ohms"),
        ("ranged/ohms", "MEAS:RES?", "ranged.ohms"),
        ("link/timeout_s", -1, "link.timeout_s"),
        ("link/timeout", 1, "link.timeout"),
        ("link/read_termination", "", "link.read_termination"),
        ("timing/mains_hz", 0, "timing.mains_hz"),
        ("kind", "supply", "kind"),
        ("format", 2, "format"),
    ],
)
def test_a_meters_mistakes_name_their_key(path: str, value: object, key: str) -> None:
    with pytest.raises(FileError, match=re.escape(key)):
        meter_profile(changed("scpi-meter", path, value))


@pytest.mark.parametrize(
    ("path", "value", "key"),
    [
        ("commands/limit", "CURR 1", "commands.limit"),
        ("commands/positive_volts", "VOLT 1", "commands.positive_volts"),
        ("questions/output", 3, "questions.output"),
        ("in_limit_bits", -1, "in_limit_bits"),
        ("off_current_a", 0, "off_current_a"),
    ],
)
def test_a_supplys_mistakes_name_their_key(path: str, value: object, key: str) -> None:
    with pytest.raises(FileError, match=re.escape(key)):
        supply_profile(changed("scpi-supply", path, value))


@pytest.mark.parametrize("text", ["[functions", 'based_on = "none"', "based_on = 3"])
def test_files_that_are_none(tmp_path: Path, text: str) -> None:
    (tmp_path / "mine.toml").write_text(text, encoding="utf-8")
    with pytest.raises(FileError, match=re.escape("mine.toml")):
        profile_table("mine.toml", tmp_path)


@pytest.mark.parametrize("name", ["../profile", "no-such", "a/b", ""])
def test_names_that_are_none(tmp_path: Path, name: str) -> None:
    with pytest.raises(FileError, match="scpi-meter"):
        profile_table(name, tmp_path)


def test_a_timeout_is_that_of_the_measurement() -> None:
    timing = TimingPart(mains_hz=50, power_line_cycles=100, autozero=True, settling_s=0.5, autorange_s=1.0)
    assert timing.timeout_s("dc volts") == pytest.approx(2 * 100 / 50 * 2 + 0.5 + 1.0 + 1.0)
    assert timing.timeout_s("ac volts") - timing.timeout_s("dc volts") == pytest.approx(6.5)
    assert timing.timeout_s("dc volts") - timing.timeout_s("dc volts", ranged=True) == pytest.approx(1.0)


def test_a_function_may_have_cycles_and_settling_of_its_own() -> None:
    timing = TimingPart(
        mains_hz=60, power_line_cycles=10, cycles={"ac volts": 1.0}, settling={"diode": 0.0}, autozero=False
    )
    assert timing.timeout_s("ac volts") == pytest.approx(2 * 1 / 60 + 7.0 + 1.0 + 1.0)
    assert timing.timeout_s("diode", ranged=True) == pytest.approx(2 * 10 / 60 + 1.0)


def test_what_a_reading_is_expected_to_take_is_never_more_than_its_timeouts() -> None:
    profile = meter_profile("scpi-meter")
    for function in FUNCTIONS:
        for range, samples in ((None, 1), (10.0, 1), (None, 5)):
            timeout_s = samples * profile.timing.timeout_s(function, ranged=range is not None)
            assert 0.0 < profile.expected_s(function, range, samples) < timeout_s
    assert profile.expected_s("ac volts") == pytest.approx(2 * 10 / 50 + 7.0 + 1.0)
