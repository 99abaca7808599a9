"""Limits, ramps and times that a plan needs, worked out from the design by rules of the trade.

Nothing here judges a reading: these numbers size the supply's limit, the ramps and the waiting times.
"""

from __future__ import annotations

import math
from typing import Final

from benchkit import quantities
from benchkit.procedure.items import RAIL_LOW_V
from benchkit.stage.design import Design, target_drop_v
from benchkit.stage.stored import stored

TYPICAL_VBE_V = 0.7
"""Used only to size current limits, never to judge; common practice."""


def supply_limit_a(design: Design, positive_v: float, negative_v: float, *, share: float) -> float:
    """Current limit per rail (A) that leaves room for a healthy unit and for little else.

    One and a half times the estimated draw of the rails plus 10 mA, rounded up to 5 mA: feed, driver resistors, what
    else hangs on the rails, and `share` of the target current of every pair.  Common practice; it judges nothing.
    """
    span_v = positive_v - negative_v
    draws = [_feed_a(design, span_v), _driver_a(design)]
    others = [part.value for part in (design.rails.other_positive, design.rails.other_negative) if part is not None]
    draws.append(max(others, default=0.0))
    per_pair_a = target_drop_v(design) / design.output.emitter_resistor.value
    draws.append(share * design.output.pairs * per_pair_a)
    return math.ceil((1.5 * sum(draws) + 0.01) / 0.005 - 1e-9) * 0.005


LOAD_OHM = 8.0
"""The dummy load that drive and limits are worked out for."""

HEADROOM_V = 3.0
"""Between a rail and the highest output of a driven stage; our own figure, of the size of two junctions and a feed."""


def drive_peak_v(design: Design, share: float) -> float:
    """Peak (V) at the output that makes `share` of full power in the dummy load; it judges nothing."""
    rails = design.rails
    rest_v = design.rest_v(rails.positive_v, rails.negative_v)
    swing_v = min(rails.positive_v - rest_v, rest_v - rails.negative_v)
    path_ohm = LOAD_OHM + design.output.emitter_resistor.value / design.output.pairs
    return math.sqrt(share) * max(swing_v - HEADROOM_V, 0.0) * LOAD_OHM / path_ohm


def drive_limit_a(design: Design, share: float) -> float:
    """Current limit per rail (A) for a stage that is driven to a share of full power into the dummy load.

    What the target needs, and a tenth more than the peak of the sine: a supply without large capacitors behind it has
    to give the peaks too.  Rounded up to 5 mA.
    """
    full = design.rails
    idle_a = supply_limit_a(design, full.positive_v, full.negative_v, share=1.0)
    return math.ceil((idle_a + 1.1 * drive_peak_v(design, share) / LOAD_OHM) / 0.005 - 1e-9) * 0.005


def discharge_s(design: Design, from_v: float, to_v: float = RAIL_LOW_V) -> float | None:
    """Time (s) for a rail to fall through the bleed resistor, t = R·C·ln(V0/V); None without a bleed resistor."""
    return stored(design, from_v, -from_v).fall_s(from_v, to_v)


def protection_v(positive_v: float, negative_v: float) -> tuple[float, float]:
    """Where the supply's over-voltage protection goes for these rails (V), as magnitudes, positive rail first.

    110 % of each rail and 1 V, our own figure: room for a regulator's overshoot, and still far below what the next
    higher rating of a capacitor is for.  An output that isn't used is held like the other.
    """
    wide = tuple(1.1 * abs(volts) + 1.0 for volts in (positive_v, negative_v or positive_v))
    return wide[0], wide[1]


def _feed_a(design: Design, span_v: float) -> float:
    feed = design.feed.upper
    if feed.kind == "source":
        return feed.value.value * (1 + feed.value.fraction)
    if feed.kind == "resistor":
        return 0.5 * span_v / feed.value.value
    return design.servo_max_a


def _driver_a(design: Design) -> float:
    """What drivers and pre-drivers draw (A): so many junctions' voltage across each of their resistors."""
    output = design.output
    draw_a = 0.0
    if output.driver_resistor is not None:
        own = output.topology == "complementary-feedback-pair" or output.driver_resistor_to == "output"
        draw_a += (1.0 if own else 2.0) * TYPICAL_VBE_V / output.driver_resistor.value
    if output.predriver_resistor is not None:
        draw_a += 4.0 * TYPICAL_VBE_V / output.predriver_resistor.value
    return draw_a


def capacitance_f(design: Design) -> float:
    """Capacitance of each rail (F): reservoir and local capacitors."""
    return (design.rails.reservoir_f or 0.0) + (design.rails.local_capacitors_f or 0.0)


CHARGING_SHARE: Final = 0.15
"""So much of a limit goes into the rails' capacitors on the way up; our own figure."""


def charging_s(design: Design, rise_v: float, limit_a: float) -> float:
    """Time (s) for the rails to rise by `rise_v` (V) with `CHARGING_SHARE` of the limit going into the capacitors."""
    return capacitance_f(design) * max(rise_v, 0.0) / (CHARGING_SHARE * limit_a)


def capacitors_settle_s(design: Design) -> float:
    """Time (s) for an ohmmeter across a rail to come to rest: eight time constants of bleed and capacitors."""
    if not capacitance_f(design):
        return 0.0
    if design.rails.bleed is None:
        return 30.0
    return min(120.0, 8.0 * design.rails.bleed.value * capacitance_f(design))


def discharge_text(design: Design, positive_v: float | None = None, negative_v: float | None = None) -> str:
    """What the rails' capacitors hold and how they let go of it, in words: energy, time, and a resistor for it.

    At the design's full rails unless others are given (V); the laws and our own figures stand in
    `benchkit.stage.stored`.
    """
    rails = design.rails
    held = stored(
        design,
        rails.positive_v if positive_v is None else positive_v,
        rails.negative_v if negative_v is None else negative_v,
    )
    if not held.farad:
        return "at once (the design names no capacitors on the rails)"
    highest_v = max(held.positive_v, -held.negative_v)
    seconds = held.fall_s(highest_v, RAIL_LOW_V)
    alone = "no bleed resistor is named"
    if seconds is not None and held.bleed_peak_w is not None:
        alone = f"{time_text(seconds)} through the bleed resistor, which takes {held.bleed_peak_w:.2g} W at first"
    single = held.negative_v == 0.0
    where = "the rail holds" if single else "both rails together hold"
    span = "" if single else f", {quantities.show(held.span_v, 'V', 3)} from rail to rail"
    return f"{alone}; {where} {_energy_text(held.joule)}{span}; {helper_text(design, held.positive_v, held.negative_v)}"


def helper_text(design: Design, positive_v: float, negative_v: float) -> str:
    """Say which resistor a hand takes, what it has to stand, and how long it needs for the higher rail."""
    held = stored(design, positive_v, negative_v)
    helper = held.helper
    if helper is None:
        return "nothing is stored"
    seconds = held.helped_s(max(positive_v, -negative_v), RAIL_LOW_V)
    time = "at once" if seconds < 0.5 else f"in {time_text(seconds)}"
    return (
        f"a resistor of {quantities.show(helper.ohm, 'ohm', 2)} rated {helper.rating_w:g} W or more (it takes "
        f"{helper.peak_w:.2g} W in the first moment at {quantities.show(helper.volts, 'V', 3)}) empties a rail {time}"
    )


def _energy_text(joule: float) -> str:
    return f"{joule:.2g} J" if joule >= 0.1 else f"{1000.0 * joule:.2g} mJ"


def with_room(design: Design, least: tuple[float, float]) -> tuple[float, float]:
    """Go a tenth above the lowest rails that regulate, rounded up to half a volt, at most to the full ones.

    At the very edge a supply that is a few millivolts low decides whether the stage regulates.
    """
    positive_v = min(design.rails.positive_v, math.ceil(2.0 * 1.1 * least[0]) / 2.0)
    negative_v = max(design.rails.negative_v, math.floor(2.0 * 1.1 * least[1]) / 2.0)
    return positive_v, negative_v


def rails_text(positive_v: float, negative_v: float) -> str:
    """Rails (V) in words."""
    if negative_v == 0.0:
        return f"{quantities.show(positive_v, 'V')}"
    if math.isclose(positive_v, -negative_v):
        return f"±{quantities.show(positive_v, 'V')}"
    return f"{quantities.show(positive_v, 'V')} and {quantities.show(negative_v, 'V')}"


def time_text(seconds: float | None) -> str:
    """A time (s) in words; None for one that nobody knows."""
    if seconds is None:
        return "not known (the design names no bleed resistor)"
    return "at once" if seconds < 0.5 else f"{seconds:.0f} s" if seconds < 120 else f"{seconds / 60:.1f} min"
