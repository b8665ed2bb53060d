"""Tables as text, as wide as the terminal; without colour where the output is not one."""

import io
import shutil
import sys
from typing import Any

WIDTH_WITHOUT_TERMINAL = 160


def table_text(*parts: Any) -> str:
    """What rich would print for tables and lines, as one string without a line end."""
    from rich.console import Console

    buffer = io.StringIO()
    width = shutil.get_terminal_size((WIDTH_WITHOUT_TERMINAL, 24)).columns
    console = Console(file=buffer, width=width, force_terminal=sys.stdout.isatty(), highlight=False, markup=False)
    for part in parts:
        console.print(part)
    lines = buffer.getvalue().rstrip("\n").split("\n")
    return "\n".join(line.rstrip() for line in lines)
