"""What a turn of the trimmer does, against two warm states and by circuit theory."""

from __future__ import annotations

import pytest

from benchkit.stage.design import Design, parse_design
from benchkit.stage.draws import nominal
from benchkit.stage.operate import solve_units
from benchkit.stage.trimmer import drop_v, full_rails
from benchkit.stage.trimmer_slope import slope
from tests.stage.catalogue import Wanted, text
from tests.stage.designs import TERN, changed, tern
from tests.stage.test_trimmer import arms


@pytest.mark.parametrize("design", [tern(), arms("between", "series")], ids=["lower", "between"])
def test_the_settled_slope_is_that_of_two_warm_states(design: Design) -> None:
    """Two positions of the trimmer, each come to rest, a hundredth of the travel apart."""
    found = slope(design)
    step = 0.005
    drops = []
    for travel in (found.travel - step, found.travel + step):
        warm = solve_units(design, nominal(design), full_rails(design, trimmer=travel, when="warm"), loading="none")
        assert warm.converged.all()
        drops.append(float(drop_v(warm)[0]))
    assert design.spreader.trimmer is not None
    per_turn = (drops[1] - drops[0]) / (2.0 * step * design.spreader.trimmer.turns)
    assert found.settled_drop_v_per_turn == pytest.approx(per_turn, rel=5e-3)
    assert found.settled_drop_v_per_turn is not None
    assert found.settled_drop_v_per_turn > found.drop_v_per_turn > 0.0


def test_the_slopes_of_drop_and_current_belong_together() -> None:
    """Two pairs: their current is the drop over the emitter resistor, twice."""
    wanted = Wanted(topology="double-emitter-follower", feed="source servo", trimmer="lower", pairs=2)
    design = parse_design(text(wanted))
    found = slope(design)
    ohm = design.output.emitter_resistor.value
    assert found.current_a_per_turn == pytest.approx(2.0 * found.drop_v_per_turn / ohm, rel=1e-3)


def test_a_target_that_is_set_cold_has_no_settled_slope() -> None:
    design = changed(TERN, ('when = "warm"', 'when = "cold"'))
    found = slope(design)
    assert found.settled_drop_v_per_turn is None
    assert found.drop_v_per_turn > 0.0


def test_more_turns_less_slope() -> None:
    twice = changed(TERN, ("turns = 12", "turns = 24"))
    assert slope(twice).drop_v_per_turn == pytest.approx(slope(tern()).drop_v_per_turn / 2.0, rel=1e-6)
