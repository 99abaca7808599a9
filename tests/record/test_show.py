from __future__ import annotations

import json
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from benchkit.events import Decided, Event, Noted, OutputOff, Resumed, StopAsked, Suspected, Tripped
from benchkit.record.show import DEFERENCE, as_text
from benchkit.record.show_json import as_json
from benchkit.record.summary import Summary, load_summary
from benchkit.record.words import clean
from tests.record.walks import (
    PROCEDURE,
    closed,
    good_events,
    judged,
    opened,
    overridden_events,
    reading,
    sha,
    suspicious_events,
    write,
)
from tests.stage.designs import TERN


def gather(tmp_path: Path, events: list[Event]) -> Summary:
    return load_summary(write(tmp_path / "r.jsonl", events))


GOOD = """\
RECORD OF A WALK
================

Verdict      PASS
Unit         T40-0017
Design       Tern 40 (SHA-256 {design})
Procedure    short walk (SHA-256 {procedure})
Operator     Mara
Meter        Maker,Meter,123,1.0
Supply       Maker,Supply,9,1.0
Begun        2031-04-05T06:07:08.000000Z
Last line    2031-04-05T06:07:19.000000Z
Made by      benchkit 0.1.0
Record       r.jsonl: whole. The record is whole and closed: 12 lines.
Exit status  0

What to know first
------------------
- Supply at the end: Off, and confirmed: OUTP? read 0,0.
- Highest rails seen at the supply: 12.01 V and -12.00 V
- Nothing failed, nothing was undecided, missed, overridden or interrupted.

No power yet
------------
                value      lowest  highest  std. unc.  verdict
Rail to rail
  ohm.rails  overload  1.000 kohm        -          -  pass

First power
-----------
             value     lowest   highest  std. unc.  verdict
Output at rest
  output  12.30 mV  -20.00 mV  20.00 mV     500 uV  pass

Notes
-----
- Highest at the unit: highest_rail_v 12.02, energy_j 1.5
"""


def test_the_text_of_a_good_walk_is_exactly_this(tmp_path: Path) -> None:
    text = as_text(gather(tmp_path, closed(good_events())))
    first = opened()
    wanted = GOOD.format(design=first.design_sha256[:16], procedure=first.procedure_sha256[:16])
    head, _, tail = text.partition("\nBenchkit helps")
    assert head.split("\n") == wanted.split("\n")
    assert " ".join(("Benchkit helps" + tail).split()) == DEFERENCE


def test_the_safety_sentence_stands_on_every_form(tmp_path: Path) -> None:
    for sentence in (
        "it is not a safety device, it certifies nothing",
        "local codes, the maker's service data and licensed practice",
        "Where they differ from the screen, they win.",
    ):
        assert sentence in DEFERENCE
    summary = gather(tmp_path, good_events()[:1])
    assert DEFERENCE in " ".join(as_text(summary).split())
    assert as_json(summary)["deference"] == DEFERENCE


def test_what_failed_first_and_passed_when_it_was_taken_again_is_said(tmp_path: Path) -> None:
    events = good_events()
    item = "first-power.output.output"
    again = [
        reading(item, "output", 0.5),
        judged(item, "output", "fail", 0.5, why="0.5 V is above the limit"),
        Decided(item=item, choice="again"),
    ]
    events[7:7] = again
    text = " ".join(as_text(gather(tmp_path, closed(events))).split())
    assert "1 reading did not pass at first; taken again" in text
    assert "Nothing failed" not in text


@pytest.mark.parametrize(
    ("design", "title"),
    [(TERN.read_text("utf-8"), "Both rails up"), ("name = 1", "{Both_rails} up")],
    ids=["a design", "one that can't be read"],
)
def test_a_title_is_said_as_the_screen_said_it(tmp_path: Path, design: str, title: str) -> None:
    procedure = PROCEDURE.replace('title = "Rails up"', 'title = "{Both_rails} up"')
    events = good_events()
    events[0] = opened(
        design_text=design, design_sha256=sha(design), procedure_text=procedure, procedure_sha256=sha(procedure)
    )
    item = "first-power.up"
    events[7:7] = [judged(item, "rails", "fail", 11.0, why="A rail has not come up")]
    assert f"FAIL: {title}, rails" in as_text(gather(tmp_path, closed(events, "fail")))


def test_failures_and_overrides_come_before_the_readings(tmp_path: Path) -> None:
    text = as_text(gather(tmp_path, closed(overridden_events(), "fail")))
    assert "Verdict      FAIL" in text
    first, _, rest = text.partition("No power yet")
    assert "UNDECIDED: Output at rest, output: the uncertainty reaches over the limit. OVERRIDDEN, reason: the" in first
    assert "the front end is not fitted" in " ".join(first.split())
    assert "FAIL: first-power.offset-rule, offset before load" in first
    assert "Nothing failed" not in text
    assert "measured again later" in rest
    assert "overridden" in rest


def test_a_trip_says_why_where_and_that_the_supply_is_off(tmp_path: Path) -> None:
    events = [
        *good_events()[:9],
        Tripped(reason="positive rail drew 0.2 A, more than 0.1 A"),
        OutputOff(reason="trip", confirmed=True, how="OUTP? read 0,0"),
    ]
    text = as_text(gather(tmp_path, closed(events, "fail", stopped="safety trip", exit_status=4)))
    assert "Verdict      FAIL, stopped: safety trip" in text
    assert "safety trip: positive rail drew 0.2 A, more than 0.1 A (at: Output at rest)" in " ".join(text.split())
    assert "Exit status  4" in text
    assert "Off, and confirmed" in text


def test_a_trip_is_placed_where_it_was_asked_about(tmp_path: Path) -> None:
    """It names no item itself, and what stands before it is an earlier one."""
    before = good_events()[:9]
    asked = Suspected(item="first-power.offset-rule", after=len(before) + 1)
    events = [*before, Tripped(reason="rail+ is held by its current limit"), asked]
    events.append(OutputOff(reason="trip", confirmed=True, how="OUTP? read 0,0"))
    text = " ".join(as_text(gather(tmp_path, closed(events, "fail", stopped="x", exit_status=4))).split())
    assert "safety trip: rail+ is held by its current limit (at: first-power.offset-rule)" in text


def test_an_unconfirmed_off_is_the_first_thing_said(tmp_path: Path) -> None:
    events = [*good_events()[:9], StopAsked(), OutputOff(reason="stop", confirmed=False, how="no answer in 2 s")]
    lines = as_text(gather(tmp_path, events)).splitlines()
    first = lines[lines.index("What to know first") + 2]
    assert first.startswith("- Supply at the end: Output state unknown: switch it off by hand.")


def test_an_unfinished_and_a_broken_record_have_no_verdict(tmp_path: Path) -> None:
    path = write(tmp_path / "r.jsonl", closed(good_events()))
    lines = path.read_bytes().splitlines(keepends=True)
    path.write_bytes(b"".join(lines[:-1]))
    assert "Verdict      NONE: the walk was not finished" in as_text(load_summary(path))
    path.write_bytes(b"".join([*lines[:3], *lines[4:]]))
    summary = load_summary(path)
    text = as_text(summary)
    assert text.splitlines()[2].startswith("BROKEN RECORD. Line 4")
    assert "Verdict      NONE: the record is broken" in text
    assert as_json(summary)["verdict"] is None


def test_a_rehearsal_says_so_at_once_with_its_seed_and_fault(tmp_path: Path) -> None:
    events = good_events()
    events[0] = opened(kind="rehearsal", seed=7, plant="driver.upper: open")
    text = as_text(gather(tmp_path, closed(events)))
    assert text.startswith("RECORD OF A REHEARSAL\n")
    assert "simulated (seed 7, with this fault in it: driver.upper: open). No real unit was measured." in " ".join(
        text.split()
    )


def test_results_from_before_a_resume_are_marked(tmp_path: Path) -> None:
    text = as_text(gather(tmp_path, [*good_events()[:9], Resumed(operator="Jo")]))
    assert "2 results are from before the walk was resumed" in text
    rows = [line for line in text.splitlines() if line.startswith(("  ohm.rails", "  output"))]
    assert len(rows) == 2
    for row in rows:
        assert row.endswith("pass     from before")


def test_control_characters_are_escaped() -> None:
    assert clean("a\x1b[2Jb\n\u202e\ud800é") == "a\\x1b[2Jb\\n\\u202e\\ud800é"


@settings(max_examples=40, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(typed=st.text(max_size=60))
def test_nothing_typed_reaches_the_terminal_raw(tmp_path: Path, typed: str) -> None:
    path = tmp_path / "typed.jsonl"
    path.unlink(missing_ok=True)
    events = good_events()
    events[0] = opened(unit=typed, operator=typed, plant=typed, design_name=typed)
    events += [StopAsked(reason=typed), judged(typed, typed, "fail", 1.0, why=typed), reading("a.b", typed, 1.0)]
    summary = load_summary(write(path, events))
    text = as_text(summary)
    assert all(letter.isprintable() or letter == "\n" for letter in text)
    json.dumps(as_json(summary), allow_nan=False)


def test_the_form_for_programs(tmp_path: Path) -> None:
    data = as_json(gather(tmp_path, closed(good_events())))
    assert json.loads(json.dumps(data, allow_nan=False)) == data
    assert data["format"] == 1
    assert data["verdict"] == "pass"
    assert data["record"]["status"] == 0
    assert data["supply_at_end"]["state"] == "off"
    overload, output = data["results"]
    assert (overload["value"], overload["overload"], overload["low"], overload["high"]) == (None, True, 1000.0, None)
    assert output["value"] == 0.0123
    assert output["standard_uncertainty"] == 0.0005
    assert (output["section"], output["step"], output["subject"]) == ("first-power", "output", "output")
    assert data["notes"] == [
        {"text": "Highest at the unit", "figures": {"highest_rail_v": 12.02, "energy_j": 1.5}},
    ]


@pytest.mark.parametrize("unit", ["V", "%", "", "ratio"])
def test_a_rule_may_have_any_unit(tmp_path: Path, unit: str) -> None:
    events = [*good_events(), judged("first-power.rule", "divider stiffness", "fail", 8.5, unit=unit, low=10.0)]
    assert "8.5" in as_text(gather(tmp_path, events))


# -- what the model said of this unit -------------------------------------------------------------------------------

WHY = "Every reading passed, but together they fit feed.upper: stuck low better than a good unit."


def suspicious(tmp_path: Path) -> Summary:
    return gather(tmp_path, closed(suspicious_events(), "undecided", why=WHY))


def test_both_limits_stand_in_the_table_and_an_odd_reading_is_said_first(tmp_path: Path) -> None:
    text = as_text(suspicious(tmp_path))
    lines = text.splitlines()
    heads = next(line for line in lines if "this unit" in line and "lowest" in line)
    row = next(line for line in lines if line.startswith("  output"))
    assert heads.index("lowest") < heads.index("highest") < heads.index("this unit") < heads.index("std. unc.")
    assert "-20.00 mV" in row
    assert "-1.000 mV to 2.000 mV" in row
    assert row.endswith("odd for this unit")
    first = text.split("What to know first")[1].split("No power yet")[0]
    assert "ODD FOR THIS UNIT: Output at rest, output" in first
    assert WHY in " ".join(first.split())
    assert "Nothing failed" not in first
    assert "in spite of it" not in text, "going on after an odd reading is no incident"
    cold = text.split("No power yet")[1].split("First power")[0]
    assert "this unit" not in cold, "no column where no reading has limits of its own"


def test_the_suspects_stand_in_words_with_what_speaks_for_them(tmp_path: Path) -> None:
    text = as_text(suspicious(tmp_path))
    told = text.split("Suspects\n--------")[1]
    assert "92 explanations of 2 readings, likeliest first: feed.upper stuck low." in told
    assert "90 %  feed.upper stuck low" in told
    assert "or feed.lower dead" in told
    assert "output reads 12.30 mV, expected 12.00 mV; healthy would read 400.0 uV" in told
    assert "1 fault could not have shown yet: driver.upper leaky." in told
    assert "Extra reading 1" in text
    assert "spread" in text


def test_a_program_gets_them_too(tmp_path: Path) -> None:
    found = json.loads(json.dumps(as_json(suspicious(tmp_path))))
    result = next(one for one in found["results"] if one["subject"] == "output")
    assert (result["low"], result["high"]) == (-0.02, 0.02)
    assert (result["unit_low"], result["unit_high"], result["odd"]) == (-0.001, 0.002, True)
    (suspicion,) = found["suspicions"]
    assert suspicion["suspects"][0]["fault"] == "feed.upper: stuck low"
    assert suspicion["unseen"] == ["driver.upper: leaky"]
    assert suspicion["line"] == 11
    assert found["verdict_why"] == WHY


def test_what_an_operator_said_burnt_parts_and_cautions_come_first(tmp_path: Path) -> None:
    events = good_events()
    events[0] = opened(supply="manual", cautions=("the meter's calibration was due 2031-01-01",))
    events[-1] = Noted(text="At the end.", broken=("emitter.upper.1: open",))
    summary = load_summary(write(tmp_path / "w.jsonl", closed(events)))
    text = as_text(summary)
    first = text[text.index("What to know first") : text.index("No power yet")]
    assert "set and switched by hand: what it showed is what the operator said" in " ".join(first.split())
    assert "CAUTION: the meter's calibration was due 2031-01-01" in first
    assert "Burnt in the simulated unit: emitter.upper.1: open" in first
    plain = as_json(summary)
    assert plain["cautions"] == ["the meter's calibration was due 2031-01-01"]
    assert plain["notes"] == [{"text": "At the end.", "figures": {}, "broken": ["emitter.upper.1: open"]}]
