"""The real keeper against the simulated bench: what a rehearsal rests on, over real sockets and pipes."""

from __future__ import annotations

import pytest

from benchkit.instruments.bench import parse_bench
from benchkit.keeper.client import KeeperClient
from benchkit.rehearsal.bench_client import start_bench
from tests.rehearsal.helpers import TERN

PATIENCE_S = 30.0


def test_limit_check_power_reading_and_off() -> None:
    with start_bench(TERN, 3) as bench:
        keeper = KeeperClient.start(None, lambda _: None)
        try:
            names = keeper.connect(parse_bench(bench.bench_text, "bench.toml").setup).result(PATIENCE_S)
            assert all(names.values())
            bench.hands.trimmer_to("least")
            bench.hands.short(True)
            keeper.supply_set(2.0, -2.0, 0.05, True).result(PATIENCE_S)
            bench.hands.advance(0.2)
            shorted = keeper.supply_state().result(PATIENCE_S)
            assert shorted.positive_in_limit
            assert shorted.negative_in_limit
            assert shorted.positive_a == pytest.approx(0.05, abs=0.002)
            assert keeper.off("limit checked").result(PATIENCE_S).confirmed
            bench.hands.short(False)
            bench.hands.connect(True)
            bench.hands.probe("output")
            keeper.supply_set(15.0, -15.0, 0.08, True).result(PATIENCE_S)
            bench.hands.advance(1.0)
            powered = keeper.supply_state().result(PATIENCE_S)
            assert not powered.in_limit
            assert powered.negative_v == pytest.approx(-15.0, abs=0.03)
            assert powered.negative_a is not None
            assert 0.005 < powered.negative_a < 0.05
            reading = keeper.read("dc volts", None, 3).result(PATIENCE_S)
            assert reading.value == pytest.approx(bench.hands.truth()["output_v"], abs=1e-4)
            bench.hands.probe(None)
            assert keeper.read("ohms").result(PATIENCE_S).overload
        finally:
            keeper.close()
        assert bench.hands.truth()["output_on"] == [False, False]
