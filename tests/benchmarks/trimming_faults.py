"""What goes wrong while a trimmer is turned or a stage soaks: are the right words said, and is the supply off in time?

Run as ``python -m tests.benchmarks.trimming_faults [--tries 20] [--plant KIND ...] [--seed 1] [--json FILE]``.

Each try is a production trim with the real session, the real keeper in its process, and a simulated unit whose
instruments are reached over sockets (`tests.benchmarks.trimming_bench`).  Up to the trim simulated time is quick.  From
there on most kinds live by the wall clock, as at a bench: the keeper watches by itself, the hand turns the screw while
the meter is read, and nobody tells the session how far.  Where a soak would take many minutes, simulated time stays
quick; what is timed is then the wall clock all the same.

What has to hold for each kind stands in `KINDS`:

* the words, on the screen or in the record, and words that must never be said of it;
* how it ends: a trip, an instrument lost, a trim that is given up, or a trim (a soak) that goes on;
* off has reached the supply within a bound: 0.3 s from the reading that shows it (the supply answers at once), 1 s from
  a meter that is unplugged, 1.5 s from one that is mute; and off is confirmed at the end of every try;
* no advice for more bias on a reading that is wrong;
* nothing burnt, but for what a runaway does before anybody can see it, which is printed.
"""

from __future__ import annotations

import argparse
import json
import random
import re
import statistics
import sys
import tempfile
from collections import Counter
from dataclasses import asdict, dataclass, field
from pathlib import Path
from typing import Final, Literal

from benchkit.events import ContactLost, OutputOff, Tripped
from benchkit.stage.design import Design
from tests.benchmarks.first_power_harm import designs
from tests.benchmarks.trimming_bench import Deed, Seen, Tale, run_try

FALLS: Final = ("tern-40", "breadboard", "double source servo lower tied 2 stopper")
"""Designs whose open wiper takes the bias away: in series with the track, and across it in two pairs."""
RISES: Final = ("triple source servo upper series 1 stopper",)
"""A design whose open wiper takes the bias to its most."""

TRIP_S: Final = 0.3
GIVEN_UP_S: Final = 1.0
UNPLUGGED_S: Final = 1.0
MUTE_S: Final = 1.5

ON_THE_POINT: Final = (
    r"the reading is gone|fell at once|rose at once|look at the probe|take the probe off|on the point\?"
)
PROBE: Final = rf"{ON_THE_POINT}|it reads negative"
WIPER: Final = r"wiper has opened|wiper open"
SURELY_THE_WIPER: Final = r"with it: the wiper has opened"

Ending = Literal["trip", "lost", "given up", "goes on"]


@dataclass(frozen=True, kw_only=True)
class Kind:
    """One thing that goes wrong.

    Parameters
    ----------
    deed : Deed
        What is done, and when.
    said, never : str
        Patterns of words: one that has to come, and one that must not ("" for none).
    ends : str
    within_s : float or None
        From what shows it (see `Told.off_s`) to off; None where nothing has to go off.
    designs : tuple of str
    words_s : float
        So soon (s, the unit's time) the words have to come.
    more_is_wrong : bool
        No advice for more bias may come while it lasts.
    """

    deed: Deed
    said: str
    never: str = ""
    ends: Ending
    within_s: float | None
    designs: tuple[str, ...] = FALLS
    words_s: float
    more_is_wrong: bool = True


KINDS: Final[dict[str, Kind]] = {
    "wiper opens, bias falls": Kind(
        deed=Deed(do="fault", plant="spreader.trimmer: wiper open", share=(0.1, 0.8)),
        said=WIPER, never=r"the probe has slipped", ends="given up", within_s=GIVEN_UP_S, words_s=4.0,
    ),
    "wiper opens at least bias": Kind(
        deed=Deed(plant="spreader.trimmer: wiper open", turns=(0.1, 0.1)),
        said=rf"nothing has moved|no response|{WIPER}", never=r"the probe has slipped", ends="given up",
        within_s=GIVEN_UP_S, words_s=60.0, more_is_wrong=False,
    ),
    "wiper opens, bias rises": Kind(
        deed=Deed(plant="spreader.trimmer: wiper open", turns=(0.3, 2.5)),
        said=r"held by its current limit|above .* A", ends="trip", within_s=TRIP_S, designs=RISES, words_s=2.0,
    ),
    "probe slips in a trim": Kind(
        deed=Deed(do="slip", moves=(1, 3)),
        said=PROBE, never=SURELY_THE_WIPER, ends="goes on", within_s=None, words_s=2.0,
    ),
    "probe on a wrong point": Kind(
        deed=Deed(do="elsewhere", moves=(1, 3)),
        said=PROBE, never=SURELY_THE_WIPER, ends="goes on", within_s=None, words_s=2.0,
    ),
    "supply folds back in a trim": Kind(
        deed=Deed(do="fault", plant="supply: folds back", share=(0.0, 0.8)),
        said=r"held by its current limit|has broken down", ends="trip", within_s=TRIP_S, words_s=2.0,
        more_is_wrong=False,
    ),
    "stage swings in a trim": Kind(
        deed=Deed(do="fault", plant="stage: oscillation", share=(0.0, 0.8), shows_s=1.0),
        said=r"current shows more|swings|oscillat|held by its current limit", never=rf"{WIPER}|slipped",
        ends="given up", within_s=GIVEN_UP_S, words_s=3.0, designs=FALLS[:2],
    ),
    "meter unplugged in a trim": Kind(
        deed=Deed(do="unplug", moves=(1, 3)),
        said=r"[Mm]eter", ends="lost", within_s=UNPLUGGED_S, words_s=2.0,
    ),
    "meter mute in a trim": Kind(
        deed=Deed(do="mute", moves=(1, 3)),
        said=r"[Mm]eter", ends="lost", within_s=MUTE_S, words_s=2.5,
    ),
    "meter unplugged in a soak": Kind(
        deed=Deed(do="unplug", soak_s=(5.0, 9.0)),
        said=r"[Mm]eter", ends="lost", within_s=UNPLUGGED_S, words_s=2.0,
    ),
    "meter mute in a soak": Kind(
        deed=Deed(do="mute", soak_s=(5.0, 9.0)),
        said=r"[Mm]eter", ends="lost", within_s=MUTE_S, words_s=2.5,
    ),
    "runaway from a trim on": Kind(
        deed=Deed(plant="heat: runaway", turns=(1.0, 3.0), into_the_soak=True, live=False),
        said=r"rises by itself|held by its current limit", ends="trip", within_s=TRIP_S, words_s=600.0,
        more_is_wrong=False,
    ),
    "runaway in a soak": Kind(
        deed=Deed(do="fault", plant="heat: runaway", soak_s=(5.0, 60.0), live=False),
        said=r"rises by itself|held by its current limit", ends="trip", within_s=TRIP_S, words_s=600.0,
    ),
    "probe slips in a soak": Kind(
        deed=Deed(do="slip", soak_s=(5.0, 15.0)),
        said=ON_THE_POINT, never=rf"{WIPER}|rises by itself", ends="goes on", within_s=None, words_s=2.5,
    ),
}  # fmt: skip


@dataclass(kw_only=True)
class Told:
    """What came of one try.

    Parameters
    ----------
    kind, design : str
    seed : int
    problems : list of str
    words_s : float or None
        From the onset to the words, in the unit's time; of a trip at the wall clock, from the reading that shows it.
    words : str
        The first of them.
    off_s : float or None
        Until the supply gets the message, by the wall clock: for a trip from the reading that shows it (the first
        answer of the supply that has a rail in its limit, else the last answer of an instrument before the trip), for
        a lost meter from the loss, for a trim that is given up from the hand's answer.
    confirmed_s : float or None
        The same until off is read back, without current, and written.
    more : int
        Pictures that advise more bias on a wrong reading.
    burnt : int
    ended : str
    never_came : bool
        The unit was done with its trim before it could happen.
    """

    kind: str
    design: str
    seed: int
    problems: list[str] = field(default_factory=list)
    words_s: float | None = None
    words: str = ""
    off_s: float | None = None
    confirmed_s: float | None = None
    more: int = 0
    burnt: int = 0
    ended: str = ""
    never_came: bool = False


def judge(name: str, kind: Kind, design: str, seed: int, tale: Tale) -> Told:
    """Hold a try against what its kind demands."""
    told = Told(kind=name, design=design, seed=seed, burnt=tale.burnt)
    if tale.onset is None:
        told.never_came, told.ended = True, tale.closed or tale.failed
        return told
    if tale.failed:
        told.problems.append(f"the try broke off: {tale.failed}")
    onset = tale.onset
    words = [(seen.sim_s, text) for seen in tale.seen if seen.sim_s >= onset.sim_s for text in _texts(seen)]
    words += [(one.sim_s, text) for one in tale.events if one.sim_s >= onset.sim_s for text in _event_texts(one.event)]
    right = sorted(one for one in words if re.search(kind.said, one[1]))
    if right:
        told.words_s, told.words = right[0][0] - onset.sim_s, right[0][1]
        if kind.ends == "trip" and kind.deed.live and tale.shown_wall_s is not None:
            told.words_s = max(told.words_s - (tale.shown_wall_s - onset.wall_s), 0.0)  # nothing shows it before
        if told.words_s > kind.words_s:
            told.problems.append(f"words after {told.words_s:.1f} s: {told.words}")
    else:
        told.problems.append(f"the words never came; last: {words[-1][1] if words else 'none'}")
    wrong = sorted({text for _, text in words if kind.never and re.search(kind.never, text)})
    told.problems += [f"wrong words: {text}" for text in wrong[:2]]
    told.more = len(tale.more_while_wrong)
    if told.more and kind.more_is_wrong:
        told.problems.append(f"advised more: {tale.more_while_wrong[0].advice}")
    told.ended = _ending(tale)
    if told.ended != kind.ends:
        told.problems.append(f"ended otherwise: {told.ended}")
    if not tale.off_at_the_end:
        told.problems.append("NOT OFF at the end")
    told.off_s, told.confirmed_s = _off_s(kind, tale)
    if kind.within_s is not None and told.ended == kind.ends:
        if told.off_s is None:
            told.problems.append("no off is in the record")
        elif told.off_s > kind.within_s:
            told.problems.append(f"off after {told.off_s:.2f} s, {kind.within_s:g} s allowed")
    if tale.burnt and "runaway" not in name:
        told.problems.append(f"{tale.burnt} parts burnt")
    if kind.ends == "goes on" and tale.taken_off_by is not None and abs(tale.taken_off_by) > 0.1:
        told.problems.append(f"a reading was taken that is {tale.taken_off_by:+.0%} off the truth")
    return told


def _texts(seen: Seen) -> tuple[str, ...]:
    return tuple(text for text in (seen.advice, seen.message, *seen.results) if text)


def _event_texts(event: object) -> tuple[str, ...]:
    if isinstance(event, Tripped):
        return (event.reason,)
    if isinstance(event, ContactLost):
        return (f"{event.who}: {event.problem}",)
    return ()


def _ending(tale: Tale) -> str:
    assert tale.onset is not None
    since = [one.event for one in tale.events if one.wall_s >= tale.onset.wall_s]
    if any(isinstance(event, Tripped) for event in since):
        return "trip"
    if any(isinstance(event, ContactLost) for event in since):
        return "lost"
    return "given up" if tale.given_up_wall_s is not None else "goes on" if tale.went_on else "stopped otherwise"


def _off_s(kind: Kind, tale: Tale) -> tuple[float | None, float | None]:
    assert tale.onset is not None
    offs = [one.wall_s for one in tale.events if isinstance(one.event, OutputOff) and one.event.confirmed
            and one.wall_s >= tale.onset.wall_s]  # fmt: skip
    begins = {"trip": tale.shown_wall_s, "lost": tale.onset.wall_s, "given up": tale.given_up_wall_s}
    began_s = begins.get(kind.ends)
    if began_s is None or tale.told_off_wall_s is None or not offs:
        return None, None
    return tale.told_off_wall_s - began_s, min(offs) - began_s


def try_once(name: str, seed: int, known: dict[str, Design], folder: Path) -> Told:
    """Do one thing wrong to one unit."""
    kind = KINDS[name]
    design = kind.designs[seed % len(kind.designs)]
    rng = random.Random(f"trimming faults {name} {seed}")
    tale = run_try(known[design], rng.randrange(2**31), kind.deed, rng, folder)
    return judge(name, kind, design, seed, tale)


def row(name: str, found: list[Told]) -> str:
    """One line of the table."""
    came = [told for told in found if not told.never_came]
    well = sum(not told.problems for told in came)
    words = [told.words_s for told in came if told.words_s is not None]
    offs = [told.off_s for told in came if told.off_s is not None]
    confirmed = [told.confirmed_s for told in came if told.confirmed_s is not None]
    limit = KINDS[name].within_s
    ends = ", ".join(f"{many} {how}" for how, many in Counter(told.ended for told in came).most_common())
    return (
        f"{name:28s}{f'{well} of {len(came)}':>9s}{_pair(words, 1):>14s}{_pair(offs, 2):>14s}"
        f"{'-' if limit is None else f'{limit:g}':>6s}{_pair(confirmed, 2):>14s}{sum(told.more for told in came):6d}"
        f"{sum(told.burnt for told in came):6d}  {ends}"
    )


def _pair(values: list[float], digits: int) -> str:
    return f"{statistics.median(values):.{digits}f} / {max(values):.{digits}f}" if values else "-"


HEAD: Final = (
    f"{'median / longest':28s}{'well':>9s}{'words (s)':>14s}{'off (s)':>14s}{'most':>6s}{'confirmed (s)':>14s}"
    f"{'MORE':>6s}{'burnt':>6s}  ends"
)


def main() -> None:
    """Do it as often as asked, and print the table."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--tries", type=int, default=20)
    parser.add_argument("--seed", type=int, default=1, help="of the first try; the others follow")
    parser.add_argument("--plant", action="append", choices=list(KINDS), metavar="KIND", help=", ".join(KINDS))
    parser.add_argument("--json", type=Path, default=None, metavar="FILE", help="append a line for each try")
    arguments = parser.parse_args()
    known, found = designs(), {name: list[Told]() for name in arguments.plant or KINDS}
    with tempfile.TemporaryDirectory() as folder:
        for name, tries in found.items():
            for seed in range(arguments.seed, arguments.seed + arguments.tries):
                told = try_once(name, seed, known, Path(folder))
                tries.append(told)
                for problem in told.problems:
                    print(f"  {name}, {told.design}, seed {seed}: {problem}", flush=True)
                if told.never_came:
                    print(f"  {name}, {told.design}, seed {seed}: it never came ({told.ended})", flush=True)
                if arguments.json is not None:
                    with arguments.json.open("a", encoding="utf-8") as file:
                        file.write(json.dumps(asdict(told)) + "\n")
            print(row(name, tries), flush=True)
    print("\n".join([HEAD, *(row(name, tries) for name, tries in found.items())]))
    sys.exit(1 if any(told.problems for tries in found.values() for told in tries) else 0)


if __name__ == "__main__":
    main()
