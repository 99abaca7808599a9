"""The keeper and its client over real pipes and sockets: duties, order, and what can't be got past it."""

from __future__ import annotations

import os
import signal
import socket
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from pathlib import Path

import pytest

from benchkit.errors import EntryError, FileError, InstrumentError, RecordError
from benchkit.events import ContactLost, Noted, OutputOff, Tripped
from benchkit.journal import read, verify
from benchkit.keeper.client import KeeperClient, KeeperDied, Push, WatchLines
from tests.keeper.helpers import Bench, Shared, bench, wait_until

posix = pytest.mark.skipif(sys.platform == "win32", reason="a POSIX signal")


@pytest.fixture(scope="module")
def shared() -> Iterator[Shared]:
    made = Shared(None)
    yield made
    made.client.close()


@pytest.fixture
def at(tmp_path: Path, shared: Shared) -> Iterator[Bench]:
    """A bench whose keeper other tests have used and will use."""
    made = Bench(tmp_path, shared)
    yield made
    shared.tidy()
    made.supply.close()
    made.meter.close()


@pytest.fixture
def alone(tmp_path: Path) -> Iterator[Bench]:
    """A bench with a keeper of its own."""
    with bench(tmp_path) as made:
        yield made


def open_and_on(at: Bench) -> None:
    at.connect()
    at.client.open_journal(at.record, Noted(text="begin")).result(5)
    at.client.supply_set(10.0, -10.0, 0.05, True).result(5)


def test_hello_comes_before_any_instrument_library_is_loaded(alone: Bench) -> None:
    assert alone.client.ready.result(5) == alone.client.pid


def test_off_right_behind_a_connect_finds_the_supply(alone: Bench) -> None:
    """Connecting waits until everything is loaded; off waits for that supply, not for nothing."""
    alone.supply.on = {1: True, 2: True}
    found = alone.client.connect(alone.setup)
    off = alone.client.off("at once")
    assert off.result(20).confirmed
    assert not alone.supply.is_on
    found.exception(20)


def test_set_read_state_off(at: Bench) -> None:
    open_and_on(at)
    state = at.client.supply_state().result(5)
    assert (state.output_on, state.positive_v, state.negative_v, state.positive_a) == (True, 10.0, -10.0, 0.01)
    assert (state.set_positive_v, state.set_negative_v, state.limit_a) == (10.0, -10.0, 0.05)
    reading = at.client.read("dc volts", samples=3).result(5)
    assert (reading.value, reading.values) == (0.012345, (0.012345,) * 3)
    assert reading.meter == "Own,Test Meter,M-1,1.0"
    off = at.client.off("the test says so").result(5)
    assert (off.confirmed, off.reason) == (True, "the test says so")
    assert not at.supply.is_on
    wait_until(lambda: at.kept() == ["noted", "output off"])
    at.wait_for(OutputOff)
    assert at.pushes == [Push(event=off, seq=2)]


def test_an_event_is_on_the_disk_when_it_is_acknowledged(at: Bench) -> None:
    assert at.client.open_journal(at.record, Noted(text="0")).result(5).seq == 1
    for seq in range(1, 20):
        assert at.client.append(Noted(text=str(seq)), seq).result(5).seq == seq + 1
        assert len(read(at.record).lines) == seq + 1


def test_an_event_that_does_not_know_the_keepers_own_is_refused(at: Bench) -> None:
    open_and_on(at)
    at.client.off("x").result(5)
    kept = at.client.append(Noted(text="knows only line 1"), 1).result(5)
    assert (kept.moved_on, kept.seq) == (True, 2)
    assert at.kept() == ["noted", "output off"]
    assert at.client.append(Noted(text="knows line 2"), 2).result(5).seq == 3


def test_answers_and_pushes_come_in_the_journals_order(at: Bench) -> None:
    open_and_on(at)
    seen: list[int] = []
    stop = threading.Event()

    def write() -> None:
        """Append as fast as it goes, taking the keeper's own events into account when they come."""
        while not stop.is_set():
            kept = at.client.append(Noted(text="x"), seen[-1] if seen else 1).result(5)
            if not kept.moved_on:
                seen.append(kept.seq)
            else:
                pushed = [push.seq for push in at.pushes if isinstance(push, Push) and push.seq is not None]
                assert kept.seq in pushed, "the push came before the refusal"
                seen.append(kept.seq)

    writer = threading.Thread(target=write)
    writer.start()
    for _ in range(10):
        at.client.off("x").result(5)
    stop.set()
    writer.join(5)
    wait_until(lambda: sum(isinstance(event, OutputOff) for event in at.events()) == 10)
    assert seen == sorted(set(seen))
    lines = read(at.record)
    assert lines.problem is None
    assert [line.event for line in lines.lines].count("output off") == 10


def test_a_trip_on_current_switches_off_by_itself_and_says_why(at: Bench) -> None:
    open_and_on(at)
    at.client.watch(WatchLines(positive_a=0.02, negative_a=0.02, own_interval_s=0.05)).result(5)
    at.client.arm().result(5)
    for _ in range(5):
        at.client.heartbeat()
        time.sleep(0.05)
    assert at.supply.is_on
    at.supply.load_ohm = 400.0
    began = time.monotonic()
    assert at.supply.wait_off(1.0)
    assert at.supply.off_time() - began < 0.3
    at.wait_for(OutputOff)
    tripped, off = at.events()
    assert isinstance(tripped, Tripped)
    assert (tripped.what, tripped.value, tripped.limit) == ("rail+.current", 0.025, 0.02)
    assert isinstance(off, OutputOff)
    assert off.confirmed
    assert "tripped" in off.reason
    assert at.kept() == ["noted", "tripped", "output off"]


def test_the_limit_counts_from_the_end_of_the_grace(at: Bench) -> None:
    at.supply.load_ohm = 50.0
    open_and_on(at)
    at.client.watch(WatchLines(trip_on_limit=True, grace_s=2.0)).result(5)
    state = at.client.sample(1.9).result(5)
    assert state.in_limit
    time.sleep(0.1)
    assert at.supply.is_on
    at.client.sample(2.0).result(5)
    assert at.supply.wait_off(1.0)
    at.wait_for(OutputOff)
    tripped = at.events()[0]
    assert isinstance(tripped, Tripped)
    assert "current limit" in tripped.reason


def test_one_output_that_goes_off_takes_the_other_with_it_even_in_the_grace(at: Bench) -> None:
    open_and_on(at)
    at.client.watch(WatchLines(grace_s=60.0)).result(5)
    at.client.sample(0.1).result(5)
    assert at.supply.is_on
    at.supply.on[2] = False
    at.client.sample(0.2).result(5)
    assert at.supply.wait_off(1.0)
    at.wait_for(OutputOff)
    tripped = at.events()[0]
    assert isinstance(tripped, Tripped)
    assert "negative output off by itself" in tripped.reason


def test_without_a_watch_or_after_off_nothing_trips(at: Bench) -> None:
    at.supply.load_ohm = 50.0
    open_and_on(at)
    at.client.sample(100.0).result(5)
    at.client.watch(WatchLines(trip_on_limit=True)).result(5)
    at.client.supply_set(0.0, 0.0, 0.05, False).result(5)
    at.client.sample(100.0).result(5)
    time.sleep(0.1)
    assert at.pushes == []


def test_a_set_that_was_on_its_way_when_a_watch_tripped_does_not_bring_the_rails_back(at: Bench) -> None:
    open_and_on(at)
    at.client.watch(WatchLines(positive_a=0.02)).result(5)
    at.supply.load_ohm = 400.0
    at.client.sample(0.0).result(5)
    at.wait_for(OutputOff)
    with pytest.raises(InstrumentError, match="without knowing"):
        at.client.supply_set(11.0, -11.0, 0.05, True).result(5)
    assert at.client.append(Noted(text="knows of nothing"), 1).result(5).moved_on
    with pytest.raises(InstrumentError, match="without knowing"):
        at.client.supply_set(11.0, -11.0, 0.05, True).result(5)
    assert not at.supply.is_on
    assert at.client.supply_set(0.0, 0.0, 0.05, False).result(5).output_on is False
    assert at.client.append(Noted(text="knows of the trip and the off"), 3).result(5).seq == 4
    assert at.client.supply_set(5.0, -5.0, 0.05, True).result(5).output_on


@pytest.mark.parametrize("how", ["closed", "silent"])
def test_a_supply_that_is_lost_while_watched_is_reported_and_off_is_tried(alone: Bench, how: str) -> None:
    open_and_on(alone)
    alone.client.watch(WatchLines(own_interval_s=0.05)).result(5)
    alone.client.arm().result(5)
    if how == "closed":
        alone.supply.close()
    else:
        alone.supply.fault = lambda connection, message: True
    began = time.monotonic()
    while not any(isinstance(event, OutputOff) for event in alone.events()):
        alone.client.heartbeat()
        time.sleep(0.05)
        assert time.monotonic() - began < 15
    lost, off = alone.events()
    assert isinstance(lost, ContactLost)
    assert lost.who == "the supply"
    assert isinstance(off, OutputOff)
    assert not off.confirmed
    assert "switch it off by hand" in off.how
    assert alone.kept() == ["noted", "contact lost", "output off"]


def test_a_supply_link_that_breaks_once_is_opened_anew_and_nothing_is_switched(at: Bench) -> None:
    open_and_on(at)
    at.client.watch(WatchLines()).result(5)
    sent = len([message for message in at.supply.messages() if message.startswith(("OUTP O", "VOLT ", "CURR "))])
    at.supply.drop_connections()
    assert at.client.sample(1.0).result(5).output_on
    assert at.supply.is_on
    again = len([message for message in at.supply.messages() if message.startswith(("OUTP O", "VOLT ", "CURR "))])
    assert again == sent
    assert at.supply.connections == 2
    assert at.pushes == []


def test_off_overtakes_a_reading_of_the_meter_and_the_supplys_own_work(at: Bench) -> None:
    open_and_on(at)
    at.meter.fault = lambda connection, message: message.startswith("MEAS")
    at.supply.fault = lambda connection, message: "MEAS:VOLT" in message and at.supply.is_on
    reading = at.client.read("ac volts")
    waiting = [at.client.supply_set(12.0, -12.0, 0.05, True) for _ in range(5)]
    time.sleep(0.2)
    began = time.monotonic()
    off = at.client.off("now")
    assert at.supply.wait_off(1.0)
    assert at.supply.off_time() - began < 0.2
    assert off.result(5).confirmed
    for future in waiting:
        with pytest.raises(InstrumentError, match="switched off"):
            future.result(5)
    time.sleep(0.1)
    assert not at.supply.is_on, "what waited is dropped, not done afterwards"
    assert not reading.done()


def test_a_meter_that_fails_is_an_error_of_the_caller_alone(at: Bench) -> None:
    open_and_on(at)
    at.meter.close()
    with pytest.raises(InstrumentError) as caught:
        at.client.read("dc volts").result(10)
    assert caught.value.kind == "link lost"
    assert at.supply.is_on
    assert at.pushes == []


@pytest.mark.parametrize("arguments", [(-1.0, 0.0, 0.1, True), (1.0, 1.0, 0.1, True), (1.0, -1.0, 0.0, True)])
def test_settings_without_sense_are_refused(at: Bench, arguments: tuple[float, float, float, bool]) -> None:
    at.connect()
    with pytest.raises(EntryError):
        at.client.supply_set(*arguments).result(5)


def test_what_is_not_connected_says_so(alone: Bench) -> None:
    with pytest.raises(InstrumentError, match="No supply"):
        alone.client.supply_set(1.0, -1.0, 0.1, True).result(5)
    with pytest.raises(InstrumentError, match="No supply"):
        alone.client.sample(0.0).result(5)
    with pytest.raises(InstrumentError, match="No meter"):
        alone.client.read("dc volts").result(5)
    with pytest.raises(FileError, match="no journal"):
        alone.client.append(Noted(text="x"), 0).result(5)
    off = alone.client.off("x").result(5)
    assert not off.confirmed
    assert "by hand" in off.how


def test_a_wrong_serial_number_stops_the_bench_but_off_still_works(at: Bench) -> None:
    setup = {"meter": None, "supply": {"address": at.supply.address, "profile": "scpi-supply", "serial": "OTHER"}}
    with pytest.raises(InstrumentError, match="serial number"):
        at.client.connect(setup).result(5)
    at.supply.on = {1: True, 2: True}
    assert at.client.off("x").result(5).confirmed
    assert not at.supply.is_on


def test_a_second_keeper_can_have_neither_instrument_nor_record(at: Bench, tmp_path: Path) -> None:
    open_and_on(at)
    other = KeeperClient.start(None, lambda push: None)
    try:
        with pytest.raises(InstrumentError, match="Another benchkit"):
            other.connect(at.setup).result(10)
        with pytest.raises(RecordError, match="another process"):
            other.resume_journal(at.record).result(5)
    finally:
        other.close()
    assert at.supply.is_on


def test_close_switches_off_and_the_journal_ends_whole(alone: Bench) -> None:
    open_and_on(alone)
    off = alone.client.close()
    assert off is not None
    assert off.confirmed
    assert not alone.supply.is_on
    assert alone.kept() == ["noted", "output off"]
    assert verify(alone.record).status == 1


def test_one_keeper_serves_one_walk_after_the_other(at: Bench, tmp_path: Path) -> None:
    open_and_on(at)
    with pytest.raises(FileError, match="still open"):
        at.client.open_journal(tmp_path / "b.jsonl", Noted(text="b")).result(5)
    from benchkit.events import Closed

    at.client.append(Closed(count=1, verdict="pass", exit_status=0), 1).result(5)
    assert verify(at.record).status == 0
    assert at.client.open_journal(tmp_path / "b.jsonl", Noted(text="b")).result(5).seq == 1
    assert verify(at.record).status == 0


def test_resuming_hands_over_the_torn_line(alone: Bench) -> None:
    alone.client.open_journal(alone.record, Noted(text="a")).result(5)
    alone.client.append(Noted(text="b"), 1).result(5)
    alone.client.close()
    alone.record.write_bytes(alone.record.read_bytes()[:-30])
    other = KeeperClient.start(None, lambda push: None)
    head = other.resume_journal(alone.record).result(5)
    assert head.seq == 1
    assert head.torn.startswith('{"seq":2')
    assert other.append(Noted(text="c"), 1).result(5).seq == 2
    other.close()


@posix
def test_a_signal_makes_the_keeper_switch_off_and_leave(alone: Bench) -> None:
    open_and_on(alone)
    os.kill(alone.client.pid, signal.SIGTERM)
    assert alone.supply.wait_off(1.0)
    alone.wait_for(KeeperDied)
    lost, off = alone.events()[:2]
    assert isinstance(lost, ContactLost)
    assert "SIGTERM" in lost.problem
    assert isinstance(off, OutputOff)
    assert off.confirmed


def test_nothing_but_messages_goes_to_standard_output() -> None:
    code = (
        "import os, sys; from benchkit.keeper.pipes import take_standard_streams; "
        "source, sink = take_standard_streams(); print('noise'); os.system('echo more'); sys.stdout.flush(); "
        "os.write(sink, b'mine')"
    )
    done = subprocess.run([sys.executable, "-c", code], input=b"x", capture_output=True, check=True)
    assert done.stdout == b"mine"
    assert done.stderr.split() == [b"more", b"noise"] or done.stderr.split() == [b"noise", b"more"]


def test_the_keeper_listens_on_no_network(at: Bench) -> None:
    """It has the pipe and the instruments' sockets, and nothing that others could connect to."""
    at.connect()
    if sys.platform != "linux":
        pytest.skip("looks into /proc")
    inodes = {os.readlink(f"/proc/{at.client.pid}/fd/{name}") for name in os.listdir(f"/proc/{at.client.pid}/fd")}
    listening = {
        f"socket:[{line.split()[9]}]"
        for line in Path("/proc/net/tcp").read_text().splitlines()[1:]
        if line.split()[3] == "0A"
    }
    assert not inodes & listening
    assert socket.socket is not None
