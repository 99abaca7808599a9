from __future__ import annotations

import hashlib
import math
import pickle
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from benchkit.errors import FileError
from benchkit.stage.design import load_design, parse_design, target_drop_v
from tests.stage.designs import BREADBOARD, DEMONSTRATIONS, TERN, breadboard, changed, changed_text, tern


@pytest.mark.parametrize("path", DEMONSTRATIONS, ids=lambda path: path.stem)
def test_demonstrations_load(path: Path) -> None:
    design = load_design(path)
    assert design.text == path.read_text(encoding="utf-8")
    assert design.sha256 == hashlib.sha256(path.read_bytes()).hexdigest()
    assert design.file == str(path)


def test_values_carry_units() -> None:
    design = tern()
    assert (design.name, design.revision) == ("Tern 40", "C")
    assert (design.rails.positive_v, design.rails.negative_v) == (35.0, -35.0)
    assert design.rails.bleed is not None
    assert tuple(design.rails.bleed) == pytest.approx((10e3, 0.05))
    assert design.feed.upper.kind == "source"
    assert tuple(design.feed.upper.value) == pytest.approx((0.008, 0.05))
    assert design.feed.lower.kind == "servo"
    assert breadboard().feed.upper.kind == "resistor"
    assert tuple(breadboard().feed.upper.value) == pytest.approx((1000.0, 0.001))
    assert design.feed.works_from_v == 8.0
    assert design.spreader.trimmer is not None
    assert design.spreader.trimmer.end_resistance_ohm == 2.0
    assert design.output.rest == (0.0, None)
    assert design.output.offset_v == pytest.approx(0.02)
    assert breadboard().output.offset_v == pytest.approx(0.02)
    assert design.target.tolerance == pytest.approx(0.1)
    assert design.thermal.heatsink_capacity_j_per_k == 400.0
    assert design.ratings["driver"].power_w == 15.0


def test_designs_are_frozen_and_hashable() -> None:
    assert hash(tern()) == hash(load_design(TERN))
    assert tern() == load_design(TERN)
    assert tern() != breadboard()
    with pytest.raises(ValueError, match="frozen"):
        tern().rails.positive_v = 3.0


def test_designs_and_predictions_travel_to_another_process() -> None:
    again = pickle.loads(pickle.dumps(tern()))
    assert again == tern()
    assert (again.text, again.file) == (tern().text, tern().file)


# (a piece of the Tern, what it becomes, key, a word of the message)
WRONG: list[tuple[str, str, str, str]] = [
    ('emitter_resistor = "0.22 ohm 1 %"', 'emitter_resistor = "0 ohm"', "output.emitter_resistor", "more than 0 ohm"),
    ('emitter_resistor = "0.22 ohm 1 %"', 'emitter_resistor = "0.22 ohm -1 %"', "output.emitter_resistor", "-1 %"),
    ('emitter_resistor = "0.22 ohm 1 %"', 'emitter_resistor = "0.22 ohm 100 %"', "output.emitter_resistor", "100 %"),
    ('emitter_resistor = "0.22 ohm 1 %"', 'emitter_resistor = "22 mV"', "output.emitter_resistor", "voltage"),
    ('emitter_resistor = "0.22 ohm 1 %"', "emitter_resistor = true", "output.emitter_resistor", "bool"),
    ('emitter_resistor = "0.22 ohm 1 %"', "", "output.emitter_resistor", "missing"),
    ('emitter_resistor = "0.22 ohm 1 %"', 'emiter_resistor = "0.22 ohm"', "output.emitter_resistor", "missing"),
    ("pairs = 1", "pears = 1", "output.pears", 'Did you mean "pairs"?'),
    ("pairs = 1", "pairs = 0", "output.pairs", "greater than or equal to 1"),
    ("pairs = 1", "pairs = 1.5", "output.pairs", "integer"),
    ("format = 1", "format = 2", "design.format", "1, the format"),
    ("format = 1", "format = true", "design.format", "1, the format"),
    ('name = "Tern 40"', 'name = ""', "design.name", "at least 1 character"),
    ('positive = "35 V"', 'positive = "-35 V"', "rails.positive", "more than 0 V"),
    ('negative = "-35 V"', 'negative = "35 V"', "rails.negative", "0 V or less"),
    ('upper = "8 mA 5 %"', 'upper = "8"', "feed.upper", "could be either"),
    ('upper = "8 mA 5 %"', 'upper = "8 V"', "feed.upper", "neither"),
    ('upper = "8 mA 5 %"', 'upper = "servo"', "feed.upper", "servo stands below"),
    ('upper = "8 mA 5 %"', 'upper = "0 mA"', "feed.upper", "more than 0 A"),
    ('lower = "servo"', 'lower = "8 mA"', "feed.lower", "servo"),
    ('lower = "servo"', 'lower = "4.7 kohm"', "feed.max_current", "belongs to a servo"),
    ('max_current = "24 mA"', 'max_current = "8 mA"', "feed.max_current", "more than the upper feed's"),
    ('works_from = "8 V"', 'works_from = "40 V"', "feed.works_from", "no more than the rails'"),
    ('transistor = "npn-small"', 'transistor = "npn-smal"', "spreader.transistor", "no device table"),
    ('upper = "npn-power"', 'upper = "pnp-power"', "output.upper", "a npn in this place"),
    ('lower = "pnp-power"', 'lower = "npn-power"', "output.lower", "a pnp in this place"),
    ('end_resistance = "2 ohm"', 'end_resistance = "250 ohm"', "spreader.trimmer.end_resistance", "less than half"),
    ('end_resistance = "2 ohm"', 'end_resistance = "-1 ohm"', "spreader.trimmer.end_resistance", "0 ohm or more"),
    ('arm = "lower"', 'arm = "middle"', "spreader.trimmer.arm", "'lower', 'upper' or 'between'"),
    ("turns = 12", "turns = 0", "spreader.trimmer.turns", "greater than 0"),
    ('wiring = "series"', 'wiring = "loose"', "spreader.trimmer.wiring", "'series' or 'tied'"),
    ('driver_upper = "npn-driver"', "", "output.driver_upper", "double-emitter-follower"),
    ('driver_resistor = "220 ohm 5 %"', "", "output.driver_resistor", "double-emitter-follower"),
    (
        'topology = "double-emitter-follower"',
        'topology = "single-emitter-follower"',
        "output.driver_upper",
        "no meaning in a single-emitter-follower",
    ),
    (
        'topology = "double-emitter-follower"',
        'topology = "quasi-complementary"',
        "output.topology",
        "'single-emitter-follower'",
    ),
    ('rest = "0 V"', 'rest = "40 V"', "output.rest", "between the rails"),
    ('rest = "0 V"', 'rest = "100 %"', "output.rest", "99 % or less"),
    ('offset = "20 mV"', 'offset = "-20 mV"', "output.offset", "0 V or more"),
    ('emitter_drop = "22 mV"', "", "target", "exactly one"),
    ('emitter_drop = "22 mV"', 'emitter_drop = "22 mV"\noptimum = true', "target", "exactly one"),
    ('emitter_drop = "22 mV"', "optimum = false", "target.optimum", "True"),
    ('tolerance = "10 %"', "tolerance = 0.1", "target.tolerance", "percentage"),
    ('tolerance = "10 %"', 'tolerance = "-10 %"', "target.tolerance", "more than 0 %"),
    ('when = "warm"', 'when = "hot"', "target.when", "'warm' or 'cold'"),
    ("driver_tracking = 0.3", "", "thermal.driver_tracking", "missing"),
    ("spreader_tracking = 0.7", "spreader_tracking = -0.1", "thermal.spreader_tracking", "greater than or equal to 0"),
    ('max_heatsink = "60 degC"', 'max_heatsink = "20 degC"', "thermal.max_heatsink", "more than the ambient"),
    ('"emitter" = { power = "3 W" }', '"emiter" = { power = "3 W" }', "ratings.emiter", "no such part"),
    ('"emitter" = { power = "3 W" }', '"emitter" = { force = "3 W" }', "ratings.emitter.force", "one of power"),
    ("IS = 1.5e-13", "IZ = 1.5e-13", "device.npn-driver.parameters.IS", "missing"),
    ("IS = 1.5e-13", "IS = 1.5e-13, HFE = 3", "device.npn-driver.parameters.HFE", "one of IS, BF"),
    ("IS = 1.5e-13", "IS = -1.5e-13", "device.npn-driver.parameters.IS", "above zero"),
    ("IS = 1.5e-13", "IS = nan", "device.npn-driver.parameters.IS", "finite"),
    ("\n[target]", "\n[targets]\n[target]", "targets", "this key is not known"),
]


@pytest.mark.parametrize(("old", "new", "key", "words"), WRONG, ids=[f"{w[2]}: {w[1][:40]}" for w in WRONG])
def test_what_is_wrong_is_named(old: str, new: str, key: str, words: str) -> None:
    with pytest.raises(FileError) as caught:
        changed(TERN, (old, new))
    assert caught.value.file == TERN.name
    assert caught.value.key == key
    assert words in str(caught.value)
    assert str(caught.value).startswith(f"{TERN.name}, {key}: ")
    assert caught.value.expected


def test_several_findings_name_the_other_keys() -> None:
    with pytest.raises(FileError, match=r"output\.offset.*Also look at output\.rest|output\.rest.*output\.offset"):
        changed(TERN, ('offset = "20 mV"', 'offset = "-1 V"'), ('rest = "0 V"', 'rest = "zero"'))


def test_spread_without_its_parameter() -> None:
    text = TERN.read_text(encoding="utf-8").replace('spread = { IS = "20 %"', 'spread = { VAR = "3 %", IKR = "20 %"')
    with pytest.raises(FileError) as caught:
        parse_design(text, "x.toml")
    assert caught.value.key.startswith("device.npn-small.spread.")


def test_missing_device_table() -> None:
    text = TERN.read_text(encoding="utf-8")
    text = text[: text.index("[device.pnp-power]")]
    with pytest.raises(FileError) as caught:
        parse_design(text, "x.toml")
    assert caught.value.key == "output.lower"
    assert "[device.pnp-power]" in str(caught.value)


def test_broken_toml_names_the_place() -> None:
    with pytest.raises(FileError, match=r"no valid TOML.*line 1[0-9]"):
        changed(TERN, ("format = 1", "format = = 1"))


def test_unreadable_files(tmp_path: Path) -> None:
    with pytest.raises(FileError, match="can't be read"):
        load_design(tmp_path / "nothing.toml")
    with pytest.raises(FileError, match="can't be read"):
        load_design(tmp_path)
    bad = tmp_path / "latin.toml"
    bad.write_bytes(b'name = "\xb5"')
    with pytest.raises(FileError, match="byte 8 is not UTF-8"):
        load_design(bad)


def test_windows_line_ends_and_byte_order_mark(tmp_path: Path) -> None:
    path = tmp_path / "tern.toml"
    path.write_bytes(b"\xef\xbb\xbf" + TERN.read_bytes().replace(b"\n", b"\r\n"))
    design = load_design(path)
    assert design.name == "Tern 40"
    assert design.sha256 == hashlib.sha256(path.read_bytes()).hexdigest()


def test_single_supply() -> None:
    one = (('negative = "-35 V"', 'negative = "0 V"'), ('other_negative = "6 mA 10 %"', ""))
    design = changed(TERN, *one, ('rest = "0 V"', 'rest = "50 %"'))
    assert design.single_supply
    assert design.rest_v(30.0, 0.0) == pytest.approx(15.0)
    assert not tern().single_supply
    with pytest.raises(FileError, match="between the rails") as caught:
        changed(TERN, *one)
    assert caught.value.key == "output.rest"
    with pytest.raises(FileError, match="no negative rail") as caught:
        changed(TERN, one[0], ('rest = "0 V"', 'rest = "50 %"'))
    assert caught.value.key == "rails.other_negative"


def test_rest_as_a_share_of_the_span() -> None:
    assert changed(TERN, ('rest = "0 V"', 'rest = "50 %"')).rest_v(20.0, -10.0) == pytest.approx(5.0)


def test_all_optional_keys_are_taken() -> None:
    design = changed(
        TERN,
        ('local_capacitors = "100 uF"', 'local_capacitors = "100 uF"\nreservoir = "10 mF"'),
        ('bypass = "10 uF"', 'bypass = "10 uF"\ncollector_resistor = "33 ohm 5 %"'),
        ("pairs = 1", 'pairs = 1\ndriver_resistor_to = "output"'),
    )
    assert design.rails.reservoir_f == pytest.approx(0.01)
    assert design.spreader.collector_resistor is not None
    assert tuple(design.spreader.collector_resistor) == pytest.approx((33.0, 0.05))


def test_target_drop() -> None:
    assert target_drop_v(tern()) == pytest.approx(0.022)
    assert target_drop_v(breadboard()) == pytest.approx(0.010 * 4.7)
    two = changed(BREADBOARD, ("pairs = 1", "pairs = 2"))
    assert target_drop_v(two) == pytest.approx(0.005 * 4.7)


@pytest.mark.parametrize(("ohm", "milliamps"), [("0.22", 116.78), ("0.1", 256.93), ("0.33", 77.86)])
def test_optimum_bias_as_published(ohm: str, milliamps: float) -> None:
    """B. M. Oliver, Hewlett-Packard Journal, February 1971 (second-hand): I_Q R_E = VT at 25 degC, ideal devices."""
    text = changed_text(
        TERN,
        ('emitter_drop = "22 mV"', "optimum = true"),
        ('emitter_resistor = "0.22 ohm 1 %"', f'emitter_resistor = "{ohm} ohm 1 %"'),
        ("RB = 1.5, RE = 0.012", "RB = 0, RE = 0"),
        ("RB = 1.3, RE = 0.014", "RB = 0, RE = 0"),
    )
    assert target_drop_v(parse_design(text)) / float(ohm) * 1e3 == pytest.approx(milliamps, abs=0.01)


def test_optimum_bias_with_ohmic_resistances() -> None:
    """The same source's formula with re 0.1 ohm, rb 5 ohm, hFE 100 and 0.22 ohm: 69.44 mA (second-hand)."""
    text = changed_text(
        TERN,
        ('emitter_drop = "22 mV"', "optimum = true"),
        ("BF = 110,", "BF = 100,"),
        ("BF = 95,", "BF = 100,"),
        ("RB = 1.5, RE = 0.012", "RB = 5, RE = 0.1"),
        ("RB = 1.3, RE = 0.014", "RB = 5, RE = 0.1"),
    )
    assert target_drop_v(parse_design(text)) / 0.22 * 1e3 == pytest.approx(69.44, abs=0.005)


LINES = TERN.read_text(encoding="utf-8").splitlines()


@settings(max_examples=60, deadline=None)
@given(line=st.integers(0, len(LINES) - 1), text=st.text(max_size=30), at=st.integers(0, 40))
def test_any_damage_to_a_file_is_a_file_error_or_harmless(line: int, text: str, at: int) -> None:
    damaged = list(LINES)
    damaged[line] = damaged[line][:at] + text + damaged[line][at:]
    try:
        design = parse_design("\n".join(damaged), "damaged.toml")
    except FileError as error:
        found = error
    else:
        assert math.isfinite(target_drop_v(design))
        return
    assert found.file == "damaged.toml"
    assert found.expected
