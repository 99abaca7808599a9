"""What a person is asked: the bench, questions, entries."""

from __future__ import annotations

import asyncio
from collections.abc import Callable
from typing import TYPE_CHECKING, Any

from benchkit.errors import BenchkitError, EntryError, InstrumentError
from benchkit.events import Answered, BenchFound, BenchMissing, Decided, Event, PartsReplaced
from benchkit.procedure.actions import Ask, Question
from benchkit.session import capturing
from benchkit.session.front import READ_BY_HAND, Reply
from benchkit.session.job import Stopped, refusal

if TYPE_CHECKING:
    from benchkit.session.run import Session

FIRST_LOOK_S = 0.2
LOOK_S = 1.0
"""How often the supply is looked at while a question stands (s)."""

FOUND_ON = "CAUTION: the supply's output was ON when benchkit found it; it was told to go off."
"""Stays in sight; whether the supply obeyed is shown by what is read back of it."""


async def connect(session: Session) -> Event:
    """Find the instruments of the bench."""
    session.busy("The instruments are being asked who they are.")
    setup = session.job.setup
    try:
        found = await asyncio.wrap_future(session.keeper.connect(setup))
        state = None
        if not session.job.manual_supply:
            state = await asyncio.wrap_future(session.keeper.supply_state())
            if state.output_on:
                session.show_moment(message=FOUND_ON)
    except InstrumentError as error:
        return BenchMissing(problem=str(error))
    return BenchFound(
        meter=found.get("meter") or READ_BY_HAND, supply=found.get("supply") or "set by hand", supply_state=state
    )


async def ask(session: Session, action: Ask) -> Event:
    """Put an item's question; what the hands then do is done before the answer counts."""
    question = action.question
    session.placed_by_itself = ""
    if capturing.possible(session, question):
        reply = await capturing.put(session, question)
    else:
        reply = await put(session, question)
    item = session.job.walk.item(session.state)
    if question.kind == "decide":
        wanted = next(choice for choice in question.choices if choice.value == reply.choice).wants_reason
        if wanted and not reply.text.strip():
            raise BenchkitError("A front end passed on a choice without its reason")
        return Decided(item=action.item, choice=reply.choice, reason=reply.text.strip())  # type: ignore[arg-type]
    if reply.choice == "make safe":
        raise Stopped(f"the operator chose it at: {question.title}")
    if question.kind == "parts":
        parts = "" if reply.choice == "no" else reply.text.strip()
        if parts:
            await session.hands.repair(f"{session.state.parts}; {parts}")
        return PartsReplaced(item=action.item, parts=parts, semiconductors=reply.choice == "semiconductors")
    if item.act and reply.choice == "done":
        await session.hands.act(item.act)
    if question.point and question.kind in ("probes", "tell"):
        await session.hands.probe(question.point)
        if not session.placed_by_itself:
            await session.clock.spend(1.0)
    return Answered(item=action.item, choice=reply.choice, text=reply.text.strip())  # type: ignore[arg-type]


async def put(session: Session, question: Question) -> Reply:
    """Put a question until the reply is one of its choices, with a reason where one is wanted."""
    refused = ""
    session.busy("")
    while True:
        reply = await _asked(session, question, refused)
        refused = refusal(question, reply)
        if not refused:
            return reply


async def _asked(session: Session, question: Question, refused: str) -> Reply:
    """Put a question, and keep looking at the supply while the person thinks."""
    asking = asyncio.ensure_future(session.front.ask(question, refused))
    try:
        look_s = FIRST_LOOK_S
        while True:
            done, _ = await asyncio.wait({asking}, timeout=look_s)
            if done:
                return asking.result()
            look_s = LOOK_S
            if session.state.energised == "on":
                await session.sample()
    finally:
        asking.cancel()


async def put_entry(session: Session, question: Question, parse: Callable[[str], Any]) -> tuple[Reply, Any]:
    """Put a question that wants something typed, until it can be used."""
    refused = ""
    session.busy("")
    while True:
        reply = await _asked(session, question, refused)
        if reply.choice == "make safe":
            raise Stopped(f"the operator chose it at: {question.title}")
        if reply.choice not in ("done", "take"):
            return reply, None
        try:
            return reply, parse(reply.text)
        except EntryError as error:
            refused = str(error)
