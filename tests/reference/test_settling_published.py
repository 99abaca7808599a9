"""Published values: NIST's Statistical Reference Datasets, Misra1a (nonlinear regression) and Mavro (univariate)."""

from __future__ import annotations

import numpy as np
import pytest

from benchkit.measure.resting import Rest
from benchkit.measure.saturating import fit_saturating
from benchkit.measure.settling import predict

# NIST StRD, Misra1a (dental research: monomolecular adsorption), y = b1 (1 - exp(-b2 x)).
MISRA_X = [77.6, 114.9, 141.1, 190.8, 239.9, 289.0, 332.8, 378.4, 434.8, 477.3, 536.8, 593.1, 689.1, 760.0]
MISRA_Y = [10.07, 14.73, 17.94, 23.93, 29.61, 35.18, 40.02, 44.82, 50.76, 55.05, 61.01, 66.40, 75.47, 81.78]

# NIST StRD, Mavro (filter transmittance), 50 values: the last two digits of 2.00xx.
MAVRO = 2.0 + 1e-4 * np.array(
    [18, 17, 18, 19, 18, 17, 15, 14, 15, 15, 17, 18, 18, 19, 19, 21, 20, 16, 14, 13, 13, 15, 15, 16, 15,
     14, 13, 14, 15, 14, 15, 16, 15, 16, 19, 20, 20, 21, 22, 23, 24, 25, 27, 26, 26, 26, 27, 26, 25, 24]
)  # fmt: skip
MAVRO_SD = 4.29123454003053e-4


@pytest.mark.parametrize("start", [(500.0, 1e-4), (250.0, 5e-4)])
def test_misra1a(start: tuple[float, float]) -> None:
    """NIST StRD, Misra1a, from both of its starts: six digits and more."""
    found = fit_saturating(MISRA_X, MISRA_Y, start)
    assert found.converged
    assert found.b1 == pytest.approx(2.3894212918e2, rel=1e-8)
    assert found.b2 == pytest.approx(5.5015643181e-4, rel=1e-8)
    assert found.u_b1 == pytest.approx(2.7070075241, rel=1e-7)
    assert found.u_b2 == pytest.approx(7.2668688436e-6, rel=1e-7)
    assert found.residual_deviation == pytest.approx(1.0187876330e-1, rel=1e-9)


def test_mavro_is_mavro() -> None:
    """NIST StRD, Mavro: mean, standard deviation, correlation of neighbours."""
    off = MAVRO - MAVRO.mean()
    assert MAVRO.mean() == pytest.approx(2.001856, rel=1e-12)
    assert MAVRO.std(ddof=1) == pytest.approx(MAVRO_SD, rel=1e-9)
    assert float(off[1:] @ off[:-1] / (off @ off)) == pytest.approx(0.937989183438248, rel=1e-9)


@pytest.mark.parametrize("window", [10, 12, 16, 20, 25, 30, 40, 49])
def test_mavro_is_never_at_rest(window: int) -> None:
    """Its standard deviation is 0.02 % of it, and the spread allowed is never reached: it creeps all the same."""
    rest = Rest(window_s=window, least=window, drift_limit=1.5 * MAVRO_SD / window, spread=8.0 * MAVRO_SD)
    assert not any(rest.add(float(at), float(value)).at_rest for at, value in enumerate(MAVRO))


def test_the_same_scatter_without_creeping_comes_to_rest() -> None:
    """What refuses Mavro lets pass what only scatters, by as much."""
    passed = 0
    for seed in range(20):
        values = 2.0 + MAVRO_SD * np.random.default_rng(seed).standard_normal(60)
        rest = Rest(window_s=30.0, least=30, drift_limit=1.5 * MAVRO_SD / 30.0, spread=8.0 * MAVRO_SD)
        passed += any(rest.add(float(at), float(value)).at_rest for at, value in enumerate(values))
    assert passed >= 14


@pytest.mark.parametrize("lags_s", [(300.0, 30.0), (100.0,), (30.0, 3.0), (10.0, 1.0)])
@pytest.mark.parametrize("noise", [1e-5, 1e-4, MAVRO_SD])
def test_mavro_is_never_called_settled(lags_s: tuple[float, ...], noise: float) -> None:
    """One reading a second; at every moment, with a target as wide as its own standard deviation either way."""
    for count in range(8, 51, 2):
        found = predict(
            np.arange(count, dtype=float), MAVRO[:count], lags_s=lags_s, noise=noise, near=MAVRO_SD,
            drift_limit=0.1 * MAVRO_SD,
        )  # fmt: skip
        assert found.verdict in {"too early", "moving"}
