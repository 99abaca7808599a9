"""Thousands of garbled, late, lost and doubled answers over real links: none is believed that isn't the instrument's.

Run as ``python -m tests.benchmarks.garbled_answers [QUESTIONS]`` (3000 for each link without a number; some minutes).
The instrument answers each question with the question's own number, garbled by chance; an answer may be believed when a
single line that was sent for this very question says it.  Then a million replies go to the parsers alone, beside a
second, strict reading of them.  It ends with status 1 when anything was believed wrongly.
"""

from __future__ import annotations

import sys
import time

from tests.instruments.fault_bench.bench import VARIANTS
from tests.instruments.test_replies_fuzz import campaign, talk


def main() -> int:
    questions = int(sys.argv[1]) if len(sys.argv) > 1 else 3000
    bad = 0
    for variant in VARIANTS:
        began = time.monotonic()
        wrong, got, refused = talk(variant, questions, questions)
        bad += len(wrong)
        took_s = time.monotonic() - began
        print(
            f"{variant}: {questions} questions in {took_s:.0f} s: {got} answers, {refused} refused, {len(wrong)} wrong"
        )
        for line in wrong[:5]:
            print(f"  {line}")
    began = time.monotonic()
    wrong, values = campaign(1, 1_000_000)
    bad += len(wrong)
    took_s = time.monotonic() - began
    print(f"parsers: 1000000 replies in {took_s:.0f} s: {values} with a value in them, {len(wrong)} read wrongly")
    for line in wrong[:5]:
        print(f"  {line}")
    return 1 if bad else 0


if __name__ == "__main__":
    sys.exit(main())
