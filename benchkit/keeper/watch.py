"""When a look at the supply means "off": plain arithmetic, no clock, no instrument."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from benchkit.keeper.protocol import WatchLines

if TYPE_CHECKING:
    from benchkit.instruments.supply import Sample

LEAST_SET_V = 2.0
"""Rails set below this are not judged by `WatchLines.least_share`, V: lead drops would count (our own figure)."""


@dataclass(frozen=True, kw_only=True)
class Trip:
    """Why the keeper switches off: in words, and the value and the line it crossed, A or V."""

    reason: str
    what: str
    value: float | None = None
    limit: float | None = None


def look(sample: Sample, lines: WatchLines, elapsed_s: float) -> Trip | None:
    """Return the trip that a look at a supply that should be on calls for, or None.

    Parameters
    ----------
    sample : Sample
        The supply as it is.
    lines : WatchLines
        What is watched for.
    elapsed_s : float
        Time since the watch was set, s; negative counts as none.

    Notes
    -----
    An output that went off by itself (the supply's own protection) takes the other one with it at once: one rail must
    never stand alone.  Current, limit and voltage count from the end of the grace on.
    """
    state = sample.state
    for name, output, tripped in (
        ("positive", sample.outputs[0], state.positive_tripped),
        ("negative", sample.outputs[1], state.negative_tripped),
    ):
        if tripped:
            return Trip(reason=f"the supply's own protection switched its {name} output off", what=f"{name} protection")
        if not output:
            return Trip(reason=f"the supply switched its {name} output off by itself", what=f"{name} output")
    if elapsed_s < lines.grace_s:
        return None
    for name, amps, line in (
        ("rail+.current", state.positive_a, lines.positive_a),
        ("rail-.current", state.negative_a, lines.negative_a),
    ):
        if amps is not None and line is not None and amps > line:
            return Trip(reason=f"{name} is {amps:.4g} A, above {line:.4g} A", what=name, value=amps, limit=line)
    if lines.trip_on_limit:
        for name, held, amps in (
            ("rail+", state.positive_in_limit, state.positive_a),
            ("rail-", state.negative_in_limit, state.negative_a),
        ):
            if held:
                return Trip(reason=f"{name} is held by its current limit", what=name, value=amps, limit=state.limit_a)
    return _volts(sample, lines)


def _volts(sample: Sample, lines: WatchLines) -> Trip | None:
    """Judge the rails' voltages."""
    state = sample.state
    for name, volts, line, set_v in (
        ("rail+", state.positive_v, lines.positive_v, state.set_positive_v),
        ("rail-", state.negative_v, lines.negative_v, state.set_negative_v),
    ):
        if volts is None:
            continue
        if line is not None and abs(volts) > line:
            return Trip(
                reason=f"{name} stands at {volts:.4g} V, beyond {line:.4g} V", what=name, value=volts, limit=line
            )
        if lines.least_share is not None and set_v is not None and abs(set_v) >= LEAST_SET_V:
            least_v = lines.least_share * abs(set_v)
            if abs(volts) < least_v:
                return Trip(
                    reason=f"{name} has broken down to {volts:.4g} V, below {least_v:.4g} V",
                    what=name,
                    value=volts,
                    limit=least_v,
                )
    return None
