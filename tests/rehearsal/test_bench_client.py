"""The bench as a process: it starts, answers over real sockets, and ends with its standard input."""

from __future__ import annotations

import os
import re
import signal
import socket
import subprocess
import sys
import time
import tomllib
from collections.abc import Iterator
from pathlib import Path

import pytest

from benchkit.errors import EntryError, InstrumentError
from benchkit.rehearsal.bench_client import BenchProcess, start_bench
from tests.rehearsal.helpers import DESIGNS, TERN

ADDRESS = re.compile(r"TCPIP::127\.0\.0\.1::(\d+)::SOCKET")


@pytest.fixture(scope="module")
def process() -> Iterator[BenchProcess]:
    with start_bench(TERN, 7) as running:
        yield running


def ask(address: str, message: str) -> str:
    match = ADDRESS.fullmatch(address)
    assert match is not None
    with socket.create_connection(("127.0.0.1", int(match[1])), 5.0) as link:
        link.sendall(message.encode() + b"\n")
        with link.makefile("r", encoding="ascii", newline="\n") as replies:
            return replies.readline()


def test_instruments_and_hands_are_on_one_bench(process: BenchProcess) -> None:
    hands, setup = process.hands, process.setup
    assert hands.trimmer_to("least") == 0.0
    hands.connect(True)
    assert ask(setup["supply"]["address"], "CURR 0.08,(@1,2);:VOLT 12,(@1,2);:OUTP ON,(@1,2);*OPC?") == "1\n"
    before_s = hands.truth()["sim_s"]
    assert hands.advance(1.0) == pytest.approx(before_s + 1.0)
    hands.probe("rail-")
    assert float(ask(setup["meter"]["address"], "MEAS:VOLT:DC?")) == pytest.approx(-12.0, abs=0.02)
    assert hands.turn(3.0) == pytest.approx(0.25)
    hands.short(False)
    assert ask(setup["supply"]["address"], "OUTP OFF,(@1,2);OUTP? (@1,2)") == "0,0\n"
    assert hands.truth()["output_on"] == [False, False]
    with pytest.raises(EntryError, match="test point"):
        hands.probe("nowhere")
    hands.probe(None)


def test_the_two_name_themselves(process: BenchProcess) -> None:
    names = [ask(process.setup[who]["address"], "*IDN?").strip().split(",") for who in ("meter", "supply")]
    assert [len(name) for name in names] == [4, 4]
    assert names[0][2] != names[1][2]


def test_the_bench_file_names_addresses_and_accuracies(process: BenchProcess) -> None:
    table = tomllib.loads(process.bench_text)
    assert table["meter"]["address"] == process.setup["meter"]["address"]
    assert table["supply"]["address"] == process.setup["supply"]["address"]
    assert len(table["meter"]["accuracy"]) > 20


def test_it_ends_with_its_input() -> None:
    running = start_bench(TERN, 1)
    began = time.monotonic()
    running.stop()
    assert not running.running
    assert time.monotonic() - began < 3.0
    running.stop()
    with pytest.raises(InstrumentError) as caught:
        running.hands.truth()
    assert caught.value.kind == "link lost"


@pytest.mark.skipif(sys.platform == "win32", reason="POSIX signals")
def test_it_ends_when_whoever_started_it_is_killed() -> None:
    script = (
        "import sys, time\n"
        "from benchkit.rehearsal.bench_client import start_bench\n"
        "bench = start_bench(sys.stdin.read(), 1)\n"
        "print(bench.pid, flush=True)\n"
        "time.sleep(60)\n"
    )
    parent = subprocess.Popen(
        [sys.executable, "-c", script], stdin=subprocess.PIPE, stdout=subprocess.PIPE, cwd=Path(__file__).parents[2]
    )
    assert parent.stdin is not None
    assert parent.stdout is not None
    parent.stdin.write(TERN.encode())
    parent.stdin.close()
    pid = int(parent.stdout.readline())
    os.kill(pid, 0)
    parent.send_signal(signal.SIGKILL)
    parent.wait()
    parent.stdout.close()
    for _ in range(100):
        try:
            os.kill(pid, 0)
        except ProcessLookupError:
            return
        if sys.platform == "linux" and ") Z " in Path(f"/proc/{pid}/stat").read_text("ascii"):
            return
        time.sleep(0.05)
    os.kill(pid, signal.SIGKILL)
    pytest.fail("the bench outlived its parent by 5 s")


def test_a_bench_that_died_is_lost() -> None:
    running = start_bench(TERN, 1)
    os.kill(running.pid, getattr(signal, "SIGKILL", signal.SIGTERM))
    while running.running:
        time.sleep(0.01)
    with pytest.raises(InstrumentError) as caught:
        running.hands.truth()
    assert caught.value.kind == "link lost"
    running.stop()


@pytest.mark.parametrize(
    ("text", "plant", "said"),
    [
        ("[design]\nformat = 1\n", "", "design"),
        (TERN, "emitter.upper.1: melted", "is no fault"),
        (TERN, "nothing", "is no planted fault"),
    ],
)
def test_what_cannot_be_rehearsed_is_said(text: str, plant: str, said: str) -> None:
    with pytest.raises(EntryError, match=said):
        start_bench(text, 1, plant)


def test_from_the_command_line_with_a_file() -> None:
    command = [
        sys.executable,
        "-m",
        "benchkit.rehearsal.bench",
        "--design",
        str(DESIGNS / "tern-40.toml"),
        "--seed",
        "2",
    ]
    ended = subprocess.run(
        command, input=b"", capture_output=True, timeout=30, cwd=Path(__file__).parents[2], check=False
    )
    assert ended.returncode == 0, ended.stderr
    assert ADDRESS.search(ended.stdout.decode())
    assert ended.stdout.count(b"\n") == 1
