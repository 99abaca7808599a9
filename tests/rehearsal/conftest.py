from __future__ import annotations

import pytest

from benchkit.rehearsal.bench import RehearsalBench
from benchkit.stage.design import Design, parse_design
from tests.rehearsal.helpers import TERN


@pytest.fixture(scope="session")
def tern() -> Design:
    return parse_design(TERN, "tern-40.toml")


@pytest.fixture
def bench(tern: Design) -> RehearsalBench:
    return RehearsalBench(tern, 1)
