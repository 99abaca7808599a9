from __future__ import annotations

import asyncio
import time

import pytest

from benchkit.session.clock import SimulatedClock, WallClock


def test_simulated_time_moves_the_bench_and_nobody_waits() -> None:
    moved: list[float] = []

    async def advance(seconds: float) -> None:
        moved.append(seconds)

    clock = SimulatedClock(advance, None)
    began_s = time.monotonic()
    asyncio.run(clock.spend(600.0))
    assert time.monotonic() - began_s < 5.0
    assert (clock.now(), moved, clock.own_watch) == (600.0, [600.0], False)


def test_a_person_sees_it_happen_at_a_pace() -> None:
    async def advance(seconds: float) -> None:
        return None

    clock = SimulatedClock(advance, 100.0)
    began_s = time.monotonic()
    asyncio.run(clock.spend(5.0))
    assert time.monotonic() - began_s >= 0.045
    assert clock.now() == 5.0


def test_time_that_the_bench_did_not_live_is_not_counted() -> None:
    async def advance(seconds: float) -> None:
        raise OSError("gone")

    clock = SimulatedClock(advance, None)
    with pytest.raises(OSError, match="gone"):
        asyncio.run(clock.spend(1.0))
    assert clock.now() == 0.0


def test_the_wall_clock_is_the_real_one() -> None:
    clock = WallClock()
    before_s = clock.now()
    asyncio.run(clock.spend(0.02))
    assert clock.now() - before_s >= 0.019
    assert clock.own_watch
