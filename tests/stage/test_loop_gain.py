"""Gains: the published criterion, and what matrices must give."""

from __future__ import annotations

import numpy as np
import pytest

from benchkit.stage.heat import heat_nodes
from benchkit.stage.loop_gain import growth_per_s, junction_gain, loop_gain, one_device_gain, rates, sum_gain
from tests.stage.designs import tern

VT_25 = 25.692579e-3


def test_published_criterion_of_one_device() -> None:
    """Thermal stability of one device with fixed bias, theta*dP/dT < 1: published worked example.

    2 mV/K, 35 V, the optimum bias at 0.22 ohm (I*R_E = VT at 25 degC): dI/dT is 4.54545 mA/K, the limit lies at
    6.2857 K/W, and 2 K/W give 0.31818.
    """
    quiescent_a = VT_25 / 0.22
    per_volt = one_device_gain(1.0, 1.0, quiescent_a, 0.22, 2e-3, 25.0)
    assert per_volt == pytest.approx(4.54545e-3, rel=2e-6)
    assert 1.0 / one_device_gain(1.0, 35.0, quiescent_a, 0.22, 2e-3, 25.0) == pytest.approx(6.2857, rel=1e-5)
    assert one_device_gain(2.0, 35.0, quiescent_a, 0.22, 2e-3, 25.0) == pytest.approx(0.31818, rel=2e-5)


def _only_outputs(watts_per_kelvin: float) -> np.ndarray:
    nodes = heat_nodes(tern())
    slopes = np.zeros((1, len(nodes.parts), len(nodes.parts)))
    for row in np.flatnonzero(nodes.on_sink):
        slopes[0, row, row] = watts_per_kelvin
    return slopes


def test_two_devices_on_one_sink() -> None:
    """Two equal devices: (theta_jh + 2*theta_sink)*dP/dT, and against each other theta_jh*dP/dT alone."""
    nodes, slopes = heat_nodes(tern()), _only_outputs(0.1)
    assert loop_gain(nodes, slopes)[0] == pytest.approx((1.5 + 2 * 1.2) * 0.1)
    assert junction_gain(nodes, slopes)[0] == pytest.approx(1.5 * 0.1)
    assert sum_gain(nodes, slopes)[0] == pytest.approx(2 * 1.2 * 0.1 / (1.0 - 1.5 * 0.1))


def test_both_forms_reach_one_together() -> None:
    nodes = heat_nodes(tern())
    at_one = 1.0 / (1.5 + 2 * 1.2)
    for share, stable in ((0.999, True), (1.001, False)):
        slopes = _only_outputs(share * at_one)
        assert (loop_gain(nodes, slopes)[0] < 1.0) == stable
        assert (sum_gain(nodes, slopes)[0] < 1.0) == stable
        assert (growth_per_s(nodes, slopes)[0] < 0.0) == stable


def test_a_spreader_takes_back() -> None:
    """A spreader whose warmth lowers every device's power lowers the gain; kept cold it doesn't."""
    nodes, slopes = heat_nodes(tern()), _only_outputs(0.1)
    spreader = nodes.parts.index("spreader.transistor")
    slopes[0, np.flatnonzero(nodes.on_sink), spreader] = -0.1
    assert sum_gain(nodes, slopes)[0] < 0.5 * sum_gain(nodes, _only_outputs(0.1))[0]
    assert loop_gain(nodes, slopes)[0] < loop_gain(nodes, _only_outputs(0.1))[0]
    assert loop_gain(nodes, slopes, tracking=False)[0] == pytest.approx(loop_gain(nodes, _only_outputs(0.1))[0])


def test_a_lagging_spreader_can_be_too_late() -> None:
    """Strong devices and a spreader that takes all of it back, but late: every static gain below one, yet it grows.

    Sink: 480 s and a gain of 2*1.2*0.6/(1 - 0.9) = 14.4 without the spreader, so 13.4/480 per second; the spreader
    answers with 1/40 per second. The sum of both rates is above zero (arithmetic).
    """
    nodes, slopes = heat_nodes(tern()), _only_outputs(0.6)
    spreader = nodes.parts.index("spreader.transistor")
    slopes[0, np.flatnonzero(nodes.on_sink), spreader] = -0.85
    assert loop_gain(nodes, slopes)[0] < 1.0
    assert sum_gain(nodes, slopes)[0] < 0.5
    assert growth_per_s(nodes, slopes)[0] > 0.0


def test_without_power_nodes_keep_their_time_constants() -> None:
    nodes = heat_nodes(tern())
    matrix = rates(nodes, np.zeros((1, len(nodes.parts), len(nodes.parts))))[0]
    assert np.sort(np.linalg.eigvals(matrix).real) == pytest.approx(np.sort(-1.0 / nodes.lag_s))


def test_what_was_not_solved_has_no_gain() -> None:
    nodes = heat_nodes(tern())
    slopes = np.full((2, len(nodes.parts), len(nodes.parts)), np.nan)
    slopes[1] = _only_outputs(0.1)[0]
    for gain in (loop_gain, junction_gain, sum_gain, growth_per_s):
        found = gain(nodes, slopes)
        assert np.isnan(found[0])
        assert np.isfinite(found[1])
