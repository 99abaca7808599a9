"""The catalogue of stages against ngspice, from committed results, and a small sample of them live.

Source: ngspice (Debian package), an independent program; `tests.reference.agreement` says how, and makes the committed
results. Here every design's healthy units and some designs' faults; ``python -m tests.reference.agreement check`` takes
the faults of all.
"""

from __future__ import annotations

import numpy as np
import pytest

from benchkit.stage.faults import faults_of
from benchkit.stage.topologies import build
from tests.reference import agreement, asking, ngspice
from tests.stage.catalogue import FEW, catalogue, few

LIVE = ("single resistor resistor lower series 1", "feedback source servo lower series 1 stopper")
EVERY_FAULT_OF = FEW[:3] + FEW[5:]
"""The two triples take the longest; some of their faults are taken in the live sample's place."""


def test_committed_results_are_those_of_the_catalogue() -> None:
    committed = agreement.committed()
    assert list(committed) == list(catalogue())
    for name, reference in committed.items():
        assert reference.healthy_v.shape == (len(build(catalogue()[name]).netlist.nodes()), agreement.UNITS + 1)
        assert reference.faulty_v.shape[1] == len(faults_of(catalogue()[name]))


@pytest.mark.parametrize("topology", ["single", "double", "triple", "feedback"])
def test_healthy_units_of_every_design(topology: str) -> None:
    """Every node of 51 units within 1e-6 + 1 uV."""
    for name, design in catalogue().items():
        if not name.startswith(topology):
            continue
        reference, ours = agreement.committed()[name], agreement.healthy(design)
        assert agreement.fingerprint(ours) == pytest.approx(reference.fingerprints[0], rel=1e-9), _STALE
        assert ours.converged.all(), name
        assert np.isfinite(reference.healthy_v).all(), name
        worst = agreement.compare_healthy(design, ours, reference.healthy_v)
        assert 0.0 < worst.share < 1.0, (name, worst)


@pytest.mark.parametrize("name", EVERY_FAULT_OF)
def test_every_fault(name: str) -> None:
    """Every test point with each fault within 1e-4 + 20 uV (2 uA)."""
    design, reference = few()[name], agreement.committed()[name]
    faults = faults_of(design)
    ours = agreement.faulty(design, faults)
    assert agreement.fingerprint(ours) == pytest.approx(reference.fingerprints[1], rel=1e-9), _STALE
    assert ours.converged.all()
    worst = agreement.compare_faulty(design, faults, ours, reference)
    assert 0.0 < worst.share < 1.0, worst


_STALE = "the catalogue's values are not those of the committed results: run `python -m tests.reference.agreement`"


def test_what_ngspice_cannot_solve_is_listed_and_little() -> None:
    committed = agreement.committed()
    assert agreement.unsolved_in(committed) == agreement.listed(agreement.UNSOLVED)
    assert len(agreement.listed(agreement.UNSOLVED)) <= MOST_UNSOLVED
    assert agreement.metered_in(committed) == agreement.listed(agreement.METERED)
    assert len(agreement.listed(agreement.METERED)) <= MOST_METERED


MOST_UNSOLVED = 18
MOST_METERED = 1194


@pytest.mark.skipif(not ngspice.installed(), reason="ngspice is not installed; committed results are compared above")
@pytest.mark.parametrize("name", LIVE)
def test_live(name: str) -> None:
    """ngspice, asked now: five healthy units and every ninth fault; and it says what was committed."""
    design, reference = few()[name], agreement.committed()[name]
    ours = agreement.healthy(design, units=4)
    answer = asking.ask(design, ours)
    assert answer.solved.all()
    table = np.array(list(answer.volts.values()))
    assert agreement.compare_healthy(design, ours, table).share < 1.0
    which = list(range(0, len(faults_of(design)), 9))
    broken = agreement.faulty(design, faults_of(design))
    answer = asking.ask_one_by_one(design, broken, which)
    found = {point: values[which] for point, values in agreement.points(design, broken, answer).items()}
    assert np.isfinite(next(iter(found.values()))).all()
    shares = agreement.faulty_shares(design, broken, agreement.points(design, broken, answer))
    metered = {key for key in reference.metered if key[0] in which}
    for point, share in shares.items():
        for unit in which:
            assert share[unit] < 1.0 or (unit, point) in metered, (point, unit)
    for unit in which:
        row = np.array([volts[unit] for volts in answer.volts.values()])
        assert np.abs(row - reference.faulty_v[:, unit]) == pytest.approx(0.0, abs=2e-5 + 1e-5 * np.abs(row).max())
