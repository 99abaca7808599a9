"""Junction, temperature and spreader values from outside.

Sources beside each check; "from memory" where nobody has looked it up again.
"""

import math

import numpy as np
import pytest

from benchkit.circuit import devices
from benchkit.circuit.netlist import Netlist
from benchkit.circuit.solve import compile_netlist


@pytest.mark.parametrize(("celsius", "millivolts"), [(25, 25.692579), (27, 25.864926), (75, 30.001246)])
def test_thermal_voltage(celsius: float, millivolts: float) -> None:
    # k and q exact (SI 2019); arithmetic
    assert devices.thermal_voltage(celsius + 273.15) * 1e3 == pytest.approx(millivolts, abs=5e-7)


@pytest.mark.parametrize(("kelvin", "ratio"), [(310.15, 4.401805), (350.15, 728.045)])
def test_saturation_current_rises_as_in_spice(kelvin: float, ratio: float) -> None:
    # IS(T)/IS(300.15 K) for EG 1.11, XTI 3: Berkeley SPICE3's temperature equations
    assert devices.saturation_current_at(kelvin, 1.0, 1.11, 3.0) == pytest.approx(ratio, rel=1e-6)


def test_gain_rises_as_in_spice() -> None:
    # (350.15/300.15)^1.5: Berkeley SPICE3's temperature equations
    assert devices.beta_at(350.15, 1.0, 1.5) == pytest.approx(1.260009, abs=5e-7)


@pytest.mark.parametrize(
    ("saturation_a", "amps", "vbe_v", "slope"),
    [(1e-14, 1e-3, 0.655118, -1.774035e-3), (1e-11, 0.1, 0.595562, -1.972457e-3)],
)
def test_vbe_falls_with_temperature(saturation_a: float, amps: float, vbe_v: float, slope: float) -> None:
    # dVBE/dT = (VBE - EG - XTI VT)/T at constant current, exact for SPICE's model; here from the solved circuit
    # only the junction's law: a diode-connected device with infinite gain
    m = Netlist()
    m.supply("rail", "v", "0")
    m.source("feed", "v", "x")
    m.transistor("q", "x", "x", "0")
    kelvin = np.array([300.15 - 0.05, 300.15, 300.15 + 0.05])
    values = {
        "rail.volts": 10.0,
        "rail.limit_a": 1.0,
        "feed.amps": amps,
        "q.IS": saturation_a,
        "q.BF": 1e15,
        "q.BR": 1e15,
    }
    vbe = compile_netlist(m).solve(values | {"q.kelvin": kelvin}, 3).voltage("x")
    assert vbe[1] == pytest.approx(vbe_v, abs=1e-6)
    assert (vbe[2] - vbe[0]) / 0.1 == pytest.approx(slope, rel=1e-5)
    vt = devices.thermal_voltage(300.15)
    assert (vbe_v - 1.11 - 3.0 * vt) / 300.15 == pytest.approx(slope, rel=1e-5)


# arithmetic, IS stated at the temperature of the check: IS 1e-14, 1 kohm base-emitter arm, 3.3 kohm collector-base arm
SPREADER = [
    (8e-3, math.inf, 0.7018201, 3.0178263),
    (8e-3, 200.0, 0.7016924, 3.1371001),
    (8e-3, 100.0, None, 3.2551945),
    (9e-3, math.inf, None, 3.0319691),
]


@pytest.mark.parametrize(("amps", "gain", "vbe_v", "spread_v"), SPREADER)
def test_spreader(amps: float, gain: float, vbe_v: float | None, spread_v: float) -> None:
    n = Netlist()
    n.supply("rail", "v", "0")
    n.source("feed", "v", "c")
    n.resistor("upper", "c", "b")
    n.resistor("lower", "b", "0")
    n.transistor("q", "c", "b", "0")
    # the published values take IS at 25 degC, the model at 27 degC: scale it back
    at_25 = 1e-14 / float(devices.saturation_current_at(298.15, 1.0))
    solution = compile_netlist(n).solve(
        {
            "rail.volts": 30.0, "rail.limit_a": 1.0, "feed.amps": amps, "upper": 3.3e3, "lower": 1e3, "q.IS": at_25,
            "q.BF": min(gain, 1e15), "q.BR": 1e15, "q.kelvin": 298.15,
        }
    )  # fmt: skip
    assert solution.voltage("c")[0] == pytest.approx(spread_v, abs=2e-7)
    if vbe_v is not None:
        assert solution.voltage("b")[0] == pytest.approx(vbe_v, abs=1e-7)
