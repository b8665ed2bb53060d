"""Tables as text: no colour and no trailing blanks where the output is not a terminal."""

import pytest
from rich.table import Table

from rtctl.cli.table import table_text


def test_table_is_plain_text(monkeypatch: pytest.MonkeyPatch) -> None:
    """Cells and headings are there, lines end where their text ends, and no escape codes appear."""
    monkeypatch.setenv("COLUMNS", "60")
    table = Table()
    table.add_column("law")
    table.add_column("RMS error [mrad]", justify="right")
    table.add_row("pid", "26.3")
    text = table_text(table, "verdict: pass")
    assert "\x1b" not in text
    assert text.splitlines()[-1] == "verdict: pass"
    assert not [line for line in text.splitlines() if line != line.rstrip()]
    assert max(len(line) for line in text.splitlines()) <= 60


def test_square_brackets_of_units_stay(monkeypatch: pytest.MonkeyPatch) -> None:
    """A unit in brackets is not taken for markup."""
    monkeypatch.setenv("COLUMNS", "60")
    assert table_text("torque [N m]") == "torque [N m]"
