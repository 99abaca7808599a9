"""Units as they come into a repair shop."""

from __future__ import annotations

from benchkit.rehearsal.as_found import FAR_OFF_TURNS, found_travel
from benchkit.rehearsal.bench import RehearsalBench
from benchkit.stage.design import Design
from benchkit.stage.operate import solve_units
from benchkit.stage.trimmer import full_rails
from tests.stage.catalogue import few


def test_most_stand_near_their_target_and_some_far_off(tern: Design) -> None:
    bench = RehearsalBench(tern, 1)
    solved = solve_units(tern, bench.unit.parameters, full_rails(tern), loading="none")
    assert solved.position is not None
    off_turns = [12.0 * (found_travel(tern, bench.unit.parameters, seed) - solved.position[0]) for seed in range(14)]
    assert max(map(abs, off_turns)) <= FAR_OFF_TURNS + 1e-9
    near = [one for one in off_turns if abs(one) < 0.3]
    assert 8 <= len(near) <= 13, "one in six is far off"
    assert min(near) < 0.0 < max(near)
    assert max(map(abs, off_turns)) > 0.4


def test_the_hands_put_it_there_the_same_each_time(tern: Design) -> None:
    travels = [RehearsalBench(tern, seed).side({"do": "trimmer to", "travel": "as found"}) for seed in (4, 4, 5)]
    assert travels[0] == travels[1] != travels[2]


def test_without_a_trimmer_there_is_nothing_to_find() -> None:
    bench = RehearsalBench(few()["feedback resistor resistor none 1"], 1)
    assert bench.side({"do": "trimmer to", "travel": "as found"}) == 0.0
