"""What parts stand: the design's words first, defaults that leave a healthy unit room."""

from __future__ import annotations

import pytest

from benchkit.rehearsal.ratings import (
    JUNCTION_C,
    RESISTOR_SIZES_W,
    ROOM,
    junction_ratings,
    rating_of,
    resistor_ratings,
    usual_powers_w,
)
from benchkit.stage.design import Design, parse_design
from benchkit.stage.points import parts_of
from tests.rehearsal.helpers import TERN
from tests.stage.catalogue import few


def test_the_designs_own_ratings_come_first(tern: Design) -> None:
    junctions = {rating.part: rating for rating in junction_ratings(tern)}
    # (150 - 25) K over the rated power (arithmetic).
    assert junctions["output.upper.1"].to_case_k_per_w == pytest.approx(125.0 / 130.0)
    assert junctions["driver.lower"].to_case_k_per_w == pytest.approx(125.0 / 15.0)
    resistors = {rating.part: rating.power_w for rating in resistor_ratings(tern)}
    assert resistors["emitter.upper.1"] == 3.0
    assert resistors["stopper.upper.1"] == RESISTOR_SIZES_W[0]


@pytest.mark.parametrize(
    ("key", "power_w"), [("emitter.upper.1", 7.0), ("emitter.upper", 5.0), ("emitter", 3.0)]
)  # fmt: skip
def test_a_rating_is_found_by_part_side_or_role(key: str, power_w: float) -> None:
    design = parse_design(TERN.replace('"emitter" = { power = "3 W" }', f'"{key}" = {{ power = "{power_w:g} W" }}'))
    rating = rating_of(design, "emitter.upper.1", "emitter")
    assert rating is not None
    assert rating.power_w == power_w


@pytest.mark.parametrize("design", few().values(), ids=few())
def test_without_ratings_a_healthy_unit_has_room(design: Design) -> None:
    resistors = {rating.part: rating.power_w for rating in resistor_ratings(design)}
    assert set(resistors) == {part.name for part in parts_of(design) if part.kind in ("resistor", "trimmer")}
    usual_w = usual_powers_w(design)
    assert set(usual_w) == set(resistors)
    assert all(power_w >= ROOM * usual_w[part] for part, power_w in resistors.items())
    for rating in junction_ratings(design):
        assert rating.most_c == JUNCTION_C
        assert 0.0 < rating.to_case_k_per_w <= 250.0
