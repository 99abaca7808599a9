"""The words of ``benchkit instruments``, from plain tables."""

from __future__ import annotations

import io

import pytest

from benchkit.quantities import show
from benchkit.ui.instruments_text import (
    Countdown,
    before_power,
    checked_lines,
    found_lines,
    identified_lines,
    written_lines,
)


class Screen(io.StringIO):
    """A text stream that says that it is a terminal."""

    def isatty(self) -> bool:
        return True


def instrument(address: str, kind: str, unanswered: int = 0, name: str = "Own,Thing,1,1") -> dict[str, object]:
    gaps = [{"question": f"question {number}", "what_happened": "silence"} for number in range(unanswered)]
    fit = {
        "profile": f"scpi-{kind}",
        "kind": kind,
        "complete": not gaps,
        "answered": ["dc volts"],
        "unanswered": gaps,
    }
    fits = [fit] if kind else []
    more = {"misses": [], "baud": None, "tried": ["scpi-meter"], "problem": None, "problem_kind": None}
    return {"address": address, "name": name, "fits": fits, **more}


def test_the_next_command_holds_addresses_that_can_be_used_and_are_quoted_for_the_shell() -> None:
    found = [
        {"address": "ASRL/dev/my port::INSTR", "kind": "serial", "what": "a", "problem": "", "cure": []},
        {"address": "ASRL/dev/ttyUSB1::INSTR", "kind": "serial", "what": "b", "problem": "no right", "cure": ["x"]},
        {"address": "", "kind": "usb", "what": "c", "problem": "no serial number", "cure": []},
    ]
    lines = found_lines({"found": found, "notes": []}, network=True)
    assert "  benchkit instruments identify 'ASRL/dev/my port::INSTR'" in lines
    assert "(no address)" in lines
    assert not any("--network" in line for line in lines)


@pytest.mark.parametrize(
    ("several", "command"),
    [
        (
            [instrument("S", "supply"), instrument("M", "meter")],
            "  benchkit instruments write bench.toml --meter M --supply S",
        ),
        ([instrument("M", "meter")], "  benchkit instruments write bench.toml --meter M"),
        # Of two meters the one that answers more.
        (
            [instrument("A", "meter", 2), instrument("B", "meter", 1)],
            "  benchkit instruments write bench.toml --meter B",
        ),
        ([instrument("X", "")], "  benchkit instruments identify ADDRESS --profile my-meter.toml"),
        (
            [instrument("X", "", name="") | {"problem": "silence", "problem_kind": "timeout"}],
            "  benchkit instruments identify ADDRESS --baud 9600 --baud 19200 --baud 115200",
        ),
        (
            [instrument("X", "", name="") | {"problem": "gone", "problem_kind": "link lost"}],
            "  benchkit instruments find",
        ),
    ],
)
def test_what_to_type_after_asking_who_they_are(several: list[dict[str, object]], command: str) -> None:
    assert command in identified_lines(several)


def test_a_library_goes_along() -> None:
    lines = identified_lines([instrument("M", "meter")], "my bench.yaml@sim")
    assert "  benchkit instruments write bench.toml --meter M --visa 'my bench.yaml@sim'" in lines


def test_what_was_not_answered_is_named() -> None:
    lines = identified_lines([instrument("M", "meter", 2)])
    start = next(number for number, line in enumerate(lines) if "1 of 3 questions" in line)
    assert "".join(lines[start : start + 4]).count("question 0: silence") == 1
    assert any("question 1: silence" in line for line in lines)


def test_each_profile_without_an_answer_says_which_question_failed_and_what_came() -> None:
    gaps = [
        {"question": "dc volts", "what_happened": "the instrument answered VAL?: the reply was 'x'; expected a number"},
        {"question": "ohms", "what_happened": "not asked"},
        {"question": "diode", "what_happened": "not asked"},
    ]
    miss = {"profile": "mine.toml", "kind": "meter", "complete": False, "answered": [], "unanswered": gaps}
    text = " ".join(" ".join(identified_lines([instrument("X", "") | {"misses": [miss]}])).split())
    assert "mine.toml: dc volts: the instrument answered VAL?: the reply was 'x'; expected a number" in text
    assert "not asked after that: ohms, diode" in text


STATE = {"output_on": True, "positive_v": 1.0, "negative_v": -1.0, "positive_a": 0.0, "limit_a": 0.01}


def checked(**more: object) -> dict[str, object]:
    supply = {
        "name": "Own,Supply,1,1",
        "found": None,
        "into_open_circuit": STATE,
        "not_powered": "",
        "off_confirmed": True,
        "off": "both read back off",
        "on_s": 0.25,
    }
    reading = {"function": "ohms", "unit": "ohm", "value": None, "overload": True, "took_s": 1.0, "problem": ""}
    whole: dict[str, object] = {
        "bench": "b",
        "meter": {"name": "Own,Meter,1,1", "readings": [reading]},
        "supply": supply,
        "cautions": [],
        "problems": [],
        "stopped": "",
    }
    return whole | more


def test_a_check_that_worked_leads_to_a_walk() -> None:
    lines = checked_lines(checked(), "my bench.toml")
    assert "  benchkit walk --design my-stage.toml --bench 'my bench.toml'" in lines
    assert any("ohms" in line and "overload" in line for line in lines)
    assert any("confirmed: both read back off" in line for line in lines)


def test_a_check_with_trouble_leads_to_no_walk() -> None:
    text = "\n".join(checked_lines(checked(problems=["The supply burns."], cautions=["It is old."]), "bench.toml"))
    assert "The supply burns." in text
    assert "It is old." in text
    assert "benchkit walk" not in text


def test_cautions_come_before_the_next_command_and_nothing_is_said_to_work() -> None:
    lines = checked_lines(checked(cautions=["It is old."]), "bench.toml")
    assert not any("worked" in line for line in lines)
    assert lines.index("To know:") < lines.index('First see to what stands under "To know". Then:')


def test_a_supply_that_was_not_switched_on_is_not_said_to_work() -> None:
    whole = checked()
    assert isinstance(whole["supply"], dict)
    whole["supply"] |= {"not_powered": "It was not asked for", "off_confirmed": None, "into_open_circuit": None}
    text = "\n".join(checked_lines(whole, "bench.toml"))
    assert "worked" not in text
    assert "The supply was not switched on; what else was tried answered." in text


@pytest.mark.parametrize("volts", [1.0, 12.0, 1000.0])
def test_no_line_is_wider_than_the_screen_and_none_breaks_inside_a_number(volts: float) -> None:
    state = (
        STATE
        | {f"{name}_{rail}_v": volts for name in ("set", "protection") for rail in ("positive", "negative")}
        | {"negative_a": 0.0, "positive_in_limit": True, "positive_tripped": True, "negative_in_limit": True}
    )
    whole = checked(cautions=["A caution with many words " * 6], problems=["Trouble with 12.34 V " * 7])
    assert isinstance(whole["supply"], dict)
    whole["supply"] |= {"found": state, "into_open_circuit": state}
    lines = checked_lines(whole, "bench.toml")
    assert max(len(line) for line in lines) <= 80
    shown = show(volts, "V")
    text = "\n".join(lines)
    assert text.count(f"set to {shown}") + text.count(f"to\n      {shown}") >= 2
    assert not any(line.rstrip().endswith((".", "12.34")) and line.strip()[-2:-1].isdigit() for line in lines)
    for line in lines:
        assert not line.split() or line.split()[0] not in {"V", "V,", "kV", "kV,", "A,", "mA,"}


def test_off_that_is_not_confirmed_can_not_be_overlooked() -> None:
    whole = checked(problems=["x"])
    assert isinstance(whole["supply"], dict)
    whole["supply"] |= {"off_confirmed": False, "off": "output state unknown: switch it off by hand"}
    lines = checked_lines(whole, "bench.toml")
    assert "  OFF IS NOT CONFIRMED: output state unknown: switch it off by hand" in lines


def test_before_power_says_how_much_how_long_and_what_if() -> None:
    text = " ".join(before_power("S", 1.0, 0.01, 1.8))
    for words in ("1.0 V", "10 mA", "1.8 s", "Take everything off", "by hand"):
        assert words in text


def test_a_written_file_names_what_is_missing_and_the_next_command() -> None:
    lines = written_lines("my bench.toml", ["meter: accuracy"])
    assert lines[-1] == "  benchkit instruments check --bench 'my bench.toml'"
    assert "  meter: accuracy" in lines


def test_a_written_file_names_the_questions_without_an_answer() -> None:
    text = " ".join(" ".join(written_lines("b.toml", [], [instrument("M", "meter", 1)])).split())
    assert "Of the meter, 1 of 2 questions of the profile scpi-meter are answered, not these:" in text
    assert "question 0: silence" in text


def test_a_countdown_on_a_terminal_writes_over_one_line_and_leaves_nothing() -> None:
    screen = Screen()
    countdown = Countdown(screen)
    for left_s in (10.0, 9.6, 3.2, 0.0):
        countdown("ac volts", left_s)
    countdown.clear()
    countdown.clear()
    shown = screen.getvalue()
    assert "\n" not in shown
    assert [part.strip() for part in shown.split("\r")] == [
        "", "ac volts: up to 10 s", "ac volts: up to 3 s", "ac volts: late, still waiting", "", "",
    ]  # fmt: skip


def test_a_countdown_elsewhere_says_each_thing_once() -> None:
    out = io.StringIO()
    countdown = Countdown(out)
    for what, left_s in (("ohms", 3.0), ("ohms", 2.0), ("diode", 3.0)):
        countdown(what, left_s)
    countdown.clear()
    assert out.getvalue() == "ohms: up to 3 s\ndiode: up to 3 s\n"


@pytest.mark.parametrize("network", [False, True])
def test_no_words_are_wider_than_the_screen(network: bool) -> None:
    port = {"address": "ASRL1::INSTR", "kind": "serial", "what": "w " * 60, "problem": "p " * 60, "cure": []}
    lines = found_lines({"found": [], "notes": ["many words " * 12]}, network=network)
    lines += found_lines({"found": [port | {"problem": ""}, port], "notes": []}, network=network)
    silent = instrument("X", "", name="") | {"problem": "many words " * 12, "problem_kind": "timeout"}
    for several in ([instrument("M", "meter", 3)], [instrument("X", "")], [silent]):
        lines += identified_lines(several)
    lines += before_power("Own,Supply,1,1", 1.0, 0.01, 1.8)
    assert {line for line in lines if len(line) > 80} == set()
