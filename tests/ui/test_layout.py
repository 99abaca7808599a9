from __future__ import annotations

import pytest

from benchkit.ui.layout import layout_for


@pytest.mark.parametrize(
    ("size", "layout"),
    [
        ((39, 40), "tiny"),
        ((200, 11), "tiny"),
        ((40, 12), "small"),
        ((79, 50), "small"),
        ((120, 23), "small"),
        ((80, 24), "full"),
        ((120, 33), "full"),
        ((120, 40), "roomy"),
    ],
)
def test_layouts(size: tuple[int, int], layout: str) -> None:
    assert layout_for(*size) == layout
