"""What each figure of the report shows: curves for those with a time axis, finished drawings (SVG) for the two without."""

from collections.abc import Sequence
from html import escape
from typing import Any

import numpy as np

from rtctl.compare import Event, Metrics, counted_rows, events, motion_seconds, row_seconds
from rtctl.record.reader import Record
from rtctl.report.series import curve, extremes, pack, pack_margins, shared_grid

# Colours of Okabe and Ito ("Color Universal Design", 2008), told apart with every common form of colour vision. Yellow is left out:
# too light for a line on white.
RECORD_COLOURS = ("#0072B2", "#D55E00", "#009E73", "#CC79A7", "#E69F00", "#56B4E9", "#000000")
TERM_COLOURS = ("#0072B2", "#E69F00", "#009E73", "#CC79A7", "#56B4E9", "#D55E00", "#7F7F7F", "#B0A000")
STRIP_COLUMNS = 500
HISTOGRAM_FIRST_US = 1.0
BINS_PER_DECADE = 12


def figure_data(records: Sequence[Record], metrics: Sequence[Metrics]) -> dict[str, Any]:
    """Everything the page's script draws, as plain values."""
    times = [motion_seconds(record) for record in records]
    period_s = max(record.header["period_ns"] for record in records) / 1e9
    grid = shared_grid(times, period_s)
    strip = shared_grid(times, period_s, STRIP_COLUMNS)
    same_reference = len({record.header["hashes"].get("reference") for record in records}) == 1
    return {
        "grid": {"start": grid.start_s, "width": grid.width_s, "columns": grid.columns},
        "strip": {"start": strip.start_s, "width": strip.width_s, "columns": strip.columns},
        "joints": _joints(records),
        "records": [
            {
                "label": found.label,
                "colour": RECORD_COLOURS[k % len(RECORD_COLOURS)],
                "terms": _terms(record),
                "stops": [[event.t_s, _mark(event)] for event in events(record) if event.what == "stop"],
                "position": [pack(curve(t_s, record.columns["q"][:, j], grid)) for j in range(_joint_count(record))],
                "reference": _reference(record, t_s, grid) if k == 0 or not same_reference else None,
                "error": [pack(curve(t_s, error[:, j], grid)) for j in range(_joint_count(record))],
                "torque": [_torque(record, t_s, j, grid) for j in range(_joint_count(record))],
                "effort": pack(curve(t_s, _accumulated_effort(record), grid)),
                "watches": record.header["watches"],
                "margins": pack_margins(extremes(t_s, record.columns["margins"], strip)[0]),
            }
            for k, (record, found, t_s, error) in enumerate(
                zip(records, metrics, times, map(_tracking_error, records), strict=True)
            )
        ],
        "termColours": TERM_COLOURS,
    }


def _mark(event: Event) -> str:
    """What stands beside the line of a stop: faults are named, commanded stops would only cover the curves."""
    return "" if event.text.endswith("commanded") else event.text


def _joint_count(record: Record) -> int:
    return len(record.joint_names)


def _joints(records: Sequence[Record]) -> list[dict[str, Any]]:
    longest = max(records, key=_joint_count)
    found = []
    for j, (name, unit) in enumerate(zip(longest.joint_names, longest.header["joint_units"], strict=True)):
        limit = longest.header["arm"]["limits"]["tau_max"][j]
        found.append({"name": name, "unit": unit, "torqueUnit": "N" if unit == "m" else "N m", "limit": limit})
    return found


def _terms(record: Record) -> list[str]:
    """Names of the terms of the first law in force."""
    laws = record.header["laws"]
    return list(laws[int(record.columns["law_index"][0])][1]) if record.row_count else []


def _tracking_error(record: Record) -> np.ndarray:
    """q_ref - q in the rows that count, NaN elsewhere. (rows, n)"""
    error: np.ndarray = record.columns["q_ref"] - record.columns["q"]
    error[~counted_rows(record)] = np.nan
    return error


def _reference(record: Record, t_s: np.ndarray, grid: Any) -> list[dict[str, Any]]:
    shown = record.columns["q_ref"].copy()
    shown[record.columns["law_status"] == 0] = np.nan  # before the law is called there is no reference
    return [pack(curve(t_s, shown[:, j], grid)) for j in range(_joint_count(record))]


def _torque(record: Record, t_s: np.ndarray, j: int, grid: Any) -> dict[str, Any]:
    terms = record.columns["terms"][:, : len(_terms(record)), j].astype(float)
    terms[record.columns["law_status"] == 0] = np.nan
    return {
        "out": pack(curve(t_s, record.columns["tau_out"][:, j], grid)),
        "terms": [pack(curve(t_s, terms[:, k], grid)) for k in range(terms.shape[1])],
    }


def _accumulated_effort(record: Record) -> np.ndarray:
    """Effort from the first counted row on, N^2 m^2 s, turning joints only. (rows,)"""
    turning = np.array([unit != "m" for unit in record.header["joint_units"]], bool)
    power = np.square(record.columns["tau_out"][:, turning]).sum(axis=1) * counted_rows(record)
    effort: np.ndarray = np.cumsum(power * row_seconds(record))
    return effort


# ---- drawings without a time axis ------------------------------------------------------------------------------------------------

_WIDTH, _HEIGHT = 560, 340
_LEFT, _RIGHT, _TOP, _BOTTOM = 64, 20, 16, 50


class _Frame:
    """A pair of axes: value to place on the paper, lines, ticks and titles."""

    def __init__(self, x_range: tuple[float, float], y_range: tuple[float, float], log: bool = False) -> None:
        self._x, self._y = (np.log10(x_range), np.log10(y_range)) if log else (np.array(x_range), np.array(y_range))
        self._log = log
        self.parts: list[str] = []

    def at(self, x: float, y: float) -> tuple[float, float]:
        """Place of a point, in pixels from the upper left."""
        if self._log:
            x, y = float(np.log10(x)), float(np.log10(y))
        across = (x - self._x[0]) / (self._x[1] - self._x[0])
        up = (y - self._y[0]) / (self._y[1] - self._y[0])
        return _LEFT + across * (_WIDTH - _LEFT - _RIGHT), _HEIGHT - _BOTTOM - up * (_HEIGHT - _TOP - _BOTTOM)

    def ticks(self, x_ticks: Sequence[float], y_ticks: Sequence[float], x_title: str, y_title: str) -> None:
        """Grid lines with numbers, and what the axes are."""
        bottom, right = _HEIGHT - _BOTTOM, _WIDTH - _RIGHT
        for tick in x_ticks:
            x = self.at(tick, 10.0 ** self._y[0] if self._log else self._y[0])[0]
            self.parts.append(f'<line class="grid" x1="{x:.1f}" y1="{_TOP}" x2="{x:.1f}" y2="{bottom}"/>')
            self.parts.append(f'<text x="{x:.1f}" y="{bottom + 17}" text-anchor="middle">{_tick(tick)}</text>')
        for tick in y_ticks:
            y = self.at(10.0 ** self._x[0] if self._log else self._x[0], tick)[1]
            self.parts.append(f'<line class="grid" x1="{_LEFT}" y1="{y:.1f}" x2="{right}" y2="{y:.1f}"/>')
            self.parts.append(f'<text x="{_LEFT - 8}" y="{y + 4:.1f}" text-anchor="end">{_tick(tick)}</text>')
        self.parts.append(f'<path class="axis" d="M{_LEFT} {_TOP}V{bottom}H{right}"/>')
        middle_x, middle_y = (_LEFT + right) / 2, (_TOP + bottom) / 2
        self.parts.append(f'<text x="{middle_x:.0f}" y="{_HEIGHT - 10}" text-anchor="middle">{escape(x_title)}</text>')
        turn = f"rotate(-90 16 {middle_y:.0f})"
        self.parts.append(f'<text x="16" y="{middle_y:.0f}" text-anchor="middle" transform="{turn}">{escape(y_title)}</text>')

    def drawing(self, title: str) -> str:
        """The finished SVG."""
        body = "".join(self.parts)
        return f'<svg viewBox="0 0 {_WIDTH} {_HEIGHT}" role="img" aria-label="{escape(title)}">{body}</svg>'


def _tick(value: float) -> str:
    return f"{value:.6g}"


def _nice_ticks(top: float) -> list[float]:
    """0 to just above `top` in four to nine steps of 1, 2 or 5 times a power of ten."""
    raw = top / 5.0 if top > 0.0 else 0.2
    power = 10.0 ** np.floor(np.log10(raw))
    step = next(factor * power for factor in (1.0, 2.0, 5.0, 10.0) if factor * power >= raw)
    return [float(step * k) for k in range(int(np.ceil(top * 1.02 / step)) + 1)] if top > 0.0 else [0.0, 1.0]


def marker(number: int, x: float, y: float, size: float = 6.0) -> str:
    """The mark of a record: shape and colour, so that it is known without colour too."""
    colour = RECORD_COLOURS[number % len(RECORD_COLOURS)]
    shapes = (
        f"M{x - size:.1f} {y:.1f}a{size} {size} 0 1 0 {2 * size} 0a{size} {size} 0 1 0 {-2 * size} 0Z",
        f"M{x - size:.1f} {y - size:.1f}h{2 * size}v{2 * size}h{-2 * size}Z",
        f"M{x:.1f} {y - 1.2 * size:.1f}l{1.2 * size} {2.1 * size}h{-2.4 * size}Z",
        f"M{x:.1f} {y - 1.3 * size:.1f}l{1.3 * size} {1.3 * size}l{-1.3 * size} {1.3 * size}l{-1.3 * size} {-1.3 * size}Z",
    )
    return f'<path d="{shapes[number % len(shapes)]}" fill="{colour}"/>'


def effort_against_error(metrics: Sequence[Metrics]) -> str:
    """One mark per record: how much torque it took (across) and how well it tracked (up). Empty when nothing can be shown."""
    shown = [
        (k, found.label + (", stopped" if found.faults else ""), found.effort_nm2_s, 1e3 * found.rms_error_rad)
        for k, found in enumerate(metrics)
        if np.isfinite(found.effort_nm2_s) and np.isfinite(found.rms_error_rad)
    ]
    if not shown:
        return ""
    x_ticks, y_ticks = _nice_ticks(max(row[2] for row in shown)), _nice_ticks(max(row[3] for row in shown))
    frame = _Frame((0.0, x_ticks[-1]), (0.0, y_ticks[-1]))
    frame.ticks(x_ticks, y_ticks, "effort [N² m² s]", "RMS tracking error [mrad]")
    taken: list[tuple[float, float]] = []
    for number, label, effort, error in sorted(shown, key=lambda row: row[3]):
        x, y = frame.at(effort, error)
        frame.parts.append(marker(number, x, y))
        left = x > _WIDTH - 170
        place_y = y + 4
        while any(abs(place_y - other_y) < 14 and abs(x - other_x) < 150 for other_x, other_y in taken):
            place_y -= 14
        taken.append((x, place_y))
        anchor, place_x = ("end", x - 12) if left else ("start", x + 12)
        frame.parts.append(f'<text x="{place_x:.1f}" y="{place_y:.1f}" text-anchor="{anchor}">{escape(label)}</text>')
    return frame.drawing("RMS tracking error against effort, one mark per record")


def lateness_histogram(records: Sequence[Record], metrics: Sequence[Metrics]) -> str:
    """How late the cycles woke up, both axes logarithmic so that single late cycles are seen. Empty when there are no rows."""
    late_us = [(record.columns["now_ns"] - record.columns["deadline_ns"]) / 1e3 for record in records]
    longest = max((float(late.max()) for late in late_us if len(late)), default=0.0)
    if longest <= 0.0:
        return ""
    decades = max(2, int(np.ceil(np.log10(longest / HISTOGRAM_FIRST_US) + 0.05)))
    edges = HISTOGRAM_FIRST_US * 10.0 ** np.linspace(0, decades, decades * BINS_PER_DECADE + 1)
    counts = [np.histogram(np.maximum(late, HISTOGRAM_FIRST_US), edges)[0] for late in late_us]
    most = max(int(count.max()) for count in counts)
    y_decades = max(1, int(np.ceil(np.log10(most + 1))))
    frame = _Frame((edges[0], edges[-1]), (0.5, 10.0**y_decades), log=True)
    x_ticks = [HISTOGRAM_FIRST_US * 10.0**k for k in range(decades + 1)]
    frame.ticks(x_ticks, [10.0**k for k in range(y_decades + 1)], "wake-up after the deadline [µs]", "cycles per bin")
    for number, count in enumerate(counts):
        filled = np.flatnonzero(count)
        if not len(filled):
            continue
        first, last = int(filled[0]), int(filled[-1])
        places = [frame.at(edges[k + side], max(count[k], 0.5)) for k in range(first, last + 1) for side in (0, 1)]
        line = "M" + "L".join(f"{x:.1f} {y:.1f}" for x, y in places)
        colour = RECORD_COLOURS[number % len(RECORD_COLOURS)]
        frame.parts.append(f'<path class="step" d="{line}" stroke="{colour}"/>')
        frame.parts.append(marker(number, *frame.at(float(np.sqrt(edges[last] * edges[last + 1])), count[last]), size=4.0))
    names = ", ".join(found.label for found in metrics)
    return frame.drawing(f"Histogram of wake-up lateness: {names}")
