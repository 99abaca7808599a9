from __future__ import annotations

from dataclasses import replace
from typing import Any

import pytest

from benchkit.events import Decided, Noted, Resumed, SupplyState, Suspected, Tripped
from benchkit.procedure.actions import Narrow, Read, Suspect
from benchkit.procedure.state import State
from benchkit.session.front import View
from benchkit.session.supply_view import supply_words
from benchkit.session.views import Headings, Moment, Painter
from tests.procedure.driver import OPENED, Drive, begun, judged, narrowed, reading, small, suspected

ON = SupplyState(output_on=True, positive_v=10.0, negative_v=-10.0, positive_a=0.0124, negative_a=0.0121, limit_a=0.045)


@pytest.mark.parametrize(
    ("energised", "supply", "by_hand", "words"),
    [
        ("off", None, False, "SUPPLY OFF (read back as off)"),
        ("off", None, True, "SUPPLY OFF (as you said; nothing switches it off by itself)"),
        (
            "off", replace(ON, positive_tripped=True), False,
            "SUPPLY OFF (read back as off)  TRIPPED by its own protection",
        ),
        ("unknown", ON, False, "SUPPLY: OUTPUT STATE UNKNOWN - treat the unit as live"),
        ("unknown", None, True, "SUPPLY IN YOUR HANDS: nothing switches it off by itself"),
        (
            "on", replace(ON, limit_a=None), True,
            "SUPPLY IN YOUR HANDS: nothing switches it off by itself  you said:  10.00 V 12.4 mA  -10.00 V 12.1 mA",
        ),
        (
            "on", replace(ON, protection_positive_v=12.0, protection_negative_v=12.0), False,
            "SUPPLY ON  10.00 V 12.4 mA  -10.00 V 12.1 mA  limit 45.0 mA  protection 12.0 V",
        ),
        (
            "on", replace(ON, protection_positive_v=39.5, protection_negative_v=34.0, limit_a=None), False,
            "SUPPLY ON  10.00 V 12.4 mA  -10.00 V 12.1 mA  protection 39.5 V and 34.0 V",
        ),
        ("on", ON, False, "SUPPLY ON  10.00 V 12.4 mA  -10.00 V 12.1 mA  limit 45.0 mA"),
        ("on", replace(ON, negative_in_limit=True, limit_a=None), False, None),
        ("on", None, False, "SUPPLY ON"),
    ],
)  # fmt: skip
def test_supply_words(energised: str, supply: SupplyState | None, by_hand: bool, words: str | None) -> None:
    found = supply_words(energised, supply, by_hand=by_hand)  # type: ignore[arg-type]
    if words is None:
        assert found.endswith("IN LIMIT")
        assert "limit" not in found
    else:
        assert found == words


HEADINGS = Headings(record="r.jsonl", design="d A", procedure="p", purpose="why")


def view(drive: Drive, moment: Moment | None = None) -> View:
    return Painter(drive.walk, HEADINGS).paint(drive.state, moment or Moment())


def test_one_painter_keeps_up_with_every_event() -> None:
    drive = begun(small())
    painter = Painter(drive.walk, HEADINGS)
    while drive.state.closed is None:
        drive.well()
        assert painter.paint(drive.state, Moment()) == view(drive)
        assert painter.paint(drive.state, Moment(busy="now")) == replace(view(drive), busy="now")


def test_nothing_is_said_to_be_off_before_it_was_read_back() -> None:
    drive = begun(small())
    assert "it may be" in view(drive).supply.words
    assert "OFF" not in view(drive).supply.words + view(drive).supply.label
    drive.well()
    assert "read back as off" in view(drive).supply.words


def test_sections_count_up() -> None:
    drive = begun(small()).until("power.current.rail+.current")
    sections = {section.name: section for section in view(drive).sections}
    assert list(sections) == ["look", "cold", "limit", "power", "bias", "made-safe"]
    assert [section.name for section in sections.values() if section.current] == ["power"]
    assert (sections["cold"].done, sections["cold"].total, sections["cold"].verdict) == (4, 4, "pass")
    assert sections["bias"].done == 0
    assert sections["bias"].verdict is None
    assert 0 < sections["power"].done < sections["power"].total


def test_the_end_shows_everything_done() -> None:
    drive = begun(small())
    drive.to_end()
    found = view(drive)
    assert all(section.done == section.total for section in found.sections)
    assert (found.verdict, found.exit_status, found.kept) == ("pass", 0, len(drive.told))
    assert found.item_number <= found.item_count


def test_results_with_their_override_and_their_past() -> None:
    drive = begun(small()).until("power.offset")
    item = "look.parts"
    before = view(drive).results[1]
    assert (before.item, before.from_before, before.overridden) == (item, False, "")
    drive.tell(Resumed(operator="Ida"))
    assert all(result.from_before for result in view(drive).results)


def test_an_override_is_shown_with_its_reason() -> None:
    drive = begun(small()).until("look.parts")
    drive.well()
    drive.tell(judged("look.parts", "fail"))
    drive.tell(Decided(item="look.parts", choice="go on", reason="a known spot"))
    _, result = view(drive).results
    assert (result.verdict, result.overridden) == ("fail", "a known spot")


def test_numbers_come_as_text_and_as_numbers() -> None:
    drive = begun(small()).until("power.current.rail+.current")
    result = next(one for one in view(drive).results if one.item == "power.output-first.output")
    assert (result.value_text, result.low_text, result.high_text) == ("500 mV", "-10.000 V", "10.000 V")
    assert (result.value, result.low, result.high) == (0.5, -10.0, 10.0)
    confirmed = view(drive).results[1]
    assert (confirmed.value_text, confirmed.value) == ("", None)


def test_a_newer_sample_goes_before_the_record() -> None:
    drive = begun(small()).until("bias.soak")
    newer = SupplyState(output_on=True, positive_v=9.9)
    assert view(drive, Moment(supply=newer)).supply.state is newer
    assert view(drive).supply.state is drive.state.supply


def test_why_a_walk_is_on_its_way_out_is_said_first_and_as_long_as_it_is() -> None:
    drive = begun(small()).until("bias.soak")
    assert view(drive, Moment(message="now this")).message == "now this"
    drive.tell(Tripped(reason="rail+ in its limit"))
    assert view(drive, Moment(message="now this")).message == (
        "STOPPED: tripped: rail+ in its limit. On the way out now. "
        "Discharge, and find the cause: no second try at a higher limit. now this"
    )
    drive.well()
    assert drive.state.closed is None
    assert view(drive).message.startswith("STOPPED: tripped: rail+ in its limit.")
    assert view(drive).stopped == "tripped: rail+ in its limit"


def test_a_supply_by_hand_is_shown_as_such_all_the_time() -> None:
    drive = Drive(small())
    drive.tell(replace(OPENED, supply="manual"))
    found = view(drive).supply
    assert found.by_hand
    assert found.words == "SUPPLY IN YOUR HANDS: nothing switches it off by itself"


def test_before_anything_is_opened_there_is_a_picture_too() -> None:
    found = view(Drive(small(), State()))
    assert (found.unit, found.operator, found.results) == ("", "", ())


# -- what the model says of this unit -------------------------------------------------------------------------------

CURRENT = "power.current.rail+.current"


def at_current() -> Drive:
    drive = begun(small()).until(CURRENT)
    while not isinstance(drive.open, Read):
        drive.well()
    return drive


def asked(drive: Drive, kind: type[Narrow] | type[Suspect]) -> Any:
    return drive.newest(kind)


def failed() -> Drive:
    drive = at_current()
    drive.tell(reading(drive.walk.item(drive.state), -1e9))
    drive.well()
    return drive


def test_the_reading_to_come_is_shown_with_both_limits() -> None:
    drive = at_current()
    aim = view(drive).aim
    assert aim is not None
    assert (aim.point, aim.design_text, aim.unit_text) == ("rail+.current", "-10.00 A to 10.00 A", "")
    drive.tell(narrowed(asked(drive, Narrow), 0.4, 0.6))
    aim = view(drive).aim
    assert aim is not None
    assert (aim.design_text, aim.unit_text) == ("-10.00 A to 10.00 A", "400.0 mA to 600.0 mA")
    drive.well()
    drive.well()
    assert view(drive).aim is None
    result = next(one for one in view(drive).results if one.item == CURRENT)
    assert (result.unit_low, result.unit_high, result.odd) == (0.4, 0.6, False)
    assert (result.unit_low_text, result.unit_high_text) == ("400.00 mA", "600.00 mA")


def test_suspects_are_said_to_be_worked_out_and_then_shown() -> None:
    drive = failed()
    suspects = view(drive).suspects
    assert suspects is not None
    assert suspects.working
    assert suspects.suspects == ()
    drive.tell(suspected(asked(drive, Suspect), "output.upper.1: open", probes=["spread"]))
    suspects = view(drive).suspects
    assert suspects is not None
    assert not suspects.working
    assert suspects.accuses
    assert [one.title for one in suspects.suspects] == ["output.upper.1 open", "no single fault"]
    assert suspects.suspects[0].evidence == ("output reads 500.0 mV, expected overload; healthy would read 0.000 V",)
    assert "driver.upper open" in suspects.suspects[0].alike
    assert suspects.next_step.startswith("Most telling next: spread (")
    assert "2 faults could not have shown" in suspects.unseen


def test_what_can_be_had_only_after_off_says_so() -> None:
    drive = failed()
    drive.tell(suspected(asked(drive, Suspect), "output.upper.1: open", probes=["diode.output.upper.1"]))
    suspects = view(drive).suspects
    assert suspects is not None
    assert "make safe first" in suspects.next_step
    drive.tell(Decided(item=CURRENT, choice="go on", reason="known"))
    assert "output.upper.1 open" in view(drive).message, "it is not forgotten when the walk goes on"


def test_a_healthy_unit_is_never_proven() -> None:
    drive = failed()
    drive.tell(suspected(asked(drive, Suspect), "healthy"))
    suspects = view(drive).suspects
    assert suspects is not None
    assert not suspects.accuses
    assert "proves nothing" in suspects.heading
    assert suspects.unseen


def test_plain_words_when_there_was_no_answer() -> None:
    drive = failed()
    action = asked(drive, Suspect)
    drive.tell(Suspected(item=action.item, after=action.after, problem="31 of 90 hypotheses have no solution"))
    suspects = view(drive).suspects
    assert suspects is not None
    assert suspects.heading == "The model has no answer about suspects: 31 of 90 hypotheses have no solution"
    assert (suspects.suspects, suspects.unseen, suspects.next_step) == ((), "", "")


def test_an_extra_reading_has_its_own_title_among_the_results() -> None:
    drive = failed()
    drive.tell(suspected(asked(drive, Suspect), "output.upper.1: open", probes=["spread"]))
    drive.tell(Decided(item=CURRENT, choice="probe"))
    assert view(drive).item_title == "Extra reading: spread"
    while drive.state.extra:
        drive.well()
    assert view(drive).results[-1].title == "Extra reading: spread"


def test_why_a_verdict_is_no_better_is_shown_at_the_end() -> None:
    drive = at_current()
    drive.tell(narrowed(asked(drive, Narrow), 2.0, 3.0))
    drive.well()
    drive.well()
    drive.tell(suspected(asked(drive, Suspect), "output.upper.1: open"))
    drive.to_end()
    assert "output.upper.1: open" in view(drive).why


def test_no_protection_and_the_lamp_are_said_all_the_time() -> None:
    words = supply_words("on", ON, by_hand=False, unprotected=True)
    assert words.endswith("limit 45.0 mA  NO OVER-VOLTAGE PROTECTION")
    for energised in ("on", "off", "unknown"):
        lamp = supply_words(energised, ON, by_hand=True, on_lamp=True)
        assert lamp == "MAINS THROUGH THE SERIES LAMP: nothing switches it off by itself, pull the plug by hand"
    drive = begun(small())
    drive.state = replace(drive.state, on_lamp=True)
    found = view(drive).supply
    assert found.by_hand
    assert "SERIES LAMP" in found.words


def test_what_broke_is_in_the_picture() -> None:
    drive = begun(small())
    assert view(drive).broken == ""
    drive.tell(Noted(text="t", broken=("emitter.upper.1: open",)))
    assert view(drive).broken == "emitter.upper.1: open"


def test_where_the_probes_go_next_and_how_long_it_has_been() -> None:
    drive = begun(small())
    painter = Painter(drive.walk, replace(HEADINGS, target_time_s=300.0))
    seen: dict[str, str] = {}
    while drive.state.closed is None:
        shown = painter.paint(drive.state, Moment(), 12.5)
        assert (shown.elapsed_s, shown.target_time_s) == (12.5, 300.0)
        seen[shown.item] = shown.next_probe
        drive.well()
    items = {item.id: item for item in drive.walk.plan.items}
    told = {item: words for item, words in seen.items() if words}
    assert told
    for item, words in told.items():
        assert items[item].kind == "measure"
        following = next(
            other for other in drive.walk.plan.items[list(items).index(item) + 1 :]
            if other.point is not None and other.point.function != "dc current"
        )  # fmt: skip
        assert following.point is not None
        assert words.startswith(f"{following.point.name}: red on {following.point.red}")
    assert any(words == "" and items[item].kind == "measure" for item, words in seen.items())
