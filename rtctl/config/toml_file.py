"""A TOML file read whole, with the line of every key: what messages about its content point to.

The standard library's parser keeps no lines, so a small scanner of the text finds them. It only has to be right about files the
parser has accepted, and only for messages: a key it does not find is reported without a line.
"""

import difflib
import hashlib
import re
import tomllib
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from rtctl.errors import ConfigError, Finding

BYTES_MAX = 4_000_000  # a file longer than this is not a file of settings

KeyPath = tuple[str | int, ...]

_HEADER = re.compile(r"\s*(\[{1,2})\s*(.+?)\s*\]{1,2}\s*(?:#.*)?$")
_KEY = re.compile(r"""\s*((?:[A-Za-z0-9_-]+|"[^"]*"|'[^']*')(?:\s*\.\s*(?:[A-Za-z0-9_-]+|"[^"]*"|'[^']*'))*)\s*=(.*)$""", re.S)
_PART = re.compile(r"""[A-Za-z0-9_-]+|"[^"]*"|'[^']*'""")


@dataclass(frozen=True)
class Document:
    """Nested tables from a file or from Python, and how to name a place in them."""

    name: str  # as the user wrote it
    data: dict[str, Any]
    lines: dict[KeyPath, int] = field(default_factory=dict, repr=False)  # from 1; empty for data from Python
    digest: str = ""  # SHA-256 of the file, hex

    def where(self, *path: str | int) -> str:
        """`file:line: key path` of a key, e.g. `arm.toml:12: joint[2].body.mass_kg`; the line is the nearest known one."""
        known = next((self.lines[path[:k]] for k in range(len(path), 0, -1) if path[:k] in self.lines), None)
        place = self.name if known is None else f"{self.name}:{known}"
        return f"{place}: {key_text(path)}" if path else place


def key_text(path: KeyPath) -> str:
    """A key path as messages write it: `joint[2].body.mass_kg`."""
    text = ""
    for part in path:
        text += f"[{part}]" if isinstance(part, int) else f".{part}"
    return text.removeprefix(".")


def read_toml(path: Path | str) -> Document:
    """The file's content. Raises ConfigError with one sentence when it cannot be read."""
    name = str(path)
    path = Path(path)
    try:
        if path.is_dir():
            raise _refusal(name, "a TOML file", "a folder")
        with path.open("rb") as file:
            raw = file.read(BYTES_MAX + 1)
    except FileNotFoundError:
        raise _missing(path, name) from None
    except OSError as error:
        raise _refusal(name, "a readable TOML file", (error.strerror or str(error)).lower()) from None
    if len(raw) > BYTES_MAX:
        raise _refusal(name, f"a TOML file of at most {BYTES_MAX} bytes", "a longer one")
    try:
        text = raw.decode()
        data = tomllib.loads(text)
    except UnicodeDecodeError as error:
        raise _refusal(name, "TOML, which is UTF-8 text", f"byte {raw[error.start]:#04x} at position {error.start}") from None
    except tomllib.TOMLDecodeError as error:
        raise _not_toml(name, str(error)) from None
    except RecursionError:
        raise _refusal(name, "TOML", "tables or lists nested too deep") from None
    return Document(name, data, key_lines(text), hashlib.sha256(raw).hexdigest())


def _refusal(name: str, expected: str, got: str, likely: str = "", next_step: str = "") -> ConfigError:
    return ConfigError.from_findings([Finding(name, expected, got, likely, next_step)])


def _missing(path: Path, name: str) -> ConfigError:
    try:
        others = sorted(other.name for other in path.parent.glob("*.toml"))
    except OSError:
        others = []
    near = difflib.get_close_matches(path.name, others, 1)
    if near:
        return _refusal(name, "an existing file", "none", f"The nearest in that folder is {near[0]}.")
    likely = "" if path.parent.is_dir() else f"There is no folder {path.parent} either."
    return _refusal(name, "an existing file", "none", likely)


def _not_toml(name: str, message: str) -> ConfigError:
    match = re.search(r"\s*\(at line (\d+), column (\d+)\)$", message)
    where = f"{name}:{match[1]}:{match[2]}" if match else name
    what = message[: match.start()] if match else message
    return _refusal(where, "TOML", what[:1].lower() + what[1:])


def key_lines(text: str) -> dict[KeyPath, int]:
    """Line numbers, from 1, of the keys, tables and table-array elements of a valid TOML text."""
    lines: dict[KeyPath, int] = {}
    table: KeyPath = ()
    counts: dict[KeyPath, int] = {}
    value = _Value()
    for number, line in enumerate(text.split("\n"), 1):
        if value.open:
            value.read(line)
            continue
        header = _HEADER.match(line)
        key = _KEY.match(line)
        if line.lstrip().startswith("[") and header:
            table = _resolve(_parts(header[2]), counts)
            if header[1] == "[[":
                index = counts.get(table, 0)
                counts[table] = index + 1
                lines.setdefault(table, number)
                table = (*table, index)
            lines.setdefault(table, number)
        elif key:
            parts = _parts(key[1])
            for k in range(1, len(parts) + 1):
                lines.setdefault((*table, *parts[:k]), number)
            value.read(key[2])
    return lines


def _parts(text: str) -> KeyPath:
    return tuple(part.strip("\"'") for part in _PART.findall(text))


def _resolve(parts: KeyPath, counts: dict[KeyPath, int]) -> KeyPath:
    """The path of a table header: names of table arrays before the last part mean their newest element."""
    path: KeyPath = ()
    for k, part in enumerate(parts):
        path = (*path, part)
        if path in counts and k < len(parts) - 1:
            path = (*path, counts[path] - 1)
    return path


class _Value:
    """Follows a value over lines: is a bracket or a multi-line string still open?"""

    _TOKEN = re.compile(r'"""|\'\'\'|"(?:[^"\\]|\\.)*"|\'[^\']*\'|#.*|[\[\]{}]')

    def __init__(self) -> None:
        self._depth = 0
        self._quote = ""

    @property
    def open(self) -> bool:
        """True when the next line still belongs to the value."""
        return bool(self._quote) or self._depth > 0

    def read(self, line: str) -> None:
        """Take the rest of a line."""
        place = 0
        while place < len(line):
            if self._quote:
                end = line.find(self._quote, place)
                if end < 0:
                    return
                place, self._quote = end + 3, ""
                continue
            token = self._TOKEN.search(line, place)
            if token is None:
                return
            place = token.end()
            if token[0] in ('"""', "'''"):
                self._quote = token[0]
            elif token[0] in "[{":
                self._depth += 1
            elif token[0] in "]}":
                self._depth -= 1
