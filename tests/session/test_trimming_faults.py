"""Faults in a trim and in a soak: a sample in memory, and how `tests.benchmarks.trimming_faults` judges its tries."""

from __future__ import annotations

import socket
import threading
import time
from collections.abc import Iterator
from dataclasses import replace

import pytest

from benchkit.events import ContactLost, Event, OutputOff, Tripped
from benchkit.procedure.actions import Wait
from benchkit.session.front import LiveView
from tests.benchmarks.trimming_bench import Kept, Onset, Seen, Tale, Tap
from tests.benchmarks.trimming_faults import KINDS, judge
from tests.session.test_trimming_on_a_bench import POINT, Table

# -- in memory ------------------------------------------------------------------------------------------------------


def test_a_runaway_in_a_soak_trips_and_the_supply_is_off() -> None:
    table = Table(0.65)
    front = table.front()

    def cover(live: LiveView) -> None:
        if len(live.trend) == 10 and not table.bench.plant:
            table.hands.fault("heat: runaway")

    front.meddle = cover
    soak = Wait(
        item="bias.soak", seconds=600.0, reason="Let it warm up.", point=POINT, function="dc volts", unit="V",
        target=table.target_v, low=0.5 * table.target_v, high=1.5 * table.target_v, until_settled=True, least_s=30.0,
        drift_limit=0.02 * table.target_v / 60.0,
    )  # fmt: skip
    assert table.run(soak, front) is None
    truth = table.bench.truth()
    assert not any(truth["output_on"])
    assert truth["burnt_parts"] == 0
    assert truth["sim_s"] < 400.0


def test_a_supply_that_folds_back_says_nothing_of_the_bias() -> None:
    """Where no watch trips on it: in a walk the keeper's does."""
    table = Table(0.5)
    front = table.front()
    folded: list[int] = []

    def fold(live: LiveView) -> None:
        if not folded and live.value is not None and live.value > 0.3 * live.target:
            folded.append(len(front.pictures))
            table.bench.table.fold(0.05)

    front.meddle = fold
    table.run(table.trim(), front)
    assert folded
    held = [live for live in front.pictures[folded[0] :] if live.mood == "folded back"]
    assert held
    assert all("the supply is in its limit" in live.advice for live in held)
    assert all(live.advised_turns is not None and live.advised_turns < 0.0 for live in held)
    assert front.pictures[-1].mood == "folded back", "nothing is taken of it"


# -- how a try is judged --------------------------------------------------------------------------------------------

OFF = OutputOff(reason="off", confirmed=True, how="read back")
TRIP = Tripped(reason="rail+ is held by its current limit", what="rail+")
WIPER = (
    "the reading fell at once to about least bias while turning, and the supply's current with it: the wiper has opened"
)
FALLS, FOLDS, MUTE = "wiper opens, bias falls", "supply folds back in a trim", "meter mute in a trim"


def seen(at_s: float, advice: str, turns: float | None = None) -> Seen:
    return Seen(wall_s=100.0 + at_s, sim_s=at_s, item="bias.pre-set", mood="", advice=advice, turns=turns, message="",
                results=())  # fmt: skip


def kept(at_s: float, event: Event) -> Kept:
    return Kept(wall_s=100.0 + at_s, sim_s=at_s, event=event)


WELL = Tale(
    onset=Onset(wall_s=110.0, sim_s=10.0), seen=[seen(9.0, "one turn"), seen(11.9, WIPER)], given_up_wall_s=116.0,
    told_off_wall_s=116.01, events=[kept(16.2, OFF)], off_at_the_end=True,
)  # fmt: skip
TRIPPED = Tale(
    onset=Onset(wall_s=110.0, sim_s=10.0), shown_wall_s=110.2, told_off_wall_s=110.25,
    events=[kept(10.3, TRIP), kept(10.5, OFF)], off_at_the_end=True,
)  # fmt: skip
LOST = Tale(
    onset=Onset(wall_s=110.0, sim_s=10.0), told_off_wall_s=110.9, off_at_the_end=True,
    events=[kept(10.9, ContactLost(who="the meter", problem="it has not answered")), kept(11.1, OFF)],
)  # fmt: skip


@pytest.mark.parametrize(
    ("name", "tale", "problem"),
    [
        (FALLS, WELL, ""),
        (FALLS, replace(WELL, seen=[seen(11.9, "two turns clockwise")]), "the words never came"),
        (FALLS, replace(WELL, seen=[seen(9.0, WIPER)]), "the words never came"),
        (FALLS, replace(WELL, seen=[seen(16.0, WIPER)]), "words after 6.0 s"),
        (FALLS, replace(WELL, seen=[seen(11.0, "the probe has slipped"), *WELL.seen]), "wrong words"),
        (FALLS, replace(WELL, more_while_wrong=[seen(11.0, "two turns", 2.0)]), "advised more: two turns"),
        (FALLS, replace(WELL, given_up_wall_s=None, went_on=True), "ended otherwise: goes on"),
        (FALLS, replace(WELL, told_off_wall_s=117.5), "off after 1.50 s"),
        (FALLS, replace(WELL, off_at_the_end=False), "NOT OFF"),
        (FALLS, replace(WELL, events=[]), "no off is in the record"),
        (FALLS, replace(WELL, burnt=1), "1 parts burnt"),
        (FALLS, replace(WELL, failed="TimeoutError"), "the try broke off"),
        (FOLDS, TRIPPED, ""),
        (FOLDS, replace(TRIPPED, told_off_wall_s=110.6), "off after 0.40 s"),
        (FOLDS, replace(TRIPPED, shown_wall_s=None), "no off is in the record"),
        (MUTE, LOST, ""),
        (MUTE, replace(LOST, told_off_wall_s=111.7), "off after 1.70 s"),
    ],
)
def test_what_a_try_is_held_against(name: str, tale: Tale, problem: str) -> None:
    problems = judge(name, KINDS[name], "breadboard", 1, tale).problems
    assert bool(problems) is bool(problem), problems
    assert any(problem in one for one in problems) or not problem


def test_what_never_came_is_no_try() -> None:
    told = judge(FALLS, KINDS[FALLS], "breadboard", 1, replace(WELL, onset=None))
    assert told.never_came
    assert not told.problems


# -- the link that is listened to -----------------------------------------------------------------------------------


@pytest.fixture
def tapped() -> Iterator[tuple[Tap, socket.socket]]:
    """A tap, and a connection through it to something that answers each line with "0,1"."""
    server = socket.create_server(("127.0.0.1", 0))

    def answer() -> None:
        near, _ = server.accept()
        with near, near.makefile("rb") as lines:
            for _ in lines:
                near.sendall(b"0,1;0,0\n")

    threading.Thread(target=answer, daemon=True).start()
    tap = Tap(f"TCPIP::127.0.0.1::{server.getsockname()[1]}::SOCKET")
    port = int(tap.address.split("::")[2])
    with socket.create_connection(("127.0.0.1", port), 5.0) as near:
        yield tap, near
    tap.close()
    server.close()


def asked(near: socket.socket, question: bytes) -> bytes:
    near.sendall(question + b"\n")
    return near.recv(100)


def test_a_tap_notes_when_a_rail_was_in_its_limit(tapped: tuple[Tap, socket.socket]) -> None:
    tap, near = tapped
    assert asked(near, b"OUTP? (@1,2);:STAT:QUES:COND? (@1,2)") == b"0,1;0,0\n"
    assert tap.first_in_limit(0.0) is None
    before_s = time.monotonic()
    asked(near, b"STAT:QUES:COND? (@1,2);:OUTP? (@1,2)")
    shown_s = tap.first_in_limit(0.0)
    assert shown_s is not None
    assert before_s <= shown_s <= time.monotonic()
    assert tap.first_in_limit(time.monotonic()) is None
    assert tap.first(before_s, "OUTP? (@1,2)") is not None
    assert tap.last_answer(time.monotonic()) == shown_s


def test_a_tap_can_fall_silent_and_hang_up(tapped: tuple[Tap, socket.socket]) -> None:
    tap, near = tapped
    asked(near, b"*IDN?")
    tap.mute = True
    near.settimeout(0.3)
    with pytest.raises(TimeoutError):
        asked(near, b"*IDN?")
    tap.unplug()
    near.settimeout(5.0)
    assert near.recv(100) == b""
    with pytest.raises(OSError, match=r"refused"):
        socket.create_connection(("127.0.0.1", int(tap.address.split("::")[2])), 1.0)
