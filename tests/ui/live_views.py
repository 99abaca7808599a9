"""Pictures of a trim and of a soak, one for each thing that may be going on: for tests, measurements and looking at."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import Any, Final

from benchkit.procedure.actions import Question
from benchkit.session.front import LiveView, View
from tests.ui import scripted

NOTHING_MORE: Final[dict[str, Any]] = {
    "settles_text": "",
    "predicted": (),
    "settles_low": None,
    "settles_high": None,
    "rate_text": "",
}


def creeping(rest_v: float, seconds: float = 80.0, count: int = 320) -> tuple[tuple[float, float], ...]:
    """Two moves of the screw, then a creep towards `rest_v`, with a meter's noise (s, V)."""
    found = []
    for number in range(count):
        at = number * seconds / count
        if at < 15.0:
            value = 4e-3
        elif at < 30.0:
            value = 13e-3 - 1e-3 * math.exp(-(at - 15.0) / 8.0)
        else:
            value = rest_v - 1.6e-3 * math.exp(-(at - 30.0) / 18.0)
        found.append((at, value + 1e-5 * math.sin(17.0 * number)))
    return tuple(found)


def trimming(rest_v: float = 0.0193, **changes: Any) -> LiveView:
    """A trim in the middle of its way, with all that is said about it."""
    trend = creeping(rest_v)
    now_s, value = trend[-1]
    final = rest_v + 0.0011
    ahead = tuple((now_s + 2.0 * k, final - (final - value) * math.exp(-k / 12.0)) for k in range(40))
    live = LiveView(
        point="emitter.upper.1",
        unit="V",
        value=value,
        text=f"{value * 1e3:.2f} mV",
        low=0.018,
        high=0.022,
        target=0.02,
        age_s=0.0,
        inside=0.018 <= value <= 0.022,
        trend=trend,
        mood="turn",
        advice="a quarter turn anticlockwise",
        advised_turns=0.25,
        rate_text="rising 0.12 mV/min",
        settles_text=f"will rest at {final * 1e3:.2f} mV ± 0.2 mV, in 1 min 40 s",
        predicted=ahead,
        settles_low=final - 0.0003,
        settles_high=final + 0.0003,
    )
    return replace(live, **changes)


TRIM_VIEW = replace(scripted.TRIM_VIEW, kind="walk", channel="L", elapsed_s=132.0, target_time_s=300.0)

LIVES: Final[dict[str, LiveView]] = {
    "turn": trimming(0.016),
    "inside": trimming(mood="inside", advice="hold: it is still rising", advised_turns=None),
    "steady": trimming(0.02, mood="steady", advice="hands off", advised_turns=None, capture="at rest 1.2 s of 2.0 s"),
    "overshot": trimming(0.0261, mood="overshot", advice="an eighth of a turn clockwise", advised_turns=-0.125),
    "wrong way": trimming(0.012, mood="wrong way", advice="the other way: anticlockwise", advised_turns=None),
    "no response": trimming(
        0.0042, mood="no response", advice="stop: wiper open, or another point?", advised_turns=None, **NOTHING_MORE
    ),
    "gone": trimming(
        mood="gone",
        advice="put the probe back on the point",
        advised_turns=None,
        value=None,
        text="overload",
        inside=False,
        capture="probe not on the point",
        **NOTHING_MORE,
    ),
    "folded back": trimming(0.015, mood="folded back", advice="half a turn clockwise", advised_turns=-0.5),
    "running away": trimming(0.031, mood="running away", advice="off", advised_turns=None, **NOTHING_MORE),
}

SOAK_VIEW: View = replace(
    TRIM_VIEW,
    live=trimming(mood="inside", advice="hands off: it comes to rest", advised_turns=None, settled_share=0.63),
    busy="The stage soaks.",
    busy_share=0.63,
    remaining_s=100.0,
)

PROBING = replace(
    scripted.VIEW,
    kind="walk",
    supply=scripted.ON,
    next_probe="emitter.lower.1",
    live=trimming(
        value=0.0195,
        text="19.50 mV",
        advice="",
        advised_turns=None,
        mood="steady",
        capture="at rest 1.2 s of 2.0 s",
        **NOTHING_MORE,
    ),
)

SCENES: Final[dict[str, tuple[Question | None, View]]] = {
    **{name: (scripted.TRIM, replace(TRIM_VIEW, live=live)) for name, live in LIVES.items()},
    "soak": (None, SOAK_VIEW),
    "probes": (scripted.PROBES, PROBING),
}
