"""Between the instruments' values and what crosses the pipe or goes into the record."""

from __future__ import annotations

from concurrent.futures import Future
from typing import TYPE_CHECKING, Any

from benchkit.keeper.offs import UNKNOWN

if TYPE_CHECKING:
    from benchkit.instruments.supply import OffOutcome, Sample


def outcome_of(ready: Future[OffOutcome]) -> dict[str, Any]:
    """Return the fields of an ``output off`` event that a done "off" gives, without its reason."""
    error = ready.exception()
    if error is not None:
        return {"confirmed": False, "how": f"{UNKNOWN} ({error})", "state": None}
    outcome = ready.result()
    state = None if outcome.state is None else vars(outcome.state)
    return {"confirmed": outcome.confirmed, "how": outcome.how, "state": state}


def pair(wanted: Any) -> tuple[float, float] | None:
    """Return two numbers that came as a list, or None."""
    return None if wanted is None else (float(wanted[0]), float(wanted[1]))


def set_v(sample: Sample) -> tuple[float, float]:
    """Return where the rails are set, V."""
    return (sample.state.set_positive_v or 0.0, sample.state.set_negative_v or 0.0)
