"""The keeper's stand-by: it connects the supply, switches it off, says what it saw, and ends.

It reads one message, ``{"supply": {...}, "reason": "..."}``, and writes one, the fields of an ``output off`` event.
Nobody's lock holds it up.
"""

from __future__ import annotations

from collections.abc import Mapping
from concurrent.futures import TimeoutError as TooLate
from typing import Any

OFF_ONLY_LIMIT_S = 6.0


def switch_off(message: Mapping[str, Any]) -> dict[str, Any]:
    """Switch the supply of a bench off and return what became of it; never raises."""
    reason = str(message.get("reason", ""))
    result: dict[str, Any] = {"reason": reason, "confirmed": False, "state": None}
    try:
        from benchkit.instruments.traffic import TrafficLog
        from benchkit.keeper.bench import OwnedSupply

        owned = OwnedSupply(message["supply"], TrafficLog(), locked=False)
        outcome = owned.supply.off().result(OFF_ONLY_LIMIT_S)
    except TooLate:
        return {**result, "how": "output state unknown: switch it off by hand (no answer)"}
    except Exception as error:
        return {**result, "how": f"output state unknown: switch it off by hand ({error})"}
    state = None if outcome.state is None else vars(outcome.state)
    return {"reason": reason, "confirmed": outcome.confirmed, "how": outcome.how, "state": state}
