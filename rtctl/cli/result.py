"""What a verb hands back: the JSON object, the text for people, and the exit code."""

import json
import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, TypeVar

import click

F = TypeVar("F", bound=Callable[..., Any])

NEGATIVE = 1


@dataclass(frozen=True)
class Result:
    """Outcome of a verb. `data` is printed with --json, `text` without."""

    data: Mapping[str, Any]
    text: str
    exit_code: int = 0


def json_option(function: F) -> F:
    """The option every verb has. It is read in `rtctl.cli.run_command`; the verb itself does not see it."""
    return click.option("--json", is_flag=True, expose_value=False, help="Print one JSON object.")(function)


def json_text(data: Mapping[str, Any]) -> str:
    """One line of JSON as RFC 8259 has it: numbers that are not finite become null, numpy values plain ones."""
    return json.dumps(_plain(data), allow_nan=False)


def _plain(value: Any) -> Any:
    if hasattr(value, "tolist"):
        value = value.tolist()
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, Mapping):
        return {str(key): _plain(entry) for key, entry in value.items()}
    if isinstance(value, (list, tuple)):
        return [_plain(entry) for entry in value]
    return value if value is None or isinstance(value, (bool, int, str)) else str(value)
