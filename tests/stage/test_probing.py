"""What to probe next: information against integration, wider models, questions of several units together."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.integrate import quad
from scipy.stats import norm

from benchkit.stage.conditions import Condition, Unpowered
from benchkit.stage.fitting import Data
from benchkit.stage.hypotheses import Library, library
from benchkit.stage.observations import Conditions
from benchkit.stage.probing import Question, information_bits, most_telling, wider
from benchkit.stage.unit_model import layout_of
from tests.stage.designs import breadboard
from tests.stage.unit_readings import FLOOR, SHARE

COLD = Condition(positive_v=4.0, negative_v=-4.0, limit_a=0.1, trimmer="least", ambient_c=25.0)
READ: list[tuple[Conditions, str]] = [((COLD,), point) for point in ("rail+", "output", "spread", "rail+.current")]
CANDIDATES: list[tuple[Conditions, str]] = [
    ((Unpowered(point=point, trimmer="least"),), point) for point in ("ohm.rails", "ohm.spreader.lower")
]
CANDIDATES.append(((COLD,), "spread.lower"))


def _by_integration(p: list[float], mean: list[float], sd: list[float]) -> float:
    """Mutual information in bits, straight from its definition."""

    def integrand(x: float) -> float:
        densities = [float(norm.pdf(x, m, s)) for m, s in zip(mean, sd, strict=True)]
        mixture = sum(a * d for a, d in zip(p, densities, strict=True))
        return sum(a * d * math.log2(d / mixture) for a, d in zip(p, densities, strict=True) if a * d > 0.0)

    low = min(m - 9.0 * s for m, s in zip(mean, sd, strict=True))
    high = max(m + 9.0 * s for m, s in zip(mean, sd, strict=True))
    return float(quad(integrand, low, high, points=mean, limit=200)[0])


@pytest.mark.parametrize(
    ("p", "mean", "sd"),
    [
        ([0.5, 0.5], [0.0, 1.0], [1.0, 1.0]),
        ([0.5, 0.5], [0.0, 3.0], [1.0, 1.0]),
        ([0.9, 0.1], [0.0, 2.0], [1.0, 0.7]),
        ([0.2, 0.3, 0.5], [0.0, 1.5, 4.0], [0.5, 1.0, 2.0]),
        ([0.5, 0.5], [0.0, 1.0], [0.1, 1.0]),
        ([0.5, 0.5], [0.0, 1.0], [1.0, 0.01]),
        ([0.3, 0.3, 0.4], [0.0, 0.5, 2.0], [0.01, 1.0, 0.01]),
    ],
)
def test_information_against_integration(p: list[float], mean: list[float], sd: list[float]) -> None:
    found = information_bits(np.array(p), np.array(mean)[:, None], np.array(sd)[:, None])
    assert float(found[0]) == pytest.approx(_by_integration(p, mean, sd), abs=0.01 if min(sd) > 0.05 else 0.06)


def test_information_at_its_ends() -> None:
    """Two equal hypotheses: far apart one bit, the same nothing; certainty leaves nothing to learn."""
    half = np.array([0.5, 0.5])
    mean, sd = np.array([[0.0, 1.0, -2.0], [1.0, 1.0, 2.0]]), np.array([[1e-4, 0.3, 1e-3], [2e-4, 0.3, 1e-3]])
    np.testing.assert_allclose(information_bits(half, mean, sd), [1.0, 0.0, 1.0], atol=1e-6)
    np.testing.assert_allclose(information_bits(np.array([1.0, 0.0]), mean, sd), 0.0, atol=1e-9)
    four = information_bits(np.full(4, 0.25), np.arange(4.0)[:, None], np.full((4, 1), 1e-3))
    np.testing.assert_allclose(four, [2.0], atol=1e-9)


@pytest.fixture(scope="module")
def lib() -> Library:
    return library(breadboard(), layout_of(READ))


def test_a_wider_model_begins_with_what_was_read(lib: Library) -> None:
    model = wider(lib, CANDIDATES)
    assert wider(lib, CANDIDATES) is model
    assert model.readings[: len(lib.model.readings)] == lib.model.readings[:4]
    assert model.coordinates.names[: len(lib.model.coordinates)] == lib.model.coordinates.names
    assert set(model.readings) == {*lib.model.readings, *CANDIDATES}


def _question(lib: Library, top: list[int]) -> Question:
    """The first hypothesis's nominal unit was read, and all in question stand at theirs."""
    f = lib.joint.f[top[:1]].repeat(len(top), axis=0)
    data = Data(f, SHARE * np.abs(f) + FLOOR)
    return Question(top, np.zeros((len(lib.model.coordinates), len(top))), np.full(len(top), 1.0 / len(top)), data)


def test_questions_together_are_answered_as_each_alone(lib: Library) -> None:
    tops = [[0, 3, 9, 12], [5, 0], [7], [0, 1, 2, 4, 6, 8, 10, 11]]
    questions = [_question(lib, top) for top in tops]
    together = most_telling(lib, CANDIDATES, {}, questions)
    assert [bool(one) for one in together] == [True, True, False, True]
    for question, probes in zip(questions, together, strict=True):
        (alone,) = most_telling(lib, CANDIDATES, {}, [question])
        assert [(one.point, one.conditions, one.why) for one in probes] == [
            (one.point, one.conditions, one.why) for one in alone
        ]
        assert [one.gain_bits for one in probes] == pytest.approx([one.gain_bits for one in alone], abs=1e-6)


def test_without_candidates_or_questions_there_is_nothing_to_say(lib: Library) -> None:
    assert most_telling(lib, [], {}, [_question(lib, [0, 3])]) == [()]
    assert most_telling(lib, CANDIDATES, {}, []) == []
