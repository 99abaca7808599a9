"""A meter: one reading at a time, on its own thread.

Rules
-----
* A function is chosen anew for every reading, because somebody may have turned the meter's own switch; within one
  reading of several samples it is chosen once, and again if the link had to be opened anew.
* Where the meter can be asked for its function, that has to be the right one before a value is believed.
* An overload is never a number, and ends a reading of several samples.
* Each sample is closed by a mark, where the meter has one (`benchkit.instruments.conversation`): an answer that came
  twice is not taken for the next, nor for all that follow.  If another line comes, the sample is taken once more.
"""

from __future__ import annotations

import math
import time
from concurrent.futures import Future
from dataclasses import dataclass

from benchkit.errors import InstrumentError
from benchkit.instruments.conversation import Conversation
from benchkit.instruments.dialect import Chosen, ask_series, fill
from benchkit.instruments.link import Link
from benchkit.instruments.numbers import visible
from benchkit.instruments.profile import MeterProfile
from benchkit.quantities import Overload

MOST_SAMPLES = 1000


@dataclass(frozen=True, kw_only=True)
class RawReading:
    """What a meter said, without any uncertainty.

    Parameters
    ----------
    value : float or None
        The mean of `values` in the function's unit; None for an overload.
    overload : bool
        At least one sample was beyond the range.
    negative : bool
        For an overload: at the negative end.
    function : str
        What was measured.
    range : float or None
        The range that was asked for.
    meter : str
        The meter's name as it gave it.
    values : tuple of float
        The samples in their order; empty for an overload.
    """

    value: float | None
    overload: bool = False
    negative: bool = False
    function: str
    range: float | None = None
    meter: str
    values: tuple[float, ...] = ()


class Meter:
    """A meter behind a link.

    Parameters
    ----------
    link : Link
        Its owner thread.
    profile : MeterProfile
        Its dialect.
    """

    def __init__(self, link: Link, profile: MeterProfile) -> None:
        self._link = link
        self._profile = profile

    def identify(self) -> Future[str]:
        """Open the link and return the meter's name."""
        return self._link.submit(self._identify)

    def expected_s(self, function: str, range: float | None = None, samples: int = 1) -> float:
        """Return how long such a reading is likely to take, s: for a countdown, not a promise."""
        return self._profile.expected_s(function, range, samples)

    def read(self, function: str, range: float | None = None, samples: int = 1) -> Future[RawReading]:
        """Take `samples` readings one after the other.

        Parameters
        ----------
        function : str
            One of `benchkit.measure.readings.FUNCTIONS`.
        range : float, optional
            In the function's unit; without it the meter chooses.
        samples : int
            1 to `MOST_SAMPLES`.

        Raises
        ------
        InstrumentError
            From the future: what went wrong with the link, or ``unsupported``.
        """
        if not 1 <= samples <= MOST_SAMPLES:
            raise InstrumentError("unsupported", f"{samples} samples were asked for", f"1 to {MOST_SAMPLES}")
        known = self._profile.functions if range is None else self._profile.ranged
        series = known.get(function)
        if series is None:
            how = "" if range is None else " on a stated range"
            raise InstrumentError(
                "unsupported",
                f"This meter's profile can't measure {function}{how}",
                "one of " + ", ".join(known) if known else "",
                "Enter this reading by hand",
            )
        if range is not None:
            if not (math.isfinite(range) and range > 0):
                raise InstrumentError("unsupported", f"The range {range!r} was asked for", "a number above zero")
            series = fill(series, {"range": f"{range:.9g}"})
        asked = series
        return self._link.submit(lambda conversation: self._read(conversation, asked, function, range, samples))

    def close(self, wait_s: float = 1.0) -> None:
        """Close the link, waiting for that for at most `wait_s`."""
        self._link.close(wait_s)

    def _identify(self, conversation: Conversation) -> str:
        name = conversation.idn or conversation.open()
        conversation.learn_mark()
        return name

    def _read(
        self, conversation: Conversation, series: tuple[str, ...], function: str, range: float | None, samples: int
    ) -> RawReading:
        rules = self._profile.rules(function)
        timeout_s = self._profile.timing.timeout_s(function, ranged=range is not None)
        conversation.learn_mark()
        values: list[float] = []
        chosen = Chosen()
        for _ in [None] * samples:
            value = ask_series(
                conversation,
                series,
                rules.read,
                timeout_s=timeout_s,
                chosen=chosen,
                after_choice=lambda: self._demand_function(conversation, function),
                closed=True,
            )
            if isinstance(value, Overload):
                return RawReading(
                    value=None,
                    overload=True,
                    negative=not value.positive,
                    function=function,
                    range=range,
                    meter=conversation.idn,
                )
            values.append(value)
        mean = math.fsum(values) / len(values)
        return RawReading(value=mean, function=function, range=range, meter=conversation.idn, values=tuple(values))

    def _demand_function(self, conversation: Conversation, function: str) -> None:
        """Let the meter switch over, and look that it did where it can be asked."""
        if self._profile.timing.switch_s:
            time.sleep(self._profile.timing.switch_s)
        if not self._profile.function_question:
            return
        wanted = self._profile.function_answers[function]
        found = ask_series(conversation, self._profile.function_question, str.strip, closed=True)
        if found.strip('"').upper() != wanted.strip('"').upper():
            raise InstrumentError(
                "refused",
                f"The meter stands on {visible(found)} although {function} was chosen",
                repr(wanted),
                "Look at the meter's own display",
            )
