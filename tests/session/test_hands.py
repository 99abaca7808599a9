from __future__ import annotations

import asyncio

import pytest

from benchkit.session.hands import Hands, end_note
from tests.session.fakes import FakeBench


def test_real_hands_are_the_operators_own() -> None:
    async def whole() -> None:
        hands = Hands()
        assert not hands.simulated
        await hands.act("short the leads")
        await hands.probe("output")
        await hands.turn(1.0)
        await hands.advance(5.0)
        await hands.repair("output.upper.1")
        assert await hands.truth() == {}

    asyncio.run(whole())


@pytest.mark.parametrize(
    ("act", "moves"),
    [
        ("short the leads", [("connect", False), ("short", True)]),
        ("connect the unit", [("short", False), ("connect", True)]),
        ("trimmer to least", [("trimmer", "least")]),
        ("connect the dummy load", []),
        ("drive the stage", [("drive", pytest.approx(1.0 / 30.0))]),
        ("drive at a third of full power", [("drive", pytest.approx(1.0 / 3.0))]),
        ("stop driving", [("drive", 0.0)]),
        ("take the dummy load off", [("drive", 0.0)]),
        ("clear the protection", [("clear protection", None)]),
    ],
)
def test_acts_in_their_order(act: str, moves: list[tuple[str, object]]) -> None:
    bench = FakeBench()
    asyncio.run(Hands(bench).act(act))
    assert bench.acts == moves


def test_whoever_has_a_screwdriver_turns_the_trimmer_themselves() -> None:
    bench = FakeBench()
    asyncio.run(Hands(bench, own_screwdriver=True).act("trimmer to least"))
    assert bench.acts == []


def test_the_rest_goes_through() -> None:
    bench = FakeBench()

    async def whole() -> None:
        hands = Hands(bench)
        assert hands.simulated
        await hands.probe("output")
        await hands.turn(-0.25)
        await hands.repair("output.upper.1")
        await hands.advance(2.0)
        assert (await hands.truth())["highest_rail_v"] == 10.0

    asyncio.run(whole())
    assert bench.acts == [("repair", None)]
    assert (bench.point, bench.turned, bench.seconds) == ("output", -0.25, 2.0)


def test_the_note_at_the_end_names_what_burnt() -> None:
    note = end_note({"burnt": ["emitter.upper.1: open"], "words": "Burnt: emitter.upper.1.", "energy_j": 2.0})
    assert note.broken == ("emitter.upper.1: open",)
    assert note.text == "Burnt: emitter.upper.1."
    assert note.figures == {"energy_j": 2.0}
    assert end_note({"burnt": []}).broken == ()
    assert end_note({}).broken is None, "a bench that says nothing of it"


@pytest.mark.parametrize(
    ("named", "well"),
    [
        ("output.upper.1", False),
        ("driver.resistor and output.upper.1", True),
        ("; Driver.resistor, output.upper.1.", True),
        ("driver.resistor, output.upper.10", False),
        ("the usual ones", False),
    ],
)
def test_only_what_was_named_is_replaced(named: str, *, well: bool) -> None:
    bench = FakeBench()
    bench.faulty = ["driver.resistor", "output.upper.1"]
    asyncio.run(Hands(bench).repair(named))
    assert (("repair", None) in bench.acts) is well
