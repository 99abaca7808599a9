"""Ask an instrument who it is, and find the profile whose questions it answers.

Rules
-----
* A profile is never guessed from the maker's name.  The instrument is asked the profile's own questions, and what it
  answers is counted.  No output is switched, no voltage and no limit is set; but a meter's function, a supply's
  selected output, remote control and the enable register that keeps a link in step (``*ESE``) may change.
* A profile says how to open a link too (terminations, serial line, messages to begin with).  A profile with which the
  instrument doesn't even say its name is out, and so are all that open the link in the same way.
* The first profile that is answered to the last question ends the search; the standard ones are tried first, a supply's
  before a meter's, because many supplies answer a meter's question for volts.
* What was not understood stays in an instrument's queue of errors; ``*CLS`` empties that at the end.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import Future
from contextlib import contextmanager, suppress
from dataclasses import dataclass, field, replace
from typing import TypeVar

from benchkit.errors import EntryError, InstrumentError
from benchkit.instruments.conversation import LinkSettings
from benchkit.instruments.identified import NOT_ASKED, Candidate, Fit, Identified, addresses_for, candidates
from benchkit.instruments.link import Link
from benchkit.instruments.lockfile import ResourceLock
from benchkit.instruments.meter import Meter
from benchkit.instruments.profile import meter_profile, supply_profile
from benchkit.instruments.supply import Supply
from benchkit.instruments.traffic import TrafficLog

T = TypeVar("T")
Say = Callable[[str], None]

_STUCK_S = 30.0
_CLOSE_S = 1.0


@dataclass
class _Search:
    """The running search at one address: what was tried, and the ways of opening that failed."""

    tried: list[str] = field(default_factory=list)
    silent: dict[LinkSettings, InstrumentError] = field(default_factory=dict)
    fits: list[Fit] = field(default_factory=list)
    misses: list[Fit] = field(default_factory=list)
    name: str = ""
    baud: int | None = None
    problem: InstrumentError | None = None


def identify(
    word: str,
    profiles: Sequence[Candidate],
    *,
    library: str = "@py",
    bauds: Sequence[int] = (),
    say: Say = lambda _: None,
    log: TrafficLog | None = None,
) -> Identified:
    """Open what `word` names, ask for its name, and try the profiles' questions.

    Parameters
    ----------
    word : str
        See `addresses_for`.
    profiles : sequence of Candidate
        In the order in which they are tried.
    library : str
        The VISA library.
    bauds : sequence of int
        Speeds to try on a serial line instead of each profile's own.
    say : callable
        Hears one line before each thing that may take a while.
    log : TrafficLog, optional

    Returns
    -------
    Identified
        Also when nothing answered: then with a problem.

    Raises
    ------
    EntryError
        If `word` can name nothing.
    """
    log = log or TrafficLog()
    problems: list[tuple[str, InstrumentError]] = []
    for address in addresses_for(word):
        search = _Search()
        speeds: Sequence[int | None] = bauds if bauds and address.upper().startswith("ASRL") else (None,)
        try:
            lock = ResourceLock(address)
        except InstrumentError as error:
            return Identified(asked=word, address=address, problem=error)
        try:
            _try_all(search, address, profiles, speeds, library, say, log)
        finally:
            lock.release()
        if search.name:
            fits = sorted(search.fits, key=lambda fit: (not fit.complete, len(fit.unanswered)))
            return Identified(
                asked=word,
                address=address,
                name=search.name,
                fits=tuple(fits),
                misses=tuple(search.misses),
                tried=tuple(search.tried),
                baud=search.baud,
            )
        assert search.problem is not None
        problems.append((address, search.problem))
        if search.problem.kind in {"bad address", "unsupported"}:
            break
    # A host that does not take one kind of link is named once, with what the last one said.
    address, problem = problems[-1] if len(problems) == 1 else (word, _none_of(problems))
    return Identified(asked=word, address=address, problem=problem)


def identify_as(
    kind: str,
    word: str,
    names: Sequence[str] = (),
    *,
    library: str = "@py",
    bauds: Sequence[int] = (),
    say: Say = lambda _: None,
) -> Identified:
    """Identify an instrument that is said to be a meter or a supply.

    Raises
    ------
    EntryError, FileError
        If `word` or a profile in `names` can't be used.
    InstrumentError
        If nothing answers, or what answers is none.
    """
    every = candidates(names)
    tried = [one for one in every if one.kind == kind]
    if not tried:
        raise EntryError(f"No profile of a {kind} came", f"--profile with one, beside {', '.join(names)}")
    one = identify(word, tried, library=library, bauds=bauds, say=say)
    if one.problem is not None:
        raise one.problem
    if one.best is None:
        raise InstrumentError(
            "unsupported",
            f"{one.name} at {one.address} answers no questions of a {kind}'s profile that was tried"
            + "".join(f". {miss.profile}: {miss.unanswered[0][1]}" for miss in one.misses),
            "answers to the questions of " + " or ".join(candidate.name for candidate in tried),
            "Name a profile of your own with --profile, or look whether the addresses are the right way round",
        )
    return one


def _try_all(
    search: _Search,
    address: str,
    profiles: Sequence[Candidate],
    speeds: Sequence[int | None],
    library: str,
    say: Say,
    log: TrafficLog,
) -> None:
    for candidate in profiles:
        for baud in speeds:
            if search.baud is not None and baud != search.baud:
                continue
            settings = settings_of(candidate, library, baud)
            if settings in search.silent:
                continue
            if not search.name:
                speed = "" if baud is None else f" at {baud} baud"
                say(f"{address}: asking for its name{speed}, as the profile {candidate.name} has it")
            # What was sent in vain may still wait for its end in an instrument that ends its lines otherwise; an empty
            # line ends it, so that it does not spoil the next message.
            before = ("",) if search.silent else ()
            opened = replace(settings, prepare=(*before, *settings.prepare))
            try:
                with _asking(candidate, address, opened, log) as device:
                    name = _answer(device.identify(), 4.0 * settings.open_timeout_s)
                    if not search.name:
                        search.name = name
                        say(f"{address}: {name}")
                    search.baud = baud
                    search.tried.append(candidate.name)
                    say(f"{address}: trying the questions of the profile {candidate.name}")
                    fit = _fit_of_supply(candidate, device) if isinstance(device, Supply) else _fit_of_meter(
                        candidate, device, lambda function: say(f"{address}:   {function}")
                    )  # fmt: skip
            except InstrumentError as error:
                search.silent[settings] = error
                search.problem = search.problem or error
                if not search.name and error.kind not in {"timeout", "garbled"}:
                    return
                continue
            (search.fits if fit.answered else search.misses).append(fit)
            if fit.complete:
                return
            break


def settings_of(candidate: Candidate, library: str = "@py", baud: int | None = None) -> LinkSettings:
    """Return how a profile opens a link, with another library or another speed put in."""
    profile = (supply_profile if candidate.kind == "supply" else meter_profile)(candidate.table)
    settings = replace(profile.link.settings(), library=library)
    return settings if baud is None else replace(settings, line=replace(settings.line, baud=baud))


@contextmanager
def _asking(candidate: Candidate, address: str, settings: LinkSettings, log: TrafficLog) -> Iterator[Meter | Supply]:
    """Give a meter or a supply that speaks as a profile says; close its link at the end."""
    link = Link("the instrument", address, settings, log)
    try:
        if candidate.kind == "supply":
            yield Supply(link, supply_profile(candidate.table))
        else:
            yield Meter(link, meter_profile(candidate.table))
        # What it did not understand must not wait in its queue of errors for the next who asks.
        with suppress(InstrumentError, TimeoutError):
            link.submit(lambda conversation: conversation.tell("*CLS")).result(_CLOSE_S)
    finally:
        link.close(_CLOSE_S)


def _answer(future: Future[T], usual_s: float) -> T:
    """Wait for an answer.  A link has its own time-outs; only one that is stuck itself is given up here."""
    try:
        return future.result(usual_s + _STUCK_S)
    except TimeoutError:
        if future.done():
            raise
        raise InstrumentError(
            "link lost", "The link did not come back", "an answer or an error", "Switch the instrument off and on"
        ) from None


def what_happened(error: InstrumentError) -> str:
    """Return what became of a question: its message and what came stand in the error, with what was expected."""
    came = error.came.rstrip(".")
    return f"{came}; expected {error.expected}" if error.expected else came


def _fit_of_supply(candidate: Candidate, supply: Supply) -> Fit:
    question = "settings, outputs and readings of both outputs"
    try:
        _answer(supply.sample(), _STUCK_S)
    except InstrumentError as error:
        return Fit(profile=candidate.name, kind="supply", answered=(), unanswered=((question, what_happened(error)),))
    return Fit(profile=candidate.name, kind="supply", answered=(question,))


def _fit_of_meter(candidate: Candidate, meter: Meter, say: Say) -> Fit:
    answered: list[str] = []
    unanswered: list[tuple[str, str]] = []
    functions = list(meter_profile(candidate.table).functions)
    for function in functions:
        say(function)
        try:
            _answer(meter.read(function), 4.0 * meter.expected_s(function))
            answered.append(function)
        except InstrumentError as error:
            unanswered.append((function, what_happened(error)))
            if not answered:
                # Not even the first: it speaks otherwise, and each further question would take its whole time.
                unanswered += [(one, NOT_ASKED) for one in functions[1:]]
                break
    return Fit(profile=candidate.name, kind="meter", answered=tuple(answered), unanswered=tuple(unanswered))


def _none_of(problems: Sequence[tuple[str, InstrumentError]]) -> InstrumentError:
    said = "; ".join(error.came.rstrip(".") for _, error in problems)
    return InstrumentError(
        problems[-1][1].kind,
        f"Nothing answered ({said})",
        "an instrument at one of these addresses",
        "See its manual for its address and port; most have a menu that switches remote control on",
    )
