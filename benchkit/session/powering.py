"""The supply: ramps under watch, off, and the same words where a person sets it by hand."""

from __future__ import annotations

import asyncio
import contextlib
import contextvars
import math
from collections.abc import AsyncIterator
from concurrent.futures import Future
from typing import TYPE_CHECKING

from benchkit import quantities
from benchkit.errors import EntryError, InstrumentError
from benchkit.events import Event, Noted, OutputOff, SupplyRefused, SupplySet, SupplyState
from benchkit.keeper.protocol import WatchLines
from benchkit.procedure.actions import Choice, Question, SetSupply, SwitchOff
from benchkit.procedure.questions import STOP
from benchkit.procedure.sizing import rails_text

if TYPE_CHECKING:
    from benchkit.session.run import Session

RAMP_SLICE_S = 0.5
"""A ramp in simulated time moves in steps of this length at most; each is watched."""

OWN_WATCH_S = 0.2
"""How often the keeper watches by itself at a real bench."""

VOLTS_SHARE = 1.05
VOLTS_MORE_V = 0.5
"""A rail beyond this share of where it was set, and so many volts more, trips (our own figures)."""

LEAST_SHARE = 0.5
"""A rail below this share of where it is set has broken down, whatever the supply says of its limit (our own)."""

METER_AGE_S = 0.6
"""So long may the meter be silent, besides its own time for a reading, while the screw is turned by it (s)."""

METER_AGE_REHEARSED_S = 5.0
"""The same in a rehearsal, where moves of the screw take simulated time (s)."""

MOVING = "The supply moves, watched at every step."


async def set_supply(session: Session, action: SetSupply) -> Event:
    """Bring both rails to where they should be, together, under watch."""
    if session.job.manual_supply:
        return await _set_by_hand(session, action)
    try:
        return await _ramp(session, action)
    except InstrumentError as error:
        return SupplyRefused(item=action.item, problem=str(error))


async def _ramp(session: Session, action: SetSupply) -> Event:
    keeper = session.keeper
    last = session.state.supply
    on = last is not None and last.output_on is True and session.state.result(action.item) is None
    from_v = (0.0, 0.0)
    if on and last is not None and last.set_positive_v is not None and last.set_negative_v is not None:
        from_v = (last.set_positive_v, last.set_negative_v)
    await asyncio.wrap_future(keeper.watch(None))
    lines = _lines(session, action, from_v) if action.trip_on_limit else None
    if session.clock.own_watch:
        await _by_the_keeper(session, action, lines)
    else:
        await _by_slices(session, action, from_v, lines)
    left_s = max(action.settle_s, 0.5)
    while left_s > 0:
        await session.clock.spend(min(0.5, left_s))
        left_s -= 0.5
        if action.trip_on_limit:
            await session.sample()
    state = await asyncio.wrap_future(keeper.supply_state())
    return SupplySet(item=action.item, state=state)


async def _by_the_keeper(session: Session, action: SetSupply, lines: WatchLines | None) -> None:
    """Let the keeper move the rails: at a real bench no step of a ramp waits for a screen."""
    loop, context = asyncio.get_running_loop(), contextvars.copy_context()

    def on_step(share: float, state: SupplyState) -> None:
        """Show a step in the context of this task: a screen finds itself by it."""
        with contextlib.suppress(RuntimeError):
            loop.call_soon_threadsafe(
                lambda: session.show_moment(busy=MOVING, busy_share=share, supply=state), context=context
            )

    session.expect_on()
    session.busy(MOVING, share=0.0)
    ramp_s = action.ramp_s if action.trip_on_limit else 0.0
    future = session.keeper.supply_ramp(
        action.positive_v, action.negative_v, action.limit_a, ramp_s, action.protection_v, lines, on_step,
        over_current=action.trip_on_limit,
    )  # fmt: skip
    state = await asyncio.wrap_future(future)
    session.show_moment(busy=MOVING, busy_share=1.0, supply=state)


async def _by_slices(
    session: Session, action: SetSupply, from_v: tuple[float, float], lines: WatchLines | None
) -> None:
    """Move the rails in slices of simulated time, and have each looked at."""
    keeper = session.keeper
    if from_v == (0.0, 0.0):
        await _set(session, 0.0, 0.0, action)
    if lines is not None:
        await asyncio.wrap_future(keeper.watch(lines))
        session.watch_since = session.clock.now()
    steps = max(1, math.ceil(action.ramp_s / RAMP_SLICE_S)) if action.trip_on_limit else 1
    slice_s = max(action.ramp_s / steps, 0.05)
    for step in range(1, steps + 1):
        share = step / steps
        rails = tuple(start + share * (end - start) for start, end in zip(from_v, _ends(action), strict=True))
        state = await _set(session, rails[0], rails[1], action)
        session.show_moment(busy=MOVING, busy_share=share, supply=state)
        await session.clock.spend(slice_s)
        if action.trip_on_limit:
            await session.sample()


async def _set(session: Session, positive_v: float, negative_v: float, action: SetSupply) -> SupplyState:
    session.expect_on()
    return await asyncio.wrap_future(
        session.keeper.supply_set(
            positive_v, negative_v, action.limit_a, True, action.protection_v, over_current=action.trip_on_limit
        )
    )


def _ends(action: SetSupply) -> tuple[float, float]:
    return action.positive_v, action.negative_v


def _lines(session: Session, action: SetSupply, from_v: tuple[float, float]) -> WatchLines:
    """Return what is watched for: limits, and each rail's voltage beyond where it comes from and where it goes."""
    tops = [max(abs(start), abs(end)) for start, end in zip(from_v, _ends(action), strict=True)]
    most_v = [VOLTS_SHARE * top + VOLTS_MORE_V if top else None for top in tops]
    return WatchLines(
        positive_v=most_v[0],
        negative_v=most_v[1],
        least_share=LEAST_SHARE,
        trip_on_limit=True,
        grace_s=action.grace_s,
        own_interval_s=OWN_WATCH_S if session.clock.own_watch else None,
    )


@contextlib.asynccontextmanager
async def minding_the_meter(session: Session) -> AsyncIterator[None]:
    """For the time of a block, let the watch depend on readings of the meter that are fresh."""
    if session.job.manual_meter or session.job.manual_supply or session.state.energised != "on":
        yield
        return
    limit_s = METER_AGE_S if session.clock.own_watch else METER_AGE_REHEARSED_S
    await asyncio.wrap_future(session.keeper.mind_meter(limit_s))
    try:
        yield
    finally:
        # Not waited for: the block may have ended because the keeper has gone.
        session.keeper.mind_meter(None)


def stay_awake(session: Session) -> None:
    """Ask the system to keep the computer awake; what it can't do is said, and kept in the record."""
    if session.job.manual_supply or not session.clock.own_watch:
        return

    def answered(done: Future[str]) -> None:
        if done.exception() is None and done.result():
            session.note(Noted(text=f"CAUTION: {done.result()}"))

    session.keeper.stay_awake().add_done_callback(answered)


async def switch_off(session: Session, action: SwitchOff) -> Event | None:
    """Switch off; what comes of it arrives as the keeper's own event."""
    if session.job.manual_supply:
        session.busy("")
        return OutputOff(reason=action.reason, confirmed=False, how="benchkit has no hand on this supply.", state=None)
    session.busy("Switching the supply off and reading it back.")
    # Shielded: the walk may have moved on by the keeper's own event before the answer comes.
    await asyncio.shield(asyncio.wrap_future(session.keeper.off(action.reason)))
    await session.hands.advance(0.2)
    return None


async def _set_by_hand(session: Session, action: SetSupply) -> Event:
    one = action.negative_v == 0.0
    rails = quantities.show(action.positive_v, "V") if one else (
        f"{quantities.show(action.positive_v, 'V')} and {quantities.show(action.negative_v, 'V')}"
    )  # fmt: skip
    limit = quantities.show(action.limit_a, "A")
    item = session.job.walk.item(session.state)
    example = "5.00 V 21 mA" if one else "5.00 V 21 mA -5.00 V 20 mA"
    how = f"Output off, limit {limit}, {_protection_words(action)}then up from 0 V to {rails}"
    now = session.state.supply
    if now is not None and now.output_on and now.positive_v is not None:  # said on, and no off since
        before = rails_text(now.positive_v, now.negative_v or 0.0)
        how = f"The output stays on. Limit {limit}, {_protection_words(action)}then from {before} to {rails}"
    question = Question(
        item=action.item,
        kind="by hand",
        title=f"Set the supply by hand: {rails}, limit {limit}",
        do=(
            f"{how}, eyes on the current. "
            f"Then type what it shows, volts and amperes of each rail ({example}); add the word limit if a rail "
            "stands in it."
        ),
        why=item.why,
        caution="Nothing switches this supply off but your hand. If the current jumps: off first, type later.",
        choices=(Choice(value="done", label="Entered"), STOP),
    )
    _, state = await session.ask_entry(question, lambda text: typed_supply(text, action))
    assert isinstance(state, SupplyState)
    return SupplySet(item=action.item, state=state)


def _protection_words(action: SetSupply) -> str:
    """Say where the over-voltage protection goes; "" where the action leaves it to the supply."""
    if action.protection_v is None:
        return ""
    sizes = action.protection_v[: 1 if action.negative_v == 0.0 else 2]
    volts = " and ".join(dict.fromkeys(quantities.show(size, "V", 3) for size in sizes))
    return f"over-voltage protection {volts} where it has one, "


def typed_supply(text: str, action: SetSupply) -> SupplyState:
    """Read what a person says that the supply shows, such as ``5.00 V 21 mA -5.00 V 20 mA limit``.

    Raises
    ------
    EntryError
        When it isn't one or two pairs of volts and amperes.
    """
    words = text.replace(",", " ").split()
    in_limit = any(word.lower() == "limit" for word in words)
    words = [word for word in words if word.lower() not in ("limit", "in", "and", "on")]
    quantities_found: list[tuple[float, str]] = []
    number = 0
    while number < len(words):
        pair = " ".join(words[number : number + 2])
        for candidate, width in ((words[number], 1), (pair, 2)):
            unit = "V" if candidate.endswith(("V", "v")) else "A" if candidate.endswith(("A", "a")) else ""
            if unit and number + width <= len(words):
                quantities_found.append((quantities.parse(candidate, unit), unit))
                number += width
                break
        else:
            raise EntryError(f"{words[number]!r} has no unit", "volts and amperes, such as 5.00 V 21 mA")
    volts = [value for value, unit in quantities_found if unit == "V"]
    amps = [abs(value) for value, unit in quantities_found if unit == "A"]
    rails = 1 if action.negative_v == 0.0 else 2
    if len(volts) != rails or len(amps) != rails:
        raise EntryError(
            f"{len(volts)} voltages and {len(amps)} currents came",
            f"{rails} of each, one pair for each rail",
            "Type what the supply shows",
        )
    return SupplyState(
        output_on=True,
        positive_v=volts[0],
        negative_v=-abs(volts[1]) if rails == 2 else 0.0,
        positive_a=amps[0],
        negative_a=amps[1] if rails == 2 else 0.0,
        positive_in_limit=in_limit,
        negative_in_limit=in_limit and rails == 2,
    )
