"""A meter: one reading at a time, on its own thread."""

from __future__ import annotations

import math
from concurrent.futures import Future
from dataclasses import dataclass

from benchkit.errors import InstrumentError
from benchkit.instruments.conversation import Conversation
from benchkit.instruments.link import Link
from benchkit.instruments.numbers import parse_number
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
        self._rules = profile.numbers.rules()

    def identify(self) -> Future[str]:
        """Open the link and return the meter's name."""
        return self._link.submit(lambda conversation: conversation.idn or conversation.open())

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
        questions = self._profile.functions if range is None else self._profile.ranged
        question = questions.get(function)
        if question is None:
            how = "" if range is None else " on a stated range"
            raise InstrumentError(
                "unsupported",
                f"This meter's profile can't measure {function}{how}",
                "one of " + ", ".join(questions),
                "Enter this reading by hand",
            )
        if range is not None:
            if not (math.isfinite(range) and range > 0):
                raise InstrumentError("unsupported", f"The range {range!r} was asked for", "a number above zero")
            question = question.replace("{range}", f"{range:.9g}")
        timeout_s = self._profile.timing.timeout_s(function)
        asked = question

        def job(conversation: Conversation) -> RawReading:
            return self._read(
                conversation, question=asked, function=function, range=range, samples=samples, timeout_s=timeout_s
            )

        return self._link.submit(job)

    def close(self, wait_s: float = 1.0) -> None:
        """Close the link, waiting for that for at most `wait_s`."""
        self._link.close(wait_s)

    def _read(
        self,
        conversation: Conversation,
        *,
        question: str,
        function: str,
        range: float | None,
        samples: int,
        timeout_s: float,
    ) -> RawReading:
        values: list[float] = []
        for _ in [None] * samples:
            value = conversation.ask(question, lambda text: parse_number(text, self._rules), timeout_s=timeout_s)
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
