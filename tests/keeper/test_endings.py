"""A whole walk ended in every way that nobody wishes for, three times each; the campaign does fifty."""

from __future__ import annotations

import sys
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor

import pytest

pytestmark = pytest.mark.skipif(sys.platform == "win32", reason="POSIX signals and terminals")

if sys.platform != "win32":
    from tests.keeper.killing import WAYS, Forge, end

TRIES = 3


@pytest.fixture(scope="module")
def forge() -> Iterator[Forge]:
    made = Forge()
    yield made
    made.close()


@pytest.mark.timeout(120)
@pytest.mark.parametrize("way", list(WAYS))
def test_the_supply_goes_off_and_the_record_says_why(forge: Forge, way: str) -> None:
    with ThreadPoolExecutor(TRIES) as pool:
        outcomes = list(pool.map(lambda _: end(forge, way), range(TRIES)))
    assert [outcome.problems for outcome in outcomes] == [()] * TRIES
    assert max(outcome.off_s for outcome in outcomes) <= WAYS[way].within_s
