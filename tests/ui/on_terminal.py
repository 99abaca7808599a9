"""A program for a real terminal: the screens over a scripted walk; each "off" goes to a file as a line.

Usage: python -m tests.ui.on_terminal FILE HOW, where HOW is ``type``, ``choose``, ``pour`` or ``crash``.
"""

from __future__ import annotations

import asyncio
import sys
import time
from dataclasses import replace
from pathlib import Path

from benchkit.events import Closed
from benchkit.session.front import Front
from benchkit.ui.entry import Identity
from benchkit.ui.running import run_app
from tests.ui import scripted

FILE, HOW = Path(sys.argv[1]), sys.argv[2]


def note(words: str) -> None:
    with FILE.open("a", encoding="utf-8") as file:
        file.write(f"{time.monotonic():.4f} {words}\n")


async def start(front: Front, identity: Identity) -> Closed:
    on = replace(scripted.TRIM_VIEW if HOW == "pour" else scripted.VIEW, supply=scripted.ON)
    front.show(on)
    question = {"type": scripted.TEXT, "pour": scripted.TRIM}.get(HOW, scripted.CONFIRM)
    asked = asyncio.ensure_future(front.ask(question))
    await asyncio.sleep(0.3)
    note("ready")
    number = 0
    while HOW == "pour" and not asked.done():
        number += 1
        front.show(replace(on, live=scripted.live(0.018 + (number % 40) * 1e-4), kept=number))
        await asyncio.sleep(0.05)
    if HOW == "crash":
        await asyncio.sleep(0.2)
        raise ZeroDivisionError("as planned")
    reply = await asked
    note(f"reply {reply.choice} {reply.text}")
    return scripted.closed()


def off(reason: str) -> None:
    note(f"off {reason}")


if __name__ == "__main__":
    beats = 0

    def beat() -> None:
        global beats  # noqa: PLW0603
        beats += 1

    status = run_app(
        start,
        off_now=off,
        heartbeat=beat,
        opening=scripted.OPENING,
        identity=scripted.WHO,
        log_dir=FILE.parent / "logs",
    )
    note(f"end {status} beats {beats}")
    sys.exit(status)
