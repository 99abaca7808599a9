from __future__ import annotations

from io import StringIO

import pytest
from rich.console import Console
from rich.table import Table
from rich.text import Text

from benchkit.ui.widgets.cut import Cut, cut


@pytest.mark.parametrize("width", range(0, 20))
def test_no_text_is_wider_than_its_room_and_what_is_cut_says_so(width: int) -> None:
    text = Text("Rails by resistors")
    shown = cut(text, width)
    assert shown.cell_len <= width or width >= text.cell_len
    assert shown.plain == text.plain if width >= text.cell_len else shown.plain.endswith(".."[:width])
    assert text.plain == "Rails by resistors"


@pytest.mark.parametrize(("width", "line"), [(30, "Rails by res..       undecided"), (60, "Rails by resistors")])
def test_beside_a_column_of_its_own_width_it_is_cut_to_what_is_left(width: int, line: str) -> None:
    table = Table.grid(expand=True)
    table.add_column(ratio=1)
    table.add_column(justify="right", no_wrap=True)
    table.add_row(Cut(Text("Rails by resistors")), "       undecided")
    out = StringIO()
    Console(file=out, width=width).print(table)
    assert out.getvalue().splitlines()[0].startswith(line[:12])
    assert (".." in out.getvalue()) == (width == 30)
