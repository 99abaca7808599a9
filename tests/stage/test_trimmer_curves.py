from __future__ import annotations

import numpy as np
import pytest

from benchkit.errors import ModelError
from benchkit.stage.draws import draw, seeds
from benchkit.stage.operate import solve_units
from benchkit.stage.trimmer import full_rails
from benchkit.stage.trimmer_curves import STEPS, curves
from tests.stage.catalogue import few
from tests.stage.designs import tern


def test_readings_rise_along_the_track_and_are_those_of_each_place_by_itself() -> None:
    design = tern()
    found = curves(design, "emitter.upper.1", full_rails(design), units=8)
    assert found.values.shape == (STEPS, 8)
    assert design.spreader.trimmer is not None
    assert (found.turns[0], found.turns[-1]) == (0.0, design.spreader.trimmer.turns)
    assert np.all(np.diff(found.values, axis=0) > 0.0)
    place = STEPS // 2
    alone = solve_units(
        design, draw(design, 8, seeds("limits", 0)), full_rails(design, when="cold", trimmer=place / (STEPS - 1)),
        loading="none",
    )  # fmt: skip
    assert found.values[place] == pytest.approx(alone.points["emitter.upper.1"], rel=1e-6)


def test_how_soon_the_drop_begins_to_move_differs_by_more_than_a_turn() -> None:
    design = tern()
    found = curves(design, "emitter.upper.1", full_rails(design))
    begins = [float(np.interp(1e-4, unit, found.turns)) for unit in found.values.T]
    assert max(begins) - min(begins) > 1.0


def test_what_has_no_track_or_no_such_point_is_refused() -> None:
    design, without = tern(), few()["feedback resistor resistor none 1"]
    with pytest.raises(ModelError, match="no trimmer"):
        curves(without, "emitter.upper.1", full_rails(without))
    with pytest.raises(ModelError, match="no test point"):
        curves(design, "emitter.upper.9", full_rails(design))
