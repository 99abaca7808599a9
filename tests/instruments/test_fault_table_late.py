"""Instruments that answer when they like: late, twice, not at all, in any order of these, to any question.

What is believed has to be the answer to the question that was asked.  The meter reads the number that it was asked for.
"""

from __future__ import annotations

import random
import time
from collections.abc import Sequence

import pytest

from benchkit.errors import InstrumentError
from tests.instruments.fault_bench import Act, Say, Wait
from tests.instruments.fault_bench.bench import VARIANTS, MeterBench, fault_meter


def moody(
    variant: str, seed: int, questions: int, link: dict[str, str] | None = None
) -> tuple[list[str], int, int, int]:
    """Ask an instrument whose every answer, to whatever question, may be late or lost for a while.

    Returns
    -------
    tuple of list of str, int, int, int
        What was believed wrongly; how many answers were got and refused; how many messages had a late answer or none.
    """
    draw = random.Random(seed)
    meter, server = fault_meter(variant)
    wrong: list[str] = []
    got = refused = odd = 0
    spells = {"good": 2, "bad": 0}

    def plan(message: str) -> Sequence[Act] | None:
        nonlocal odd
        if spells["good"]:
            spells["good"] -= 1
            return None
        if not spells["bad"]:
            spells["bad"] = draw.randrange(1, 6)
        spells["bad"] -= 1
        if not spells["bad"]:
            spells["good"] = draw.randrange(1, 6)
        odd += 1
        reply = meter.reply(message)
        if reply is None or draw.random() < 0.15:
            return ()
        # lateness that falls on either side of every time-out there is
        return (Wait(draw.choice([0.0, 0.03, 0.08, 0.12, 0.2, 0.35])), Say(reply.encode() + b"\n"))

    table: dict[str, object] = {"timeout_s": 0.1, "open_timeout_s": 0.8, **(link or {})}
    with server, MeterBench(server.address, table) as bench:
        bench.meter.identify().result(20)
        meter.plan = plan
        for number in range(1, questions + 1):
            try:
                value = bench.start(number, 0.1, repeats=draw.random() < 0.7).result(60)
            except InstrumentError as error:
                refused += 1
                if error.kind not in {"timeout", "link lost", "garbled"}:
                    wrong.append(f"question {number} ended in {error.kind}: {error.message}")
                continue
            got += 1
            if value != number:
                wrong.append(f"question {number} was answered by {value!r}")
        meter.plan = None
        time.sleep(0.4)
        for number in range(3):
            for attempt in (1, 2, 3):
                try:
                    value = bench.read(1000.0 + number)
                except InstrumentError as error:
                    # what waits in the instrument may still be in the way, with such short time-outs
                    if attempt == 3:
                        wrong.append(f"it never came back: {error.message}")
                    continue
                if value != 1000.0 + number:
                    wrong.append(f"afterwards {value!r} was read instead of {1000.0 + number}")
                break
    return wrong, got, refused, odd


@pytest.mark.parametrize(
    ("variant", "link"),
    [(variant, {}) for variant in VARIANTS]
    + [(variant, {"sync": ""}) for variant in ("serial", "vxi-11, one output for all links")],
)
def test_an_answer_is_to_its_question_or_none(variant: str, link: dict[str, str]) -> None:
    """A sample; ``python -m tests.benchmarks.late_answers`` asks thousands."""
    wrong, got, _, odd = moody(variant, 7, 12, link)
    assert wrong == []
    assert got >= 2
    assert odd >= 5
