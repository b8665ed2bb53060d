"""The findings of the benchmarks, as a table for people and as one object of ratios for programs."""

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

from tests.bench.ratios import Comparison, Times, compare


@dataclass(frozen=True)
class Finding:
    """One line of the table.

    key         name in the JSON object, ending in `_ratio`; "" = the line is for people only
    what        what was measured
    ours, other the two times or rates, as text
    comparison  their ratio; None = there is only one side
    aim         what is wanted of the ratio, as text
    note        what a reader must know to judge it
    """

    key: str
    what: str
    ours: str
    other: str = ""
    comparison: Comparison | None = None
    aim: str = ""
    note: str = ""


def time_text(ns: float) -> str:
    """A time in the unit that suits it."""
    if not abs(ns) < 1e6:
        return f"{ns * 1e-6:.1f} ms"
    return f"{ns:.0f} ns" if abs(ns) < 1e3 else f"{ns * 1e-3:.2f} us"


def rate_text(per_second: float) -> str:
    """A rate in cycles per second, to the hundred."""
    return f"{round(per_second, -2):,.0f}/s"


def faster(key: str, what: str, ours: Times, other: Times, aim: str = "", note: str = "") -> Finding:
    """How many times faster ours is than the other: other / ours."""
    found = compare(ours, other)
    return Finding(key, what, time_text(float(np.median(ours))), time_text(float(np.median(other))), found, aim, note)


def cost(key: str, what: str, ours: Times, base: Times, aim: str = "", note: str = "") -> Finding:
    """How many times the base ours takes: ours / base."""
    found = compare(base, ours)
    return Finding(key, what, time_text(float(np.median(ours))), time_text(float(np.median(base))), found, aim, note)


def as_json(findings: Iterable[Finding]) -> dict[str, object]:
    """`key` -> ratio, `key` with _spread -> spread of the sides against themselves, and which ratios cannot be told from 1."""
    result: dict[str, object] = {}
    unclear = []
    for finding in findings:
        if finding.key and finding.comparison is not None:
            result[finding.key] = round(finding.comparison.ratio, 4)
            result[f"{finding.key}_spread"] = round(finding.comparison.spread, 4)
            if not finding.comparison.tells:
                unclear.append(finding.key)
    result["cannot_tell"] = unclear
    return result


def as_text(title: str, findings: list[Finding]) -> str:
    """The findings of one subject as lines of equal columns."""
    head = ("", "ours", "other", "ratio", "A to A", "aim")
    rows = [head, *(_cells(finding) for finding in findings)]
    widths = [max(len(row[c]) for row in rows) for c in range(len(head))]
    lines = [title]
    for row, note in zip(rows, ["", *(finding.note for finding in findings)], strict=True):
        cells = [row[0].ljust(widths[0]), *(cell.rjust(width) for cell, width in zip(row[1:], widths[1:], strict=True))]
        lines.append("  ".join([" ", *cells, note]).rstrip())
    return "\n".join(lines)


def _cells(finding: Finding) -> tuple[str, ...]:
    found = finding.comparison
    if found is None:
        return finding.what, finding.ours, finding.other, "", "", finding.aim
    ratio = f"{found.ratio:.2f}" if found.tells else f"cannot tell ({found.ratio:.2f})"
    return finding.what, finding.ours, finding.other, ratio, f"{100.0 * found.spread:.0f} %", finding.aim
