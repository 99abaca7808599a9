from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pytest

from benchkit.errors import RecordError
from benchkit.events import (
    Answered,
    BenchFound,
    ContactLost,
    Event,
    OutputOff,
    ReadingMissed,
    Resumed,
    StopAsked,
    SupplySet,
    SupplyState,
    Tripped,
)
from benchkit.procedure.hearing import UNPROTECTED
from benchkit.record.show import as_text
from benchkit.record.summary import Summary, load_summary
from tests.record.walks import (
    ON,
    PROCEDURE,
    closed,
    good_events,
    judged,
    opened,
    overridden_events,
    reading,
    sha,
    write,
)


def gather(tmp_path: Path, events: list[Event]) -> Summary:
    return load_summary(write(tmp_path / "r.jsonl", events))


def test_a_good_walk(tmp_path: Path) -> None:
    summary = gather(tmp_path, closed(good_events()))
    assert summary.verdict == "pass"
    assert (summary.meter, summary.supply) == ("Maker,Meter,123,1.0", "Maker,Supply,9,1.0")
    assert [(result.section, result.step, result.subject, result.verdict) for result in summary.results] == [
        ("cold", "rails", "ohm.rails", "pass"),
        ("first-power", "output", "output", "pass"),
    ]
    assert summary.results[1].title == "Output at rest"
    assert summary.results[1].condition == "+12 V -12 V, trimmer least, cold"
    assert summary.results[0].condition == ""
    assert summary.sections == (
        ("cold", "No power yet"),
        ("first-power", "First power"),
        ("made-safe", "The way out"),
    )
    assert summary.highest_v == (12.01, 12.0)
    assert (summary.ending.state, summary.incidents) == ("off", ())
    assert (summary.begun, summary.ended) == ("2031-04-05T06:07:08.000000Z", "2031-04-05T06:07:19.000000Z")


def test_what_was_measured_again_is_replaced_and_what_was_gone_on_from_is_overridden(tmp_path: Path) -> None:
    summary = gather(tmp_path, closed(overridden_events(), "fail"))
    cold, first, second, rule = summary.results
    assert (first.verdict, first.replaced, first.overridden, first.counts_against) == ("fail", True, None, False)
    assert (second.verdict, second.replaced, second.overridden, second.counts_against) == (
        "undecided",
        False,
        "the front end is not fitted",
        True,
    )
    assert (rule.subject, rule.reading, rule.counts_against) == ("offset before load", None, True)
    assert not cold.counts_against


def test_a_missed_reading_counts_against_until_it_is_taken(tmp_path: Path) -> None:
    item = "first-power.output.output"
    missed = ReadingMissed(item=item, point="output", problem="the meter did not answer within 3 s")
    events = [*good_events()[:7], missed]
    (result,) = [result for result in gather(tmp_path, events).results if result.subject == "output"]
    assert (result.missed, result.counts_against) == ("the meter did not answer within 3 s", True)
    again = gather(tmp_path / "..", [*events, reading(item, "output", 0.01), judged(item, "output", "pass", 0.01)])
    results = [result for result in again.results if result.subject == "output"]
    assert [result.counts_against for result in results] == [False, False]


def test_results_before_a_resume_are_from_before(tmp_path: Path) -> None:
    item = "first-power.output.output"
    events = [
        *good_events()[:9],
        Resumed(operator="Jo", torn="{"),
        OutputOff(reason="resume", confirmed=True, how="OUTP? read 0,0"),
        reading(item, "output", 0.011),
        judged(item, "output", "pass", 0.011),
    ]
    summary = gather(tmp_path, events)
    assert [(result.from_before, result.replaced) for result in summary.results] == [
        (True, False),
        (True, True),
        (False, False),
    ]
    assert summary.incidents[0].what == "resumed by Jo; the last line before it was torn and is lost"


@pytest.mark.parametrize(
    ("behind", "state", "word"),
    [
        ([], "on", "Take it as on"),
        ([OutputOff(reason="x", confirmed=True, how="read back")], "off", "confirmed: read back"),
        ([OutputOff(reason="x", confirmed=False, how="no answer")], "unknown", "switch it off by hand"),
        (
            [OutputOff(reason="x", confirmed=True, how="read back"), SupplySet(item="a.b", state=ON)],
            "on",
            "Take it as on",
        ),
        (
            [
                OutputOff(reason="x", confirmed=False, how="no answer"),
                OutputOff(reason="y", confirmed=True, how="read back"),
            ],
            "off",
            "confirmed",
        ),
        ([SupplySet(item="a.b", state=SupplyState(output_on=False))], "off", "when it was last asked"),
        ([SupplySet(item="a.b", state=SupplyState(output_on=None, set_positive_v=3.0))], "on", "Take it as on"),
        (
            [
                OutputOff(reason="x", confirmed=False, how="no answer"),
                SupplySet(item="a.b", state=SupplyState(output_on=False)),
            ],
            "unknown",
            "by hand",
        ),
    ],
)
def test_the_supply_at_the_end_is_never_surer_than_the_record(
    tmp_path: Path, behind: list[Event], state: str, word: str
) -> None:
    summary = gather(tmp_path, [*good_events()[:9], *behind])
    assert summary.ending.state == state
    assert word in summary.ending.words


def test_a_walk_without_power_was_never_on(tmp_path: Path) -> None:
    assert gather(tmp_path, good_events()[:4]).ending.state == "never on"


@pytest.mark.parametrize(
    ("event", "words"),
    [
        (Tripped(reason="positive rail drew 0.2 A"), "safety trip: positive rail drew 0.2 A"),
        (ContactLost(who="the meter", problem="timeout"), "contact lost with the meter: timeout"),
        (StopAsked(), "stopped: the operator asked for it"),
        (Answered(item="first-power.output", choice="no", text="it rings"), "answered no: it rings"),
    ],
)
def test_what_disturbed_the_walk_is_named_with_the_step(tmp_path: Path, event: Event, words: str) -> None:
    summary = gather(tmp_path, [*good_events()[:9], event])
    (incident,) = summary.incidents
    assert (incident.what, incident.where, incident.seq) == (words, "Output at rest", 10)


def test_an_unreadable_procedure_leaves_the_names(tmp_path: Path) -> None:
    text = "later = 'format'"
    import hashlib

    events = good_events()
    events[0] = opened(procedure_text=text, procedure_sha256=hashlib.sha256(text.encode()).hexdigest())
    summary = gather(tmp_path, events)
    assert summary.sections == ()
    assert summary.results[1].title == "first-power.output.output"


def test_the_start_of_a_broken_record_is_still_gathered_and_nothing_behind_it(tmp_path: Path) -> None:
    path = write(tmp_path / "r.jsonl", closed(good_events()))
    lines = path.read_bytes().splitlines(keepends=True)
    lines[7] = lines[7].replace(b"0.0123", b"0.0023")
    path.write_bytes(b"".join(lines))
    summary = load_summary(path)
    assert (summary.record.status, summary.record.line) == (2, 8)
    assert [result.subject for result in summary.results] == ["ohm.rails"]
    assert summary.verdict is None
    assert summary.ending.state == "on"


def test_what_holds_no_first_line_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "x.jsonl"
    path.write_text("hello\n")
    with pytest.raises(RecordError, match="Line 1"):
        load_summary(path)


# -- supplies that only a person switches, cautions, burnt parts ----------------------------------------------------


def by_hand_events(*, said: bool) -> list[Event]:
    events = good_events()
    events[0] = opened(supply="manual")
    events[9] = OutputOff(reason="end", confirmed=False, how="benchkit has no hand on this supply.")
    if said:
        events.insert(10, Answered(item="made-safe.off", choice="done"))
    return events


def test_a_supply_by_hand_is_off_only_as_said(tmp_path: Path) -> None:
    ending = gather(tmp_path, by_hand_events(said=True)).ending
    assert ending.state == "off"
    assert ending.words == "Off, as said by the operator; benchkit had no hand on it."


def test_nor_is_it_off_when_nobody_said_so(tmp_path: Path) -> None:
    summary = gather(tmp_path, by_hand_events(said=False))
    assert summary.ending.state == "unknown"
    assert "nobody said that it is off" in summary.ending.words
    assert not summary.incidents, "a hand that switches is no fault of the bench"


def test_cautions_of_the_bench_and_of_its_supply_are_gathered(tmp_path: Path) -> None:
    events = good_events()
    events[0] = opened(cautions=("the meter's calibration was due 2031-01-01",))
    why = f"Both rails stand where they were set, none in its limit. {UNPROTECTED}"
    for _ in range(2):
        events.insert(6, judged("first-power.up", "rails", "pass", 12.0, why=why))
    assert gather(tmp_path, events).cautions == (
        "the meter's calibration was due 2031-01-01",
        UNPROTECTED.removeprefix("CAUTION: "),
    )
    (tmp_path / "before").mkdir()
    assert gather(tmp_path / "before", good_events()).cautions == (), "records of before say nothing of protection"


# -- mains through a lamp -------------------------------------------------------------------------------------------

LAMP = PROCEDURE.replace(
    'kind = "supply"\ntitle = "Rails up"\nrails = "lowest"\nlimit = "50 mA"',
    'kind = "series lamp"\ntitle = "Mains on"\ndo = "Is it dark?"',
)
ON_LAMP: list[Event] = [
    opened(procedure_text=LAMP, procedure_sha256=sha(LAMP), supply="manual"),
    Answered(item="first-power.up.hold", choice="yes", text="yes"),
    Answered(item="first-power.up", choice="yes"),
]


@pytest.mark.parametrize(
    ("more", "state", "words"),
    [
        ([], "unknown", "nobody said that it is off"),
        ([Answered(item="first-power.output.output", choice="done")], "unknown", "nobody said that it is off"),
        ([Answered(item="made-safe.off", choice="done")], "off", "off at 2031-04-05T06:07:11.000000Z, as said by"),
        (
            [Resumed(operator="Jo"), Answered(item="first-power.output.output", choice="done")],
            "off",
            "off at 2031-04-05T06:07:12.000000Z, as said by",
        ),
    ],
)
def test_mains_through_a_lamp_is_never_called_never_on(
    tmp_path: Path, more: list[Event], state: str, words: str
) -> None:
    ending = gather(tmp_path, [*ON_LAMP, *more]).ending
    assert ending.state == state
    assert ending.words.startswith("Mains through the series lamp from 2031-04-05T06:07:09.000000Z")
    assert words in ending.words


def test_a_lamp_that_was_never_said_yes_to_was_never_on(tmp_path: Path) -> None:
    assert gather(tmp_path, ON_LAMP[:1]).ending.state == "never on"


def test_a_hold_written_before_the_lamp_counts_as_its_own(tmp_path: Path) -> None:
    hold = '[[section.step]]\nname = "ready"\nkind = "hold"\ntitle = "Ready?"\ndo = "Ready?"\n\n'
    at = LAMP.index('[[section.step]]\nname = "up"')
    text = LAMP[:at] + hold + LAMP[at:]
    first = opened(procedure_text=text, procedure_sha256=sha(text), supply="manual")
    summary = gather(tmp_path, [first, Answered(item="first-power.ready", choice="yes", text="yes")])
    assert summary.ending.state == "unknown"


def test_the_bench_supply_of_a_walk_on_the_lamp_is_told_of_too(tmp_path: Path) -> None:
    events = [opened(procedure_text=LAMP, procedure_sha256=sha(LAMP)), good_events()[5], *ON_LAMP[1:]]
    ending = gather(tmp_path, [*events, Answered(item="made-safe.off", choice="done")]).ending
    assert ending.state == "on"
    assert "Mains through the series lamp" in ending.words
    assert "The bench's supply: No line says" in ending.words


@pytest.mark.parametrize(("output_on", "said"), [(True, "its output ON (12 V"), (None, "nothing to say")])
def test_a_supply_that_was_found_on_is_something_to_know(tmp_path: Path, output_on: bool | None, said: str) -> None:
    events = good_events()
    events[1] = BenchFound(meter="m", supply="s", supply_state=replace(ON, output_on=output_on))
    events.insert(2, OutputOff(reason="it was on", confirmed=True, how="OUTP? read 0,0"))
    summary = gather(tmp_path, events)
    assert said.partition(" (")[0] in summary.incidents[0].what
    assert "told to go off" in summary.incidents[0].what
    assert "the supply was found with" in " ".join(as_text(summary).split())
