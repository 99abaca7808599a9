"""Every way an answer fails, on every link: kind of error, sentence, time, and that the next answer is right.

The meter of the fault bench reads the number that it was asked for, so that a reading proves to which question it
belongs.  Times are limits for a loaded machine, not measurements; where a fault has to be found before the time-out,
the time-out is half a minute.
"""

from __future__ import annotations

import gc
import logging
import os
import re
import subprocess
import sys
import time
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from pathlib import Path

import pytest

from benchkit.errors import InstrumentError
from benchkit.instruments.conversation import LinkSettings
from benchkit.instruments.link import Link
from benchkit.instruments.numbers import parse_number
from benchkit.instruments.traffic import TrafficLog
from tests.instruments.fault_bench import KINDS, Act, Close, FaultMeter, FaultServer, Reset, Say, SerialServer, Wait
from tests.instruments.fault_bench.acts import bytewise, halves
from tests.instruments.fault_bench.bench import RULES, TIMEOUT_S, VARIANTS, MeterBench, fault_meter, serve

EVERY = tuple(KINDS)
STREAMS = tuple(kind for kind, server in KINDS.items() if server.stream)
MESSAGES = tuple(kind for kind, server in KINDS.items() if not server.stream)
NETWORK = tuple(kind for kind in KINDS if kind != "serial")

AT_ONCE_S = 30.0
"""A time-out so long that what is found earlier was not found by waiting."""


@dataclass(frozen=True)
class Row:
    """One fault: what the instrument does, on which links, and what has to come of it."""

    name: str
    acts: tuple[Act, ...]
    kind: str
    says: str
    links: tuple[str, ...] = EVERY
    timeout_s: float = TIMEOUT_S
    within_s: float = 2.5
    partial: bytes | None = None


ROWS = (
    Row("no reply", (), "timeout", "nothing came"),
    Row("no end", (Say(b"+1.234", end=False),), "timeout", r"only '\+1\.234' came", partial=b"+1.234"),
    Row("half a reply, then silence", halves(b"+1.234", 3, 0.1)[:2], "timeout", r"only '\+1\.' came"),
    Row("late reply", (Wait(0.5), Say(b"+99\n")), "timeout", "nothing came"),
    Row("peer closes", (Close(),), "link lost", "", timeout_s=AT_ONCE_S),
    Row("peer closes in the middle", (Close(b"+1.2"),), "link lost", r"'\+1.2'", STREAMS, AT_ONCE_S, partial=b"+1.2"),
    Row("peer closes in the middle", (Close(b"+1.2"),), "link lost", "", MESSAGES, AT_ONCE_S, within_s=8.0),
    Row("reset", (Reset(),), "link lost", "", NETWORK, AT_ONCE_S),
    Row("bytes above 0x7F", (Say(b"+1.2\xb5V\n"),), "garbled", r"\\xb5", timeout_s=AT_ONCE_S),
    Row("another alphabet", (Say("1.5 Ω\n".encode()),), "garbled", r"\\xce\\xa9", timeout_s=AT_ONCE_S),
    Row("a multi-byte alphabet", (Say("1.5 欧\n".encode("gbk")),), "garbled", r"\\xc5\\xb7", timeout_s=AT_ONCE_S),
    Row("control bytes", (Say(b"\x1b[2J\x07\x00\n"),), "garbled", r"\\x1b\[2J\\x07\\x00", timeout_s=AT_ONCE_S),
    Row("an empty line", (Say(b"\n"),), "garbled", "''", timeout_s=AT_ONCE_S),
    Row("two lines", (Say(b"1.0\n2.0\n"),), "garbled", "more than one line|1.0.n2.0", timeout_s=AT_ONCE_S),
    Row("1 MB", (Say(b"7" * 1_000_000 + b"\n"),), "garbled", "bytes|without an end", timeout_s=AT_ONCE_S, within_s=8.0),
    Row("1 MB without an end", (Say(b"7" * 1_000_000, end=False),), "garbled", "without an end", within_s=8.0),
)

CASES = [pytest.param(link, row, id=f"{row.name}-{link}") for row in ROWS for link in row.links]

GOOD = (
    ("CR-LF", (Say(b"+17\r\n"),), EVERY),
    ("two halves", halves(b"+17\n", 2, 0.3), EVERY),
    ("byte by byte", bytewise(b"+1.700000E+01\r\n", 0.01), EVERY),
    ("slow", (Wait(0.4), Say(b"17\n")), EVERY),
    ("no line feed but an end", (Say(b"+17"),), MESSAGES),
    ("blanks", (Say(b" 17 \n"),), EVERY),
)


@pytest.fixture
def at(request: pytest.FixtureRequest) -> Iterator[tuple[FaultMeter, FaultServer, MeterBench]]:
    meter, server = fault_meter(request.param)
    with server, MeterBench(server.address) as bench:
        assert bench.meter.identify().result(20) == meter.name
        yield meter, server, bench


At = tuple[FaultMeter, FaultServer, MeterBench]


def plugged_in(server: FaultServer) -> None:
    """A serial device that went away is put back; a network one still listens."""
    if isinstance(server, SerialServer) and not server.present:
        server.start()


def right_from_now_on(bench: MeterBench) -> None:
    """Three readings through `Meter`, each belonging to its own question."""
    began = time.monotonic()
    assert [bench.read(number) for number in (3.0, 4.0, 5.0)] == [3.0, 4.0, 5.0]
    assert time.monotonic() - began < 8.0


@pytest.mark.parametrize(("at", "row"), CASES, indirect=["at"])
def test_the_fault_is_named_in_time_and_the_next_answer_is_right(at: At, row: Row) -> None:
    meter, server, bench = at
    meter.fails_once("MEAS", *row.acts)
    began = time.monotonic()
    error = bench.error(17.0, row.timeout_s)
    took_s = time.monotonic() - began
    assert error is not None
    assert (error.kind, bool(re.search(row.says, error.message))) == (row.kind, True), error.message
    assert took_s < row.within_s
    if row.kind == "timeout":
        assert took_s >= row.timeout_s
    if row.partial is not None:
        assert error.partial == row.partial
    assert error.message.isprintable()
    assert error.message.isascii()
    assert server.address in error.message
    assert error.expected or error.next_step
    plugged_in(server)
    right_from_now_on(bench)


@pytest.mark.parametrize("at", EVERY, indirect=True)
def test_one_fault_is_got_over_by_asking_again(at: At) -> None:
    meter, server, bench = at
    meter.fails_once("MEAS", Say(b"\x07\n"))
    before = server.connections
    assert bench.read(17.0) == 17.0
    assert meter.messages().count("MEAS:VOLT:DC? 17") == 2
    assert server.connections == before


@pytest.mark.parametrize(
    ("at", "acts"),
    [pytest.param(link, acts, id=f"{name}-{link}") for name, acts, links in GOOD for link in links],
    indirect=["at"],
)
def test_odd_but_right(at: At, acts: tuple[Act, ...]) -> None:
    meter, _, bench = at
    meter.fails_once("MEAS", *acts)
    assert bench.ask_once(17.0, AT_ONCE_S) == 17.0
    assert meter.messages().count("MEAS:VOLT:DC? 17") == 1
    assert bench.ask_once(18.0, AT_ONCE_S) == 18.0


@pytest.mark.parametrize("at", EVERY, indirect=True)
def test_a_reply_in_two_at_every_byte(at: At) -> None:
    meter, _, bench = at
    whole = b"+1.70E+01\r\n"
    for place in range(1, len(whole)):
        meter.fails_once("MEAS", *halves(whole, place, 0.02))
        assert bench.ask_once(17.0, AT_ONCE_S) == 17.0
    assert len([message for message in meter.messages() if message.startswith("MEAS")]) == len(whole) - 1


@pytest.mark.parametrize(
    ("link", "pause_s"),
    [({}, 0.0), ({}, 0.4), ({"sync": ""}, 0.0)],
    ids=["at once", "when it has come", "without a question of our own"],
)
@pytest.mark.parametrize("variant", list(VARIANTS))
def test_a_late_answer_is_nobody_elses(variant: str, link: dict[str, str], pause_s: float) -> None:
    """The old answer is on its way when the next question is asked, or has come by then."""
    meter, server = fault_meter(variant)
    with server, MeterBench(server.address, link) as bench:
        bench.meter.identify().result(20)
        meter.fails_once("MEAS", Wait(0.5), Say(b"+99\n"))
        error = bench.error(17.0)
        assert error is not None
        assert error.kind == "timeout"
        time.sleep(pause_s)
        right_from_now_on(bench)


@pytest.mark.parametrize("at", EVERY, indirect=True)
def test_a_line_that_nobody_asked_for(at: At) -> None:
    """A stream shows it before the next question; an instrument with messages drops it when that question comes."""
    _, server, bench = at
    server.blurt(b"+99\n")
    time.sleep(0.2)
    if server.stream:
        right_from_now_on(bench)
    else:
        assert bench.error(17.0) is None
        right_from_now_on(bench)


@pytest.mark.parametrize("at", EVERY, indirect=True)
def test_two_answers_to_one_question(at: At) -> None:
    """The first may count, the second never for the next question."""
    meter, _, bench = at
    meter.fails_once("MEAS", Say(b"+17\n"), Wait(0.1), Say(b"+99\n"))
    error = bench.error(17.0)
    assert error is None or error.kind == "garbled"
    time.sleep(0.3)
    right_from_now_on(bench)


@pytest.mark.parametrize("kind", EVERY)
def test_killed_while_it_was_asked_and_back_again(kind: str) -> None:
    meter, server = fault_meter(kind)
    with server, MeterBench(server.address) as bench:
        bench.meter.identify().result(20)
        meter.fails_always("MEAS")
        running = bench.start(17.0, AT_ONCE_S, repeats=False)
        deadline = time.monotonic() + 10.0
        while "MEAS:VOLT:DC? 17" not in meter.messages() and time.monotonic() < deadline:
            time.sleep(0.01)
        killed = time.monotonic()
        server.stop()
        error = running.exception(20)
        assert getattr(error, "kind", error) == "link lost"
        assert time.monotonic() - killed < 4.0
        meter.plan = None
        for _ in range(2):
            began = time.monotonic()
            gone = bench.error(18.0)
            assert gone is not None
            assert gone.kind in {"link lost", "bad address"}, gone.message
            assert gone.next_step
            assert time.monotonic() - began < 5.0
        server.start()
        right_from_now_on(bench)


@pytest.mark.parametrize("kind", EVERY)
def test_a_process_that_is_killed_without_warning(kind: str, tmp_path: Path) -> None:
    """A process of its own, so that the system and not the fault bench closes what was open."""
    command = [sys.executable, "-m", "tests.instruments.fault_bench", kind, "meter", "60"]
    environment = {**os.environ, "TMPDIR": str(tmp_path)}  # it can't tidy up after itself
    with subprocess.Popen(
        command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True, env=environment
    ) as process:
        assert process.stdout is not None
        address = process.stdout.readline().strip()
        with MeterBench(address) as bench:
            bench.meter.identify().result(20)
            running = bench.start(17.0, AT_ONCE_S, repeats=False)
            time.sleep(0.2)
            killed = time.monotonic()
            process.kill()
            assert getattr(running.exception(20), "kind", None) == "link lost"
            assert time.monotonic() - killed < 4.0
            error = bench.error(18.0)
            assert error is not None
            assert error.kind in {"link lost", "bad address"}


@pytest.mark.parametrize("kind", EVERY)
def test_closing_while_a_reading_runs(kind: str) -> None:
    meter, server = fault_meter(kind)
    with server, MeterBench(server.address) as bench:
        bench.meter.identify().result(20)
        meter.fails_always("MEAS")
        running = bench.start(17.0, AT_ONCE_S, repeats=True)
        waiting = bench.start(18.0, AT_ONCE_S, repeats=True)
        time.sleep(0.1)
        began = time.monotonic()
        bench.link.close(5.0)
        assert time.monotonic() - began < 2.0
        for future in (running, waiting):
            assert isinstance(future.exception(5), InstrumentError)


@pytest.mark.parametrize("kind", EVERY)
def test_many_threads_and_each_gets_its_own_answer(kind: str) -> None:
    _, server = fault_meter(kind)
    with server, MeterBench(server.address) as bench:
        bench.meter.identify().result(20)
        before = server.connections

        def asks(name: int) -> list[float]:
            numbers = [float(100 * name + number) for number in range(1, 51)]
            return [number for number in numbers if bench.start(number, AT_ONCE_S, repeats=False).result(60) != number]

        with ThreadPoolExecutor(8) as pool:
            assert list(pool.map(asks, range(8))) == [[]] * 8
        assert server.connections == before


@pytest.mark.parametrize("at", STREAMS, indirect=True)
def test_an_instrument_that_ends_with_nothing_but_silence(at: At) -> None:
    """Such a one has to be agreed on; a pause within an answer that is shorter than that is no end."""
    meter, server, _ = at
    settings = LinkSettings(ends_by_idle_s=0.25, timeout_s=2.0)
    if server.kind == "serial":
        at[2].link.close(5.0)
    link = Link("the meter", server.address, settings, TrafficLog())
    meter.fails_always("MEAS", *halves(b"+17", 2, 0.05)[:2], Say(b"7", end=False))
    job = link.submit(lambda talk: talk.ask("MEAS:VOLT:DC?", lambda text: parse_number(text, RULES)))
    assert job.result(20) == 17.0
    assert link.submit(lambda talk: talk.ask("*IDN?", str)).result(20) == meter.name
    link.close(5.0)


@pytest.mark.parametrize("kind", EVERY)
def test_restarted_between_two_questions(kind: str) -> None:
    _, server = fault_meter(kind)
    with server, MeterBench(server.address) as bench:
        assert bench.read(2.0) == 2.0
        server.stop()
        server.start()
        right_from_now_on(bench)


@pytest.mark.parametrize("kind", EVERY)
def test_another_instrument_after_a_restart_is_refused(kind: str) -> None:
    meter, server = fault_meter(kind)
    with server, MeterBench(server.address) as bench:
        assert bench.read(2.0) == 2.0
        server.stop()
        meter.name = "Own,Other Meter,OM-2,1.0"
        server.start()
        error = bench.error(17.0, AT_ONCE_S)
        if error is not None and error.kind == "link lost":
            error = bench.error(17.0, AT_ONCE_S)
        assert error is not None
        assert error.kind == "refused"
        assert "OM-2" in error.message


@pytest.mark.parametrize("kind", EVERY)
def test_accepts_and_never_answers(kind: str) -> None:
    server = serve(kind, FaultMeter(), mute=True)
    with server, MeterBench(server.address) as bench:
        began = time.monotonic()
        error = bench.meter.identify().exception(30)
        assert getattr(error, "kind", error) in {"timeout", "link lost"}
        assert time.monotonic() - began < 7.0
        assert server.address in str(error)
        began = time.monotonic()
    assert time.monotonic() - began < 7.0


@pytest.mark.parametrize("kind", EVERY)
def test_off_overtakes_a_reading_that_takes_long(kind: str) -> None:
    """The meter's own reading is given up; the message gets there although the instrument hasn't answered."""
    meter, server = fault_meter(kind)
    with server, MeterBench(server.address) as bench:
        bench.meter.identify().result(20)
        meter.fails_always("MEAS")
        running = bench.start(17.0, AT_ONCE_S, repeats=True)
        waiting = bench.start(18.0, AT_ONCE_S, repeats=True)
        time.sleep(0.3)
        began = time.monotonic()
        bench.link.submit_urgent(lambda talk: talk.tell_at_once("ABOR")).result(20)
        deadline = time.monotonic() + 10.0
        while "ABOR" not in meter.messages() and time.monotonic() < deadline:
            time.sleep(0.002)
        assert meter.heard_at("ABOR") - began < 0.6
        for future in (running, waiting):
            assert getattr(future.exception(10), "kind", None) == "refused"
        meter.plan = None
        right_from_now_on(bench)


@pytest.mark.parametrize("act", [Close(), Close(b"+1.2"), Reset(), Wait(0.0)], ids=["close", "half", "reset", "none"])
@pytest.mark.parametrize("kind", EVERY)
def test_what_is_left_of_a_broken_link_is_silent(kind: str, act: Act, caplog: pytest.LogCaptureFixture) -> None:
    """PyVISA closes what it finds open when it is thrown away, and complains: nothing may be left to find."""
    meter, server = fault_meter(kind)
    with server, MeterBench(server.address) as bench:
        bench.meter.identify().result(20)
        meter.fails_once("MEAS", act)
        bench.error(17.0)
        plugged_in(server)
        assert bench.read(3.0) == 3.0
    del bench
    gc.collect()
    assert [record.getMessage() for record in caplog.records if record.levelno >= logging.WARNING] == []


@pytest.mark.parametrize("kind", EVERY)
def test_use_after_close(kind: str) -> None:
    _, server = fault_meter(kind)
    with server:
        bench = MeterBench(server.address)
        assert bench.read(2.0) == 2.0
        bench.link.close(5.0)
        error = bench.error(17.0)
        assert error is not None
        assert error.kind == "link lost"
        assert "closed by benchkit" in error.message
