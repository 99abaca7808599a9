from __future__ import annotations

import pytest

from benchkit.stage.heat_checks import check_heat
from tests.stage.designs import TERN, breadboard, changed, tern


def test_good_designs_give_nothing_to_look_at() -> None:
    assert check_heat(tern()) == []
    assert check_heat(breadboard()) == []


@pytest.mark.parametrize(
    ("tracking", "sink", "words"), [("0.1", "2.2", "close to running away"), ("0.0", "8", "no stable warm state")]
)
def test_poor_tracking(tracking: str, sink: str, words: str) -> None:
    design = changed(
        TERN, ("spreader_tracking = 0.7", f"spreader_tracking = {tracking}"), ('heatsink = "1.2', f'heatsink = "{sink}')
    )
    (finding,) = check_heat(design)
    assert finding.key == "thermal.spreader_tracking"
    assert words in finding.came
    assert not finding.fatal
    assert "spreader's transistor" in str(finding)


def test_too_hot_and_too_weak() -> None:
    design = changed(
        TERN,
        ('max_heatsink = "60 degC"', 'max_heatsink = "30 degC"'),
        ('power = "130 W", junction = "150 degC"', 'power = "3 W", junction = "38 degC"'),
    )
    found = [str(finding) for finding in check_heat(design)]
    assert any("the heat sink idles at 33.3 degC" in text for text in found)
    assert any("output.upper.1 idles at 38.5 degC" in text for text in found)
    assert any("output.lower.1 idles with 3.47 W" in text for text in found)
    assert len(found) == 5
