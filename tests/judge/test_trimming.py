"""A simulated screw: a junction and a resistor in series, with what can go wrong while it is turned."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pytest

from benchkit.judge.advice import Advice
from benchkit.judge.answers import OfUnits
from benchkit.judge.screw import KNEE_V, Scale, taken_for
from benchkit.judge.trimming import Adviser
from benchkit.judge.trust import RailLine
from benchkit.judge.turning import MOST_TURNS, SLACK

TARGET_V, LOW_V, HIGH_V = 0.022, 0.0198, 0.0242
SLOPE_V = 0.016
NOISE_V = 2e-6
STEP_S = 0.1
SCALE = Scale(target=TARGET_V, knee=KNEE_V, floor=1e-9)


def adviser(**changes: object) -> Adviser:
    given: dict[str, object] = {"slope": SLOPE_V, "more_way": "anticlockwise", "turns": 12.0, "noise": NOISE_V}
    return Adviser(TARGET_V, LOW_V, HIGH_V, **(given | changes))  # type: ignore[arg-type]


@dataclass
class Bench:
    """A stage whose drop follows its screw; time passes in steps."""

    value: float = 5e-5
    stronger: float = 1.0
    asleep: float = 0.0
    scale: Scale = SCALE
    adviser: Adviser = field(default_factory=adviser)
    rng: np.random.Generator = field(default_factory=lambda: np.random.default_rng(1))
    t_s: float = 0.0
    rail_a: float | None = None
    seen: list[Advice] = field(default_factory=list)
    broken: bool = False

    def turn(self, turns: float, *, known: bool = False, seconds: float = 1.0) -> None:
        if known:
            self.adviser.turned(turns)
        steps = max(1, round(seconds / STEP_S))
        for _ in range(steps):
            self.asleep -= turns / steps if self.asleep > 0.0 else 0.0
            if not self.broken and self.asleep <= 0.0:
                scale = self.scale
                u = scale.even(self.value) + turns / steps * self.stronger * SLOPE_V * SCALE.steepness(TARGET_V)
                self.value = scale.value_at(u)
            self.read()

    def read(self, value: float | None = -1.0, **more: Any) -> Advice:
        self.t_s += STEP_S
        shown = self.value + NOISE_V * self.rng.standard_normal() if value == -1.0 else value
        rail = None if self.rail_a is None else (self.t_s, self.rail_a)
        self.seen.append(self.adviser.add(self.t_s, shown, rail=rail, **more))
        return self.seen[-1]

    def look(self, seconds: float = 1.5, **more: Any) -> Advice:
        for _ in range(round(seconds / STEP_S)):
            last = self.read(**more)
        return last


# -- the way to the target ------------------------------------------------------------------------------------------


@pytest.mark.parametrize("known", [False, True])
@pytest.mark.parametrize("stronger", [0.4, 0.7, 1.0, 1.5, 2.2])
def test_a_hand_that_follows_the_advice_arrives_without_much_overshoot(stronger: float, known: bool) -> None:
    bench = Bench(stronger=stronger, rng=np.random.default_rng(int(10 * stronger)))
    hand = np.random.default_rng(7)
    highest = 0.0
    for moves in range(14):  # noqa: B007
        advice = bench.look()
        highest = max(highest, bench.value)
        if advice.mood == "steady":
            break
        assert advice.turns is not None, advice
        assert abs(advice.turns) <= MOST_TURNS
        told = advice.turns if known else math.copysign(taken_for(abs(advice.turns), 12.0), advice.turns)
        bench.turn(told * (1.0 + 0.15 * hand.standard_normal()), known=known)
    assert advice.mood == "steady"
    assert LOW_V < bench.value < HIGH_V
    assert highest < 1.15 * HIGH_V
    assert moves <= 12
    assert advice.slope_source == "this unit"


def test_the_first_advice_is_half_of_the_model_and_its_words_name_way_and_amount() -> None:
    bench = Bench(value=0.016)
    advice = bench.look()
    whole = (SCALE.even(TARGET_V) - SCALE.even(0.016)) / (SLOPE_V * SCALE.steepness(TARGET_V))
    assert advice.turns is not None
    assert 0.5 * 0.5 * whole < advice.turns <= 0.5 * whole
    assert advice.words == "an eighth of a turn anticlockwise"
    assert advice.slope_source == "the model"
    above = Bench(value=0.03).look()
    assert above.turns is not None
    assert above.turns < 0.0
    assert above.words.endswith(" clockwise")


@pytest.mark.parametrize("known", [True, False])
def test_it_learns_what_this_unit_does(known: bool) -> None:
    bench = Bench(value=0.012, stronger=1.6)
    advice = bench.look()
    assert advice.turns is not None
    bench.turn(advice.turns, known=known)
    bench.look()
    assert bench.adviser.slope_source == "this unit"
    assert bench.adviser.slope is not None
    assert 1.15 < bench.adviser.slope / SLOPE_V < 1.75


def test_without_a_model_it_goes_by_quarter_turns_until_it_knows() -> None:
    bench = Bench(value=0.012, adviser=adviser(slope=None))
    advice = bench.look()
    assert advice.turns == 0.25
    assert advice.slope_source == "nothing yet"
    bench.turn(0.25)
    assert bench.look().slope_source == "this unit"


def test_what_creeps_is_no_answer_to_the_screw() -> None:
    bench = Bench(value=0.012)
    for _ in range(600):
        bench.value += 5e-6  # 50 uV a second: a stage that warms up
        bench.read()
    assert bench.adviser.slope_source == "the model"
    assert all(advice.moved_s is None for advice in bench.seen)
    assert {advice.mood for advice in bench.seen} == {"turn"}


def test_the_predicted_rest_is_aimed_at() -> None:
    bench = Bench(value=0.0215)
    advice = bench.look(rest=0.027)
    assert advice.mood == "inside"
    assert advice.words.startswith("but still rising")
    assert advice.turns is not None
    assert advice.turns < 0.0
    waiting = Bench(value=0.0185).look(rest=0.0218)
    assert (waiting.mood, waiting.words, waiting.turns) == ("turn", "hold: it is still rising", None)
    soon = Bench(value=0.0203).look(rest=0.0221)
    assert (soon.mood, soon.words, soon.turns) == ("inside", "hold: it is still rising", None)
    there = Bench(value=0.0212).look(rest=0.0221)
    assert there.mood == "steady"


@pytest.mark.parametrize(
    ("value", "guard", "mood", "words"),
    [
        (0.0214, 0.0, "steady", "leave it"),
        (0.0208, 0.0, "inside", "1.2 mV below the target: a touch anticlockwise"),
        (0.0234, 0.0, "inside", "1.4 mV above the target: a touch clockwise"),
        (0.0214, 0.0018, "inside", "600 uV below the target: a touch anticlockwise"),
        (0.0219, 0.0100, "steady", "leave it"),  # the meter is too coarse to be nearer than this
    ],
)
def test_advice_goes_on_until_it_is_near_and_clear_of_the_limits(
    value: float, guard: float, mood: str, words: str
) -> None:
    bench = Bench(value=value)
    bench.adviser.guards(guard)
    advice = bench.look()
    assert advice.mood == mood
    assert advice.words.startswith(words)
    assert (advice.turns is None) is (mood == "steady")


STANDING_A, SPAN_A = 0.022, 0.097


def test_what_else_hangs_on_a_rail_is_taken_off_before_turns_are_worked_out() -> None:
    """The same stage, read as its rail's current: the advice has to be that of its drop."""
    per_drop = SPAN_A / TARGET_V
    for drop in (0.006, 0.016, 0.021, 0.030):
        by_drop, by_current = adviser(), by_current_of_rail()
        for n in range(20):
            one = by_drop.add(0.1 * n, drop)
            other = by_current.add(0.1 * n, STANDING_A + per_drop * drop)
        assert other.mood == one.mood
        assert other.turns == pytest.approx(one.turns, rel=1e-6) if one.turns else other.turns is None


def by_current_of_rail() -> Adviser:
    per_drop = SPAN_A / TARGET_V
    return Adviser(
        STANDING_A + SPAN_A, STANDING_A + 0.9 * SPAN_A, STANDING_A + 1.1 * SPAN_A, slope=SLOPE_V * per_drop,
        more_way="anticlockwise", turns=12.0, noise=NOISE_V * per_drop, knee=KNEE_V * per_drop, standing=STANDING_A,
        unit="A",
    )  # fmt: skip


# -- what goes wrong --------------------------------------------------------------------------------------------------


def test_overshot() -> None:
    bench = Bench(value=0.015)
    bench.look()
    bench.turn(1.1)
    advice = bench.look()
    assert advice.mood == "overshot"
    assert advice.words.startswith("too far: ")
    assert advice.words.removesuffix(SLACK).endswith(" clockwise")


def test_wrong_way() -> None:
    bench = Bench(value=0.015)
    bench.look()
    bench.turn(-0.4)
    advice = bench.look()
    assert advice.mood == "wrong way"
    assert advice.words.startswith("that was the wrong way: ")
    bench.turn(0.5)
    assert bench.look().mood == "turn"


def test_no_response_is_told_and_ends_after_two_turns_more() -> None:
    bench = Bench(value=0.012, broken=True)
    moods: list[str] = []
    turned = 0.0
    for _ in range(30):
        advice = bench.look()
        moods.append(advice.mood)
        if advice.turns is None:
            break
        turned += advice.turns
        bench.turn(advice.turns, known=True)
    assert moods[0] == "turn"
    assert moods[1] == "no response"
    assert "stop" in advice.words
    assert "wiper open" in advice.words.lower()
    assert turned < 2.0 + 2.0


TURNS = np.linspace(0.0, 12.0, 121)


def slow_units() -> OfUnits:
    """Units whose drop sleeps for up to five turns and then wakes."""
    curves = []
    for asleep in (0.0, 2.0, 5.0):
        u = SCALE.even(2e-6) + np.maximum(TURNS - asleep, 0.0) * SLOPE_V * SCALE.steepness(TARGET_V)
        curves.append([SCALE.value_at(float(one)) for one in u])
    return OfUnits(TURNS, np.array(curves).T)


def moods_of_a_hand(bench: Bench) -> tuple[list[str], float]:
    moods: list[str] = []
    turned = 0.0
    for _ in range(40):
        advice = bench.look()
        moods.append(advice.mood)
        if advice.turns is None:
            break
        turned += advice.turns
        bench.turn(advice.turns, known=True)
    return moods, turned


@pytest.mark.parametrize("asleep", [0.0, 3.0, 4.8])
def test_a_healthy_unit_that_hardly_moves_for_some_turns_is_not_accused(asleep: float) -> None:
    bench = Bench(value=2e-6, asleep=asleep, adviser=adviser(answers=slow_units()))
    moods, _ = moods_of_a_hand(bench)
    assert moods[-1] == "steady"
    assert "no response" not in moods


def test_a_wiper_that_is_open_from_the_beginning_is_found_later_but_is_found() -> None:
    bench = Bench(value=2e-6, broken=True, adviser=adviser(answers=slow_units()))
    moods, turned = moods_of_a_hand(bench)
    assert moods[-2:] == ["no response", "no response"]
    assert "stop" in bench.seen[-1].words
    assert 5.0 < turned <= 12.0


def test_nobody_knows_whether_a_real_hand_has_turned() -> None:
    bench = Bench(value=0.012, broken=True)
    assert bench.look(10.0).mood == "turn"
    advice = bench.look(4.0)
    assert advice.mood == "no response"
    assert "If the screw was turned" in advice.words


def test_a_move_that_the_meter_cannot_see_yet_is_no_silence() -> None:
    """Far below the knee a turn moves the drop by microvolts, and this meter reads to 0.1 mV."""
    bench = Bench(value=5e-5, adviser=adviser(noise=1e-4))
    for _ in range(3):
        advice = bench.look()
        assert advice.mood == "turn", advice
        bench.turn(0.3, known=True)


@pytest.mark.parametrize(
    ("rail_after", "mood", "words"),
    [
        (0.03, "no response", "the supply's current with it: the wiper has opened"),
        (0.09, "gone", "the probe has slipped"),
        (None, "no response", "is the probe on the point? Then the wiper has opened"),
    ],
)
def test_a_reading_that_falls_away_while_turning(rail_after: float | None, mood: str, words: str) -> None:
    bench = Bench(value=0.014, rail_a=None if rail_after is None else 0.09)
    bench.look()
    bench.turn(0.05)
    bench.look()
    bench.value, bench.broken, bench.rail_a = 6e-5, True, rail_after
    advice = bench.look(2.0)
    assert advice.mood == mood
    assert words in advice.words
    assert advice.turns is None
    bench.value, bench.rail_a = 0.014, None if rail_after is None else 0.09
    assert bench.look(2.0).mood == "turn"


@pytest.mark.parametrize("early", [1, 2])
def test_a_wiper_is_told_by_the_current_although_the_supply_answered_first(early: int) -> None:
    """Meter and supply are asked side by side: the current may show it a reading or two before the meter does."""
    bench = Bench(value=0.014, rail_a=0.09)
    bench.look()
    bench.rail_a = 0.03
    for _ in range(early):
        bench.read()
    bench.value, bench.broken = 6e-5, True
    advice = bench.look(2.0)
    assert advice.mood == "no response"
    assert "the supply's current with it: the wiper has opened" in advice.words


def test_a_wiper_that_takes_the_drivers_current_away_too_has_opened() -> None:
    """An open wiper collapses the spread further than the least bias does: the supply loses more than the drop says."""
    line = RailLine(standing_a=0.02, per_unit=1.0 / 0.22)
    bench = Bench(value=0.00285, adviser=adviser(line=line), rail_a=0.0359)
    bench.look()
    bench.turn(0.1)
    bench.value, bench.broken, bench.rail_a = -6e-7, True, 0.0159
    bench.look(5.0)
    for advice in bench.seen[-25:]:
        assert advice.mood == "no response", advice
        assert "the supply's current with it: the wiper has opened" in advice.words


def test_a_probe_that_slips_is_told_from_it_by_a_current_that_stays() -> None:
    line = RailLine(standing_a=0.02, per_unit=1.0 / 0.22)
    bench = Bench(value=0.00285, adviser=adviser(line=line), rail_a=0.0359)
    bench.look()
    bench.turn(0.1)
    bench.value, bench.broken = -6e-7, True
    bench.look(3.0)
    said = {advice.words for advice in bench.seen[-20:]}
    assert any("slipped" in words or "probe" in words for words in said)
    assert not any("wiper has opened" in words for words in said)


def test_a_reading_that_falls_away_far_below_the_target_is_not_told_by_the_current() -> None:
    bench = Bench(value=1e-4, rail_a=0.020)
    bench.look()
    bench.adviser.turned(1.0)
    bench.value, bench.broken = 5e-6, True
    advice = bench.look()
    assert advice.mood == "no response"
    assert "Then the wiper has opened" in advice.words


def test_a_move_before_the_reading_was_ever_calm_is_learnt_from_too() -> None:
    bench = Bench(value=0.010)
    bench.read()
    bench.turn(0.3, known=True)
    assert bench.look().mood == "turn"
    assert bench.adviser.slope_source == "this unit"


def test_a_wiper_that_opens_is_told_from_a_lead_in_the_air_by_the_current() -> None:
    bench = Bench(value=0.014, rail_a=0.09)
    bench.look()
    bench.value, bench.rail_a = 1e-6, 0.03
    advice = bench.look(1.0, gone="next to nothing")
    assert "the wiper has opened" in advice.words


@pytest.mark.parametrize(
    ("do", "mood", "words"),
    [
        (lambda bench: bench.read(None), "gone", "overload"),
        (lambda bench: bench.read(gone="it jumps"), "gone", "it jumps"),
        (lambda bench: bench.read(folded=True), "folded back", "half a turn clockwise"),
        (lambda bench: bench.read(running_away=True), "running away", "faster and faster"),
    ],
)
def test_other_trouble_in_words(do: Callable[[Bench], Advice], mood: str, words: str) -> None:
    bench = Bench(value=0.014)
    bench.look()
    advice = do(bench)
    assert advice.mood == mood
    assert words in advice.words


def test_a_probe_that_slips_teaches_nothing() -> None:
    bench = Bench(value=0.014)
    bench.look()
    for _ in range(10):
        bench.read(None)
    assert bench.look(1.0).turns is None
    assert bench.look().mood == "turn"
    assert bench.adviser.slope_source == "the model"


def test_by_hand_every_entry_counts() -> None:
    by_hand = adviser(calm_s=0.0, noise=3e-5)
    first = by_hand.add(0.0, 0.010)
    assert first.mood == "turn"
    assert by_hand.add(20.0, 0.0145).slope_source == "this unit"
    assert by_hand.add(40.0, 0.0300).mood == "overshot"
    assert by_hand.add(60.0, 0.0221).mood == "steady"


# -- is it the point at all -------------------------------------------------------------------------------------------

PER_V = 4.0
LINE = RailLine(standing_a=0.02, per_unit=PER_V)


def rail_at(drop_v: float) -> float:
    return LINE.standing_a + PER_V * drop_v


@pytest.mark.parametrize("before", [None, 0.015, 0.030])
@pytest.mark.parametrize("overload", [0, 8])
@pytest.mark.parametrize("known", [True, False])
def test_swapped_probes_are_never_told_to_turn(before: float | None, overload: int, known: bool) -> None:
    bench = Bench(rail_a=rail_at(before or 0.015) if known else None, adviser=adviser(line=LINE))
    if before is not None:
        bench.value = before
        bench.look()
    for _ in range(overload):
        bench.read(None)
    bench.value = -(before or 0.015)
    for _ in range(60):
        advice = bench.read()
        assert advice.mood == "gone"
        assert advice.turns is None
    assert "swapped" in advice.words
    bench.value = before or 0.015
    assert bench.look(3.0).mood == "turn"


@pytest.mark.parametrize("after", [0.0, 2e-4, 0.004, 0.011])
@pytest.mark.parametrize("before", [0.016, 0.022, 0.030])
@pytest.mark.parametrize("overload", [0, 10])
@pytest.mark.parametrize("line", [LINE, None])
def test_another_point_under_the_probe_is_no_reason_for_more(
    before: float, after: float, overload: int, line: RailLine | None
) -> None:
    """The supply's current goes on as before: the bias did not fall."""
    if line is None and not overload and after > 0.5 * before:
        return  # a quick hand does as much, and nothing tells
    bench = Bench(value=before, rail_a=rail_at(before), adviser=adviser(line=line))
    bench.look(2.0)
    for _ in range(overload):
        bench.read(None)
    bench.value = after
    for _ in range(100):
        advice = bench.read()
        assert (advice.turns or 0.0) <= 0.0, advice
    assert advice.mood == "gone"
    bench.value = before
    assert bench.look(3.0).mood == ("turn" if before != TARGET_V else "steady")


def test_a_fall_that_the_current_has_too_is_believed_once_it_stands() -> None:
    bench = Bench(value=0.021, rail_a=rail_at(0.021), adviser=adviser(line=LINE))
    bench.look(2.0)
    bench.value, bench.rail_a = 0.011, rail_at(0.011)
    assert bench.look(1.3).turns is None
    advice = bench.look(1.0)
    assert advice.mood == "turn"
    assert advice.turns is not None
    assert advice.turns > 0.0
    assert advice.slope_source == "the model"


def test_a_first_reading_that_hides_the_bias_is_no_reason_for_more() -> None:
    """A trimmer as found, and the probes on a point that reads next to nothing."""
    bench = Bench(value=1e-4, rail_a=rail_at(0.020), adviser=adviser(line=LINE))
    for _ in range(50):
        bench.read()
    assert bench.seen[-1].mood == "gone"
    assert "more bias than this reading" in bench.seen[-1].words
    assert not any((advice.turns or 0.0) > 0.0 for advice in bench.seen)
    least = Bench(value=1e-4, rail_a=rail_at(1e-4), adviser=adviser(line=LINE)).look()
    assert least.turns is not None
    assert least.turns > 0.0


@pytest.mark.parametrize("seed", range(6))
@pytest.mark.parametrize("rail", [True, False])
def test_a_lead_in_the_air_is_never_told_to_turn(seed: int, rail: bool) -> None:
    rng = np.random.default_rng(seed)
    bench = Bench(value=0.016, rail_a=rail_at(0.016) if rail else None, adviser=adviser(line=LINE), rng=rng)
    bench.look(2.0)
    for n in range(200):
        advice = bench.read(None) if n % 20 == 19 else bench.read(float(0.0025 * rng.standard_normal()))
        assert advice.turns is None, (n, advice)
    bench.value = 0.016
    assert bench.look(3.0).mood == "turn"


def test_where_no_current_tells_the_probe_is_put_on_again() -> None:
    bench = Bench(value=0.021)
    bench.look(2.0)
    bench.value = 0.012
    advice = bench.look(3.0)
    assert advice.turns is None
    assert "put it on again" in advice.words
    for _ in range(6):
        bench.read(None)
    assert bench.look(2.0).mood == "turn"


def test_a_fallen_entry_is_typed_again_before_more_is_advised() -> None:
    by_hand = adviser(calm_s=0.0, noise=3e-5)
    assert by_hand.add(0.0, 0.018).mood == "turn"
    fallen = by_hand.add(20.0, 0.0095)
    assert fallen.mood == "gone"
    assert fallen.turns is None
    assert "type what they read" in fallen.words
    again = by_hand.add(30.0, 0.0096)
    assert again.turns is not None
    assert again.turns > 0.0
    assert by_hand.add(40.0, -0.0096).words.startswith("it reads negative")
    assert by_hand.add(50.0, None).turns is None
    assert by_hand.add(60.0, 0.0040).turns is None


@pytest.mark.parametrize(
    ("change", "expected"),
    [
        (lambda bench: None, False),
        (lambda bench: setattr(bench, "rail_a", rail_at(0.022)), True),
        (lambda bench: setattr(bench, "rail_a", rail_at(0.012)), False),
        (lambda bench: [bench.read(None) for _ in range(6)], True),
        (lambda bench: bench.read(None), False),
        (lambda bench: bench.turn(0.1, known=True), True),
        (lambda bench: bench.turn(0.1), False),  # nothing was advised, nobody knows of it
    ],
    ids=["nothing", "current", "other current", "off and on", "one overload", "a turn", "a move by itself"],
)
def test_what_proves_that_a_reading_is_of_the_point(change: Callable[[Bench], Any], expected: bool) -> None:
    bench = Bench(value=0.0215, adviser=adviser(line=LINE))
    bench.look(2.0)
    change(bench)
    bench.look(2.0)
    assert bench.adviser.proven(bench.value, bench.rail_a) is expected


@pytest.mark.parametrize("first", [0.0138, 0.030])
def test_first_readings_of_the_point_before_are_forgotten_when_the_current_says_so(first: float) -> None:
    """The offset stood there until the probe came; least bias is what the supply carries all the time."""
    bench = Bench(value=first, rail_a=rail_at(2e-6), adviser=adviser(line=LINE))
    bench.look(2.0)
    bench.value = 2e-6
    advice = bench.look(3.0)
    assert advice.mood == "turn"
    assert advice.turns is not None
    assert advice.turns > 0.0
