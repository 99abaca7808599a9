"""Readings just outside the model's limits."""

from __future__ import annotations

import pytest

from benchkit.judge.limits import Limits
from benchkit.judge.rare import RARE_SHARE, is_rare
from benchkit.measure.readings import Reading


def volts(value: float | None, *, negative: bool = False) -> Reading:
    return Reading(
        point="spread", value=value, unit="V", overload=value is None, negative=negative, standard_uncertainty=1e-6,
        meter="m", function="dc volts",
    )  # fmt: skip


BOTH = Limits(1.0, 3.0, 2.0, "V", "the model")


@pytest.mark.parametrize(
    ("value", "limits", "rare"),
    [
        (3.0 + 0.99 * RARE_SHARE, BOTH, True),
        (3.0 + 1.01 * RARE_SHARE, BOTH, False),
        (1.0 - 0.99 * RARE_SHARE, BOTH, True),
        (1.0 - 1.01 * RARE_SHARE, BOTH, False),
        (3.0000001, BOTH, True),  # inside by less than its uncertainty, or outside: the same to a good unit
        (None, BOTH, False),
        (3.1, Limits(None, 3.0, 2.0, "V", "the model"), False),
        (0.9, Limits(1.0, None, 2.0, "V", "the model"), False),
        (3.1, Limits(3.0, 3.0, 3.0, "V", "the model"), False),
    ],
)
def test_near_means_within_a_share_of_the_half_width(value: float | None, limits: Limits, rare: bool) -> None:
    assert is_rare(volts(value), limits) is rare
