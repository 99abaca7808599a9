"""Which "off" is under way, who asked for it, who knows of it, and what is known of the output since.

Rules
-----
* One "off" at a time: whoever asks while one is under way gets the same answer.
* It is given `OFF_LIMIT_S`; after that the output's state is unknown and is called so.
* After an "off" nothing is switched on before the screen has shown that it knows of it (`known` reaches `count`).
* What has been confirmed stays confirmed: when a later "off" can't be confirmed because the supply doesn't answer, and
  nothing has been switched on in between, the output is still off.  A supply that says that an output is on, or that
  current flows, is believed, whenever and to whomever it says so, and whatever becomes of its link after that.
* The output may be on from before "on" is sent until an "off" is confirmed, a setting to "off" has been read back, or
  a failed setting has ended in a confirmed "off".
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

OFF_LIMIT_S = 4.0
NO_SUPPLY = "benchkit has no supply that it could switch: switch it off by hand"
UNKNOWN = "output state unknown: switch it off by hand"


class Offs:
    """The keeper's book of offs.

    Attributes
    ----------
    count : int
        How many there have been.
    known : int
        The last one that the screen knows of.
    reason : str
        Of the one that is under way, or of the last.
    may_be_on : bool
        Whether the output may be on, as far as the keeper has done anything about it.
    """

    def __init__(self) -> None:
        self.count = 0
        self.known = 0
        self.reason = ""
        self.may_be_on = False
        self._coming_on = 0
        self._deadline_s = math.inf
        self._requests: list[int] = []
        self._proof = ""

    @property
    def under_way(self) -> bool:
        """Whether one has been sent and has not been answered."""
        return self._deadline_s < math.inf

    @property
    def settled(self) -> bool:
        """Whether the output has been confirmed as off and nothing was switched on since."""
        return bool(self._proof)

    def begin(self, reason: str, now_s: float, request: int | None = None) -> bool:
        """Note that somebody wants "off"; return whether it has to be sent, because none is under way."""
        if request is not None:
            self._requests.append(request)
        if self.under_way:
            return False
        self.count += 1
        self.reason = reason
        self._deadline_s = now_s + OFF_LIMIT_S
        return True

    def late(self, now_s: float) -> bool:
        """Whether the one under way has had its time."""
        return now_s > self._deadline_s

    def switching_on(self) -> None:
        """Note that an output is about to be switched on: nothing is proved any more.  `set_on_done` follows."""
        self._proof = ""
        self.may_be_on = True
        self._coming_on += 1

    def set_on_done(self, *, off_confirmed: bool) -> None:
        """Note that a setting to "on" is over; `off_confirmed`: it failed, and that ended in a confirmed "off"."""
        self._coming_on -= 1
        if off_confirmed and not self._coming_on:
            self.may_be_on = False

    def seen(self, *, on: bool) -> None:
        """Note whether an output was seen on, or a current, since the last "off": that takes back what was proved."""
        if on:
            self._proof = ""

    def set_off_done(self) -> None:
        """Note that a setting to "off" was read back as off, without any current."""
        self.may_be_on = self._coming_on > 0

    def finish(self, outcome: Mapping[str, Any]) -> tuple[dict[str, Any], list[int]] | None:
        """Close the one under way; None when there is none.

        Parameters
        ----------
        outcome : mapping
            ``confirmed``, ``how`` and ``state`` (a mapping or None).

        Returns
        -------
        payload : dict
            The fields of an ``output off`` event.
        requests : list of int
            Who waits for it.
        """
        if not self.under_way:
            return None
        self._deadline_s = math.inf
        payload = {"reason": self.reason, **outcome}
        if payload["confirmed"]:
            self._proof = str(payload["how"])
            self.may_be_on = self._coming_on > 0
        elif self._proof and _silent(payload["state"]):
            payload["confirmed"] = True
            payload["how"] = (
                f"confirmed before, and nothing was switched on since: {self._proof} "
                "(asked once more the supply did not answer)"
            )
        else:
            self._proof = ""
        requests, self._requests = self._requests, []
        return payload, requests


def _silent(state: Mapping[str, Any] | None) -> bool:
    """Whether the supply said nothing about its outputs."""
    return state is None or state.get("output_on") is None
