"""The comparison itself: it would see a difference, and committed results belong to the decks that they stand for."""

import json

import pytest

from benchkit.circuit.netlist import Netlist
from tests.reference import ngspice


def divider(ohm: float) -> tuple[Netlist, dict[str, float]]:
    n = Netlist()
    n.supply("rail", "v+", "0")
    n.resistor("r", "v+", "mid")
    n.resistor("s", "mid", "0")
    return n, {"rail.volts": 10.0, "rail.limit_a": 1.0, "r": ohm, "s": 1e3}


def test_values_reach_the_deck() -> None:
    assert ngspice.run_deck(*divider(1e3))["mid"] == pytest.approx(10.0 / 2000.01 * 1e3, rel=1e-7)
    assert ngspice.run_deck(*divider(1.01e3))["mid"] == pytest.approx(10.0 / 2010.01 * 1e3, rel=1e-7)


def test_many_digits_come_back() -> None:
    assert len(repr(ngspice.run_deck(*divider(1e3))["mid"]).rstrip("0")) >= 12


@pytest.mark.skipif(not ngspice.installed(), reason="ngspice is not installed")
def test_a_deck_that_ngspice_refuses_is_an_error() -> None:
    with pytest.raises(RuntimeError, match="printed 0 of 1"):
        ngspice.run_text("title\nR1 a 0 1\nQ1 a a 0 unheard_of\n.control\nop\nprint v(a)\n.endc\n.end\n")


def test_without_ngspice_committed_results_stand_in(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(ngspice, "installed", lambda: False)
    monkeypatch.setattr(ngspice, "used_committed", [])
    assert ngspice.run_deck(*divider(1e3))["mid"] == pytest.approx(5.0, rel=1e-4)
    assert len(ngspice.used_committed) == 1
    with pytest.raises(pytest.skip.Exception, match="no committed result"):
        ngspice.run_deck(*divider(123.4))


def test_committed_results_are_voltages_by_node() -> None:
    committed = json.loads(ngspice.COMMITTED.read_text())
    assert committed
    for digest, volts in committed.items():
        assert len(digest) == 64
        assert all(isinstance(v, float) for v in volts.values())
