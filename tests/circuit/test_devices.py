import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from benchkit.circuit import devices
from benchkit.circuit.netlist import TRANSISTOR_DEFAULTS
from tests.circuit.circuits import POWER, SMALL
from tests.circuit.residual import transistor_currents

volts = st.floats(-40.0, 0.85)


def parameters(kind: dict[str, float], kelvin: float = 300.15) -> dict[str, np.ndarray]:
    return {key: np.array([float(kind.get(key, value))]) for key, value in TRANSISTOR_DEFAULTS.items()} | {
        "kelvin": np.array([kelvin])
    }


@pytest.mark.parametrize("kind", [SMALL, POWER, {}], ids=["small", "power", "defaults"])
@given(vbe=volts, vbc=volts, kelvin=st.floats(250.0, 420.0))
@settings(max_examples=60, deadline=None)
def test_currents_are_those_of_the_textbook_form(kind, vbe, vbc, kelvin) -> None:  # type: ignore[no-untyped-def]
    p = parameters(kind, kelvin)
    got = devices.gummel_poon(np.array([vbe]), np.array([vbc]), devices.junctions_at_temperature(p))
    ic, ib = transistor_currents({k: float(v[0]) for k, v in p.items()}, vbe, vbc)
    # the two forms group their terms differently: compare to the size of the terms
    scale = abs(ic) + abs(ib)
    assert got.ic[0] == pytest.approx(ic, rel=1e-9, abs=1e-9 * scale + 1e-24)
    assert got.ib[0] == pytest.approx(ib, rel=1e-9, abs=1e-9 * scale + 1e-24)


@pytest.mark.parametrize("kind", [SMALL, POWER, {}], ids=["small", "power", "defaults"])
@given(vbe=st.floats(-5.0, 0.8), vbc=st.floats(-5.0, 0.8))
@settings(max_examples=60, deadline=None)
def test_derivatives_are_those_of_the_currents(kind, vbe, vbc) -> None:  # type: ignore[no-untyped-def]
    j = devices.junctions_at_temperature(parameters(kind))

    def currents(e: float, c: float) -> np.ndarray:
        g = devices.gummel_poon(np.array([e]), np.array([c]), j)
        return np.array([g.ic[0], g.ib[0]])

    h = 1e-5
    g = devices.gummel_poon(np.array([vbe]), np.array([vbc]), j)

    def slope(e: float, c: float) -> np.ndarray:
        """Central differences of fourth order."""
        near = currents(vbe + h * e, vbc + h * c) - currents(vbe - h * e, vbc - h * c)
        far = currents(vbe + 2 * h * e, vbc + 2 * h * c) - currents(vbe - 2 * h * e, vbc - 2 * h * c)
        return np.asarray((8.0 * near - far) / (12.0 * h))

    scale = max(abs(currents(vbe, vbc)).max(), 1e-12) / 0.025
    assert slope(1, 0) == pytest.approx(np.array([g.ic_vbe[0], g.ib_vbe[0]]), rel=1e-5, abs=1e-8 * scale)
    assert slope(0, 1) == pytest.approx(np.array([g.ic_vbc[0], g.ib_vbc[0]]), rel=1e-5, abs=1e-8 * scale)


def test_a_junction_keeps_its_digits_near_zero() -> None:
    current, slope = devices.junction(np.array([1e-12]), np.array([1e-14]), np.array([40.0]))
    assert current[0] == pytest.approx(1e-14 * 40e-12, rel=1e-10)
    assert slope[0] == pytest.approx(1e-14 * 40.0, rel=1e-10)


def test_an_absurd_voltage_gives_a_finite_current() -> None:
    current, slope = devices.junction(np.array([1e6]), np.array([1e-14]), np.array([40.0]))
    assert np.isfinite(current).all()
    assert np.isfinite(slope).all()


@given(new=st.floats(-100.0, 1e5), old=st.floats(-100.0, 1.0))
def test_limiting_never_passes_the_new_voltage_nor_undershoots_a_fall(new: float, old: float) -> None:
    k = np.array([1 / 0.0259])
    critical = devices.critical_voltage(np.array([1e-14]), k)
    limited, held = devices.limit_junction(np.array([new]), np.array([old]), k, critical)
    if not held[0]:
        assert limited[0] == new
        assert new <= critical[0] or abs(new - old) <= 2 * 0.0259 * (1 + 1e-12)
    elif new > old:
        assert min(old, critical[0]) <= limited[0] <= max(new, critical[0])
        assert limited[0] - max(old, critical[0]) <= 0.0259 * math.log1p((new - old) / 0.0259) * (1 + 1e-9)
    else:
        assert critical[0] <= limited[0] <= old


def test_the_critical_voltage_is_where_a_tenth_of_a_milliampere_flows() -> None:
    k = np.array([1 / 0.0259])
    critical = devices.critical_voltage(np.array([1e-14]), k)
    assert 1e-14 * math.exp(critical[0] / 0.0259) == pytest.approx(1e-4)
    assert devices.critical_voltage(np.array([1.0]), k)[0] == pytest.approx(2 * 0.0259)


@pytest.mark.parametrize(
    ("new", "old", "expected"),
    [(5.0, -5.0, 0.0), (-5.0, 5.0, 0.0), (5.0, 0.0, 5.0), (0.1, -0.1, 0.1), (-3.0, -4.0, -3.0), (0.3, -0.3, 0.0)],
)
def test_a_sigmoid_that_changes_sides_is_held_at_its_centre(new: float, old: float, expected: float) -> None:
    at, held = devices.centre(np.array([new]), np.array([old]))
    assert at[0] == expected
    assert held[0] == (expected != new)


def test_fields_can_be_changed_one_by_one() -> None:
    j = devices.junctions_at_temperature(parameters(SMALL))
    doubled = j.map(lambda a: 2 * a)
    assert doubled.is_a == pytest.approx(2 * j.is_a)
    assert replace(j, leak_e_a=np.zeros(1)).leak_e_a[0] == 0.0
