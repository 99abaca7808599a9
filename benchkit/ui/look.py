"""How things look: shapes, words and colours, in one place and without a terminal.

Rules
-----
* A status is a word, then a shape, then a place on the screen, and only then a colour.
* Only characters that the plain Linux console fonts hold are drawn: `SAFE` lists them.  ``ohm`` is written out.
* Colours keep a contrast of at least 4.5:1 against the ground that they stand on (WCAG 2.1, 1.4.3), and no two verdicts
  differ in red against green alone: blue, orange and yellow stay apart for colour-blind eyes.
"""

from __future__ import annotations

from typing import Final

from benchkit.events import Verdict
from benchkit.session.front import Energised

BLOCK: Final = "█"
LIGHT_SHADE: Final = "░"
SHADE: Final = "▒"
UP: Final = "▲"
DOWN: Final = "▼"
DISC: Final = "●"
RULE: Final = "─"
DOT: Final = "·"

SAFE: Final = frozenset("█░▒▲▼●°±µ·─│┌┐└┘├┤┬┴┼═║╔╗╚╝")
"""Characters beyond ASCII that the screens may draw."""

VERDICT_WORDS: Final[dict[Verdict, str]] = {"pass": "pass", "undecided": "undecided", "fail": "fail"}
VERDICT_SHAPES: Final[dict[Verdict, str]] = {"pass": DISC, "undecided": SHADE, "fail": DOWN}
VERDICT_ORDER: Final[tuple[Verdict, ...]] = ("pass", "undecided", "fail")
"""The places that the three verdicts always take, from left to right."""

SUPPLY_WORDS: Final[dict[Energised, str]] = {
    "off": "SUPPLY OFF",
    "on": "SUPPLY ON",
    "unknown": "SUPPLY UNKNOWN",
}
SUPPLY_SHAPES: Final[dict[Energised, str]] = {"off": RULE * 2, "on": UP + UP, "unknown": SHADE * 2}

GROUND: Final = "#10151b"
PANEL: Final = "#1b232c"
INK: Final = "#f2efe6"
QUIET: Final = "#a9b4bf"
LINE: Final = "#5f6f7f"
STRONG: Final = "#ffffff"
CARE: Final = "#ffd166"
RED_LEAD: Final = "#ff9a8a"
PASS: Final = "#7cc8ff"
UNDECIDED: Final = "#ffe08a"
FAIL: Final = "#ff9d5c"
ENERGISED: Final = "#ffc233"
UNKNOWN: Final = "#e6a8ff"

VERDICT_COLOURS: Final[dict[Verdict, str]] = {"pass": PASS, "undecided": UNDECIDED, "fail": FAIL}
SUPPLY_COLOURS: Final[dict[Energised, str]] = {"off": QUIET, "on": ENERGISED, "unknown": UNKNOWN}

TEXT_COLOURS: Final = (INK, QUIET, STRONG, CARE, RED_LEAD, PASS, UNDECIDED, FAIL, ENERGISED, UNKNOWN)
"""Every colour that text is written in, on GROUND or PANEL or (reversed) under them."""


def contrast(first: str, second: str) -> float:
    """Return the contrast ratio of two colours.

    Parameters
    ----------
    first, second : str
        Colours as ``#rrggbb``.

    Returns
    -------
    float
        From 1 (the same) to 21 (black on white).

    Notes
    -----
    WCAG 2.1, definitions of "contrast ratio" and "relative luminance".
    """
    lighter, darker = sorted((_luminance(first), _luminance(second)), reverse=True)
    return (lighter + 0.05) / (darker + 0.05)


def _luminance(colour: str) -> float:
    channels = (int(colour[at : at + 2], 16) / 255.0 for at in (1, 3, 5))
    red, green, blue = (part / 12.92 if part <= 0.03928 else ((part + 0.055) / 1.055) ** 2.4 for part in channels)
    return 0.2126 * red + 0.7152 * green + 0.0722 * blue


def safe(text: str) -> str:
    """Return `text` with characters that a plain console font lacks written out.

    Words come from procedures and designs, which may hold anything; what can't be drawn everywhere is replaced.
    """
    if text.isascii():
        return text
    return "".join(_safe_character(character) for character in text)


_WRITTEN: Final = {
    "\u03a9": "ohm",
    "\u2126": "ohm",
    "μ": "µ",
    "–": "-",
    "—": "-",
    "−": "-",
    "‘": "'",
    "’": "'",
    "“": '"',
    "”": '"',
    "…": "...",
    "×": "x",
    "→": "->",
    "←": "<-",
    "≤": "<=",
    "≥": ">=",
    "≈": "about ",
    "√": "root ",
    "€": "EUR",
    "\u00a0": " ",
    "\u202f": " ",
    "\u2009": " ",
}


def _safe_character(character: str) -> str:
    if character in _WRITTEN:
        return _WRITTEN[character]
    if character.isascii() or character in SAFE or ("\u00a1" <= character <= "\u00ff" and character.isalpha()):
        return character
    return character if character.isalpha() else "?"
