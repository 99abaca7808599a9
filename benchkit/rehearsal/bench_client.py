"""Starting the rehearsal's bench as a process of its own, and the hands on its side channel.

The bench lives as long as its standard input is open: when whoever started it goes, however that happens, it goes too.
"""

from __future__ import annotations

import contextlib
import json
import socket
import subprocess
import sys
import tempfile
import threading
from collections.abc import Mapping
from typing import IO, Any, Final, Literal

from benchkit.errors import BenchkitError, EntryError, InstrumentError
from benchkit.keeper.platform import own_group
from benchkit.rehearsal.bench_file import bench_text
from benchkit.rehearsal.driving import LOAD_OHM

START_TIMEOUT_S: Final = 30.0
STOP_TIMEOUT_S: Final = 5.0
QUICK_TIMEOUT_S: Final = 10.0
ADVANCE_TIMEOUT_S: Final = 120.0


class SideChannel:
    """The hands at the simulated bench: clips, screwdriver, plugs, and time.

    Calls block until the bench has answered; any thread may call, one at a time.

    Parameters
    ----------
    port : int
        Of the side channel, on the loopback interface.

    Raises
    ------
    InstrumentError
        Here and from every method: ``link lost`` when the bench is gone, ``timeout`` when it doesn't answer.
    EntryError
        From every method, when the bench can't do what it was told.
    """

    def __init__(self, port: int) -> None:
        self._lock = threading.Lock()
        try:
            self._socket = socket.create_connection(("127.0.0.1", port), QUICK_TIMEOUT_S)
        except OSError as error:
            raise _gone(error) from None
        self._socket.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        self._reader = self._socket.makefile("rb")

    def probe(self, point: str | None) -> None:
        """Clip the meter to a test point; None takes the clips off."""
        self._ask({"do": "probe", "point": point})

    def turn(self, turns: float) -> float:
        """Turn the trimmer's screw, positive for more bias; return the travel from the least-bias end, 0...1."""
        return float(self._ask({"do": "turn", "turns": turns}))

    def trimmer_to(self, travel: Literal["least", "most", "as found"] | float) -> float:
        """Put the trimmer at an end, at a travel from the least-bias end, or where a shop finds it; return that."""
        return float(self._ask({"do": "trimmer to", "travel": travel}))

    def connect(self, connected: bool) -> None:
        """Put the unit on the supply's leads, or take it off."""
        self._ask({"do": "connect", "connected": connected})

    def short(self, shorted: bool) -> None:
        """Join the ends of the supply's leads, or open them."""
        self._ask({"do": "short", "shorted": shorted})

    def drive(self, share: float, load_ohm: float = LOAD_OHM) -> None:
        """Drive the stage to a share of full power into a dummy load; 0 ends it."""
        self._ask({"do": "drive", "share": share, "load_ohm": load_ohm})

    def slip(self, seconds: float) -> None:
        """Let the clips slip off their point for some simulated seconds."""
        self._ask({"do": "slip", "seconds": seconds})

    def fault(self, what: str) -> None:
        """Let something go wrong, in the words of `benchkit.rehearsal.mishaps`."""
        self._ask({"do": "fault", "what": what})

    def repair(self) -> dict[str, Any]:
        """Put new parts in for what is faulty or burnt; return ``parts`` and whether there are ``semiconductors``."""
        answer = self._ask({"do": "repair"})
        assert isinstance(answer, dict)
        return answer

    def clear_protection(self) -> None:
        """Clear the supply's tripped protection at its own keys."""
        self._ask({"do": "clear protection"})

    def advance(self, seconds: float) -> float:
        """Let simulated time (s) pass; return what the simulated clock then shows."""
        return float(self._ask({"do": "advance", "seconds": seconds}, ADVANCE_TIMEOUT_S))

    def truth(self) -> dict[str, Any]:
        """Return what is really so (see `RehearsalBench.truth`): for tests and for judging a rehearsal afterwards."""
        truth = self._ask({"do": "truth"})
        assert isinstance(truth, dict)
        return truth

    def close(self) -> None:
        """Hang up; a second call does nothing."""
        with contextlib.suppress(OSError):
            self._reader.close()
            self._socket.close()

    def _ask(self, request: Mapping[str, Any], timeout_s: float = QUICK_TIMEOUT_S) -> Any:
        with self._lock:
            try:
                self._socket.settimeout(timeout_s)
                self._socket.sendall(json.dumps(request).encode("utf-8") + b"\n")
                line = self._reader.readline()
            except TimeoutError:
                self.close()
                raise InstrumentError(
                    "timeout", f"The rehearsal's bench did not answer within {timeout_s:g} s", "", "Start it again"
                ) from None
            except (OSError, ValueError) as error:
                raise _gone(error) from None
        if not line.endswith(b"\n"):
            raise _gone(None)
        reply = json.loads(line)
        if "error" in reply:
            raise EntryError(str(reply["error"]))
        return reply["ok"]


class BenchProcess:
    """A running bench.

    Attributes
    ----------
    bench_text : str
        TOML of a bench file for it, accuracies included.
    setup : dict
        What the keeper needs to connect: ``{"meter": {"address", "profile"}, "supply": {...}}``.
    hands : SideChannel
    """

    def __init__(self, process: subprocess.Popen[bytes], addresses: Mapping[str, Any], log: IO[bytes]) -> None:
        self._process = process
        self._log = log
        self.bench_text = bench_text(str(addresses["meter"]), str(addresses["supply"]))
        self.setup: dict[str, dict[str, str]] = {
            "meter": {"address": str(addresses["meter"]), "profile": "scpi-meter"},
            "supply": {"address": str(addresses["supply"]), "profile": "scpi-supply"},
        }
        self.hands = SideChannel(int(addresses["side"]))

    @property
    def running(self) -> bool:
        """Whether the process is alive."""
        return self._process.poll() is None

    @property
    def pid(self) -> int:
        """The process's number."""
        return self._process.pid

    def stop(self) -> None:
        """End the bench; a second call does nothing."""
        self.hands.close()
        _end(self._process)
        self._log.close()

    def __enter__(self) -> BenchProcess:
        return self

    def __exit__(self, *_: object) -> None:
        self.stop()


def start_bench(
    design_text: str,
    seed: int,
    plant: str | None = "",
    clock: Literal["manual", "follow"] = "manual",
    *,
    file_name: str = "design",
) -> BenchProcess:
    """Start a bench with a simulated unit.

    Parameters
    ----------
    design_text : str
        Text of a design file.
    seed : int
    plant : str
        What goes wrong, such as ``"PART: FAULT"``; empty or None for a healthy unit.
    clock : str
        ``manual``: simulated time passes only by `SideChannel.advance`; ``follow``: with the wall clock too.
    file_name : str
        What messages call the design.

    Returns
    -------
    BenchProcess

    Raises
    ------
    EntryError
        When design, part or fault can't be used.
    InstrumentError
        When the process doesn't come up.
    """
    command = [sys.executable, "-m", "benchkit.rehearsal.bench", "--design", "-", "--seed", str(seed)]
    command += ["--plant", plant or "", "--clock", clock]
    # A process group of its own keeps the terminal's Ctrl-C away: the bench has to answer until the supply is off.
    log = tempfile.TemporaryFile()  # noqa: SIM115 - lives as long as the process
    process = subprocess.Popen(command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, stderr=log, **own_group())
    try:
        assert process.stdin is not None
        head = json.dumps({"design": design_text, "file": file_name}).encode("utf-8") + b"\n"
        with contextlib.suppress(OSError):
            process.stdin.write(head)
            process.stdin.flush()
        return BenchProcess(process, _addresses(process, log), log)
    except BaseException:
        _end(process)
        log.close()
        raise


def _addresses(process: subprocess.Popen[bytes], log: IO[bytes]) -> dict[str, Any]:
    """Wait for the line with the addresses."""
    lines: list[bytes] = []
    assert process.stdout is not None
    reader = threading.Thread(target=lambda: lines.append(process.stdout.readline()), daemon=True)  # type: ignore[union-attr]
    reader.start()
    reader.join(START_TIMEOUT_S)
    line = lines[0] if lines else b""
    if not line:
        log.seek(0)
        last = log.read().decode("utf-8", "replace").strip().rpartition("\n")[2]
        raise InstrumentError(
            "timeout", f"The rehearsal's bench did not start{': ' + last if last else ''}", "its addresses", "Try again"
        )
    answer = json.loads(line)
    if "error" in answer:
        raise EntryError(str(answer["error"]))
    assert isinstance(answer, dict)
    return answer


def _end(process: subprocess.Popen[bytes]) -> None:
    if process.stdin is not None:
        with contextlib.suppress(OSError, ValueError):
            process.stdin.write(b"leave\n")
            process.stdin.flush()
        with contextlib.suppress(OSError):
            process.stdin.close()
    try:
        process.wait(STOP_TIMEOUT_S)
    except subprocess.TimeoutExpired:
        process.kill()
        process.wait()
    if process.stdout is not None:
        process.stdout.close()


def _gone(error: Exception | None) -> BenchkitError:
    why = f" ({error})" if error is not None else ""
    return InstrumentError("link lost", f"The rehearsal's bench can't be reached{why}", "", "Start the rehearsal again")
