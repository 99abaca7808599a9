"""Readings side by side: which ones, at which rails, and whether the meters can tell them apart."""

from __future__ import annotations

import math

import pytest

from benchkit.measure.readings import Reading
from benchkit.record.facts import Result
from benchkit.record.pairing import KEY_POINTS, changes, rails_words, standing

FULL, LOW = (35.0, -35.0), (15.0, -15.0)


def result(
    point: str,
    value: float | None,
    *,
    rails_v: tuple[float, float] | None = FULL,
    uncertainty: float | None = 1e-4,
    step: str = "drops",
    replaced: bool = False,
    driven: bool = False,
) -> Result:
    reading = Reading(
        point=point, value=value, unit="V", overload=value is None, standard_uncertainty=uncertainty, meter="m",
        function="dc volts",
    )  # fmt: skip
    return Result(
        seq=1, at="", item=f"s.{step}", section="s", step=step, title="", subject=point, reading=reading,
        replaced=replaced, driven=driven, rails_v=rails_v,
    )  # fmt: skip


def test_the_last_standing_reading_counts_and_none_that_was_taken_otherwise() -> None:
    before = [
        result("output", 1.0),
        result("output", 2.0),
        result("output", 3.0, replaced=True),
        result("output", 4.0, driven=True),
        result("output", 5.0, step="extra-1"),
    ]
    assert [one.reading.value for one in standing(before) if one.reading is not None] == [1.0, 2.0]
    (change,) = changes(before, [result("output", 2.5)])
    assert change.amount == pytest.approx(0.5)


def test_a_reading_is_put_beside_one_at_the_same_rails() -> None:
    before = [result("output", 1.0), result("output", 2.0, rails_v=LOW)]
    (change,) = changes(before, [result("output", 1.5, rails_v=(35.4, -35.2))])
    assert change.amount == pytest.approx(0.5)
    assert change.same_rails
    (change,) = changes(before[1:], [result("output", 1.5)])
    assert change.amount == pytest.approx(-0.5)
    assert not change.same_rails
    (change,) = changes([result("output", 1.0, rails_v=None)], [result("output", 1.5)])
    assert not change.same_rails


def test_what_only_one_of_them_has_stays_in_sight() -> None:
    found = changes([result("output", 1.0), result("spread", 2.0)], [result("spread", 2.0), result("rail+", 35.0)])
    assert [(one.point, one.before is None, one.after is None) for one in found] == [
        ("spread", False, False),
        ("rail+", True, False),
        ("output", False, True),
    ]
    assert found[1].amount is None
    assert found[1].moved is None
    assert found[2].unit == "V"


@pytest.mark.parametrize(
    ("before", "after", "uncertainty", "moved", "share"),
    [
        (0.020, 0.0205, 1e-4, True, 0.025),
        (0.020, 0.02028, 1e-4, False, 0.014),
        (0.020, 0.02029, 1e-4, True, 0.0145),
        (0.0001, 0.02, 1e-4, True, None),
        (0.020, 0.0205, None, None, 0.025),
        (None, 0.02, 1e-4, None, None),
        (0.02, None, 1e-4, None, None),
    ],
)
def test_a_change_counts_when_it_is_more_than_twice_its_uncertainty(
    before: float | None, after: float | None, uncertainty: float | None, moved: bool | None, share: float | None
) -> None:
    """Two readings of 0.1 mV each: their difference is good to 0.1414 mV, so that 0.2828 mV is the border."""
    (change,) = changes(
        [result("emitter.upper.1", before, uncertainty=None if before is None else uncertainty)],
        [result("emitter.upper.1", after, uncertainty=None if after is None else uncertainty)],
    )
    assert change.moved is moved
    assert change.share == (None if share is None else pytest.approx(share))
    if uncertainty is not None and before is not None and after is not None:
        assert change.uncertainty == pytest.approx(math.sqrt(2.0) * 1e-4)


def test_an_offset_has_no_share() -> None:
    (change,) = changes([result("output", 0.01)], [result("output", 0.02)])
    assert change.share is None


@pytest.mark.parametrize(
    ("point", "key"),
    [
        ("emitter.upper.1", True),
        ("emitter.pair.2", True),
        ("output", True),
        ("output.ac", True),
        ("rail-.current", True),
        ("rail+.drop", True),
        ("rail+", False),
        ("ohm.emitter.upper.1", False),
        ("ohm.output", False),
        ("output.upper.1.vbe", False),
    ],
)
def test_records_are_compared_by_drops_offset_and_currents(point: str, key: bool) -> None:
    assert bool(KEY_POINTS.fullmatch(point)) is key


def test_rails_in_words() -> None:
    assert rails_words((35.0, -12.5)) == "+35 V -12.5 V"
    assert rails_words((24.0, 0.0)) == "+24 V +0 V"
    assert rails_words(None) == "no power"
