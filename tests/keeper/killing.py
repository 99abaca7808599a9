"""Ways for a walk to end that nobody wished for, and what has to hold after each; for the tests and the campaign."""

from __future__ import annotations

import contextlib
import os
import pty
import resource
import shutil
import signal
import subprocess
import sys
import tempfile
import threading
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

from benchkit.journal import read
from tests.keeper.helpers import gone
from tests.keeper.walker import WalkMeter, WalkSupply

ROOT = Path(__file__).parents[2]
START_S = 60.0
KEEPER_LEAVES_S = 15.0
BEGINNINGS = 6


@dataclass(frozen=True)
class Outcome:
    """What was seen: how long the output stayed on, the record's events, what is wrong, when the walk had ended."""

    way: str
    off_s: float
    events: tuple[str, ...]
    problems: tuple[str, ...]
    end_s: float | None = None


class Forge:
    """Makes walks: a process that has loaded everything once, and forks."""

    def __init__(self) -> None:
        self._lock = threading.Lock()
        self.process = subprocess.Popen(
            [sys.executable, "-m", "tests.keeper.walker"],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=subprocess.DEVNULL,
            cwd=ROOT,
            text=True,
            env={**os.environ, "TERM": "xterm-256color", "COLUMNS": "100", "LINES": "30", "OMP_NUM_THREADS": "1"},
        )

    def make(self, *words: str) -> int:
        """Start a walk and return its process's number."""
        assert self.process.stdin is not None
        assert self.process.stdout is not None
        with self._lock:
            self.process.stdin.write(" ".join(words) + "\n")
            self.process.stdin.flush()
            return int(self.process.stdout.readline())

    def close(self) -> None:
        assert self.process.stdin is not None
        assert self.process.stdout is not None
        self.process.stdin.close()
        self.process.wait(10)
        self.process.stdout.close()


class Patient:
    """A walk that stands at the trim with its rails up, in a terminal of its own; the bench is in this process."""

    def __init__(self, forge: Forge) -> None:
        self.folder = Path(tempfile.mkdtemp(prefix="benchkit-kill-"))
        self.meter = WalkMeter()
        self.supply = WalkSupply()
        self.terminal, slave = pty.openpty()
        self.pid = forge.make(os.ttyname(slave), self.meter.address, self.supply.address, str(self.folder))
        self._slave = slave
        self.keeper = 0
        os.set_blocking(self.terminal, False)

    def wait_there(self) -> None:
        """Wait until it stands at the trim with the rails up, and a little longer, reading what it paints."""
        end_s = time.monotonic() + START_S
        while not (self.folder / "there").exists():
            self.drink()
            assert not gone(self.pid), f"the walk ended before it was there {self.log()}"
            assert time.monotonic() < end_s, "the walk never came to its trim"
            time.sleep(0.01)
        self._drop_slave()
        self.keeper = int((self.folder / "there").read_text().split()[1])
        for _ in range(20):
            self.drink()
            time.sleep(0.01)
        assert self.supply.is_on

    def drink(self) -> None:
        """Read what was painted, so that the terminal never stops the painter."""
        with contextlib.suppress(OSError):
            while os.read(self.terminal, 65536):
                pass

    def _drop_slave(self) -> None:
        """Let go of the walk's side of the terminal, or closing ours would not hang it up."""
        if self._slave >= 0:
            os.close(self._slave)
            self._slave = -1

    def close_terminal(self) -> None:
        if self.terminal >= 0:
            os.close(self.terminal)
            self.terminal = -1

    def drinking(self, true: Callable[[], bool], timeout_s: float) -> bool:
        """Wait for something while the terminal is read."""
        end_s = time.monotonic() + timeout_s
        while not true():
            if time.monotonic() > end_s:
                return False
            if self.terminal >= 0:
                self.drink()
            time.sleep(0.005)
        return True

    def events(self) -> tuple[str, ...]:
        records = [path for path in self.folder.glob("*.jsonl") if path.is_file()]
        return tuple(line.event for line in read(records[0]).lines) if records else ()

    def record_problems(self) -> list[str]:
        """Say what is wrong with the record: it has to be whole, and every "off" in it confirmed."""
        (record,) = self.folder.glob("*.jsonl")
        journal = read(record)
        problems = [journal.problem] if journal.problem else []
        offs = [line.payload for line in journal.lines if line.event == "output off"]
        return problems + [f"not confirmed: {off['how']}" for off in offs if not off["confirmed"]]

    def log(self) -> str:
        """Return what keeper, stand-by and a walk that failed had to complain of."""
        paths = (self.folder / "logs" / "keeper.log", self.folder / "crash", self.folder / "words")
        said = [path.read_text() for path in paths if path.exists()]
        for record in self.folder.glob("*.jsonl"):
            ends = ("contact lost", "tripped", "output off", "supply refused", "bench missing", "stop asked")
            said += [
                str(line.payload.get("problem", line.payload.get("reason")))
                for line in read(record).lines
                if line.event in ends
            ]
        return " ".join(said)

    def close(self) -> None:
        for number in (signal.SIGCONT, signal.SIGKILL):
            with contextlib.suppress(OSError):
                os.kill(self.pid, number)
        self.drinking(lambda: gone(self.pid) and gone(self.keeper), KEEPER_LEAVES_S)
        self._drop_slave()
        self.close_terminal()
        self.meter.close()
        self.supply.close()
        shutil.rmtree(self.folder, ignore_errors=True)


def _signal(number: int) -> Callable[[Patient], None]:
    return lambda patient: os.kill(patient.pid, number)


def _full_disk(patient: Patient) -> None:
    """Let no file of the keeper's grow any more, then take the reading, which has to be kept."""
    (record,) = patient.folder.glob("*.jsonl")
    resource.prlimit(patient.keeper, resource.RLIMIT_FSIZE, (record.stat().st_size + 20, resource.RLIM_INFINITY))
    os.kill(patient.pid, signal.SIGUSR2)


def _cut_record(patient: Patient) -> None:
    """Take the record's last line away, then take the reading, which has to be kept."""
    (record,) = patient.folder.glob("*.jsonl")
    whole = record.read_bytes()
    os.truncate(record, whole.rstrip(b"\n").rfind(b"\n") + 1)
    os.kill(patient.pid, signal.SIGUSR2)


def _unplug(patient: Patient) -> None:
    patient.meter.close()


def _mute(patient: Patient) -> None:
    patient.meter.fault = lambda connection, message: True


def _kill_keeper(patient: Patient) -> None:
    os.kill(patient.keeper, signal.SIGKILL)


def _freeze_keeper(patient: Patient) -> None:
    os.kill(patient.keeper, signal.SIGSTOP)


def _kill_both(patient: Patient) -> None:
    os.kill(patient.keeper, signal.SIGKILL)
    os.kill(patient.pid, signal.SIGKILL)


@dataclass(frozen=True)
class Way:
    """One way to end.

    Parameters
    ----------
    act : callable
        What is done to the walk.
    within_s : float
        So soon the output has to be off, s.
    leaves : tuple of str
        Events that the record has to end with some of: all of them, in this order, with others between.
    words : str
        What the walk has to know of the supply at its end, if it can still speak.
    says : tuple of str
        What it then says on its standard error.
    """

    act: Callable[[Patient], None]
    within_s: float
    leaves: tuple[str, ...]
    words: str = ""
    says: tuple[str, ...] = ()


LOST = ("contact lost", "output off")
OFF = "Supply off, and confirmed"
WAYS: dict[str, Way] = {
    "SIGKILL": Way(_signal(signal.SIGKILL), 1.0, LOST),
    "SIGTERM": Way(_signal(signal.SIGTERM), 1.0, ("output off",), OFF, ("Stopped from outside (signal SIGTERM)",)),
    "SIGHUP": Way(_signal(signal.SIGHUP), 1.0, ("output off",), OFF, ("Stopped from outside (signal SIGHUP)",)),
    "terminal closed": Way(Patient.close_terminal, 1.0, ("output off",)),
    "SIGSTOP": Way(_signal(signal.SIGSTOP), 3.0, LOST),
    "exception in a screen": Way(
        _signal(signal.SIGUSR1), 1.0, ("output off",), OFF, ("an error of its own (ZeroDivisionError)",)
    ),
    "full disk": Way(_full_disk, 1.0, (), OFF, ("could not be kept (", "Free the disk")),
    "record cut short": Way(_cut_record, 1.0, (), OFF, ("the record was lost or damaged while it was written",)),
    "meter unplugged": Way(_unplug, 1.0, LOST),
    "meter mute": Way(_mute, 1.5, LOST),
    "keeper killed": Way(_kill_keeper, 1.0, LOST, OFF, ("The keeper of the instruments has ended", "A second keeper")),
    "keeper frozen": Way(_freeze_keeper, 3.0, LOST, OFF, ("The keeper of the instruments has ended",)),
    "keeper and walk killed": Way(_kill_both, 1.0, LOST),
}


def begun(forge: Forge, told: Callable[[str], None]) -> Patient:
    """Start a walk and bring it to its trim; one that is stopped before that, by a machine too slow, is begun anew."""
    for _ in range(BEGINNINGS):
        patient = Patient(forge)
        try:
            patient.wait_there()
        except AssertionError as error:
            patient.close()
            told(str(error))
        else:
            return patient
    raise AssertionError(f"no walk came to its trim in {BEGINNINGS} tries")


def end(forge: Forge, name: str, told: Callable[[str], None] = print) -> Outcome:
    """Start a walk, end it that way, and say what was seen."""
    way = WAYS[name]
    patient = begun(forge, told)
    problems: list[str] = []
    try:
        before = patient.events()
        began_s = time.monotonic()
        way.act(patient)
        patient.drinking(lambda: not patient.supply.is_on, way.within_s + 6.0)
        if patient.supply.is_on:
            return Outcome(name, float("inf"), (), ("the output stayed on",))
        off_s = patient.supply.off_time() - began_s
        if off_s > way.within_s:
            problems.append(f"off after {off_s:.2f} s, {way.within_s} s allowed")
        end_s = None
        if way.words:
            words_there = (patient.folder / "words").exists
            if not patient.drinking(lambda: words_there() or gone(patient.pid), KEEPER_LEAVES_S):
                problems.append(f"the walk did not end by itself {patient.log()}")
            elif words_there():  # else it was too slow, and left the hard way
                end_s = time.monotonic() - began_s
                time.sleep(0.05)
                words = (patient.folder / "words").read_text()
                if way.words not in words:
                    problems.append(f"its last words were {words!r}")
                said = (patient.folder / "said").read_text().rpartition("\x1b")[2].partition("l")[2]
                problems += [f"it said {said!r}, not {wanted!r}" for wanted in way.says if wanted not in said]
        patient.drinking(lambda: not missing(way, before, patient.events()), 3.0)
        events = patient.events()
        if missing(way, before, events):
            lacks = f"the record lacks {missing(way, before, events)} behind line {len(before)}: {events[-4:]}"
            problems.append(f"{lacks} {patient.log()}")
        problems += patient.record_problems()
        if patient.supply.is_on:
            problems.append("the output came on again")
        return Outcome(name, off_s, events[len(before) :], tuple(problems), end_s)
    finally:
        patient.close()


def missing(way: Way, before: tuple[str, ...], after: tuple[str, ...]) -> tuple[str, ...]:
    """Return what of the events that had to be written was not, in this order."""
    left = list(way.leaves)
    for event in after[len(before) :]:
        if left and event == left[0]:
            left.pop(0)
    return tuple(left)
