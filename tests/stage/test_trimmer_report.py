"""All about a trimmer in one object."""

from __future__ import annotations

import pytest

from benchkit.errors import ModelError
from benchkit.stage.trimmer import authority, cold_to_warm, open_wiper
from benchkit.stage.trimmer_report import trimmer_report
from benchkit.stage.trimmer_slope import slope
from tests.stage.test_trimmer import without_trimmer


def test_report_without_a_trimmer() -> None:
    report = trimmer_report(without_trimmer())
    assert not report.present
    assert (report.authority, report.slope, report.open_wiper, report.cold_to_warm) == (None, None, None, None)
    assert report.fixed_v is not None
    assert report.fixed_v.low < report.fixed_v.nominal < report.fixed_v.high
    assert report.share_at_target == 0.0
    for ask in (authority, slope, open_wiper, cold_to_warm):
        with pytest.raises(ModelError, match="no trimmer"):
            ask(without_trimmer())
