"""Profiles: the shipped ones are whole, mistakes name their key, time-outs follow from the measurement."""

from __future__ import annotations

import re
from pathlib import Path
from typing import Any

import pytest

from benchkit.errors import FileError
from benchkit.instruments.profile import (
    TimingPart,
    meter_profile,
    profile_table,
    shipped,
    shipped_names,
    supply_profile,
)
from benchkit.measure.readings import FUNCTIONS


def test_the_shipped_ones_are_taken_and_cover_every_function() -> None:
    assert shipped_names() == ("scpi-meter", "scpi-supply")
    assert set(meter_profile("scpi-meter").functions) == set(FUNCTIONS)
    assert supply_profile("scpi-supply").commands.off == "OUTP OFF,(@1,2)"


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
        ("questions/output", "", "questions.output"),
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
