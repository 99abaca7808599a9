"""The catalogue holds what it says."""

from __future__ import annotations

from itertools import product

import numpy as np

from benchkit.stage.draws import draw, seeds
from benchkit.stage.operate import solve_units
from benchkit.stage.reach import full_rails
from tests.stage.catalogue import FEEDS, FEW, TOPOLOGIES, TRIMMERS, arm_key, catalogue, few, found_arm, wanted
from tests.stage.catalogue_arms import ARMS


def test_every_topology_with_every_feed_and_trimmer_and_one_to_three_pairs() -> None:
    designs = catalogue()
    assert len(designs) > 140
    two_rails = {
        (d.output.topology, f"{d.feed.upper.kind} {d.feed.lower.kind}",
         d.spreader.trimmer.arm if d.spreader.trimmer else "none", d.output.pairs)
        for d in designs.values() if not d.single_supply
    }  # fmt: skip
    for topology, feed, trimmer in product(TOPOLOGIES, FEEDS, TRIMMERS):
        for pairs in (1,) if topology == "complementary-feedback-pair" else (1, 2, 3):
            assert (topology, feed, trimmer, pairs) in two_rails
    single = {(d.output.topology, d.spreader.trimmer.arm if d.spreader.trimmer else "none")
              for d in designs.values() if d.single_supply}  # fmt: skip
    assert single == set(product(TOPOLOGIES, TRIMMERS))
    arms = {(d.spreader.trimmer.arm, d.spreader.trimmer.wiring) for d in designs.values() if d.spreader.trimmer}
    assert arms == set(product(("lower", "upper", "between"), ("series", "tied")))


def test_few_hold_everything_once() -> None:
    designs = few()
    assert tuple(designs) == FEW
    assert {d.output.topology for d in designs.values()} == set(TOPOLOGIES)
    assert {d.spreader.trimmer.arm for d in designs.values() if d.spreader.trimmer} == {"lower", "upper", "between"}
    assert {f"{d.feed.upper.kind} {d.feed.lower.kind}" for d in designs.values()} == set(FEEDS)
    assert {d.output.pairs for d in designs.values()} == {1, 2, 3}
    assert any(d.single_supply for d in designs.values())
    assert any(d.device[d.spreader.transistor].polarity == "pnp" for d in designs.values())


def test_every_trimmer_of_the_few_reaches_the_target_in_every_unit() -> None:
    for name, design in few().items():
        solved = solve_units(design, draw(design, 200, seeds("unit", 1)), full_rails(design), loading="none")
        assert solved.converged.all(), name
        if solved.unclipped is not None:
            assert np.all((solved.unclipped > 0.05) & (solved.unclipped < 0.95)), name
        else:
            drop_v = solved.points["emitter.pair.1"] / 2.0
            assert abs(np.median(drop_v) - 0.020) < 0.006, name


def test_the_table_of_arms_is_what_the_model_finds() -> None:
    ones = {arm_key(one): one for one in wanted()}
    for key in list(ones)[::9]:
        assert abs(found_arm(ones[key]) / ARMS[key] - 1.0) < 1e-4, key
