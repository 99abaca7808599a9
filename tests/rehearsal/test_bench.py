"""The bench in one object: determinism, and the side channel's requests."""

from __future__ import annotations

import json
from typing import Any

import pytest

from benchkit.errors import EntryError
from benchkit.rehearsal.bench import SIDE_REQUESTS, RehearsalBench, SideTalker
from benchkit.rehearsal.servers import Talker
from benchkit.stage.design import Design

SCRIPT: list[tuple[str, Any]] = [
    ("side", {"do": "trimmer to", "travel": "least"}),
    ("side", {"do": "probe", "point": "ohm.spreader.lower"}),
    ("meter", "MEAS:RES?"),
    ("side", {"do": "connect", "connected": True}),
    ("supply", "CURR 0.06,(@1,2);:VOLT 12,(@1);:VOLT 12,(@2);:OUTP ON,(@1,2)"),
    ("side", {"do": "advance", "seconds": 0.01}),
    ("supply", "MEAS:VOLT? (@1,2);CURR? (@1,2)"),
    ("side", {"do": "advance", "seconds": 2}),
    ("side", {"do": "probe", "point": "spread"}),
    ("meter", "MEAS:VOLT:DC?"),
    ("side", {"do": "turn", "turns": 2.5}),
    ("side", {"do": "advance", "seconds": 5.0}),
    ("meter", "CONF:VOLT:DC 10;:SAMP:COUN 2;:READ?"),
    ("supply", "OUTP OFF,(@1,2);OUTP? (@1,2)"),
    ("side", {"do": "truth"}),
]


def play(design: Design, seed: int) -> list[str | None]:
    bench = RehearsalBench(design, seed)
    talkers: dict[str, Talker] = {"side": SideTalker(bench), "meter": bench.meter, "supply": bench.supply}
    return [talkers[who].handle(what if isinstance(what, str) else json.dumps(what)) for who, what in SCRIPT]


def test_the_same_seed_and_messages_give_the_same_replies(tern: Design) -> None:
    first = play(tern, 4)
    assert first == play(tern, 4)
    other = play(tern, 5)
    assert other[2] != first[2]
    assert other[9] != first[9]


def test_truth_is_json_and_says_what_is_so(tern: Design) -> None:
    truth = json.loads(str(play(tern, 4)[-1]))["ok"]
    assert truth["travel"] == pytest.approx(2.5 / 12.0)
    assert truth["output_on"] == [False, False]
    assert truth["sim_s"] == pytest.approx(7.01)
    assert truth["highest_rail_v"] == pytest.approx([12.0, -12.0], abs=0.02)
    assert truth["connected"] is True
    assert truth["probe"] == "spread"
    assert truth["unsolved"] == 0
    assert truth["energy_j"] > 1.0


@pytest.mark.parametrize(
    ("line", "said"),
    [
        ("", "no JSON"),
        ("nonsense", "no JSON"),
        ("[1]", "a JSON object"),
        ("{}", "one of probe, turn"),
        ('{"do": "dance"}', "one of probe, turn"),
        ('{"do": "turn"}', "a finite number"),
        ('{"do": "turn", "turns": true}', "a finite number"),
        ('{"do": "turn", "turns": NaN}', "a finite number"),
        ('{"do": "trimmer to", "travel": "middle"}', "a finite number"),
        ('{"do": "connect", "connected": 1}', "true or false"),
        ('{"do": "advance", "seconds": -1}', "zero or more"),
        ('{"do": "probe", "point": 5}', "a test point's name"),
        ('{"do": "probe", "point": "spred"}', "spread"),
    ],
)
def test_what_the_hands_cannot_do(bench: RehearsalBench, line: str, said: str) -> None:
    reply = json.loads(SideTalker(bench).handle(line))
    assert set(reply) == {"error"}
    assert said in reply["error"]


def test_a_planted_part_must_exist(tern: Design) -> None:
    with pytest.raises(EntryError, match=r"emitter\.upper\.1"):
        RehearsalBench(tern, 1, "emitter.uper.1: open")
    assert RehearsalBench(tern, 1, "emitter.upper.1: open").truth()["plant"] == "emitter.upper.1: open"


def test_following_the_clock_lets_time_pass(tern: Design, monkeypatch: pytest.MonkeyPatch) -> None:
    now_s = [100.0]
    monkeypatch.setattr("benchkit.rehearsal.bench.time.monotonic", lambda: now_s[0])
    following, manual = RehearsalBench(tern, 1, follow=True), RehearsalBench(tern, 1)
    now_s[0] += 0.25
    for bench in (following, manual):
        bench.catch_up()
    assert following.table.sim_s == pytest.approx(0.25)
    assert manual.table.sim_s == 0.0


def test_every_request_is_known_by_name() -> None:
    assert set(SIDE_REQUESTS) == {
        "probe", "turn", "trimmer to", "connect", "short", "drive", "slip", "fault", "repair", "advance", "truth",
        "clear protection",
    }  # fmt: skip
