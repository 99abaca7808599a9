from __future__ import annotations

import pytest

from benchkit.ui.entry import entry_problem


@pytest.mark.parametrize("text", ["0042", " R. Holm ", "Ünit/7", "x" * 40])
def test_usable(text: str) -> None:
    assert entry_problem("operator", text) == ""


@pytest.mark.parametrize(("text", "says"), [("", "empty"), ("   ", "empty"), ("a\x1bb", "printed"), ("x" * 41, "41")])
def test_unusable(text: str, says: str) -> None:
    assert says in entry_problem("serial number", text)
    assert "serial number" in entry_problem("serial number", text)
