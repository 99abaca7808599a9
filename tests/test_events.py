from __future__ import annotations

import dataclasses
import json
import math
from typing import Any

import hypothesis.strategies as st
import pytest
from hypothesis import given

from benchkit import events
from benchkit.errors import BenchkitError
from benchkit.events import (
    EVENT_KINDS,
    KINDS,
    Answered,
    Event,
    Judged,
    Narrowed,
    NarrowedLimits,
    Noted,
    Predicted,
    ProbeNamed,
    ReadingTaken,
    SupplySet,
    SupplyState,
    Suspected,
    SuspectEvidence,
    SuspectNamed,
    Tripped,
    from_payload,
    to_payload,
)
from benchkit.measure.readings import Reading
from tests.procedure.driver import begun, every_event, limits_of, small

SAMPLES = every_event(small(), begun(small()).state)


def through_json(event: Event) -> Event:
    return from_payload(event.name, json.loads(json.dumps(to_payload(event), allow_nan=False)))


@pytest.mark.parametrize("event", SAMPLES, ids=lambda event: event.name)
def test_an_event_comes_back_from_its_line(event: Event) -> None:
    assert through_json(event) == event
    assert hash(type(event)) is not None


def test_a_whole_walk_comes_back() -> None:
    drive = begun(small())
    drive.to_end()
    for event, _ in drive.told:
        assert through_json(event) == event
    predicted = next(event for event, _ in drive.told if isinstance(event, Predicted))
    assert through_json(predicted).limits == predicted.limits  # type: ignore[attr-defined]
    assert limits_of is not None


def test_every_kind_is_in_the_list_under_its_own_name() -> None:
    kinds = {
        kind
        for kind in vars(events).values()
        if isinstance(kind, type) and issubclass(kind, Event) and kind is not Event
    }
    assert kinds == set(EVENT_KINDS)
    assert len(KINDS) == len(EVENT_KINDS)
    assert all(kind.name for kind in EVENT_KINDS)


@pytest.mark.parametrize("kind", EVENT_KINDS)
def test_events_are_frozen_keyword_only_and_described(kind: type[Event]) -> None:
    assert kind.__doc__
    parameters = dataclasses.fields(kind)
    assert all(parameter.kw_only for parameter in parameters)
    assert kind.__dataclass_params__.frozen  # type: ignore[attr-defined]


@pytest.mark.parametrize("value", [math.nan, math.inf, -math.inf])
def test_a_number_that_is_not_finite_never_goes_in(value: float) -> None:
    for event in (
        Judged(item="i", subject="s", verdict="fail", value=value, unit="V", low=None, high=None),
        Noted(text="t", figures={"highest_v": value}),
        Tripped(reason="r", state=SupplyState(positive_v=value)),
    ):
        with pytest.raises(BenchkitError, match="finite"):
            to_payload(event)


@pytest.mark.parametrize("value", [math.nan, math.inf])
def test_nor_does_it_come_out(value: float) -> None:
    payload = to_payload(SAMPLES[8])
    with pytest.raises(BenchkitError, match="judged"):
        from_payload("judged", {**payload, "value": value})
    state = {**to_payload(Tripped(reason="r", state=SupplyState(positive_v=1.0)))}
    state["state"]["positive_v"] = value
    with pytest.raises(BenchkitError, match="tripped"):
        from_payload("tripped", state)


@pytest.mark.parametrize(
    ("name", "changes", "words"),
    [
        ("answered", {"choice": "maybe"}, "choice"),
        ("answered", {"colour": "red"}, "colour"),
        ("answered", {"item": 7}, "item"),
        ("answered", {"item": None}, "item"),
        ("no such event", {}, "no such event"),
    ],
)
def test_a_payload_that_does_not_fit(name: str, changes: dict[str, Any], words: str) -> None:
    payload = {**to_payload(Answered(item="i", choice="yes")), **changes}
    with pytest.raises(BenchkitError) as caught:
        from_payload(name, payload)
    assert words in str(caught.value)
    assert type(caught.value) is BenchkitError


def test_a_payload_that_lacks_something() -> None:
    with pytest.raises(BenchkitError, match="choice"):
        from_payload("answered", {"item": "i"})


def test_an_old_line_without_a_newer_field_can_be_read() -> None:
    assert from_payload("answered", {"item": "i", "choice": "yes"}) == Answered(item="i", choice="yes")


def test_a_reading_that_contradicts_itself_cannot_be_read() -> None:
    taken = next(event for event in SAMPLES if isinstance(event, ReadingTaken))
    payload = to_payload(taken)
    payload["reading"]["overload"] = True
    with pytest.raises(BenchkitError):
        from_payload("reading taken", payload)


@pytest.mark.parametrize(("positive", "negative", "limit"), [(0, 0, False), (1, 0, True), (0, 1, True), (1, 1, True)])
def test_either_rail_in_its_limit(positive: int, negative: int, limit: bool) -> None:
    state = SupplyState(positive_in_limit=bool(positive), negative_in_limit=bool(negative))
    assert state.in_limit is limit


def test_only_plain_values_go_in() -> None:
    with pytest.raises(BenchkitError, match="complex"):
        to_payload(Noted(text="t", figures={"z": 1j}))  # type: ignore[dict-item]


@given(st.text(), st.text(), st.dictionaries(st.text(), st.floats(allow_nan=False, allow_infinity=False)))
def test_any_words_and_figures_come_back(item: str, text: str, figures: dict[str, float]) -> None:
    event = Noted(item=item, text=text, figures=figures)
    assert through_json(event) == event


@given(st.dictionaries(st.text(max_size=8), st.one_of(st.none(), st.booleans(), st.floats(), st.text(max_size=5))))
def test_any_payload_is_an_event_or_an_error_of_ours(payload: dict[str, Any]) -> None:
    for name in KINDS:
        try:
            event = from_payload(name, payload)
        except BenchkitError:
            continue
        assert event.name == name


NUMBERS = st.floats(allow_nan=False, allow_infinity=False)
OPEN = st.none() | NUMBERS


@given(st.lists(st.tuples(st.text(), st.text(), OPEN, OPEN), max_size=4), st.integers(0, 10**6), st.text())
def test_narrowed_limits_come_back(parts: list[Any], after: int, problem: str) -> None:
    limits = tuple(
        NarrowedLimits(point=point, condition=condition, unit="V", low=low, high=high)
        for point, condition, low, high in parts
    )
    event = Narrowed(item="i", after=after, limits=limits, readings=3, units=9, seed=1, seconds=0.5, problem=problem)
    assert through_json(event) == event


@given(st.lists(st.tuples(st.text(), st.floats(0.0, 1.0), OPEN, OPEN, NUMBERS), max_size=4), st.lists(st.text()))
def test_suspects_come_back(parts: list[Any], unseen: list[str]) -> None:
    suspects = tuple(
        SuspectNamed(
            fault=fault,
            probability=probability,
            alike=(fault,),
            evidence=(
                SuspectEvidence(
                    point="p", condition="c", unit="V", read=read, expected=expected, healthy=None, weight=weight
                ),
            ),
        )
        for fault, probability, read, expected, weight in parts
    )
    event = Suspected(
        item="i",
        after=3,
        suspects=suspects,
        probe_next=(ProbeNamed(point="p", condition="c", gain_bits=0.5, why="w"),),
        unseen_count=len(unseen),
        unseen=tuple(unseen),
    )
    assert through_json(event) == event


def test_a_verdict_from_before_there_were_narrowed_limits_can_be_read() -> None:
    payload = to_payload(Judged(item="i", subject="s", verdict="pass", value=1.0, unit="V", low=None, high=None))
    for newer in ("unit_low", "unit_high", "odd"):
        del payload[newer]
    read = from_payload("judged", payload)
    assert isinstance(read, Judged)
    assert (read.unit_low, read.unit_high, read.odd) == (None, None, False)


def test_lines_from_before_these_fields_were_there_are_read() -> None:
    """A record of an earlier version says nothing of protection, of a rail's fall or of burnt parts."""
    cases: list[tuple[Event, tuple[str, ...]]] = [
        (
            SupplySet(item="i", state=SupplyState(output_on=True, positive_v=5.0)),
            ("positive_tripped", "negative_tripped", "protection_positive_v", "protection_negative_v"),
        ),
        (
            ReadingTaken(
                item="i",
                reading=Reading(
                    point="rail+", value=0.1, unit="V", standard_uncertainty=1e-3, meter="m", function="dc volts"
                ),
            ),
            ("fell_from_v", "fell_s", "fell_slowly"),
        ),
        (Noted(text="t"), ("broken",)),
    ]
    for event, added in cases:
        payload = to_payload(event)
        holder = payload["state"] if isinstance(event, SupplySet) else payload
        for name in added:
            del holder[name]
        assert from_payload(event.name, payload) == event


def test_a_supply_is_tripped_when_either_rail_is() -> None:
    assert not SupplyState().tripped
    assert SupplyState(positive_tripped=True).tripped
    assert SupplyState(negative_tripped=True).tripped
