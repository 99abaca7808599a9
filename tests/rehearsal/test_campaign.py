"""A few units of the first-power-on campaign: `tests.benchmarks.first_power_study` runs hundreds."""

from __future__ import annotations

from collections.abc import Iterator
from types import SimpleNamespace
from typing import Any

import pytest

from benchkit.session import predictions, this_unit
from benchkit.stage.design import Design
from benchkit.stage.faults import Fault
from tests.benchmarks.first_power_bench import Outcome, share_the_model, walk_once
from tests.benchmarks.first_power_harm import Careless, harm_of, straight_on, why_not
from tests.benchmarks.first_power_study import Drawn, Figures, Harm
from tests.stage.catalogue import few
from tests.stage.designs import breadboard


@pytest.fixture
def quick() -> Iterator[None]:
    kept = predictions.predict, predictions.check_warm, this_unit.Narrower, this_unit.suspect
    share_the_model(narrowing=False, suspects=False)
    yield
    predictions.predict, predictions.check_warm = kept[:2]
    this_unit.Narrower, this_unit.suspect = kept[2:]  # type: ignore[misc]


def test_harm_is_found_by_simulation() -> None:
    design = breadboard()
    harm = harm_of(design, Fault("spreader.transistor", "missing"))
    assert harm is not None
    assert set(harm.burnt) | set(harm.overloaded)
    nothing = Careless(burnt=(), overloaded=())
    assert straight_on(design, 4242, "spreader.lower: open", 0.0, seconds=2.0) == nothing, "it takes the bias away"


def test_a_healthy_unit_stands_careless_power(tern: Design) -> None:
    assert straight_on(tern, 3, "", 0.0, seconds=3.0) == Careless(burnt=(), overloaded=())


def test_carelessness_burns(tern: Design) -> None:
    careless = straight_on(tern, 3, "driver.resistor: short", 0.5, seconds=1.0)
    assert {part.partition(".")[0] for part in careless.burnt} & {"driver", "output"}


def test_the_procedure_saves_what_carelessness_overloads(quick: None) -> None:
    plant = "spreader.transistor: missing"
    assert straight_on(breadboard(), 4242, plant, 0.0, seconds=5.0).overloaded
    found = walk_once(breadboard(), 4242, plant, units=120)
    assert found.truth["broken"] == []
    assert found.truth["overloaded"] == {}
    assert found.noticed.startswith("cold.")
    assert not found.full
    assert found.closed.stopped
    assert found.closed.exit_status == 1
    assert found.truth["output_on"] == [False, False]


def test_designs_that_no_unit_can_help_are_named() -> None:
    reasons = {name: why_not(design) for name, design in few().items()}
    assert reasons["feedback resistor resistor none 1"] == "it has no trimmer"
    assert reasons["triple source servo upper series 1 stopper"] == "an open wiper raises its bias"
    assert list(reasons.values()).count("") >= 3


def outcome(*, broken: tuple[str, ...] = (), full: bool = True, noticed: str = "", verdict: str = "pass") -> Outcome:
    truth = {"broken": list(broken), "burnt": [], "overloaded": {}}
    closed: Any = SimpleNamespace(verdict=verdict, stopped="")
    return Outcome(events=(), closed=closed, truth=truth, full=full, noticed=noticed)


@pytest.mark.parametrize(
    ("plant", "found", "burnt_parts", "unnoticed", "stopped"),
    [
        ("", outcome(), 0, 0, 0),
        ("", outcome(verdict="fail"), 0, 0, 1),
        ("driver.resistor: short", outcome(verdict="fail", full=False, noticed="cold.x"), 0, 0, 0),
        ("driver.resistor: short", outcome(broken=("driver.upper", "driver.lower")), 2, 1, 0),
        ("driver.resistor: ten times low", outcome(broken=("driver.resistor",), noticed="low-rails.x"), 0, 0, 0),
    ],
)
def test_what_is_counted(
    tern: Design, plant: str, found: Outcome, burnt_parts: int, unnoticed: int, stopped: int
) -> None:
    figures = Figures()
    one = Drawn(number=0, design="tern-40", seed=1, plant=plant, wrong_end=False)
    figures.count(one, found, Careless(burnt=(), overloaded=()), tern)
    assert (figures.burnt_parts, figures.unnoticed, figures.healthy_stopped) == (burnt_parts, unnoticed, stopped)
    assert figures.healthy + figures.faulty == 1


def test_harm_is_remembered(tmp_path: Any) -> None:
    design, path = breadboard(), tmp_path / "harm.json"
    fault = Fault("spreader.lower", "open")
    assert Harm(path).harmful("breadboard", design, fault) is False
    again = Harm(path)
    assert again.known == {"breadboard": {str(fault): False}}
