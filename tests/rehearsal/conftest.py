from __future__ import annotations

from pathlib import Path

import pytest

from benchkit.rehearsal.bench import RehearsalBench
from benchkit.stage.design import Design, parse_design

DESIGNS = Path(__file__).parents[2] / "procedures" / "designs"
TERN = (DESIGNS / "tern-40.toml").read_text("utf-8")


@pytest.fixture(scope="session")
def tern() -> Design:
    return parse_design(TERN, "tern-40.toml")


@pytest.fixture
def bench(tern: Design) -> RehearsalBench:
    return RehearsalBench(tern, 1)


def power_up(bench: RehearsalBench, volts: float, limit_a: float, *, settle_s: float = 1.0) -> None:
    """Put the unit on the leads, the trimmer at least bias, and both rails up together."""
    bench.table.connect(True)
    bench.table.set_travel(0.0)
    tell(bench, f"CURR {limit_a},(@1,2)", f"VOLT {volts},(@1);:VOLT {volts},(@2)", "OUTP ON,(@1,2)")
    bench.table.advance(settle_s)


def tell(bench: RehearsalBench, *messages: str) -> None:
    for message in messages:
        assert bench.supply.handle(message) is None
    assert bench.supply.handle("SYST:ERR?") == '0,"No error"'


def supply(bench: RehearsalBench, question: str) -> tuple[float, ...]:
    reply = bench.supply.handle(question)
    assert reply is not None
    return tuple(float(part) for part in reply.split(","))


def meter(bench: RehearsalBench, point: str | None, question: str = "MEAS:VOLT:DC?") -> float:
    bench.table.probe(point)
    reply = bench.meter.handle(question)
    assert reply is not None
    return float(reply)
