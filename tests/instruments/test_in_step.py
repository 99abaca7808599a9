"""Whatever comes late, twice or never: an answer that is taken belongs to the question that was asked.

The peer is simulated, and so is the time.  Each question asks for a number of its own, so that a wrong answer shows.
"""

from __future__ import annotations

from collections import deque

import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from benchkit.errors import InstrumentError
from benchkit.instruments.conversation import Conversation, LinkSettings
from benchkit.instruments.numbers import NumberRules, parse_number
from benchkit.instruments.transports import Piece
from benchkit.quantities import Overload
from tests.instruments.simulated_peer import NAME, Fate, Peer, PeerTransport, simulated

RULES = NumberRules()
TALK = LinkSettings(timeout_s=1.0, open_timeout_s=1.0)
MUTE = LinkSettings(timeout_s=1.0, open_timeout_s=1.0, sync="")

LATE = st.one_of(st.just(0.0), st.floats(0.0, 0.9), st.floats(0.9, 6.0))
AT_ONCE = st.builds(Fate, late_s=LATE, copies=st.integers(0, 3), cancel=st.booleans())
ANY = st.builds(Fate, late_s=LATE, copies=st.integers(0, 3), gap_s=LATE, cancel=st.booleans())


def echo(talk: Conversation, peer: Peer, number: int, *, closed: bool = False) -> float | Overload | None:
    """Ask for a number; None when it failed."""
    peer.cancel.clear()
    try:
        return talk.ask(f"ECHO? {number}", lambda text: parse_number(text, RULES), closed=closed)
    except InstrumentError as error:
        kind = error.kind
    assert kind in {"timeout", "garbled", "refused"}
    return None


def ask_all(talk: Conversation, peer: Peer, pauses: list[float], *, always_dirty: bool = False) -> None:
    """Ask for one number after the other; each is either right or not there, and in the end all are right."""
    for number, pause_s in enumerate(pauses):
        if always_dirty:
            talk._dirty = True
        assert echo(talk, peer, number) in {None, float(number)}
        peer.clock.now_s += pause_s
    peer.fates.clear()
    peer.clock.now_s += 100.0
    for number in (1001, 1002, 1003):
        assert echo(talk, peer, number) == float(number)


CASES = {
    "socket": (Peer(), TALK),
    "socket without a question of our own": (Peer(), MUTE),
    "socket that does not know ours": (Peer(knows_sync=False), TALK),
    "one wire": (Peer(shared_wire=True), TALK),
}


@pytest.mark.parametrize("case", list(CASES))
@given(fates=st.lists(AT_ONCE, max_size=30), pauses=st.lists(LATE, min_size=1, max_size=12))
@settings(max_examples=80, deadline=None)
def test_late_lost_and_doubled_answers_are_nobody_elses(case: str, fates: list[Fate], pauses: list[float]) -> None:
    model, how = CASES[case]
    peer = Peer(shared_wire=model.shared_wire, knows_sync=model.knows_sync)
    with simulated(peer, how) as talk:
        assert talk.open() == NAME
        peer.fates = deque(fates)
        ask_all(talk, peer, pauses)


@pytest.mark.parametrize("shared_wire", [False, True], ids=["socket", "one wire"])
@given(fates=st.lists(ANY, max_size=30), pauses=st.lists(LATE, min_size=1, max_size=12))
@settings(max_examples=80, deadline=None)
def test_between_two_marks_copies_may_come_at_any_time(
    shared_wire: bool, fates: list[Fate], pauses: list[float]
) -> None:
    peer = Peer(shared_wire=shared_wire)
    with simulated(peer, TALK) as talk:
        assert talk.open() == NAME
        peer.fates = deque(fates)
        ask_all(talk, peer, pauses, always_dirty=True)


BRIEF = st.floats(0.0, 0.05)
DOUBLED = st.builds(Fate, late_s=BRIEF, copies=st.integers(1, 3), gap_s=BRIEF)


@pytest.mark.parametrize("shared_wire", [False, True], ids=["socket", "one wire"])
@given(fates=st.lists(DOUBLED, min_size=1, max_size=6), pauses=st.lists(BRIEF, min_size=1, max_size=12))
@settings(max_examples=80, deadline=None)
def test_what_came_twice_between_two_marks_is_not_left_for_the_next_question(
    shared_wire: bool, fates: list[Fate], pauses: list[float]
) -> None:
    """Each second question is asked on a link that has just got back into step, and nothing more goes wrong."""
    peer = Peer(shared_wire=shared_wire)
    with simulated(peer, TALK) as talk:
        assert talk.open() == NAME
        for number, pause_s in enumerate(pauses):
            talk._dirty = True
            peer.fates = deque(fates)
            assert echo(talk, peer, 2 * number) in {None, 2.0 * number}
            peer.fates.clear()
            peer.clock.now_s += pause_s
            assert echo(talk, peer, 2 * number + 1) == 2.0 * number + 1
        assert peer.openings == 1


ONCE = st.just(Fate())


@pytest.mark.parametrize("shared_wire", [False, True], ids=["socket", "one wire"])
@example(fates=[Fate(), Fate(), Fate(copies=2, gap_s=0.01), *[Fate(late_s=0.02)] * 8], pauses=[0.0] * 6)
@given(fates=st.lists(ONCE | DOUBLED, max_size=30), pauses=st.lists(st.just(0.0) | BRIEF, min_size=6, max_size=12))
@settings(max_examples=80, deadline=None)
def test_a_closed_question_takes_no_copy_on_a_link_that_never_failed(
    shared_wire: bool, fates: list[Fate], pauses: list[float]
) -> None:
    peer = Peer(shared_wire=shared_wire)
    with simulated(peer, TALK) as talk:
        talk.learn_mark()
        peer.fates = deque(fates)
        for number, pause_s in enumerate(pauses):
            assert echo(talk, peer, number, closed=True) in {None, float(number)}
            peer.clock.now_s += pause_s


def test_a_closed_question_costs_one_mark() -> None:
    peer = Peer()
    with simulated(peer, TALK) as talk:
        talk.learn_mark()
        assert echo(talk, peer, 1, closed=True) == 1.0
        peer.told.clear()
        talk.learn_mark()
        for number in (2, 3):
            assert echo(talk, peer, number, closed=True) == float(number)
        assert [message.split()[0] for message in peer.told] == ["ECHO?", "*ESE", "ECHO?", "*ESE"]
        assert peer.openings == 1


@given(fates=st.lists(AT_ONCE, max_size=12))
@settings(max_examples=80, deadline=None)
def test_an_opening_under_fire_gives_the_name_or_an_error(fates: list[Fate]) -> None:
    for shared_wire in (False, True):
        peer = Peer(shared_wire=shared_wire, fates=deque(fates))
        peer.wire.extend([(0.0, b"+1.0\n"), (0.5, b"left over\n")])
        with simulated(peer, TALK) as talk:
            try:
                assert talk.open() == NAME
            except InstrumentError:
                assert talk.dirty


def test_a_late_name_of_an_earlier_try_shifts_nothing() -> None:
    """Two names asked for while getting into step, both late: the second must not be left for the next question."""
    peer = Peer()
    with simulated(peer, MUTE) as talk:
        talk.open()
        for number in range(20):
            peer.fates = deque([Fate(late_s=1.5), Fate(late_s=1.2), Fate(late_s=0.9)])
            assert echo(talk, peer, number) in {None, float(number)}
            peer.clock.now_s += 0.05


def test_off_and_its_read_back_after_a_cancelled_question() -> None:
    """The answers of the cancelled question come just before those of the read-back."""
    peer = Peer()
    with simulated(peer, TALK) as talk:
        talk.open()
        peer.fates = deque([Fate(late_s=0.3, cancel=True)])
        assert echo(talk, peer, 7) is None
        peer.cancel.clear()
        with talk.impatient(1.2, repeats=False):
            began_s = peer.clock.now_s
            talk.tell_at_once("OUTP OFF")
            assert peer.told[-1] == "OUTP OFF"
            assert talk.ask("ECHO? 8", lambda text: parse_number(text, RULES)) == 8.0
            assert peer.clock.now_s - began_s < 0.5
        assert peer.openings == 1


def test_a_mark_is_asked_for_once_and_then_the_link_is_as_quick_as_before() -> None:
    peer = Peer()
    with simulated(peer, TALK) as talk:
        talk.open()
        peer.fates = deque([Fate(copies=0)])
        assert echo(talk, peer, 1) == 1.0
        peer.told.clear()
        assert echo(talk, peer, 2) == 2.0
        assert peer.told == ["ECHO? 2"]
        assert peer.openings == 1


def test_an_instrument_that_does_not_know_our_question_is_not_asked_it_for_ever() -> None:
    peer = Peer(knows_sync=False)
    with simulated(peer, TALK) as talk:
        talk.open()
        for number in range(3):
            peer.fates = deque([Fate(copies=0)])
            assert echo(talk, peer, number) == float(number)
        assert sum("*ESE?" in message for message in peer.told) == 1
        assert peer.openings == 4


def test_on_one_wire_without_a_question_of_our_own_silence_has_to_do() -> None:
    """No link is opened anew: that would change nothing on the same wire."""
    peer = Peer(shared_wire=True)
    with simulated(peer, MUTE) as talk:
        talk.open()
        for number in range(5):
            peer.fates = deque([Fate(late_s=1.3)])
            assert echo(talk, peer, number) == float(number)
        assert peer.openings == 1


def test_on_one_wire_a_question_that_was_answered_once_has_to_be_answered_again() -> None:
    peer = Peer(shared_wire=True)
    with simulated(peer, TALK) as talk:
        talk.open()
        peer.knows_sync = False
        peer.fates = deque([Fate(copies=0)])
        assert echo(talk, peer, 1) is None
        with pytest.raises(InstrumentError, match="as it did before"):
            talk.ask("ECHO? 2", str)


@pytest.mark.parametrize("first", ["", "OUTP OFF"])
def test_what_is_said_after_opening(first: str) -> None:
    """What has to be said before the instrument obeys; and "off" both before and after it."""
    peer = Peer()
    settings_ = LinkSettings(prepare=("SYST:REM", "DISP OFF"), settle_s=0.5)
    with simulated(peer, settings_) as talk:
        talk.open(first)
    said = [first] if first else []
    assert peer.told == [*said, "SYST:REM", "DISP OFF", *said, "*IDN?"]


class Babbler(PeerTransport):
    """A link over which somebody sends all the time, whatever is asked."""

    def read_piece(self, wait_s: float, left_s: float) -> Piece:
        self._peer.clock.now_s += 0.001
        return Piece(b"+1.0\n", False)

    def pending(self) -> bool:
        return True

    def drain(self, quiet_s: float) -> bytes:
        self._peer.clock.now_s += 10 * quiet_s
        return b"+1.0\n"


@pytest.mark.parametrize("how", [TALK, MUTE], ids=["", "without a question of our own"])
@pytest.mark.parametrize("shared_wire", [False, True], ids=["socket", "one wire"])
def test_one_who_never_stops_is_given_up_in_time(how: LinkSettings, shared_wire: bool) -> None:
    peer = Peer(shared_wire=shared_wire)
    peer.connect = lambda address, settings: Babbler(peer, peer.wire)  # type: ignore[method-assign]
    with simulated(peer, how) as talk:
        with pytest.raises(InstrumentError) as caught:
            talk.open()
        assert caught.value.kind in {"timeout", "garbled"}
        assert peer.clock.now_s < 15.0


def test_one_who_begins_to_babble_later_is_given_up_in_time() -> None:
    peer = Peer()
    with simulated(peer, TALK) as talk:
        talk.open()
        peer.connect = lambda address, settings: Babbler(peer, peer.wire)  # type: ignore[method-assign]
        talk._opener = peer.connect
        talk.close()
        assert echo(talk, peer, 7) is None
        assert peer.clock.now_s < 30.0


@pytest.mark.parametrize(("hurry", "gap_s"), [(False, 0.2), (True, 0.05)])
def test_the_gap_between_two_messages_is_kept_and_short_in_a_hurry(hurry: bool, gap_s: float) -> None:
    peer = Peer()
    with simulated(peer, LinkSettings(gap_s=0.2)) as talk:
        talk.open()
        talk.tell("VOLT 5")
        began_s = peer.clock.now_s
        (talk.tell_at_once if hurry else talk.tell)("OUTP OFF")
        assert peer.clock.now_s - began_s == pytest.approx(gap_s)
