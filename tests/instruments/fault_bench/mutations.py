"""Replies as instruments send them, and what a bad line, a cheap firmware or a mixed-up driver makes of them."""

from __future__ import annotations

import random
from collections.abc import Callable

_ALPHABET = "0123456789+-.,eE ONFLonfl\r\t\x00\x07\x1b\x1c\x1f\x7f\x80\x85\xa0\xb2\xb5\xb9\xff;:_%#'\"VAmk"


def plain(draw: random.Random) -> str:
    """Return a reply that a sound instrument could send to one of the questions."""
    kind = draw.randrange(8)
    if kind == 0:
        return f"{_value(draw):+.{draw.randrange(1, 9)}E}"
    if kind == 1:
        return f"{_value(draw):.{draw.randrange(0, 7)}f}"
    if kind == 2:
        return ",".join(f"{_value(draw):+.5E}" for _ in range(2))
    if kind == 3:
        return ",".join(draw.choice(["1", "0", "ON", "OFF"]) for _ in range(2))
    if kind == 4:
        return ",".join(str(draw.randrange(0, 70000)) for _ in range(2))
    if kind == 5:
        return draw.choice(["+9.90000000E+37", "-9.9E37", "9.91E37", "OL", "-OL", "INF", "OVLD", "NAN"])
    if kind == 6:
        return draw.choice(["1", "0", "+0", "-0", "0.", ".5", "65535", "65536", "1E1", "1e-9", "8.999E37"])
    return draw.choice(['+0,"No error"', '-113,"Undefined header"', "Own,Meter,M-1,1.0", ""])


def _value(draw: random.Random) -> float:
    return draw.choice([-1.0, 1.0]) * draw.uniform(1.0, 10.0) * 10.0 ** draw.randrange(-9, 9)


def _insert(draw: random.Random, text: str) -> str:
    place = draw.randrange(len(text) + 1)
    return text[:place] + draw.choice(_ALPHABET) + text[place:]


def _replace(draw: random.Random, text: str) -> str:
    place = draw.randrange(len(text)) if text else 0
    return text[:place] + draw.choice(_ALPHABET) + text[place + 1 :]


def _flip(draw: random.Random, text: str) -> str:
    if not text:
        return text
    place = draw.randrange(len(text))
    return text[:place] + chr(ord(text[place]) ^ (1 << draw.randrange(8))) + text[place + 1 :]


def _cut(draw: random.Random, text: str) -> str:
    return text[: draw.randrange(len(text) + 1)]


def _behead(draw: random.Random, text: str) -> str:
    return text[draw.randrange(len(text) + 1) :]


def _delete(draw: random.Random, text: str) -> str:
    place = draw.randrange(len(text)) if text else 0
    return text[:place] + text[place + 1 :]


def _join(draw: random.Random, text: str) -> str:
    return text + draw.choice(["", ",", ";", " ", "\r", "\t"]) + plain(draw)


def _surround(draw: random.Random, text: str) -> str:
    return draw.choice(["", " ", "\r", "\t", "\xa0", "\x1c"]) + text + draw.choice(["", " ", "\r", " V", "V", "\x85"])


def _swap_case(draw: random.Random, text: str) -> str:
    return text.swapcase()


_MUTATIONS: tuple[Callable[[random.Random, str], str], ...] = (
    _insert,
    _replace,
    _flip,
    _cut,
    _behead,
    _delete,
    _join,
    _surround,
    _swap_case,
)


def mutated(draw: random.Random, text: str) -> str:
    """Return a reply after one to three mutations."""
    for _ in range(draw.randrange(1, 4)):
        text = draw.choice(_MUTATIONS)(draw, text)
    return text


def reply(draw: random.Random) -> str:
    """Return one reply: sound, mutated, or nothing but noise.  All characters fit into one byte."""
    kind = draw.random()
    if kind < 0.15:
        return plain(draw)
    if kind < 0.9:
        return mutated(draw, plain(draw))
    if kind < 0.95:
        return "".join(draw.choice(_ALPHABET) for _ in range(draw.randrange(0, 12)))
    return draw.randbytes(draw.randrange(0, 40)).decode("latin-1")
