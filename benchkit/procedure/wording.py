"""What the words in braces of a procedure stand for, for one design."""

from __future__ import annotations

import math
from collections.abc import Mapping

from benchkit import quantities
from benchkit.procedure.items import DRIVE_SHARES
from benchkit.procedure.sizing import LOAD_OHM, discharge_text, drive_peak_v, rails_text
from benchkit.stage.design import Design, target_drop_v


def words_of(design: Design, positive_v: float, negative_v: float, limit_a: float) -> dict[str, str]:
    """Return each word with what it stands for, at these rails (V) and this limit (A)."""
    trimmer = design.spreader.trimmer
    both = "the rail" if design.single_supply else "both rails"
    words = {
        "design": design.name,
        "limit": quantities.show(limit_a, "A"),
        "rails": rails_text(positive_v, negative_v),
        "target": f"{quantities.show(target_drop_v(design), 'V')} ± {design.target.tolerance:.0%}",
        "discharge_time": discharge_text(design),
        "both_rails": both,
        "Both_rails": both.capitalize(),
        "least_bias": "No trimmer: the parts set the bias",
        "turns": "",
        "arm": "",
        "more_bias_way": "",
        "less_bias_way": "",
    }
    words["load"] = quantities.show(LOAD_OHM, "ohm", 2)
    for word, act in (("drive", "drive the stage"), ("third", "drive at a third of full power")):
        rms_v = drive_peak_v(design, DRIVE_SHARES[act]) / math.sqrt(2.0)
        words[word] = quantities.show(rms_v, "V", 2)
        words[f"{word}_power"] = quantities.show(rms_v**2 / LOAD_OHM, "W", 2)
    if trimmer is not None:
        ways = ("clockwise", "anticlockwise")
        words["least_bias"] = "Trimmer at its least-bias end"
        words["turns"] = f"{trimmer.turns:g}"
        words["arm"] = "lower and upper" if trimmer.arm == "between" else trimmer.arm
        words["more_bias_way"] = trimmer.raises_bias
        words["less_bias_way"] = ways[1 - ways.index(trimmer.raises_bias)]
    return words


def fill(text: str, words: Mapping[str, str]) -> str:
    """Put what they stand for in place of the words in braces."""
    for word, value in words.items():
        text = text.replace("{" + word + "}", value)
    return text
