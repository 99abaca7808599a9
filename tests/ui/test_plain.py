from __future__ import annotations

import asyncio
import io
import threading
from collections.abc import Awaitable, Callable
from dataclasses import replace

import click
import pytest

from benchkit.procedure.actions import Question
from benchkit.procedure.questions import NOTHING_REPLACED, OTHER_PARTS, SEMICONDUCTORS, STOP
from benchkit.session.front import Reply
from benchkit.ui import plain
from benchkit.ui.plain import PlainFront
from tests.ui import scripted
from tests.ui.live_views import LIVES, PROBING, SOAK_VIEW
from tests.ui.scripted import (
    AIM,
    CONFIRM,
    DECIDE,
    HOLD,
    ODD_QUESTION,
    PROBES,
    SUSPECTED,
    SUSPECTING,
    TEXT,
    TRIM,
    TRIM_VIEW,
    VIEW,
    WORKING,
)

BY_HAND = replace(
    scripted.BY_HAND_READING,
    choices=(*scripted.BY_HAND_READING.choices, replace(PROBES.choices[1], label="Make safe")),
)


class Terminal:
    """Lines that come one by one, as from a person; the end comes when it is closed."""

    def __init__(self, *, tty: bool = True) -> None:
        self._lines: list[str] = []
        self._ready = threading.Condition()
        self._closed = False
        self._tty = tty

    def type(self, *lines: str) -> None:
        with self._ready:
            self._lines += [f"{line}\n" for line in lines]
            self._ready.notify()

    def close(self) -> None:
        with self._ready:
            self._closed = True
            self._ready.notify()

    def readline(self) -> str:
        with self._ready:
            while not self._lines and not self._closed:
                self._ready.wait(5.0)
            return self._lines.pop(0) if self._lines else ""

    def isatty(self) -> bool:
        return self._tty


Play = Callable[[PlainFront, Terminal, list[str]], Awaitable[None]]


def play(script: Play, *, tty: bool = True) -> tuple[str, list[str]]:
    out, terminal = io.StringIO(), Terminal(tty=tty)
    offs: list[str] = []

    async def whole() -> None:
        front = PlainFront(offs.append, out=out, source=terminal)  # type: ignore[arg-type]
        try:
            await asyncio.wait_for(script(front, terminal, offs), 10.0)
        finally:
            terminal.close()

    asyncio.run(whole())
    return out.getvalue(), offs


def answer(question: Question, *lines: str, view: object = None, refused: str = "") -> tuple[Reply, str]:
    replies: list[Reply] = []

    async def script(front: PlainFront, terminal: Terminal, offs: list[str]) -> None:
        front.show(view or VIEW)  # type: ignore[arg-type]
        terminal.type(*lines)
        replies.append(await front.ask(question, refused))

    text, _ = play(script)
    return replies[0], text


@pytest.mark.parametrize(
    ("question", "line", "reply"),
    [
        (CONFIRM, "1", Reply(choice="yes")),
        (CONFIRM, "no", Reply(choice="no")),
        (CONFIRM, "y", Reply(choice="yes")),
        (CONFIRM, "N", Reply(choice="no")),
        (HOLD, "m", Reply(choice="make safe")),
        (DECIDE, "a", Reply(choice="again")),
        (DECIDE, "g a known spot", Reply(choice="go on", text="a known spot")),
        (TRIM, "T", Reply(choice="take")),
        (PROBES, "", Reply(choice="done")),
        (PROBES, "2", Reply(choice="make safe")),
        (HOLD, "yes", Reply(choice="yes", text="yes")),
        (HOLD, "YES", Reply(choice="yes", text="yes")),
        (HOLD, "2", Reply(choice="make safe")),
        (DECIDE, "1", Reply(choice="again")),
        (DECIDE, "2 a known spot", Reply(choice="go on", text="a known spot")),
        (DECIDE, "make safe", Reply(choice="make safe")),
        (TEXT, "23 degC", Reply(choice="done", text="23 degC")),
        (BY_HAND, "12.3 mV", Reply(choice="done", text="12.3 mV")),
        (BY_HAND, "OL", Reply(choice="done", text="OL")),
        (BY_HAND, "2", Reply(choice="done", text="2")),  # a number is a reading, never an answer
        (BY_HAND, "make safe", Reply(choice="make safe")),
        (TRIM, "+0.25", Reply(choice="turn", turns=0.25)),
        (TRIM, "-1", Reply(choice="turn", turns=-1.0)),
        (TRIM, "1", Reply(choice="take")),
        (TRIM, "2 at its end", Reply(choice="end", text="at its end")),
    ],
)
def test_answers(question: Question, line: str, reply: Reply) -> None:
    assert answer(question, line)[0] == reply


@pytest.mark.parametrize(
    ("question", "lines"),
    [
        (HOLD, ["1", "y", "", "yes please", "yes"]),
        (CONFIRM, ["", "maybe", "0", "3", "yes"]),
        (TRIM, ["+nan", "-inf", "+much", "1"]),
        (DECIDE, ["", "because", "again"]),
    ],
)
def test_what_is_no_answer_is_asked_for_again(question: Question, lines: list[str]) -> None:
    reply, text = answer(question, *lines)
    assert reply.choice in {choice.value for choice in question.choices}
    assert text.count("! That is no answer here") == len(lines) - 1


PARTS = Question(
    item="parts",
    kind="parts",
    title="Which parts were replaced?",
    do="Name them.",
    choices=(NOTHING_REPLACED, SEMICONDUCTORS, OTHER_PARTS, STOP),
)


@pytest.mark.parametrize(
    ("question", "lines", "reply"),
    [
        (PARTS, ["o", "R12 and C3"], Reply(choice="other parts", text="R12 and C3")),
        (PARTS, ["o R12 and C3"], Reply(choice="other parts", text="R12 and C3")),
        (PARTS, ["3", "2 resistors, R12 and R13"], Reply(choice="other parts", text="2 resistors, R12 and R13")),
        (PARTS, ["other parts", "n-type thermistor"], Reply(choice="other parts", text="n-type thermistor")),
        (PARTS, ["S", "Q5"], Reply(choice="semiconductors", text="Q5")),
        (PARTS, ["o", "", "n"], Reply(choice="no")),  # nothing goes back
        (PARTS, ["o", "s", "Q5"], Reply(choice="semiconductors", text="Q5")),  # a changed mind
        (PARTS, ["o", "o", "R12"], Reply(choice="other parts", text="R12")),
        (PARTS, ["o", "m"], Reply(choice="make safe")),
        (PARTS, ["o", "make safe"], Reply(choice="make safe")),
        (PARTS, ["o", "4"], Reply(choice="make safe")),
        (DECIDE, ["g", "a known spot"], Reply(choice="go on", text="a known spot")),
        (DECIDE, ["2", "", "a"], Reply(choice="again")),
    ],
)
def test_the_words_of_an_answer_may_stand_on_the_next_line(question: Question, lines: list[str], reply: Reply) -> None:
    given, text = answer(question, *lines)
    assert given == reply
    assert "That is no answer here" not in text


def test_it_is_said_what_is_to_be_typed_on_the_next_line() -> None:
    _, text = answer(PARTS, "o", "", "o", "R12")
    assert text.count("type all the parts that were replaced, or nothing to go back> ") == 2
    assert "Nothing was typed: the question stands again." in text
    assert "type the reason, or nothing to go back> " in answer(DECIDE, "g", "a known spot")[1]


def test_off_is_off_where_the_words_are_wanted() -> None:
    async def script(front: PlainFront, terminal: Terminal, offs: list[str]) -> None:
        front.show(VIEW)
        terminal.type("o", "off", "R12")
        assert await front.ask(PARTS) == Reply(choice="other parts", text="R12")
        assert offs == ["the operator typed off"]

    play(script, tty=False)


def test_a_wrong_answer_is_told_which_keys_there_are() -> None:
    _, text = answer(CONFIRM, "x", "y")
    assert "type the number or its letter (Y or N)" in text
    assert "1 yes, both (Y)" in text
    _, text = answer(HOLD, "y", "yes")
    assert "type yes in full, M to make safe" in text


def test_a_question_says_everything() -> None:
    _, text = answer(PROBES, "1")
    for words in (PROBES.title, "Red: the end of emitter.upper.1", "Black: output", "Expected: 0.00 mV", "Why:",
                  "CAUTION: Clip on with the power", "(3 of 7)", "1 done (D)", "2 I can't: make safe (M)"):  # fmt: skip
        assert words in " ".join(text.split()), words
    asked = text[text.index(PROBES.title) :]
    assert max(len(line) for line in asked.splitlines()) <= plain.WIDTH


def test_a_refusal_is_said_and_the_question_not_put_again() -> None:
    _, text = answer(DECIDE, "1", refused="A reason in words is needed to go on.")
    assert "! A reason in words is needed" in text
    assert DECIDE.title not in text


def test_a_trim_shows_where_it_is_and_how_to_turn_a_simulated_screw() -> None:
    _, text = answer(TRIM, "1", view=TRIM_VIEW)
    assert "now 19.31 mV" in text
    assert "+0.25" in text
    _, text = answer(TRIM, "1", view=replace(TRIM_VIEW, kind="walk"))
    assert "+0.25" not in text


def test_only_what_is_new_is_printed() -> None:
    async def script(front: PlainFront, terminal: Terminal, offs: list[str]) -> None:
        for _ in range(3):
            front.show(replace(VIEW, busy="Reading.", message="A remark."))
        front.show(replace(VIEW, results=(*VIEW.results, scripted.FAILED), message="A remark."))
        front.show(replace(VIEW, supply=scripted.UNKNOWN, message="A remark."))

    text, _ = play(script)
    for words, times in (("[PASS]", 2), ("[FAIL]", 1), ("... Reading.", 1), ("! A remark.", 1),
                         ("== First volts ==", 1), (scripted.UNKNOWN.words, 1), (scripted.OFF.words, 1)):  # fmt: skip
        assert text.count(words) == times, words


def test_off_switches_off_although_nothing_is_asked() -> None:
    async def script(front: PlainFront, terminal: Terminal, offs: list[str]) -> None:
        front.show(replace(VIEW, busy="Let it warm up"))
        terminal.type("", "what is it doing", "off")
        while not offs:
            await asyncio.sleep(0.005)

    _, offs = play(script)
    assert offs == ["the operator typed off"]


@pytest.mark.parametrize("word", ["off", "OFF", "  Off "])
@pytest.mark.parametrize("question", [CONFIRM, HOLD, TEXT, BY_HAND, TRIM, DECIDE, PROBES])
def test_off_at_every_prompt(word: str, question: Question) -> None:
    async def script(front: PlainFront, terminal: Terminal, offs: list[str]) -> None:
        front.show(VIEW)
        asking = asyncio.create_task(front.ask(question))
        await asyncio.sleep(0.01)
        terminal.type(word)
        while not offs:
            await asyncio.sleep(0.005)
        assert not asking.done()
        asking.cancel()

    assert play(script)[1] == ["the operator typed off"]


def test_lines_of_a_pipe_keep_their_order() -> None:
    async def script(front: PlainFront, terminal: Terminal, offs: list[str]) -> None:
        front.show(VIEW)
        terminal.type("1", "off", "2")
        await asyncio.sleep(0.05)
        assert (await front.ask(CONFIRM)).choice == "yes"
        assert offs == []
        assert (await front.ask(CONFIRM)).choice == "no"
        assert offs == ["the operator typed off"]

    play(script, tty=False)


def test_the_end_of_the_input_switches_off_and_leaves(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(plain, "END_S", 0.05)

    async def script(front: PlainFront, terminal: Terminal, offs: list[str]) -> None:
        front.show(VIEW)
        terminal.type("1")
        terminal.close()
        assert (await front.ask(CONFIRM)).choice == "yes"
        for _ in range(2):
            with pytest.raises(click.Abort):
                await front.ask(CONFIRM)
        assert offs == ["the input of the terminal has ended"]

    play(script)


def test_a_broken_terminal_is_an_end() -> None:
    class Broken(Terminal):
        def readline(self) -> str:
            raise OSError("Input/output error")

    offs: list[str] = []

    async def whole() -> None:
        front = PlainFront(offs.append, out=io.StringIO(), source=Broken())  # type: ignore[arg-type]
        asking = asyncio.create_task(front.ask(HOLD))
        while not offs:
            await asyncio.sleep(0.005)
        asking.cancel()

    asyncio.run(whole())
    assert offs


# -- what the model says of this unit -------------------------------------------------------------------------------


def test_suspects_are_told_in_lines_once() -> None:
    async def script(front: PlainFront, terminal: Terminal, offs: list[str]) -> None:
        for suspects in (None, WORKING, SUSPECTED, SUSPECTED):
            front.show(replace(VIEW, suspects=suspects))

    text, _ = play(script)
    assert text.count("The model works out what would explain") == 1
    assert text.count("83 %  emitter.upper.1 open") == 1
    assert "healthy would read" in text
    assert "or output.upper.1 emitter open" in text
    assert "14 faults could not have shown yet" in text
    assert "Most telling next: driver.upper.vbe" in text
    told = [line for line in text.splitlines() if not line.startswith("  [")]
    assert max(len(line) for line in told) <= plain.WIDTH


@pytest.mark.parametrize("line", ["4", "probe"])
def test_an_extra_reading_is_taken_up_in_lines(line: str) -> None:
    reply, text = answer(SUSPECTING, line)
    assert reply == Reply(choice="probe")
    assert "4 Read driver.upper.vbe next" in text


def test_an_odd_reading_needs_no_reason_to_go_on() -> None:
    reply, text = answer(ODD_QUESTION, "1")
    assert reply == Reply(choice="go on")
    assert "1 Go on (G)\n" in text


def test_this_units_limits_stand_under_the_designs_whenever_they_come() -> None:
    _, text = answer(PROBES, "", view=replace(VIEW, aim=AIM))
    assert "Expected: 0.00 mV to 1.20 mV" in text
    assert text.count("This unit: 80.00 uV to 140.0 uV.") == 1

    async def script(front: PlainFront, terminal: Terminal, offs: list[str]) -> None:
        front.show(VIEW)
        asking = asyncio.create_task(front.ask(PROBES))
        await asyncio.sleep(0.05)
        front.show(replace(VIEW, aim=AIM))
        front.show(replace(VIEW, aim=AIM))
        terminal.type("")
        await asking

    text, _ = play(script)
    assert text.count("This unit: 80.00 uV to 140.0 uV.") == 1


def test_a_falling_rail_is_told_as_it_falls_and_what_burnt_at_the_end() -> None:
    async def script(front: PlainFront, terminal: Terminal, offs: list[str]) -> None:
        for value in (35.0, 34.0, 33.0, 20.0, 19.0, 9.0, 8.9):
            live = replace(scripted.FALL_VIEW.live, value=value, text=f"{value:.2f} V")  # type: ignore[type-var]
            front.show(replace(scripted.FALL_VIEW, live=live, remaining_s=value))
        front.show(replace(VIEW, busy="The meter reads output.ac (ac volts).", remaining_s=7.0))
        front.show(replace(VIEW, busy="The meter reads output.ac (ac volts).", remaining_s=6.0))
        for _ in range(2):
            front.show(replace(VIEW, broken="emitter.upper.1: open"))

    text, _ = play(script)
    assert text.count("... rail+") == 3, "each time that it has fallen by a third"
    assert "... rail+ 20.00 V. Falling to 1.0 V. About 20 s left." in text
    assert text.count("output.ac (ac volts). About 7 s left.") == 1
    assert "6 s left" not in text
    assert text.count("BURNT in the simulated unit: emitter.upper.1: open.") == 1


def test_watching_goes_on_by_itself_and_can_be_ended() -> None:
    reply, text = answer(scripted.FALL, "enough", view=scripted.FALL_VIEW)
    assert reply == Reply(choice="enough")
    assert "Take it as it reads now" in text


# --- watched readings -----------------------------------------------------------------------------------------------


class _Out(io.StringIO):
    def __init__(self, tty: bool) -> None:
        super().__init__()
        self._tty = tty

    def isatty(self) -> bool:
        return self._tty


@pytest.mark.parametrize(("tty", "bell", "rings"), [(True, True, 1), (True, False, 0), (False, True, 0)])
def test_a_trim_in_lines_with_its_bell(tty: bool, bell: bool, rings: int) -> None:
    out, terminal, seconds = _Out(tty), Terminal(tty=tty), [0.0]

    async def whole() -> None:
        front = PlainFront(lambda _: None, out=out, source=terminal, bell=bell, clock=lambda: seconds[0])  # type: ignore[arg-type]
        view = replace(TRIM_VIEW, live=LIVES["turn"], channel="L")
        front.show(view)
        asked = asyncio.ensure_future(front.ask(TRIM))
        await asyncio.sleep(0)
        for name in ("turn", "turn", "inside", "gone"):
            for tenth in range(10):
                seconds[0] += 0.1
                front.show(replace(view, live=replace(LIVES[name], captured=int(name == "gone" and tenth > 4))))
        terminal.type("t")
        assert await asked == Reply(choice="take")
        front.show(replace(view, live=LIVES["overshot"]))
        terminal.close()

    asyncio.run(whole())
    text = out.getvalue()
    lines = [line for line in text.splitlines() if "  ~ " in line]
    assert len(lines) == 3, lines
    assert [word in line for word, line in zip(("TOO LOW", "INSIDE", "READING GONE"), lines, strict=True)] == [True] * 3
    assert "a quarter turn anticlockwise; rising 0.12 mV/min; will rest at 17.10 mV" in lines[0]
    assert text.count("\a") == rings
    assert "(channel L)" in text


def test_a_soak_in_lines_and_where_the_probes_go_next() -> None:
    async def script(front: PlainFront, terminal: Terminal, offs: list[str]) -> None:
        front.show(SOAK_VIEW)
        front.show(replace(SOAK_VIEW, remaining_s=99.5))
        front.show(replace(PROBING, live=None))
        terminal.type("")
        await front.ask(PROBES)

    text, _ = play(script)
    assert text.count("  ~ ") == 1
    assert "hands off: it comes to rest" in text
    assert "The stage soaks; about 100 s left" in text
    assert "After this: emitter.lower.1." in text
