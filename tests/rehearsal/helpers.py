"""What the tests of the rehearsal's bench share."""

from __future__ import annotations

from pathlib import Path

from benchkit.rehearsal.bench import RehearsalBench

DESIGNS = Path(__file__).parents[2] / "procedures" / "designs"
TERN = (DESIGNS / "tern-40.toml").read_text("utf-8")


def power_up(
    bench: RehearsalBench, volts: float, limit_a: float, *, travel: float = 0.0, settle_s: float = 1.0
) -> None:
    """Put the unit on the leads, the trimmer at a travel, and both rails up together."""
    bench.table.connect(True)
    bench.table.set_travel(travel)
    tell(bench, f"CURR {limit_a},(@1,2)", f"VOLT {volts},(@1);:VOLT {volts},(@2)", "OUTP ON,(@1,2)")
    bench.table.advance(settle_s)


def tell(bench: RehearsalBench, *messages: str) -> None:
    """Send messages to the supply that have no reply and must not be refused."""
    for message in messages:
        assert bench.supply.handle(message) is None
    assert bench.supply.handle("SYST:ERR?") == '0,"No error"'


def supply(bench: RehearsalBench, question: str) -> tuple[float, ...]:
    """Ask the supply something that is answered in numbers."""
    reply = bench.supply.handle(question)
    assert reply is not None
    return tuple(float(part) for part in reply.split(","))


def meter(bench: RehearsalBench, point: str | None, question: str = "MEAS:VOLT:DC?") -> float:
    """Clip the meter somewhere and ask it for a reading."""
    bench.table.probe(point)
    reply = bench.meter.handle(question)
    assert reply is not None
    return float(reply)
