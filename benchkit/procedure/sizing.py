"""Limits, ramps and times that a plan needs, worked out from the design by rules of the trade.

Nothing here judges a reading: these numbers size the supply's limit, the ramps and the waiting times.
"""

from __future__ import annotations

import math

from benchkit import quantities
from benchkit.procedure.items import RAIL_LOW_V
from benchkit.stage.design import Design, target_drop_v

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


def discharge_s(design: Design, from_v: float, to_v: float = RAIL_LOW_V) -> float | None:
    """Time (s) for a rail to fall through the bleed resistor, t = R·C·ln(V0/V); None without a bleed resistor."""
    capacitance_f = (design.rails.reservoir_f or 0.0) + (design.rails.local_capacitors_f or 0.0)
    if not capacitance_f or from_v <= to_v:
        return 0.0
    if design.rails.bleed is None:
        return None
    return design.rails.bleed.value * capacitance_f * math.log(from_v / to_v)


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


def charging_s(design: Design, rise_v: float, limit_a: float) -> float:
    """Time (s) for the rails to rise by `rise_v` (V) with 15 % of the limit going into the capacitors."""
    return capacitance_f(design) * max(rise_v, 0.0) / (0.15 * limit_a)


def capacitors_settle_s(design: Design) -> float:
    """Time (s) for an ohmmeter across a rail to come to rest: eight time constants of bleed and capacitors."""
    if not capacitance_f(design):
        return 0.0
    if design.rails.bleed is None:
        return 30.0
    return min(120.0, 8.0 * design.rails.bleed.value * capacitance_f(design))


def discharge_text(design: Design) -> str:
    """What the rails' capacitors hold and how they let go of it, in words: energy, time, and a resistor for it.

    E = C·V²/2 and t = R·C·ln(V0/V), first-moment power V0²/R; each rail to 0 V.
    """
    volts = max(design.rails.positive_v, -design.rails.negative_v)
    farads = capacitance_f(design)
    if not farads:
        return "at once (the design names no capacitors on the rails)"
    joules = 0.5 * farads * volts**2
    held = f"each rail holds {joules:.2g} J" if joules >= 0.1 else f"each rail holds {1000.0 * joules:.2g} mJ"
    seconds = discharge_s(design, volts)
    alone = "no bleed resistor is named" if seconds is None else f"{time_text(seconds)} through the bleed resistor"
    ohms = 1000.0
    by_hand = time_text(ohms * farads * math.log(volts / RAIL_LOW_V))
    by_hand = by_hand if by_hand == "at once" else f"in {by_hand}"
    return f"{alone}; {held}; a 1 kohm resistor for {volts**2 / ohms:.2g} W empties it {by_hand}"


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
