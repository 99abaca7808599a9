"""A walk in a process of its own, for those who kill it: real session, keeper and screen, and a bench of test servers.

``python -m tests.keeper.walker`` loads everything once and then makes a walk of each line that it reads, four words:
TERMINAL METER SUPPLY FOLDER; it answers with the process's number.  The walk is short, its predictions come at once.
Questions are answered well, until the screw is to be turned: the rails are up, the meter is read again and again, and
the watch depends on it.  Then the line ``there KEEPER`` goes to the file ``FOLDER/there``.  SIGUSR1 raises an error in
a screen; SIGUSR2 takes the reading, so that something has to be kept.
"""

from __future__ import annotations

import asyncio
import fcntl
import importlib
import os
import re
import signal
import socket
import sys
import termios
import traceback
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from benchkit.events import Closed, Event, Narrowed, Predicted
from benchkit.keeper.client import KeeperClient
from benchkit.measure.accuracy import HANDHELD, STATED_DEFAULT
from benchkit.procedure.actions import Narrow, Predict, Question, Target
from benchkit.procedure.file import parse_procedure
from benchkit.session import predictions, this_unit
from benchkit.session import start as session_start
from benchkit.session.clock import WallClock
from benchkit.session.front import Front, Reply, View
from benchkit.session.hands import Hands
from benchkit.session.start import Runner, Setting
from benchkit.ui.entry import Identity, Opening
from benchkit.ui.running import run_app
from tests.instruments.server import TestMeter, TestSupply
from tests.procedure.driver import SMALL, judged, limits_of, small, suspected
from tests.session.fakes import GOOD_VALUES, well
from tests.stage.designs import breadboard

QUICKER = 200.0
"""So much faster than at a bench do dwells pass."""

STEEPER = 4.0
"""So much faster than at a bench do rails rise."""


class WalkMeter(TestMeter):
    """Knows where its probes are, because the hands tell it: ``PROBE? point``."""

    def __init__(self) -> None:
        self.point = ""
        super().__init__()

    def answer(self, message: str) -> str | None:
        if match := re.fullmatch(r"PROBE\? (.*)", message):
            self.point = match[1]
            return "1"
        if message.startswith("MEAS"):
            return f"{GOOD_VALUES.get(self.point, 0.0):+.8E}"
        return super().answer(message)


class WalkSupply(TestSupply):
    """Knows whether its leads are shorted: ``SHORT? 1``."""

    def __init__(self) -> None:
        self.shorted = False
        super().__init__()

    def answer(self, message: str) -> str | None:
        if match := re.fullmatch(r"SHORT\? ([01])", message):
            self.shorted = match[1] == "1"
            self.load_ohm = 1e-3 if self.shorted else 1000.0
            return "1"
        return super().answer(message)


class HastyKeeper(KeeperClient):
    """A keeper's client that asks for short ramps."""

    def supply_ramp(
        self, positive_v: float, negative_v: float, limit_a: float, ramp_s: float, *more: Any, **named: Any
    ) -> Any:
        return super().supply_ramp(positive_v, negative_v, limit_a, ramp_s / STEEPER, *more, **named)


class Told:
    """Hands that tell the servers what they do."""

    def __init__(self, meter: str, supply: str) -> None:
        self._meter = socket.create_connection(("127.0.0.1", int(meter.split("::")[2])))
        self._supply = socket.create_connection(("127.0.0.1", int(supply.split("::")[2])))

    def probe(self, point: str | None) -> None:
        self._tell(self._meter, f"PROBE? {point or ''}")

    def short(self, shorted: bool) -> None:
        self._tell(self._supply, f"SHORT? {int(shorted)}")

    def turn(self, turns: float) -> None:
        """Nobody turns anything."""

    def trimmer_to(self, travel: Any) -> None:
        """Nobody turns anything."""

    def connect(self, connected: bool) -> None:
        """The load is always there."""

    def drive(self, share: float) -> None:
        """Nobody drives anything."""

    def repair(self) -> None:
        """Nobody repairs anything."""

    def clear_protection(self) -> None:
        """Nothing trips."""

    def advance(self, seconds: float) -> None:
        """Time passes by itself."""

    def truth(self) -> dict[str, Any]:
        return {}

    def _tell(self, link: socket.socket, message: str) -> None:
        link.sendall(message.encode() + b"\n")
        link.recv(16)


class QuickClock(WallClock):
    """The wall clock of a person in a hurry."""

    async def spend(self, seconds: float) -> None:
        await asyncio.sleep(seconds / QUICKER)


class Answering:
    """Answers well in the person's place, shows everything on the real screen, and leaves the trim to it."""

    def __init__(self, screen: Front, folder: Path, runner: Runner) -> None:
        self._screen = screen
        self._folder = folder
        self._runner = runner
        self._take = asyncio.Event()
        asyncio.get_running_loop().add_signal_handler(signal.SIGUSR2, self._take.set)

    def show(self, view: View) -> None:
        self._screen.show(view)

    async def ask(self, question: Question, refused: str = "") -> Reply:
        if question.kind != "trim":
            return well(question)
        assert self._runner.session is not None
        (self._folder / "there.new").write_text(f"there {self._runner.session.keeper.pid}\n")
        (self._folder / "there.new").rename(self._folder / "there")
        asked = asyncio.ensure_future(self._screen.ask(question, refused))
        took = asyncio.ensure_future(self._take.wait())
        try:
            await asyncio.wait({asked, took}, return_when=asyncio.FIRST_COMPLETED)
            return asked.result() if asked.done() else Reply(choice="take")
        finally:
            asked.cancel()
            took.cancel()


def without_a_model() -> None:
    """Let wide limits come at once in place of the model's."""

    def predict(design: Any, action: Predict, units: int | None, seed: int) -> Event:
        return Predicted(
            item=action.item, condition=action.key, limits=limits_of(small(), action), units=9, solved=9, seed=seed,
            seconds=0.0,
        )  # fmt: skip

    def narrow(self: object, action: Narrow, targets: Sequence[Target]) -> Narrowed:
        return Narrowed(item=action.item, after=action.after, readings=len(action.known))

    vars(session_start)["KeeperClient"] = HastyKeeper
    predictions.predict = predict
    predictions.check_warm = lambda design, action, seed: judged(action.item, "pass")
    predictions.evaluate_rule = lambda design, walk, state, action: judged(action.item, "pass")
    this_unit.Narrower.narrow = narrow  # type: ignore[method-assign]
    this_unit.suspect = lambda design, action: suspected(action, "healthy")


def walk(meter: str, supply: str, folder: Path) -> None:
    """Walk, and end this process."""
    setting = Setting(
        kind="walk",
        design=breadboard(),
        procedure=parse_procedure(SMALL, "small.toml"),
        setup={
            "meter": {"address": meter, "profile": "scpi-meter"},
            "supply": {"address": supply, "profile": "scpi-supply"},
        },
        bench_text="",
        bench_sha256="",
        accuracy=STATED_DEFAULT,
        supply_accuracy=HANDHELD,
        hands=Hands(Told(meter, supply)),
        clock=QuickClock(),
        records=folder,
    )
    runner = Runner(setting)

    async def start(screen: Front, identity: Identity) -> Closed:
        app: Any = screen._app  # type: ignore[attr-defined]

        def boom() -> None:
            raise ZeroDivisionError("planted in a screen")

        asyncio.get_running_loop().add_signal_handler(signal.SIGUSR1, lambda: app.call_later(boom))
        return await runner.begin(Answering(screen, folder, runner), identity.unit, identity.operator)

    opening = Opening(
        kind="walk", design="d", procedure="p", purpose="", meter=meter, supply=supply, record=str(folder), unit="17",
        operator="Mara", resumed=False,
    )  # fmt: skip
    status = run_app(
        start,
        off_now=runner.off_now,
        heartbeat=lambda: None,
        opening=opening,
        identity=Identity(unit="17", operator="Mara"),
        log_dir=folder / "logs",
    )
    (folder / "words").write_text(f"{status} {runner.last_words()}\n")
    sys.stdout.flush()
    os._exit(status)


def main() -> None:
    importlib.import_module("benchkit.ui.screens")
    without_a_model()
    small()
    signal.signal(signal.SIGCHLD, signal.SIG_IGN)
    for line in sys.stdin:
        terminal, meter, supply, folder = line.split()
        pid = os.fork()
        if pid == 0:
            try:
                take_terminal(terminal, Path(folder))
                signal.signal(signal.SIGCHLD, signal.SIG_DFL)
                walk(meter, supply, Path(folder))
            except BaseException as error:
                (Path(folder) / "crash").write_text("".join(traceback.format_exception(error)))
            finally:
                os._exit(99)
        print(pid, flush=True)


def take_terminal(name: str, folder: Path) -> None:
    """Make a terminal this process's own; what it has to say at its end goes to a file."""
    os.setsid()
    terminal = os.open(name, os.O_RDWR)
    fcntl.ioctl(terminal, termios.TIOCSCTTY, 0)
    for number in (0, 1):
        os.dup2(terminal, number)
    os.dup2(os.open(folder / "said", os.O_WRONLY | os.O_CREAT), 2)
    sys.stdin = sys.__stdin__ = os.fdopen(0)  # type: ignore[misc]


if __name__ == "__main__":
    main()
