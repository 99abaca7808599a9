"""How to speak with one instrument: what a profile's ``[link]`` and ``[link.line]`` become."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

PURE_LIBRARY = "@py"
"""The VISA library that needs no vendor's driver; links over it are watched more closely than over others."""

Parity = Literal["none", "odd", "even"]
Flow = Literal["none", "rts/cts", "xon/xoff", "dtr/dsr"]


@dataclass(frozen=True, kw_only=True)
class SerialLine:
    """The settings of a serial line.

    Parameters
    ----------
    baud : int
        Bits a second.
    data_bits : int
        5 to 8.
    parity : {"none", "odd", "even"}
    stop_bits : float
        1, 1.5 or 2.
    flow : {"none", "rts/cts", "xon/xoff", "dtr/dsr"}
        Who may stop whom.
    dtr, rts : bool
        These two lines on; some isolated leads take their power from them.
    """

    baud: int = 9600
    data_bits: int = 8
    parity: Parity = "none"
    stop_bits: float = 1
    flow: Flow = "none"
    dtr: bool = True
    rts: bool = True


@dataclass(frozen=True, kw_only=True)
class LinkSettings:
    """How to speak with one instrument.

    Parameters
    ----------
    read_termination, write_termination : str
        What ends a reply and a message.  A reply without any (then "") needs `ends_by_idle_s` on a stream.
    timeout_s : float
        For a plain question, s.
    open_timeout_s : float
        For opening, and for the first answer, s.
    gap_s : float
        The least time between two messages, s.
    settle_s : float
        Rest after opening, s.
    sync : str
        A question with a number of our own choice, ``{n}``, in its answer; it gets a link back into step.  "" when the
        instrument has none.
    ends_by_idle_s : float
        Above zero: a reply also ends after so long a silence, s.
    lock_timeout_s : float
        How long VXI-11 may wait for another's lock, s.
    line : SerialLine
    prepare : tuple of str
        Messages to send after opening.
    library : str
        The VISA library: ``@py``, or what PyVISA takes instead.
    """

    read_termination: str = "\n"
    write_termination: str = "\n"
    timeout_s: float = 2.0
    open_timeout_s: float = 3.0
    gap_s: float = 0.0
    settle_s: float = 0.0
    sync: str = "*ESE {n};*ESE?"
    ends_by_idle_s: float = 0.0
    lock_timeout_s: float = 0.0
    line: SerialLine = SerialLine()
    prepare: tuple[str, ...] = ()
    library: str = PURE_LIBRARY
