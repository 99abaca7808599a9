"""The bench file of a rehearsal is one that any bench could have."""

from __future__ import annotations

import math

import numpy as np
import pytest

from benchkit.instruments.bench import parse_bench
from benchkit.rehearsal.bench_file import bench_text
from benchkit.rehearsal.meter import SPECIFICATION
from benchkit.rehearsal.supply import Supply, Terminals

TEXT = bench_text("TCPIP::127.0.0.1::50001::SOCKET", "TCPIP::127.0.0.1::50002::SOCKET")


def test_it_is_read_as_any_other() -> None:
    bench = parse_bench(TEXT, "bench.toml")
    assert bench.cautions == ()
    assert bench.meter is not None
    assert bench.supply is not None
    assert bench.meter.address == "TCPIP::127.0.0.1::50001::SOCKET"
    assert bench.supply.address == "TCPIP::127.0.0.1::50002::SOCKET"
    assert bench.meter.input_resistance_ohm == 10e6


def test_its_accuracies_are_those_that_the_meter_was_drawn_from() -> None:
    accuracy = parse_bench(TEXT, "bench.toml").accuracy
    assert set(accuracy.rows) == set(SPECIFICATION.rows)
    for function, rows in SPECIFICATION.rows.items():
        for row in rows:
            value = 0.7 * row.full_scale
            assert accuracy.standard_uncertainty(function, value) == pytest.approx(
                SPECIFICATION.standard_uncertainty(function, value), rel=1e-9
            )


class _Leads:
    def program(self, channel: int, volts: float, limit_a: float, on: bool) -> None:
        pass

    def terminals(self, channel: int) -> Terminals:
        return Terminals(15.0, 0.04)


def test_the_supply_reads_inside_what_is_stated() -> None:
    accuracy = parse_bench(TEXT, "bench.toml").supply_accuracy
    for function, question, true in (("dc volts", "VOLT", 15.0), ("dc current", "CURR", 0.04)):
        half_width = accuracy.standard_uncertainty(function, true) * math.sqrt(3.0)
        for seed in range(30):
            supply = Supply(_Leads(), np.random.default_rng(seed))
            for reading in str(supply.handle(f"MEAS:{question}? (@1,2)")).split(","):
                assert float(reading) == pytest.approx(true, abs=half_width)
