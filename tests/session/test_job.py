"""What is no answer to a question."""

from __future__ import annotations

import pytest

from benchkit.procedure import questions
from benchkit.procedure.actions import Question
from benchkit.session.front import Reply
from benchkit.session.job import refusal
from tests.procedure.driver import item_of, small

OFF_ITEM = item_of(small(), "made-safe.off")
OFF_QUESTIONS = [
    questions.supply_off(OFF_ITEM),
    questions.by_hand_off(OFF_ITEM, "No answer."),
    questions.lamp_off(OFF_ITEM),
]


@pytest.mark.parametrize("question", OFF_QUESTIONS)
@pytest.mark.parametrize("text", ["47.68 mV", "no", "0", "on", "47.68"])
def test_a_figure_never_says_that_a_supply_is_off(question: Question, text: str) -> None:
    said = refusal(question, Reply(choice="done", text=text))
    assert f'"{text}" came' in said
    assert "Enter alone" in said


@pytest.mark.parametrize("question", OFF_QUESTIONS)
@pytest.mark.parametrize("text", ["", " ", "off", "Done", "yes"])
def test_nothing_typed_or_the_word_does(question: Question, text: str) -> None:
    assert refusal(question, Reply(choice="done", text=text)) == ""
