"""What flows and warms in the simulated unit besides its d.c. operating point: a sine, an oscillation, ripple, hum.

All of it rides on the operating point: it adds to the rails' currents and to the heat, and shows on an a.c. voltmeter.
"""

from __future__ import annotations

import math
from typing import Final

from benchkit.rehearsal.driving import Drive
from benchkit.rehearsal.mishaps import OSCILLATION_A, STRAY_V, Trouble
from benchkit.rehearsal.rails import Pair

OSCILLATES_FROM_V: Final = 5.0
"""Below these rails an unstable stage has too little gain to swing (our own figure)."""
_LIVE_V = 1.0


class Beyond:
    """What one unit is driven to and does by itself.

    Attributes
    ----------
    drive : Drive or None
        A sine into a dummy load.
    troubles : tuple of str
        What it does by itself; see `benchkit.rehearsal.mishaps`.
    """

    def __init__(self, pairs: int) -> None:
        self.drive: Drive | None = None
        self.troubles: tuple[Trouble, ...] = ()
        self._pairs = pairs

    def extra_a(self, volts: Pair) -> float:
        """Return what each rail at these magnitudes gives besides the operating point's current (A)."""
        driven_a = 0.0 if self.drive is None else self.drive.mean_a(*volts)
        return driven_a + (OSCILLATION_A if self._oscillates(volts) else 0.0)

    def stray_v(self, volts: Pair) -> float:
        """Return what an a.c. voltmeter finds at the output besides hum (V)."""
        driven_v = 0.0 if self.drive is None else self.drive.output_rms_v(*volts)
        ripple_v = STRAY_V["ripple"] if "ripple" in self.troubles and volts[0] >= _LIVE_V else 0.0
        return math.hypot(driven_v, ripple_v, STRAY_V["oscillation"] if self._oscillates(volts) else 0.0)

    def device_w(self, volts: Pair) -> float:
        """Return what heats each output device besides its operating point (W)."""
        watts = 0.0 if self.drive is None else self.drive.device_w(*volts)
        if self._oscillates(volts):
            watts += 0.5 * sum(volts) * OSCILLATION_A / self._pairs
        return watts

    def resistor_w(self, volts: Pair, emitter_ohm: float) -> float:
        """Return what heats an emitter resistor besides its operating point (W)."""
        return 0.0 if self.drive is None else self.drive.resistor_w(*volts, emitter_ohm)

    def drop_v(self, volts: Pair, emitter_ohm: float) -> float:
        """Return what the mean current of a sine adds to the drop over an emitter resistor (V)."""
        return 0.0 if self.drive is None else self.drive.drop_v(*volts, emitter_ohm)

    @property
    def drives(self) -> bool:
        """Whether a sine is being played."""
        return self.drive is not None and self.drive.share > 0.0

    def held_v(self, volts: Pair, idle_a: float, limit_a: float) -> Pair:
        """Return where a supply set to `volts` holds the rails of a driven stage: it gives no more than its limit."""
        return volts if self.drive is None else self.drive.rails_at(volts, limit_a - idle_a)

    def _oscillates(self, volts: Pair) -> bool:
        return "oscillation" in self.troubles and volts[0] >= OSCILLATES_FROM_V
