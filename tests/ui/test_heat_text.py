"""The heat block: what it says of good and bad designs, and that it fits a narrow terminal."""

from __future__ import annotations

import pytest

from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design
from benchkit.ui.heat_text import WIDTH, heat_lines
from tests.stage.catalogue import few
from tests.stage.designs import TERN, breadboard, changed, tern


def _text(design: Design, trimmer: str | float = "target") -> str:
    rails = design.rails
    condition = Condition(positive_v=rails.positive_v, negative_v=rails.negative_v, trimmer=trimmer)  # type: ignore[arg-type]
    lines = heat_lines(design, condition)
    assert all(len(line) <= WIDTH for line in lines)
    assert all(line.isascii() for line in lines)
    return " ".join(" ".join(lines).split())


def test_a_good_design() -> None:
    text = _text(tern())
    assert "Heat (35.00 V and -35.00 V, trimmer target)" in text
    assert "idle dissipation 6.95 W in the output devices" in text
    assert "heat sink 33.3 degC" in text
    assert "TOO HOT" not in text
    assert "RUNNING AWAY" not in text
    assert "used up not before the heat sink has risen by 175 K" in text
    assert "to 22.00 mV at rest" in text


def test_a_design_that_is_close() -> None:
    poor = changed(TERN, ("spreader_tracking = 0.7", "spreader_tracking = 0.1"), ('heatsink = "1.2', 'heatsink = "2.2'))
    text = _text(poor)
    assert "CLOSE TO RUNNING AWAY" in text
    assert "used up at a heat-sink rise of 28.6 K" in text
    assert "Mount the spreader's transistor closer" in text


@pytest.mark.parametrize(("trimmer", "words"), [(0.6, "has no warm state"), ("target", "has no stable warm state")])
def test_a_design_without_a_warm_state(trimmer: str | float, words: str) -> None:
    bad = changed(TERN, ("spreader_tracking = 0.7", "spreader_tracking = 0.0"), ('heatsink = "1.2', 'heatsink = "8'))
    text = _text(bad, trimmer)
    assert "NO WARM STATE" in text
    assert words in text
    assert "idle dissipation" not in text


def test_hot_designs_are_told() -> None:
    rated = ('power = "130 W", junction = "150 degC"', 'power = "130 W", junction = "38 degC"')
    hot = changed(TERN, ('max_heatsink = "60 degC"', 'max_heatsink = "30 degC"'), rated)
    text = _text(hot)
    assert "the design allows 30.0 degC: TOO HOT" in text
    assert "TOO HOT: output.upper.1 is at 38.5 degC of 38.0 degC" in text


@pytest.mark.parametrize("design", [breadboard(), *few().values()], ids=lambda design: design.name)
def test_every_stage_fits(design: Design) -> None:
    text = _text(design, "target" if design.spreader.trimmer is not None else "unknown")
    for label in ("idle dissipation", "heat sink", "hottest junction", "runaway margin", "used up", "warming up"):
        assert label in text
