"""Thousands of questions to instruments that answer late or not at all: no answer is taken for another question's.

Run as ``python -m tests.benchmarks.late_answers [QUESTIONS [SEED]]`` (300 for each link and dialect without a number;
some minutes).  It ends with status 1 when anything was believed wrongly.
"""

from __future__ import annotations

import sys
import time

from tests.instruments.fault_bench.bench import VARIANTS
from tests.instruments.test_fault_table_late import moody


def main() -> int:
    questions = int(sys.argv[1]) if len(sys.argv) > 1 else 300
    seed = int(sys.argv[2]) if len(sys.argv) > 2 else 1
    bad = 0
    for variant in VARIANTS:
        for link in ({}, {"sync": ""}):
            began = time.monotonic()
            wrong, got, refused, odd = moody(variant, seed, questions, link)
            bad += len(wrong)
            what = "without a question of our own" if link else "with a question of our own"
            took_s = time.monotonic() - began
            print(f"{variant}, {what}, {odd} messages late or lost: ", end="")
            print(f"{got} answers, {refused} refused, {len(wrong)} wrong, in {took_s:.0f} s", flush=True)
            for line in wrong[:5]:
                print(f"  {line}")
    print(f"{bad} wrong")
    return 1 if bad else 0


if __name__ == "__main__":
    sys.exit(main())
