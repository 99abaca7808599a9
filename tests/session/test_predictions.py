from __future__ import annotations

import math
from dataclasses import replace
from typing import Any

import pytest

from benchkit.errors import ModelError
from benchkit.events import Event, Judged, OutputOff
from benchkit.procedure.actions import CheckWarm, Question
from benchkit.session import predictions
from benchkit.session.front import Reply
from benchkit.stage import warming
from benchkit.stage.conditions import Condition
from benchkit.stage.design import Design, parse_design
from tests.procedure.driver import small
from tests.session.fakes import Run, quick_predictions
from tests.stage.designs import tern

WARM = Condition(positive_v=35.0, negative_v=-35.0, limit_a=0.2, trimmer="target", when="warm")


def check(design: Design, *conditions: Condition) -> Judged:
    return predictions.check_warm(design, CheckWarm(item="i", conditions=conditions), 1)


def test_a_design_that_comes_to_rest_passes_with_its_loop_gain() -> None:
    found = check(tern(), WARM)
    assert (found.item, found.subject, found.verdict, found.high) == ("i", "warm state", "pass", 1.0)
    assert found.value is not None
    assert 0.0 < found.value < 0.5
    assert "comes to rest" in found.why


def test_a_design_without_a_warm_state_fails_and_says_what_to_do() -> None:
    text = tern().text.replace('heatsink = "1.2 K/W"', 'heatsink = "12 K/W"')
    text = text.replace("spreader_tracking = 0.7", "spreader_tracking = 0.0")
    assert text != tern().text
    found = check(parse_design(text, "hot.toml"), WARM)
    assert found.verdict == "fail"
    assert "no" in found.why
    assert "warm state" in found.why
    assert "spreader" in found.why
    assert found.value is None or found.value > 0.0


def test_the_worst_of_several_conditions_is_told(monkeypatch: pytest.MonkeyPatch) -> None:
    class Report:
        def __init__(self, gain: float) -> None:
            self.gain = self.worst_gain = gain
            self.has_warm_state = gain < 1.0
            self.sentence, self.next_step = f"gain {gain}", "Enlarge the heat sink"

    gains = iter([0.1, 0.4, 0.2])
    monkeypatch.setattr(warming, "warm_report", lambda design, condition, seed: Report(next(gains)))
    found = check(tern(), WARM, WARM, WARM)
    assert (found.verdict, found.value, found.why) == ("pass", 0.4, "gain 0.4")
    gains = iter([0.1, math.inf])
    found = check(tern(), WARM, WARM)
    assert (found.verdict, found.value, found.why) == ("fail", None, "gain inf Enlarge the heat sink.")


def test_a_model_that_can_not_tell_decides_nothing(monkeypatch: pytest.MonkeyPatch) -> None:
    def fails(*arguments: Any, **more: Any) -> Any:
        raise ModelError("There is no solution", "one", "Look at the design")

    monkeypatch.setattr(warming, "warm_report", fails)
    found = check(tern(), WARM)
    assert (found.verdict, found.value) == ("undecided", None)
    assert "no solution" in found.why


@pytest.mark.parametrize(("choice", "verdict"), [("go on", "fail"), ("make safe", "fail")])
def test_a_walk_is_refused_until_somebody_with_a_reason_overrides(
    monkeypatch: pytest.MonkeyPatch, choice: str, verdict: str
) -> None:
    quick_predictions(monkeypatch)

    def hot(design: Design, action: CheckWarm, seed: int) -> Event:
        return Judged(
            item=action.item, subject="warm state", verdict="fail", value=None, unit="", low=None, high=1.0, why="hot"
        )

    monkeypatch.setattr(predictions, "check_warm", hot)
    run = Run()
    asked: list[str] = []

    async def answer(question: Question, refused: str) -> Reply | None:
        if question.kind != "decide":
            return None
        asked.append(refused)
        return Reply(choice=choice, text="" if choice == "go on" and len(asked) == 1 else "cold readings only")

    run.front.answer = answer
    closed = run.go()
    assert closed.verdict == verdict
    if choice == "go on":
        assert asked[1], "a reason is wanted"
        assert run.session.state.overrides == {"look.warm-state": "cold readings only"}
        assert len(run.session.state.results) > 5
    else:
        assert run.keeper.sets == [], "nothing was ever switched on"
        assert any(isinstance(event, OutputOff) for event in run.keeper.kept)
    assert small().plan.items[1].kind == "warm state"


@pytest.mark.parametrize(
    ("point", "share", "volts"),
    [("emitter.upper.1", 1.0, 1.0), ("emitter.lower.1", 0.25, 1.0), ("emitter.pair.1", 1.0, 2.0)],
)
def test_what_a_turn_does_to_a_drop(point: str, share: float, volts: float) -> None:
    from benchkit.session.predictions import screw_of
    from benchkit.stage.design import target_drop_v
    from benchkit.stage.trimmer_slope import slope

    design = tern()
    screw = screw_of(design, point, share * volts * target_drop_v(design), share)
    assert screw.per_turn == pytest.approx(volts * slope(design).drop_v_per_turn)
    assert screw.full == pytest.approx(volts * target_drop_v(design))
    assert screw.knee == pytest.approx(volts * 0.03)
    assert screw.settled_share > 1.0
    assert (screw.more_way, screw.turns) == (design.spreader.trimmer.raises_bias, design.spreader.trimmer.turns)  # type: ignore[union-attr]


def test_what_a_turn_does_to_a_rail() -> None:
    from benchkit.session.predictions import screw_of
    from benchkit.stage.trimmer_slope import slope

    design = tern()
    current = screw_of(design, "rail+.current", 0.11, 1.0)
    assert current.per_turn == pytest.approx(slope(design).current_a_per_turn, rel=0.02)
    drop = screw_of(design, "rail+.drop", 0.11, 1.0, 1.0)
    assert drop.per_turn == pytest.approx(current.per_turn)
    assert screw_of(design, "rail+.drop", 0.11, 1.0).per_turn is None


def test_what_hangs_on_a_rail_beside_the_bias_is_known() -> None:
    from benchkit.session.predictions import screw_of
    from benchkit.stage.trimmer import at_target, full_rails, quiescent_a

    design = tern()
    unit, _ = at_target(design)
    rail_a, bias_a = float(unit.points["rail+.current"][0]), float(quiescent_a(design, unit)[0])
    warm = full_rails(design)
    whole = screw_of(design, "rail+.current", rail_a, 1.0, None, warm)
    assert whole.standing == pytest.approx(rail_a - bias_a, rel=1e-3)
    assert 0.01 < whole.standing < 0.03
    assert whole.full == pytest.approx(rail_a)
    fuse = replace(warm, fuse_ohm=2.0)
    drop = screw_of(design, "rail+.drop", 2.0 * rail_a, 1.0, 2.0, fuse)
    assert drop.standing == pytest.approx(2.0 * whole.standing, rel=0.02)
    half = screw_of(design, "rail+.current", whole.standing + 0.5 * bias_a, 0.5, None, warm)
    assert half.full == pytest.approx(rail_a, rel=0.02)
    assert screw_of(design, "emitter.upper.1", 0.022, 1.0, None, warm).standing == 0.0


def test_what_may_be_expected_of_units_is_that_of_their_curves() -> None:
    from benchkit.session.predictions import answers_of
    from benchkit.stage.trimmer import full_rails

    answers = answers_of(tern(), "emitter.upper.1", full_rails(tern()))
    assert answers is not None
    assert answers.least_change(0.02, 0.5, 1e-6) > 0.003
    assert answers.least_change(5e-6, 0.5, 1e-6) < 1e-5
    assert answers_of(tern(), "emitter.upper.1", None) is None
    assert answers_of(tern(), "emitter.upper.9", full_rails(tern())) is None


def test_time_constants_are_the_longest_first() -> None:
    from benchkit.session.predictions import time_constants

    lags_s = time_constants(tern())
    assert len(lags_s) >= 2
    assert list(lags_s) == sorted(lags_s, reverse=True)
    assert lags_s[-1] > 0.0


def test_a_runaway_in_words() -> None:
    from benchkit.session.predictions import runaway

    tripped = runaway("emitter.upper.1", "V", 0.0312, 0.0242)
    assert tripped.reason == "emitter.upper.1 rises by itself, faster and faster: 31.2 mV"
    assert (tripped.what, tripped.value, tripped.limit) == ("emitter.upper.1", 0.0312, 0.0242)
