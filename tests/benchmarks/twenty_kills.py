"""Kill a rehearsal at random moments, and see what is left and whether it goes on.

Run as ``python -m tests.benchmarks.twenty_kills [TIMES]``.  Each time a stand-in rehearsal on the breadboard design is
killed with SIGKILL at a random moment; then

* every result that it had told on its output has to stand in the journal (it is told only once it is kept);
* the journal has to be whole up to its end, or its torn last line reported;
* the supply has to be off, by the keeper's own line, within a second where it was on;
* ``benchkit walk --resume`` has to end with the verdict of a walk that nobody killed.
"""

from __future__ import annotations

import os
import random
import signal
import subprocess
import sys
import tempfile
import time
from pathlib import Path

from benchkit.events import Judged, OutputOff, SupplySet
from benchkit.record import verify

BENCHKIT = [sys.executable, "-m", "benchkit"]
LONGEST_S = 18.0


def once(number: int, folder: Path, wait_s: float) -> str:
    """Kill one rehearsal after `wait_s` seconds and go on with it; returns a line about it."""
    command = [*BENCHKIT, "rehearse", "--plain", "--stand-in", "--design", "breadboard", "--units", "300"]
    with (folder / "out").open("wb") as out:
        process = subprocess.Popen([*command, "--seed", str(number), "--records", str(folder)], stdout=out)
        time.sleep(wait_s)
        os.kill(process.pid, signal.SIGKILL)
        killed = time.monotonic()
        process.wait()
    records = list(folder.glob("*.jsonl"))
    if not records:
        return f"{number:2d} killed after {wait_s:5.1f} s: no record yet"
    (record,) = records
    lines = (folder / "out").read_text(encoding="utf-8").splitlines()
    told = sum(line.startswith(("pass ", "fail ", "undecided ")) for line in lines)
    if verify.load(record).status == 0:
        return f"{number:2d} was finished before {wait_s:5.1f} s"
    off_s = None
    while time.monotonic() < killed + 4.0:
        found = verify.load(record)
        if isinstance(found.kept[-1].event, OutputOff):
            off_s = time.monotonic() - killed
            break
        time.sleep(0.02)
    events = [kept.event for kept in found.kept]
    judged = sum(isinstance(event, Judged) for event in events)
    if judged < told:
        raise SystemExit(f"{number}: {told} results were told and {judged} are kept")
    offs = [number for number, event in enumerate(events) if isinstance(event, OutputOff)]
    sets = [number for number, event in enumerate(events) if isinstance(event, SupplySet)]
    was_on = bool(sets) and (len(offs) < 2 or sets[-1] > offs[-2])
    last = events[-1]
    if was_on and not (isinstance(last, OutputOff) and last.confirmed):
        raise SystemExit(f"{number}: the supply was on and its off is not confirmed: {last}")
    went_on = subprocess.run(
        [*BENCHKIT, "walk", "--resume", str(record), "--units", "300"], capture_output=True, text=True, check=False
    )
    after = verify.load(record)
    return (
        f"{number:2d} killed after {wait_s:5.1f} s, line {len(events)}, {'on' if was_on else 'off'}, "
        f"off said after {'-' if off_s is None else f'{off_s:.2f} s'}; torn {found.torn is not None}; "
        f"went on to exit {went_on.returncode}, record {after.word}"
    )


def main() -> None:
    """Do it as often as asked."""
    times = int(sys.argv[1]) if len(sys.argv) > 1 else 20
    rng = random.Random(1)
    for number in range(1, times + 1):
        with tempfile.TemporaryDirectory() as folder:
            print(once(number, Path(folder), rng.uniform(2.0, LONGEST_S)), flush=True)


if __name__ == "__main__":
    main()
