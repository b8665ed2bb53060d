"""Reads a CSV file of waypoints: a column of times and one per joint, units in the header. Reports everything wrong at once.

    t[s],joint_1[rad],joint_2[rad]
    0.0,0.10,-0.40
    0.5,0.25,-0.35

Joints may stand in any order. Rows in messages count from 1 and do not count the header.
"""

import csv
import difflib
import math
import re
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt

from rtctl.errors import ConfigError, Finding

FloatArray = npt.NDArray[np.float64]

REPORTED_CELLS = 10  # a file with the wrong decimal sign has thousands of the same mistake
_HEADING = re.compile(r"\s*(?P<name>[^\[\]]*?)\s*\[\s*(?P<unit>[^\[\]]*?)\s*\]\s*")
_UNIT_HELP = {
    "deg": "Multiply by pi/180 and write rad.",
    "degree": "Multiply by pi/180 and write rad.",
    "degrees": "Multiply by pi/180 and write rad.",
    "°": "Multiply by pi/180 and write rad.",
    "mm": "Divide by 1000 and write m.",
    "ms": "Divide by 1000 and write s.",
}


@dataclass(frozen=True)
class Waypoints:
    """Checked content of a waypoint file, columns in the arm's joint order."""

    t: FloatArray  # (m,) s, from 0, strictly increasing
    q: FloatArray  # (m, n) rad or m


def read_waypoints(path: Path, joint_names: Sequence[str], units: Sequence[str]) -> Waypoints:
    """The waypoints of a file, times counted from the first row. Raises ConfigError with all findings."""
    try:
        with path.open(newline="", encoding="utf-8-sig") as file:
            rows = [row for row in csv.reader(file) if any(cell.strip() for cell in row)]
    except OSError as error:
        finding = Finding(str(path), "a CSV file that can be read", str(error.strerror), next="Check the path in the run file.")
        raise ConfigError.from_findings([finding]) from error
    except (UnicodeDecodeError, csv.Error) as error:
        raise ConfigError.from_findings([Finding(str(path), "CSV text in UTF-8", str(error))]) from error
    header = rows[0] if rows else []
    columns, findings = _columns(str(path), header, joint_names, units)
    table, cell_findings = _table(str(path), rows[1:], len(header))
    findings += cell_findings
    if "t" in columns:
        findings += _time_findings(str(path), table[:, columns["t"]])
    if findings:
        raise ConfigError.from_findings(findings)
    t = table[:, columns["t"]]
    return Waypoints(t - t[0], np.ascontiguousarray(table[:, [columns[name] for name in joint_names]]))


def _columns(
    path: str, header: list[str], joint_names: Sequence[str], units: Sequence[str]
) -> tuple[dict[str, int], list[Finding]]:
    """Index of each known column by its name, `t` for time, and what is wrong with the header."""
    expected_units = {"t": "s", **dict(zip(joint_names, units, strict=True))}
    columns: dict[str, int] = {}
    findings: list[Finding] = []
    for k, text in enumerate(header):
        where = f"{path}: column {k + 1}"
        match = _HEADING.fullmatch(text)
        name = match["name"] if match else text.strip()
        if name not in expected_units:
            near = difflib.get_close_matches(name, expected_units, 1)
            likely = f"The nearest is {near[0]}." if near else ""
            findings.append(Finding(where, f"t or a joint of the arm ({', '.join(joint_names)})", repr(name), likely))
            continue
        unit = match["unit"] if match else ""
        if unit != expected_units[name]:
            expected = f"{name}[{expected_units[name]}]"
            hint = _UNIT_HELP.get(unit.lower(), f"Write {expected_units[name]}.")
            findings.append(Finding(where, expected, repr(text.strip()), next=hint))
        if name in columns:
            findings.append(Finding(where, "a column of its own", f"{name} again (first in column {columns[name] + 1})"))
        columns.setdefault(name, k)
    missing = [f"{name}[{unit}]" for name, unit in expected_units.items() if name not in columns]
    if missing:
        likely = "" if header else "The file is empty."
        findings.append(
            Finding(f"{path}: header", f"complete: missing {', '.join(missing)}", ",".join(header) or "nothing", likely)
        )
    return columns, findings


def _table(path: str, rows: list[list[str]], width: int) -> tuple[FloatArray, list[Finding]]:
    """The numbers of the file, NaN where there is none, and what is wrong with its cells."""
    table = np.full((len(rows), width), np.nan)
    findings: list[Finding] = []
    for r, row in enumerate(rows):
        if len(row) != width:
            findings.append(Finding(f"{path}: row {r + 1}", f"{width} cells, as in the header", str(len(row))))
            continue
        for k, cell in enumerate(row):
            try:
                table[r, k] = float(cell)
            except ValueError:
                pass
            if not math.isfinite(table[r, k]):
                findings.append(Finding(f"{path}: row {r + 1}, column {k + 1}", "a finite number", repr(cell.strip())))
    if len(rows) < 2:
        findings.append(Finding(f"{path}: rows", "at least 2 below the header", str(len(rows))))
    if len(findings) > REPORTED_CELLS:
        rest = len(findings) - REPORTED_CELLS
        more = Finding(f"{path}: rows", "numbers with a point as decimal sign", f"{rest} more cells that are not")
        findings = [*findings[:REPORTED_CELLS], more]
    return table, findings


def _time_findings(path: str, t: FloatArray) -> list[Finding]:
    """The first row whose time is not later than that of the row before."""
    for r in range(1, len(t)):
        if t[r] <= t[r - 1]:  # a cell without a number has its own finding
            likely = "The same instant twice." if t[r] == t[r - 1] else "Rows are out of order, or two recordings were joined."
            return [Finding(f"{path}: row {r + 1}", f"later than row {r} (t > {t[r - 1]:g} s)", f"{t[r]:g} s", likely)]
    return []
