"""What the rails' capacitors hold after off, how they let go of it, and what a person needs for helping them.

The equations
-------------
A capacitor C (F) at V0 (V) holds E = C·V0²/2 (J).  Through a resistor R (ohm) it falls as v(t) = V0·exp(-t/(R·C)), so
that it reaches V after t = R·C·ln(V0/V); the resistor takes V0²/R (W) in the first moment, and E altogether.  (The law
of an RC circuit, in any textbook of circuits.)

From rail to rail two equal capacitors stand in series: C/2 at twice the voltage, the same energy as both together, and
the same time constant with a resistor on each.  So ±35 V are 70 V, and a resistor that a hand puts there sees 70 V.

Own figures
-----------
* A second look after a minute, where `LARGE_J` or more is stored, or where more than `HAZARDOUS_V` lies from rail to
  rail and the design names a reservoir: the dielectric gives back a part of what it held.
* The resistor for a hand is the smallest of the E6 series that takes at most `MOST_RESISTOR_W` in the first moment,
  from rail to rail; its rating is the next usual one above that.
* A rail falls too slowly when its time constant, as it is being read, is more than `TOO_SLOW` times the design's: that
  is beyond what the tolerances of an electrolytic capacitor (-20 %, +20 %; common practice) and of the bleed resistor
  explain, and less than what an open resistor shows.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

from benchkit.stage.design import Design

HAZARDOUS_V: Final = 60.0
"""Direct voltage (V) above which a part is treated as hazardous live (IEC 61010-1, IEC 62368-1)."""

LARGE_J: Final = 1.0
"""Stored energy (J) from which on a second look is asked for; our own figure."""

SECOND_LOOK_S: Final = 60.0
"""Time (s) until the second look; common practice."""

MOST_RESISTOR_W: Final = 5.0
"""What a discharge resistor may take in the first moment (W); our own figure."""

TOO_SLOW: Final = 2.0
"""Ratio of time constants, read to expected, above which a rail falls too slowly; our own figure."""

CAPACITOR_SPREAD: Final = 0.2
"""How far the capacitance of an electrolytic may lie above its nominal value; common practice."""

_E6: Final = (1.0, 1.5, 2.2, 3.3, 4.7, 6.8)
_RATINGS_W: Final = (0.25, 0.5, 1.0, 2.0, 3.0, 5.0, 10.0)


@dataclass(frozen=True, kw_only=True)
class Helper:
    """A resistor that a hand puts across a rail.

    Parameters
    ----------
    ohm, rating_w : float
    volts, peak_w : float
        What it sees and takes in the first moment at the worst place, rail to rail.
    """

    ohm: float
    rating_w: float
    volts: float
    peak_w: float


@dataclass(frozen=True, kw_only=True)
class Stored:
    """What the rails of a design hold at given voltages.

    Parameters
    ----------
    positive_v, negative_v : float
        The rails before off (V); the negative one is zero or negative.
    farad : float
        Capacitance of each rail (F): reservoir and local capacitors.
    bleed_ohm, bleed_fraction : float or None, float
        The bleed resistor of each rail (ohm), None without one, and its tolerance.
    reservoir : bool
        The design names a reservoir capacitor.
    """

    positive_v: float
    negative_v: float
    farad: float
    bleed_ohm: float | None
    bleed_fraction: float
    reservoir: bool

    @property
    def span_v(self) -> float:
        """The voltage from rail to rail (V)."""
        return self.positive_v - self.negative_v

    @property
    def joule(self) -> float:
        """The energy (J) of both rails together, E = C·V²/2 each."""
        return 0.5 * self.farad * (self.positive_v**2 + self.negative_v**2)

    @property
    def tau_s(self) -> float | None:
        """The time constant (s) with which each rail falls, and rail to rail too; None when nobody knows."""
        if not self.farad:
            return 0.0
        return None if self.bleed_ohm is None else self.bleed_ohm * self.farad

    @property
    def slowest_tau_s(self) -> float | None:
        """The time constant (s) at the far ends of the tolerances; None when nobody knows."""
        tau_s = self.tau_s
        return None if tau_s is None else tau_s * (1.0 + self.bleed_fraction) * (1.0 + CAPACITOR_SPREAD)

    def fall_s(self, from_v: float, to_v: float) -> float | None:
        """Time (s) for a fall between two voltages (V) through the bleed resistor; None without one."""
        return fall_s(self.tau_s, from_v, to_v)

    @property
    def bleed_peak_w(self) -> float | None:
        """What each bleed resistor takes in the first moment (W), the larger of the rails'; None without one."""
        if self.bleed_ohm is None:
            return None
        return max(self.positive_v, -self.negative_v) ** 2 / self.bleed_ohm

    @property
    def helper(self) -> Helper | None:
        """The resistor for a hand; None where nothing is stored."""
        if not self.farad or self.span_v <= 0.0:
            return None
        ohm = _next_e6(self.span_v**2 / MOST_RESISTOR_W)
        peak_w = self.span_v**2 / ohm
        rating_w = next((watt for watt in _RATINGS_W if watt >= peak_w * (1.0 - 1e-9)), _RATINGS_W[-1])
        return Helper(ohm=ohm, rating_w=rating_w, volts=self.span_v, peak_w=peak_w)

    def helped_s(self, from_v: float, to_v: float, *, rails: int = 1) -> float:
        """Time (s) for a fall through the resistor for a hand alone: across one rail, or from rail to rail (2)."""
        helper = self.helper
        if helper is None:
            return 0.0
        seconds = fall_s(helper.ohm * self.farad / rails, from_v, to_v)
        assert seconds is not None
        return seconds

    @property
    def second_look(self) -> bool:
        """Whether the rails are looked at once more after a minute; see the rule above."""
        return self.joule >= LARGE_J or (self.reservoir and self.span_v > HAZARDOUS_V)


def stored(design: Design, positive_v: float, negative_v: float) -> Stored:
    """Return what the rails of `design` hold at these voltages (V)."""
    rails = design.rails
    return Stored(
        positive_v=positive_v,
        negative_v=negative_v,
        farad=(rails.reservoir_f or 0.0) + (rails.local_capacitors_f or 0.0),
        bleed_ohm=None if rails.bleed is None else rails.bleed.value,
        bleed_fraction=0.0 if rails.bleed is None else rails.bleed.fraction,
        reservoir=bool(rails.reservoir_f),
    )


def fall_s(tau_s: float | None, from_v: float, to_v: float) -> float | None:
    """Time (s) of an exponential fall with time constant `tau_s`, t = tau·ln(V0/V); None when that isn't known.

    Zero when it is there already; `to_v` has to be above zero.
    """
    if tau_s is None:
        return None
    from_v = abs(from_v)
    return 0.0 if from_v <= to_v else tau_s * math.log(from_v / to_v)


def read_tau_s(first: tuple[float, float], last: tuple[float, float]) -> float | None:
    """Time constant (s) between two readings (s, V) of a falling rail; None when it isn't falling.

    tau = (t2 - t1) / ln(v1/v2)
    """
    (first_s, first_v), (last_s, last_v) = first, last
    first_v, last_v = abs(first_v), abs(last_v)
    if last_s <= first_s or last_v <= 0.0 or last_v >= first_v:
        return None
    return (last_s - first_s) / math.log(first_v / last_v)


def _next_e6(least_ohm: float) -> float:
    decade = 10.0 ** math.floor(math.log10(least_ohm))
    for scale in (decade, 10.0 * decade):
        for step in _E6:
            if step * scale >= least_ohm * (1.0 - 1e-9):
                return step * scale
    raise AssertionError(least_ohm)
