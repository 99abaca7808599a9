"""What programs get beside the expected readings."""

from __future__ import annotations

import json
import math

import numpy as np
import pytest

from benchkit.stage.bias_cost import bias_report
from benchkit.stage.more_expected import more_json, plain
from benchkit.stage.trimmer import full_rails
from benchkit.stage.trimmer_report import trimmer_report
from tests.stage.designs import TERN, changed, tern


def test_the_objects_hold_what_the_reports_say() -> None:
    condition = full_rails(tern())
    found = more_json(tern(), condition, (8.0,))
    assert json.loads(json.dumps(found, allow_nan=False)) == found
    assert list(found) == ["heat", "trimmer", "bias"]
    report, trimmer = bias_report(tern(), condition, (8.0,)), trimmer_report(tern())
    assert found["bias"]["least_ripple_v"] == pytest.approx(report.least_ripple_v, rel=1e-6)
    assert [one["name"] for one in found["bias"]["biases"]] == [one.name for one in report.biases]
    curve = found["bias"]["biases"][0]["curve"]
    assert len(curve["amps"]) == len(curve["gain"]) == len(curve["output_ohm"])
    assert trimmer.slope is not None
    assert found["trimmer"]["slope"]["drop_v_per_turn"] == pytest.approx(trimmer.slope.drop_v_per_turn, rel=1e-6)
    assert found["heat"]["warm_state"] is True
    assert 0.0 < found["heat"]["loop_gain"] < found["heat"]["worst_loop_gain"] < 1.0


def test_no_answer_is_none() -> None:
    design = changed(TERN, ('emitter_drop = "22 mV"', 'emitter_drop = "900 mV"'))
    found = more_json(design, full_rails(design, trimmer="least", when="cold"), (8.0,))
    assert found["bias"] is not None
    assert found["trimmer"] is None or found["trimmer"]["cold_to_warm"] is None


def test_plain() -> None:
    assert plain({"a": (1, np.float64(0.123456789), math.inf), "b": math.nan, "c": True, "d": None, "e": "x"}) == {
        "a": [1, 0.1234568, None], "b": None, "c": True, "d": None, "e": "x",
    }  # fmt: skip
