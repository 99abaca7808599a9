"""Devices: the Gummel-Poon transistor at d.c., its temperature, junction limiting, and the saturating law.

Rules
-----
* Everything here is elementwise: arrays broadcast, nothing knows of nodes or matrices.
* Voltages are the device's own, already multiplied by its polarity: positive forward for npn and pnp alike.
* Parameters have their SPICE names at 27 degC (300.15 K). An infinite VAF, VAR, IKF or IKR is no effect; it is carried
  as its inverse, 0.
* Each function returns the derivatives with the value, because Newton's method wants both and most of the work is
  shared.

Sources
-------
The d.c. equations and the temperature scaling are those of Berkeley SPICE3 (bjtload.c, bjttemp.c). The charge model
they come from: H. K. Gummel, H. C. Poon, "An integral charge control model of bipolar transistors", Bell System
Technical Journal 49 (1970), 827-852.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

BOLTZMANN_J_PER_K = 1.380649e-23
"""Exact since the SI of 2019."""
ELEMENTARY_CHARGE_C = 1.602176634e-19
"""Exact since the SI of 2019."""
NOMINAL_KELVIN = 300.15
"""27 degC: the temperature that Gummel-Poon parameters are stated at."""
JUNCTION_GMIN_S = 1e-12
"""Conductance beside each junction."""
_LARGEST_EXPONENT = 200.0


def thermal_voltage(kelvin: Array | float) -> Array:
    """Thermal voltage kT/q [V] at ``kelvin``; elementwise."""
    return np.asarray(kelvin, dtype=np.float64) * (BOLTZMANN_J_PER_K / ELEMENTARY_CHARGE_C)


def saturation_log_factor(
    kelvin: Array | float, eg_ev: Array | float, xti: Array | float, nominal_kelvin: float = NOMINAL_KELVIN
) -> Array:
    """Natural logarithm of IS(T)/IS(Tnom): (T/Tnom - 1) * EG/VT(T) + XTI * ln(T/Tnom); elementwise."""
    ratio = np.asarray(kelvin, dtype=np.float64) / nominal_kelvin
    return np.asarray((ratio - 1.0) * eg_ev / thermal_voltage(kelvin) + xti * np.log(ratio), dtype=np.float64)


def saturation_current_at(
    kelvin: Array | float,
    saturation_a: Array | float,
    eg_ev: Array | float = 1.11,
    xti: Array | float = 3.0,
    nominal_kelvin: float = NOMINAL_KELVIN,
) -> Array:
    """Saturation current [A] at ``kelvin`` of one stated at ``nominal_kelvin``; elementwise."""
    return np.asarray(saturation_a * np.exp(saturation_log_factor(kelvin, eg_ev, xti, nominal_kelvin)))


def beta_at(
    kelvin: Array | float, beta: Array | float, xtb: Array | float, nominal_kelvin: float = NOMINAL_KELVIN
) -> Array:
    """Current gain at ``kelvin`` of one stated at ``nominal_kelvin``: BF * (T/Tnom)^XTB; elementwise."""
    return np.asarray(beta * (np.asarray(kelvin, dtype=np.float64) / nominal_kelvin) ** xtb)


@dataclass
class Junctions:
    """A batch of transistors at their temperatures, ready for `gummel_poon`; every field broadcasts to one shape.

    Attributes
    ----------
    forward_a, reverse_vt : arrays
        IS(T) [A]; fields ``inv_...`` are inverses: of NF*VT, NR*VT, NE*VT, NC*VT [1/V], of BF(T), BR(T), of VAF, VAR
        [1/V], of IKF, IKR [1/A].
    leak_e_a, leak_c_a : arrays
        ISE(T), ISC(T) [A].
    """

    is_a: Array
    inv_nf_vt: Array
    inv_nr_vt: Array
    inv_bf: Array
    inv_br: Array
    inv_vaf: Array
    inv_var: Array
    inv_ikf: Array
    inv_ikr: Array
    leak_e_a: Array
    inv_ne_vt: Array
    leak_c_a: Array
    inv_nc_vt: Array

    def map(self, change: Callable[[Array], Array]) -> Junctions:
        """Return a copy with ``change`` applied to every field."""
        return Junctions(*(change(getattr(self, field.name)) for field in fields(self)))


def junctions_at_temperature(parameters: Mapping[str, Array]) -> Junctions:
    """Scale Gummel-Poon parameters to each device's temperature.

    Parameters
    ----------
    parameters : mapping
        ``kelvin`` and the Gummel-Poon names at 300.15 K, arrays that broadcast together.

    Returns
    -------
    Junctions
        IS by exp(factor), ISE and ISC by exp(factor/NE) and exp(factor/NC) over (T/Tnom)^XTB, BF and BR by
        (T/Tnom)^XTB, with factor from `saturation_log_factor`.
    """
    p = parameters
    kelvin = p["kelvin"]
    vt = thermal_voltage(kelvin)
    factor = saturation_log_factor(kelvin, p["EG"], p["XTI"])
    gain = (kelvin / NOMINAL_KELVIN) ** p["XTB"]
    return Junctions(
        is_a=p["IS"] * np.exp(factor),
        inv_nf_vt=1.0 / (p["NF"] * vt),
        inv_nr_vt=1.0 / (p["NR"] * vt),
        inv_bf=1.0 / (p["BF"] * gain),
        inv_br=1.0 / (p["BR"] * gain),
        inv_vaf=1.0 / p["VAF"],
        inv_var=1.0 / p["VAR"],
        inv_ikf=1.0 / p["IKF"],
        inv_ikr=1.0 / p["IKR"],
        leak_e_a=p["ISE"] * np.exp(factor / p["NE"]) / gain,
        inv_ne_vt=1.0 / (p["NE"] * vt),
        leak_c_a=p["ISC"] * np.exp(factor / p["NC"]) / gain,
        inv_nc_vt=1.0 / (p["NC"] * vt),
    )


def junction(volts: Array, saturation_a: Array, inv_n_vt: Array) -> tuple[Array, Array]:
    """Current IS * (exp(v/(n VT)) - 1) [A] of a junction and its derivative [S]; elementwise.

    ``expm1`` keeps the digits near 0 V. The exponent is held below 200, far above what limiting lets through.
    """
    current = np.minimum(volts * inv_n_vt, _LARGEST_EXPONENT)
    np.expm1(current, out=current)
    current *= saturation_a
    slope = current + saturation_a
    slope *= inv_n_vt
    return current, slope


@dataclass
class TransistorCurrents:
    """Collector and base current into a transistor [A] and their derivatives by vbe and vbc [S], one shape."""

    ic: Array
    ib: Array
    ic_vbe: Array
    ic_vbc: Array
    ib_vbe: Array
    ib_vbc: Array


def gummel_poon(vbe: Array, vbc: Array, j: Junctions) -> TransistorCurrents:
    """Gummel-Poon currents of intrinsic transistors (without RB, RE, RC), with analytic derivatives; elementwise.

    With IF = IS(exp(vbe/NF VT) - 1), IR = IS(exp(vbc/NR VT) - 1) and
    1/qb = 2 (1 - vbc/VAF - vbe/VAR) / (1 + sqrt(1 + 4 (IF/IKF + IR/IKR))):

    * IC = (IF - IR)/qb - IR/BR - ISC(exp(vbc/NC VT) - 1)
    * IB = IF/BF + IR/BR + ISE(exp(vbe/NE VT) - 1) + ISC(exp(vbc/NC VT) - 1)

    Beside each junction lies a conductance of 1e-12 S.
    """
    i_f, g_f = junction(vbe, j.is_a, j.inv_nf_vt)
    i_r, g_r = junction(vbc, j.is_a, j.inv_nr_vt)
    root = i_f * j.inv_ikf
    root += i_r * j.inv_ikr
    root *= 4.0
    root += 1.0
    np.sqrt(root, out=root)
    t = 1.0 / (1.0 + root)
    early = 1.0 - vbc * j.inv_vaf
    early -= vbe * j.inv_var
    two_t = t + t
    h = two_t * early
    # d(root)/dv = 2 g / (IK root), and dh = two_t * d(early) - h * t * d(root)
    common = h * t
    common *= 2.0
    common /= root
    transport = i_f - i_r
    h_vbe = two_t * j.inv_var
    h_vbe += common * g_f * j.inv_ikf
    h_vbc = two_t * j.inv_vaf
    h_vbc += common * g_r * j.inv_ikr

    ic = transport * h
    ic_vbe = g_f * h
    ic_vbe -= transport * h_vbe
    ic_vbc = -(g_r * h)
    ic_vbc -= transport * h_vbc

    ib = i_f * j.inv_bf
    ib_vbe = g_f * j.inv_bf
    if np.any(j.leak_e_a):
        leak, leak_g = junction(vbe, j.leak_e_a, j.inv_ne_vt)
        ib += leak
        ib_vbe += leak_g
    ib += JUNCTION_GMIN_S * vbe
    ib_vbe += JUNCTION_GMIN_S

    back = i_r * j.inv_br
    back_g = g_r * j.inv_br
    if np.any(j.leak_c_a):
        leak, leak_g = junction(vbc, j.leak_c_a, j.inv_nc_vt)
        back += leak
        back_g += leak_g
    back += JUNCTION_GMIN_S * vbc
    back_g += JUNCTION_GMIN_S
    ib += back
    ic -= back
    ic_vbc -= back_g
    return TransistorCurrents(ic=ic, ib=ib, ic_vbe=ic_vbe, ic_vbc=ic_vbc, ib_vbe=ib_vbe, ib_vbc=back_g)


LIMITED_ABOVE_A = 1e-4
"""Forward current above which a junction's step is limited."""


def critical_voltage(is_a: Array, inv_n_vt: Array) -> Array:
    """Voltage [V] above which a junction's step is limited: where it conducts 0.1 mA, at least 2 n VT; elementwise."""
    return np.asarray(np.maximum(np.log(LIMITED_ABOVE_A / is_a), 2.0) / inv_n_vt)


def limit_junction(new: Array, old: Array, inv_n_vt: Array, critical: Array) -> tuple[Array, Mask]:
    """Hold back a junction voltage that rises too far in one step.

    Above the critical voltage, a change by more than 2 n VT is replaced by the step which gives the *current* that the
    linearised junction would have had (L. W. Nagel, SPICE2, Memorandum ERL-M520, University of California, 1975); but a
    rising voltage gets to the critical voltage at once. Our critical voltage is lower than SPICE's (some 18 mA): below
    it junctions would otherwise creep up by a tenth of a volt a step, above it they swing between off and burning.

    Returns
    -------
    limited : array
        The voltage to linearise at [V].
    held : array of bool
        Where it differs from ``new``.
    """
    held = (new > critical) & (np.abs(new - old) * inv_n_vt > 2.0)
    if not held.any():
        return new, held
    shape = new.shape
    n, o, k, c = new[held], old[held], np.broadcast_to(inv_n_vt, shape)[held], np.broadcast_to(critical, shape)[held]
    limited = new.copy()
    with np.errstate(all="ignore"):
        logarithm = np.log(np.maximum(1.0 + (n - o) * k, 1e-300)) / k
    limited[held] = np.maximum(o + logarithm, c)
    return limited, held


def saturating(argument: Array) -> tuple[Array, Array]:
    """Return tanh(u) and its derivative 1 - tanh(u)^2; elementwise."""
    value = np.tanh(argument)
    return value, 1.0 - value * value


def centre(new: Array, old: Array) -> tuple[Array, Mask]:
    """Hold a sigmoid's argument at 0 when a step takes it from one saturated side to the other; elementwise.

    A saturated sigmoid has no slope left to come back by. Linearised at its centre it is steepest, and the next step
    finds out on which side the solution lies. Steps of less than 0.5 within the knee are left alone.
    """
    held = (new * old < 0.0) & (np.abs(new - old) > 0.5)
    if not held.any():
        return new, held
    return np.where(held, 0.0, new), held
