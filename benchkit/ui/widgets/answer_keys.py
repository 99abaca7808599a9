"""Which key takes which choice, and what a typed answer means: without a terminal."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Final

from benchkit.procedure.actions import Choice, Question
from benchkit.session.front import Reply

ENTER: Final = "\n"
"""How Enter is kept of what is typed ahead; what comes after it belongs to nothing that is known yet."""


def typed_on(text: str, key: str, character: str | None) -> str:
    """Return a half typed text after another key.

    Examples
    --------
    >>> typed_on("1.2", "3", "3"), typed_on("1.2", "backspace", None), typed_on("1.2", "enter", None) == "1.2" + ENTER
    ('1.23', '1.', True)
    """
    if key == "backspace":
        return text[:-1]
    if key == "enter":
        return text + ENTER
    return text if character is None or ENTER in text else text + character


def keyed(choices: Sequence[Choice]) -> tuple[tuple[str, Choice], ...]:
    """Return each choice with its letter: the first free letter of its value, else of its label, else a figure.

    Examples
    --------
    >>> again, away = Choice(value="again", label="Read again"), Choice(value="away", label="Put it away")
    >>> [letter for letter, _ in keyed([again, away])]
    ['a', 'w']
    """
    taken: list[tuple[str, Choice]] = []
    for number, choice in enumerate(choices, start=1):
        used = {letter for letter, _ in taken}
        letters = [letter for letter in (choice.value + choice.label).lower() if letter.isascii() and letter.isalpha()]
        free = [letter for letter in letters if letter not in used]
        taken.append((free[0] if free else str(number), choice))
    return tuple(taken)


def keys_in_words(choices: Sequence[Choice]) -> str:
    """Return the keys of `choices` for a sentence.

    Examples
    --------
    >>> keys_in_words([Choice(value="yes", label="Yes"), Choice(value="no", label="No")])
    'Y or N'
    """
    letters = [letter.upper() for letter, _ in keyed(choices)]
    return " or ".join(part for part in (", ".join(letters[:-1]), letters[-1] if letters else "") if part)


def typed_reply(question: Question, text: str) -> Reply | Choice | str:
    """Return the reply that `text` means, the choice that it names where that wants a reason too, or why it means none.

    At a hold point only the whole word ``yes`` passes; the other choices may be typed too.  Elsewhere the text goes to
    the first choice as it is: whether it can be used is not for a screen to say.  What is done by hand without a test
    point may be answered with nothing.
    """
    if question.kind == "hold":
        word = text.casefold()
        for choice in question.choices:
            if word == choice.value.casefold():
                return choice if choice.wants_reason else Reply(choice=choice.value, text=text)
        if not question.choices and word == "yes":
            return Reply(choice="yes", text=text)
        was = f'"{text}" was typed' if text else "Nothing was typed yet"
        return f"{was}. Only the whole word yes, then Enter, passes this point."
    if not text and (question.kind != "by hand" or question.point):
        return "Nothing was typed yet."
    return Reply(choice=question.choices[0].value if question.choices else "done", text=text)
