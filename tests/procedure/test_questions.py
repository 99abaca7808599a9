from __future__ import annotations

from dataclasses import replace

import pytest

from benchkit.events import Judged, PointLimits
from benchkit.judge.falls import fall_words
from benchkit.judge.limits import Limits
from benchkit.procedure import questions
from benchkit.procedure.actions import Ask, Read, Write
from benchkit.procedure.items import Item
from tests.procedure.driver import begun, item_of, judged, reading, shipped, small


def values(item: Item) -> list[str]:
    return [choice.value for choice in questions.question_for(item).choices]


@pytest.mark.parametrize(
    ("item", "kind", "choices"),
    [
        ("cold.least", "tell", ["done", "make safe"]),
        ("look.parts", "confirm", ["yes", "no", "make safe"]),
        ("cold.remark", "text", ["done", "make safe"]),
        ("power.ready", "hold", ["yes", "make safe"]),
    ],
)
def test_each_kind_has_its_answers(item: str, kind: str, choices: list[str]) -> None:
    found = item_of(small(), item)
    assert questions.question_for(found).kind == kind
    assert values(found) == choices


def test_a_placing_says_where_the_probes_go_and_what_comes() -> None:
    item = item_of(small(), "power.output-first.output")
    question = questions.placing(item, Limits(-0.02, 0.02, 0.0, "V", "the model"))
    assert (question.kind, question.point, question.black) == ("probes", "output", "0 V")
    assert "-20.00 mV to 20.00 mV" in question.expected
    assert "the model" in question.expected


def test_expected_text_leaves_an_open_nominal_out() -> None:
    text = questions.expected_text(Limits(100.0, None, None, "ohm", "stated in the procedure"))
    assert text == "at least 100.0 ohm (stated in the procedure)"


def test_a_trim_can_be_taken_given_up_or_stopped() -> None:
    question = questions.trimming(item_of(small(), "bias.trim.emitter.upper.1"))
    assert [choice.value for choice in question.choices] == ["take", "end", "make safe"]
    assert question.red
    assert question.black


@pytest.mark.parametrize(
    ("item", "way_out", "choices"),
    [
        ("power.current.rail+.current", False, ["again", "go on", "make safe"]),
        ("power.output-first.output", False, ["again", "make safe"]),
        ("cold.end.ohm.spreader.lower", False, ["again", "make safe"]),
        ("made-safe.rails-low.rail+", True, ["again", "go on"]),
    ],
)
def test_what_can_be_decided(item: str, way_out: bool, choices: list[str]) -> None:
    question = questions.deciding(item_of(small(), item), judged(item, "fail"), "", way_out=way_out)
    assert [choice.value for choice in question.choices] == choices
    assert question.title.endswith("failed.")
    assert all(choice.wants_reason == (choice.value == "go on") for choice in question.choices)
    assert ("no way past" in question.caution) == ("go on" not in choices)


@pytest.mark.parametrize("now_a", [None, 0.02])
def test_after_an_opened_wiper_the_usual_answer_is_to_make_safe(now_a: float | None) -> None:
    """What the adviser says there is known here."""
    _, why = fall_words(0.1, now_a)
    item = item_of(small(), "bias.trim.emitter.upper.1")
    question = questions.deciding(item, replace(judged(item.id, "fail"), why=why), "", way_out=False)
    assert [choice.value for choice in question.choices] == ["make safe", "again"]
    assert "least-bias end" in question.caution
    other = questions.deciding(item, replace(judged(item.id, "fail"), why="too high"), "", way_out=False)
    assert other.choices[0].value == "again"


def test_no_result_is_said_as_such() -> None:
    question = questions.deciding(item_of(small(), "look.parts"), None, "no answer", way_out=False)
    assert "no result" in question.title
    assert question.do == "no answer"


def test_off_by_hand_has_one_answer_and_treats_the_unit_as_live() -> None:
    question = questions.by_hand_off(item_of(small(), "made-safe.off"), "No answer.")
    assert [choice.value for choice in question.choices] == ["done"]
    assert "live" in question.caution
    assert question.do.startswith("No answer.")


def test_model_limits_name_their_condition() -> None:
    limits = questions.model_limits(PointLimits(point="output", unit="V", nominal=0.0, low=-1.0, high=None), "cold")
    assert (limits.low, limits.high, limits.source) == (-1.0, None, "the model: cold")


@pytest.mark.parametrize("name", ["tern-40", "breadboard"])
def test_every_word_in_braces_is_filled_in(name: str) -> None:
    for item in shipped(name).items:
        for text in (item.title, item.do, item.why, item.caution, item.expected):
            assert "{" not in text, item.id
            assert "  " not in text, item.id


def test_a_value_inside_that_the_meter_leaves_open_is_not_said_to_be_just_outside() -> None:
    walk = small()
    drive = begun(walk)
    while not isinstance(drive.open, Read) or item_of(walk, drive.open.item).condition is None:
        drive.well()
    item = item_of(walk, drive.open.item)
    limits = walk.limits_for(drive.state, item)
    assert limits is not None
    assert limits.low is not None
    assert limits.high is not None
    drive.tell(reading(item, (limits.low + limits.high) / 2.0, u=limits.width))
    (write,) = drive.actions
    assert isinstance(write, Write)
    assert isinstance(write.event, Judged)
    assert (write.event.verdict, write.event.rare) == ("undecided", True)
    assert questions.INSIDE_WHY in write.event.why
    drive.tell(write.event)
    assert isinstance(drive.open, Ask)
    assert "outside" not in drive.open.question.title
    assert "measure again" not in drive.open.question.caution
