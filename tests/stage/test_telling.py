"""What fitted hypotheses have to say: what is alike, what stays unseen, evidence and probes."""

from __future__ import annotations

import math

import numpy as np
import pytest

from benchkit.stage.conditions import Condition, Unpowered
from benchkit.stage.draws import Array
from benchkit.stage.fitting import Data
from benchkit.stage.hypotheses import library
from benchkit.stage.observations import Conditions, Observation
from benchkit.stage.suspects import suspect
from benchkit.stage.telling import BAYES_FACTOR, Report
from benchkit.stage.unit_model import layout_of
from tests.stage.designs import breadboard
from tests.stage.unit_readings import POINTS, fault_of, first_group, observed, powered

COLD = Condition(positive_v=4.0, negative_v=-4.0, limit_a=0.1, trimmer="least", ambient_c=25.0)
NAMES = tuple(point for point in POINTS if point != "driver.resistor")
PLANTED = ("healthy", "spreader.lower: open", "output.upper.1: missing", "emitter.upper.1: ten times high")


@pytest.fixture(scope="module")
def readings() -> list[list[Observation]]:
    return powered(breadboard(), COLD, [fault_of(name, breadboard()) for name in PLANTED], NAMES, seed=6)


@pytest.fixture(scope="module")
def report(readings: list[list[Observation]]) -> Report:
    lib = library(breadboard(), layout_of([((COLD,), one.point) for one in readings[0]]))
    y = np.array([[one.value for one in some] for some in readings])
    u = np.array([[one.standard_uncertainty for one in some] for some in readings])
    candidates: list[tuple[Conditions, str]] = [
        ((Unpowered(point=point, trimmer="least"),), point) for point in ("ohm.rails", "ohm.spreader.lower")
    ]
    return Report(lib, Data(y, u), candidates)


def test_probabilities_and_order(report: Report) -> None:
    for said in report.suspicions():
        probabilities = [one.probability for one in said.suspects]
        assert sum(probabilities) == pytest.approx(1.0, abs=1e-9)
        assert probabilities == sorted(probabilities, reverse=True)
        assert {one.fault for one in said.suspects} == set(report.lib.faults)
        assert len(said.suspects) == said.hypotheses == len(report.lib.faults)


def test_alike_goes_both_ways_and_is_at_most_three(report: Report) -> None:
    named = 0
    for number, said in enumerate(report.suspicions()):
        alike = {one.fault: one.alike for one in said.suspects}
        for fault, others in alike.items():
            assert fault not in others
            assert len(set(others)) == len(others) <= 3
            named += len(others)
            for other in others:
                assert fault in alike[other]
        if number:
            assert fault_of(PLANTED[number], breadboard()) in first_group(said)
    assert named > 0


def _expected_factor(report: Report, number: int, first: int, second: int) -> float:
    """Logarithm of the expected Bayes factor of one hypothesis against another, by drawing readings from it."""
    fit, rows = report.fitted.fit, report.fitted.row[number]
    u = report.data.u[number]
    rng = np.random.default_rng(0)

    def normal(k: int) -> tuple[Array, Array]:
        slope = fit.joint.slope[rows[k]]
        return fit.joint.f[rows[k]] - slope @ fit.z[:, rows[k]], slope @ slope.T + np.diag(u**2)

    def log_density(y: Array, k: int) -> Array:
        mean, spread = normal(k)
        off = y - mean
        square = np.einsum("ni,ij,nj->n", off, np.linalg.inv(spread), off)
        return np.asarray(-0.5 * square - 0.5 * np.linalg.slogdet(spread)[1])

    y = fit.joint.f[rows[first]] + u * rng.standard_normal((4000, len(u)))
    return float((log_density(y, first) - log_density(y, second)).mean())


def test_alike_is_an_expected_bayes_factor_below_three_both_ways(report: Report) -> None:
    """Against drawn readings: what is named is below (with room for the draws), what clearly isn't alike above."""
    number = PLANTED.index("spreader.lower: open")
    said = report.suspicions()[number]
    faults = report.lib.faults
    first = faults.index(said.suspects[0].fault)
    assert said.suspects[0].alike
    for other in said.suspects[0].alike:
        for a, b in ((first, faults.index(other)), (faults.index(other), first)):
            assert _expected_factor(report, number, a, b) < math.log(BAYES_FACTOR) + 0.3
    apart = next(one for one in said.suspects[1:] if one.probability > 0.0 and one.fault not in said.suspects[0].alike)
    k = faults.index(apart.fault)
    if report.fitted.row[number, k] >= 0:
        factors = [_expected_factor(report, number, a, b) for a, b in ((first, k), (k, first))]
        assert max(factors) > math.log(BAYES_FACTOR) - 0.3


def test_unseen_faults_are_those_that_read_like_a_healthy_unit(readings: list[list[Observation]]) -> None:
    """What is called unseen reads, in the nominal unit, within what healthy units read; what moves much is not."""
    some = [one for one in readings[0] if one.point in ("output", "spread", "rail+")]
    lib = library(breadboard(), layout_of([((COLD,), one.point) for one in some]))
    data = Data(np.array([[one.value for one in some]]), np.array([[one.standard_uncertainty for one in some]]))
    report = Report(lib, data, ())
    healthy, u = lib.joint.f[0], np.median(report.data.u, axis=0)
    spread = np.hypot(np.sqrt((lib.joint.slope[0] ** 2).sum(axis=1)), u)
    off = np.abs((lib.joint.f[: len(lib.faults)] - healthy) / spread).max(axis=1)
    said = report.suspicions()[0]
    assert said.unseen
    for fault in said.unseen:
        assert off[lib.faults.index(fault)] < 3.0, fault
    for k in np.flatnonzero(off > 30.0):
        assert lib.faults[k] not in said.unseen


def test_unseen_never_holds_the_first_suspect(report: Report) -> None:
    for said in report.suspicions():
        assert said.suspects[0].fault not in said.unseen
        assert len(set(said.unseen)) == len(said.unseen)


def test_evidence_says_what_was_read_and_what_was_expected(report: Report, readings: list[list[Observation]]) -> None:
    for said, some in zip(report.suspicions()[1:], readings[1:], strict=True):
        read = {one.point: one for one in some}
        first = said.suspects[0]
        assert first.evidence
        weights = [one.weight for one in first.evidence]
        assert weights == sorted(weights, reverse=True)
        for one in first.evidence:
            assert one.weight > 0.0
            assert one.read == read[one.point].value
            assert one.conditions == (COLD,)
            u = read[one.point].standard_uncertainty
            assert abs(one.read - one.expected) < 5.0 * u + 1e-3 * abs(one.read)
            assert abs(one.read - one.healthy) > abs(one.read - one.expected)


def test_an_overload_under_power_is_no_evidence() -> None:
    """Nothing says where a voltmeter's range ended: such a reading has no weight, whatever its sign."""
    spread = powered(breadboard(), COLD, [fault_of("spreader.lower: open", breadboard())], ("spread",))[0]
    candidates: list[tuple[Conditions, str]] = [((COLD,), "rail+.current")]
    said = suspect(breadboard(), [observed(COLD, "output", -math.inf), *spread], candidates=candidates)
    assert any(one.point == "spread" for suspect_ in said.suspects for one in suspect_.evidence)
    assert all(one.point != "output" for suspect_ in said.suspects for one in suspect_.evidence)


def test_probes_are_of_the_candidates_and_worth_something(report: Report) -> None:
    number = PLANTED.index("spreader.lower: open")
    for probe in report.suspicions()[number].probe_next:
        assert (probe.conditions, probe.point) in report.candidates
        assert 0.0 < probe.gain_bits <= math.log2(len(report.lib.faults))
        assert " would read " in probe.why
