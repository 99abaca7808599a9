"""The stage driven by a sine into a dummy load: what that adds to the rails' currents, the heat and the readings.

The model (our own; a class-B half sine on top of the idle state)
-----------------------------------------------------------------
With V the voltage from rest to a rail, R_L the load and R_E/n the emitter resistors of one half in parallel,

    full    = (V_full - `HEADROOM_V`) / (R_L + R_E/n)          peak current at full power, at the design's rails
    peak    = min(sqrt(share) * full, (V - `HEADROOM_V`) / (R_L + R_E/n))
    mean    = peak / pi                                        of each half: what each rail gives besides its idle
    rms     = peak * R_L / sqrt(2)                             at the output
    heat    = V * peak / pi - peak^2 * (R_L + R_E/n) / 4       of each half's output devices (average over a period)
    resistor = (peak / n)^2 / 4 * R_E                          in each emitter resistor

`share` is the share of full power.  The idle current is taken to flow on: near the crossing of zero it does, and away
from it the other half carries a few millivolts' worth less, which the mean current of a driven stage hides.  Drivers,
base currents and a clipped feed are left out.  The generator's amplitude is fixed, so that rails that sag clip the
sine; a supply in its limit sags until the clipped sine is what it can give.

In a single-supply stage V is the way from rest to the rail; the lower half lives from the output capacitor's charge.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

from benchkit.stage.design import Design

HEADROOM_V: Final = 3.0
"""Between a rail and the highest output (our own figure, of the size of two junctions and a feed)."""
LOAD_OHM: Final = 8.0


@dataclass(frozen=True)
class Drive:
    """A sine of a share of the design's full power into a resistor.

    Parameters
    ----------
    design : Design
    share : float
        Of full power, 0...1.
    load_ohm : float
    """

    design: Design
    share: float
    load_ohm: float = LOAD_OHM

    @property
    def path_ohm(self) -> float:
        """Load and emitter resistors of one half."""
        output = self.design.output
        return self.load_ohm + output.emitter_resistor.value / output.pairs

    @property
    def full_v(self) -> float:
        """From rest to a rail at the design's own rails (V)."""
        rails = self.design.rails
        return _swing_v(self.design, rails.positive_v, -rails.negative_v)

    def peak_a(self, positive_v: float, negative_v: float) -> float:
        """Peak current (A) with the rails at these magnitudes."""
        full_a = max(self.full_v - HEADROOM_V, 0.0) / self.path_ohm
        most_a = max(_swing_v(self.design, positive_v, negative_v) - HEADROOM_V, 0.0) / self.path_ohm
        return min(math.sqrt(self.share) * full_a, most_a)

    def mean_a(self, positive_v: float, negative_v: float) -> float:
        """What each rail gives besides its idle current (A)."""
        return self.peak_a(positive_v, negative_v) / math.pi

    def output_rms_v(self, positive_v: float, negative_v: float) -> float:
        """What an a.c. voltmeter reads at the output (V)."""
        return self.peak_a(positive_v, negative_v) * self.load_ohm / math.sqrt(2.0)

    def drop_v(self, positive_v: float, negative_v: float, emitter_ohm: float) -> float:
        """What the mean current adds to the drop over one emitter resistor (V)."""
        return self.mean_a(positive_v, negative_v) * emitter_ohm / self.design.output.pairs

    def device_w(self, positive_v: float, negative_v: float) -> float:
        """What heats each output device besides its idle power (W)."""
        peak_a = self.peak_a(positive_v, negative_v)
        swing_v = _swing_v(self.design, positive_v, negative_v)
        half_w = swing_v * peak_a / math.pi - peak_a**2 * self.path_ohm / 4.0
        return max(half_w, 0.0) / self.design.output.pairs

    def resistor_w(self, positive_v: float, negative_v: float, emitter_ohm: float) -> float:
        """What heats each emitter resistor besides its idle power (W)."""
        return (self.peak_a(positive_v, negative_v) / self.design.output.pairs) ** 2 / 4.0 * emitter_ohm

    def rails_at(self, volts: tuple[float, float], spare_a: float) -> tuple[float, float]:
        """Return the magnitudes (V) that a supply with so much current to spare holds the rails at.

        Parameters
        ----------
        volts : pair of float
            What the supply is set to.
        spare_a : float
            Its limit less what the stage draws at idle (A).
        """
        if self.mean_a(*volts) <= spare_a:
            return volts
        swing_v = math.pi * max(spare_a, 0.0) * self.path_ohm + HEADROOM_V
        share = min(swing_v / max(_swing_v(self.design, *volts), 1e-9), 1.0)
        return volts[0] * share, volts[1] * share


def _swing_v(design: Design, positive_v: float, negative_v: float) -> float:
    """From rest to the nearer rail (V); `negative_v` is a magnitude."""
    rest_v = design.rest_v(positive_v, -negative_v)
    return min(positive_v - rest_v, rest_v + negative_v)
