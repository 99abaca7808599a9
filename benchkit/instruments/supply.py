"""A supply with two outputs, the positive and the negative rail, that are always set together.

Rules
-----
* How it is set stands in `benchkit.instruments.setting`, what "off" needs to be believed in
  `benchkit.instruments.switching_off`.
* A setting is never sent a second time by itself.  If the link had to be opened anew in between, nothing more is set.
* A tripped protection is never cleared by itself, and with one tripped nothing is switched on.
* If only one output is on, both are switched off; likewise when a setting was not taken on the way from off to on.
"""

from __future__ import annotations

import math
from concurrent.futures import Future
from contextlib import suppress

from benchkit.errors import EntryError, InstrumentError
from benchkit.instruments.conversation import Conversation
from benchkit.instruments.dialect import SupplyTalk
from benchkit.instruments.link import Link
from benchkit.instruments.profile import SupplyProfile
from benchkit.instruments.reading_supply import Sample, empty_error_queue, read_outputs, read_sample, read_trips
from benchkit.instruments.setting import Setter, Wanted
from benchkit.instruments.switching_off import (
    OFF_TIMEOUT_S,
    UNKNOWN,
    Memory,
    OffOutcome,
    flows,
    say_off,
    switch_off,
    words,
)

__all__ = ["OFF_TIMEOUT_S", "UNKNOWN", "WATCH_TIMEOUT_S", "OffOutcome", "Sample", "Supply", "usual_protection_v"]

WATCH_TIMEOUT_S = 1.0
"""How long each answer may take while the supply is watched, s; a silent one is given up after four times that."""


def usual_protection_v(positive_v: float, negative_v: float) -> float:
    """Where over-voltage protection belongs, V: 10 % and 1 V above the higher rail (our own figures)."""
    return 1.1 * max(abs(positive_v), abs(negative_v)) + 1.0


class Supply:
    """A supply behind a link.

    Parameters
    ----------
    link : Link
        Its owner thread.
    profile : SupplyProfile
        Its dialect.
    """

    def __init__(self, link: Link, profile: SupplyProfile) -> None:
        self._link = link
        self._profile = profile
        self._talk = SupplyTalk(profile)
        self._memory = Memory()

    @property
    def off_confirmed(self) -> bool:
        """Whether the last thing done was an "off" that was confirmed: also one that a failed setting brought about."""
        return self._memory.off_confirmed

    @property
    def seen_on(self) -> bool:
        """Whether it has said since the last confirmed "off" that an output is on or that current flows."""
        return self._memory.seen_on

    def looks_on(self, sample: Sample) -> bool:
        """Whether a look shows an output that is on, or a current that flows."""
        return any(sample.outputs) or flows(self._talk, sample.state)

    def identify(self) -> Future[str]:
        """Open the link, empty the supply's error queue of what was before, and return its name."""
        return self._link.submit(self._identify)

    def set(
        self,
        positive_v: float,
        negative_v: float,
        limit_a: float,
        output_on: bool,
        *,
        protection_v: tuple[float, float] | None = None,
        over_current: bool = True,
    ) -> Future[Sample]:
        """Set both rails, limit and protection, and the output; return what was read back.

        Parameters
        ----------
        positive_v, negative_v : float
            V; the negative rail is zero or negative.
        limit_a : float
            For each rail, A.
        output_on : bool
            Both outputs on, or both off.
        protection_v : pair of float, optional
            Over-voltage protection of the positive and the negative rail, magnitudes in V; without it
            `usual_protection_v`.
        over_current : bool
            False leaves over-current protection off: a limit that is checked into a short would trip it.

        Raises
        ------
        EntryError
            If a number makes no sense.
        InstrumentError
            From the future; ``refused`` when the supply did not do it.
        """
        if not (math.isfinite(positive_v) and positive_v >= 0):
            raise EntryError(f"The positive rail was to be {positive_v!r} V", "0 V or more")
        if not (math.isfinite(negative_v) and negative_v <= 0):
            raise EntryError(f"The negative rail was to be {negative_v!r} V", "0 V or less")
        if not (math.isfinite(limit_a) and limit_a > 0):
            raise EntryError(f"The current limit was to be {limit_a!r} A", "more than 0 A")
        usual_v = usual_protection_v(positive_v, negative_v)
        levels = (usual_v, usual_v) if protection_v is None else (protection_v[0], protection_v[1])
        for rail_v, level_v in zip((positive_v, -negative_v), levels, strict=True):
            if not (math.isfinite(level_v) and level_v > rail_v):
                raise EntryError(f"The over-voltage protection was to be {level_v!r} V", f"more than {rail_v:g} V")
        wanted = Wanted(
            volts=(positive_v, (-negative_v if self._profile.negative_programmed_positive else negative_v) + 0.0),
            limit_a=limit_a,
            on=output_on,
            protection_v=self._bounded(levels, max(positive_v, -negative_v)),
            over_current=over_current,
        )
        return self._link.submit(lambda conversation: self._set(conversation, wanted))

    def sample(self) -> Future[Sample]:
        """Read the supply's outputs, settings and measurements; each answer may take `WATCH_TIMEOUT_S`.

        When it finds one output off or tripped while the other is on, "off" is sent at once; the sample still shows
        what was found.
        """

        def job(conversation: Conversation) -> Sample:
            with conversation.impatient(WATCH_TIMEOUT_S, repeats=True):
                sample = read_sample(conversation, self._talk, self._memory)
                if any(sample.outputs) and (not all(sample.outputs) or sample.state.tripped):
                    say_off(conversation, self._talk)
                return sample

        return self._link.submit(job)

    def off(self) -> Future[OffOutcome]:
        """Switch both outputs off and confirm it, before anything else that waits.  The future never fails."""
        return self._link.submit_urgent(self._off)

    def clear_trip(self) -> Future[Sample]:
        """Clear a tripped protection: only after a person has said yes to that.

        The outputs are off and their voltages at 0 V before anything is cleared.

        Raises
        ------
        InstrumentError
            From the future; ``unsupported`` if the profile has no such command, ``refused`` if it stays tripped.
        """
        return self._link.submit(self._clear_trip)

    def close(self, wait_s: float = 1.0) -> None:
        """Close the link, waiting for that for at most `wait_s`.  It switches nothing."""
        self._link.close(wait_s)

    def _identify(self, conversation: Conversation) -> str:
        name = conversation.idn or conversation.open()
        with suppress(InstrumentError):
            empty_error_queue(conversation, self._talk)
        return name

    def _bounded(self, levels: tuple[float, float], rail_v: float) -> tuple[float, float]:
        """Return protection levels that the supply can be set to."""
        profile = self._profile
        if not profile.has_over_voltage:
            return levels
        most_v = profile.over_voltage_most_v or math.inf
        if rail_v >= most_v:
            raise EntryError(
                f"A rail was to be {rail_v:g} V",
                f"less than {most_v:g} V, the highest over-voltage protection that this supply has",
            )
        bounded = [min(max(level, profile.over_voltage_least_v), most_v) for level in levels]
        return (bounded[0], bounded[1])

    def _set(self, conversation: Conversation, wanted: Wanted) -> Sample:
        self._memory.off_confirmed = False
        was_on = any(read_outputs(conversation, self._talk, self._memory))
        self._memory.seen_on = self._memory.seen_on or was_on
        if wanted.on:
            self._refuse_tripped(conversation, was_on)
        setter = Setter(conversation, self._talk, self._memory)
        try:
            sample = setter.carry_out(wanted, was_on)
        except Exception as error:
            if ((not was_on and wanted.on) or setter.astray) and not conversation.cancelled:
                self._off_because(conversation, error)
            raise
        if sample.outputs != (wanted.on, wanted.on):
            refused = InstrumentError(
                "refused",
                f"The supply's outputs read back as {words(sample.outputs)}",
                f"both {'on' if wanted.on else 'off'}",
                "Look at the supply's own display",
            )
            if any(sample.outputs) and not conversation.cancelled:
                self._off_because(conversation, refused)
            raise refused
        return sample

    def _off_because(self, conversation: Conversation, error: Exception) -> None:
        """Switch off after an error, and say so if it could not be confirmed."""
        outcome = self._off(conversation)
        if not outcome.confirmed and isinstance(error, InstrumentError):
            raise InstrumentError(error.kind, error.came, error.expected, outcome.how, partial=error.partial) from None

    def _refuse_tripped(self, conversation: Conversation, was_on: bool) -> None:
        state = read_trips(conversation, self._talk, self._memory)
        if not state.tripped:
            return
        if was_on:
            say_off(conversation, self._talk)
        rails = [
            f"the {name} rail"
            for name, tripped in (("positive", state.positive_tripped), ("negative", state.negative_tripped))
            if tripped
        ]
        raise InstrumentError(
            "refused",
            f"The supply's own protection has switched off {' and '.join(rails)}",
            "no tripped protection",
            "Find the cause first; a trip is cleared only by an explicit yes",
        )

    def _clear_trip(self, conversation: Conversation) -> Sample:
        if not self._profile.commands.clear_protection:
            raise InstrumentError(
                "unsupported",
                "This supply's profile has no command that clears a tripped protection",
                "commands.clear_protection in the profile",
                "Clear it at the supply itself",
            )
        outcome = self._off(conversation)
        if not outcome.confirmed:
            raise InstrumentError("refused", "The trip was not cleared", "the outputs off first", outcome.how)
        return Setter(conversation, self._talk, self._memory).clear_protection()

    def _off(self, conversation: Conversation) -> OffOutcome:
        outcome = switch_off(conversation, self._talk, self._memory)
        self._memory.told = (False, False) if outcome.confirmed else None
        self._memory.off_confirmed = outcome.confirmed
        if outcome.confirmed:
            self._memory.seen_on = False
        self._memory.told_openings = conversation.openings
        return outcome
