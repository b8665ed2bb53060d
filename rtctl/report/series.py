"""From a million rows to pixel columns: smallest and largest value of each column of time, packed for a page.

A drawing of the reduced series covers the same pixels as one of all rows, because every column keeps its extremes.
All records of a report share one grid of time, so that their curves lie over each other and zoom together.
"""

import base64
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

MAX_COLUMNS = 1500
ROWS_PER_COLUMN = 2  # at least: a column without a row would be a gap in the curve
EMPTY = -32768  # in place of a value: nothing in this column
STEPS = 32767  # a packed value is a whole number of steps on each side of the middle


@dataclass(frozen=True)
class Grid:
    """Columns of equal width over a span of time."""

    start_s: float
    width_s: float
    columns: int

    @property
    def edges_s(self) -> np.ndarray:
        """Borders of the columns, (columns + 1,)."""
        return self.start_s + self.width_s * np.arange(self.columns + 1)


def shared_grid(times_s: Sequence[np.ndarray], period_s: float, most: int = MAX_COLUMNS) -> Grid:
    """The grid over all records' times; at most `most` columns, each wide enough for two rows."""
    filled = [times for times in times_s if len(times)]
    if not filled:
        return Grid(0.0, period_s, 1)
    start_s = min(float(times[0]) for times in filled)
    end_s = max(float(times[-1]) for times in filled) + period_s
    columns = int(np.clip((end_s - start_s) / (ROWS_PER_COLUMN * period_s), 1, most))
    return Grid(start_s, (end_s - start_s) / columns, columns)


def extremes(times_s: np.ndarray, values: np.ndarray, grid: Grid) -> tuple[np.ndarray, np.ndarray]:
    """Smallest and largest value of each column, NaN where it has no row.

    times_s  (rows,)        rising
    values   (rows, ...)

    Returns two arrays (columns, ...).
    """
    borders = np.searchsorted(times_s, grid.edges_s)
    low = np.full((grid.columns, *values.shape[1:]), np.nan)
    high = low.copy()
    has_rows = np.flatnonzero(np.diff(borders) > 0)
    if len(has_rows):
        inside = values[borders[0] : borders[-1]]
        starts = borders[has_rows] - borders[0]
        low[has_rows] = np.fmin.reduceat(inside, starts, axis=0)
        high[has_rows] = np.fmax.reduceat(inside, starts, axis=0)
    return low, high


def curve(times_s: np.ndarray, values: np.ndarray, grid: Grid) -> np.ndarray:
    """Two points per column, its extremes, in the order in which the signal goes through them. (2 * columns,)"""
    low, high = extremes(times_s, values, grid)
    borders = np.minimum(np.searchsorted(times_s, grid.edges_s), max(len(values) - 1, 0))
    at_border = values[borders] if len(values) else np.zeros(grid.columns + 1)
    rising = at_border[1:] >= at_border[:-1]
    points = np.empty(2 * grid.columns)
    points[0::2] = np.where(rising, low, high)
    points[1::2] = np.where(rising, high, low)
    return points


def pack(points: np.ndarray) -> dict[str, Any]:
    """A curve as 16-bit steps: rounding is below 1/65000 of the curve's own range, less than a pixel at any screen height."""
    finite = points[np.isfinite(points)]
    low, high = (float(finite.min()), float(finite.max())) if len(finite) else (0.0, 0.0)
    middle, half = 0.5 * (low + high), 0.5 * (high - low)
    scale = half / STEPS if half > 0.0 else 1.0
    steps = np.full(points.shape, EMPTY, "<i2")
    known = np.isfinite(points)
    steps[known] = np.rint((points[known] - middle) / scale).astype("<i2")
    return {"middle": middle, "scale": scale, "steps": base64.b64encode(steps.tobytes()).decode()}


def pack_margins(low: np.ndarray) -> str:
    """Margins in [0, 1] as bytes: 0 at or beyond the limit, 254 far from it, 255 where there is no row. (columns, watches)"""
    shades = np.ceil(254.0 * np.clip(np.nan_to_num(low, nan=0.0), 0.0, 1.0)).astype(np.uint8)
    shades[np.isnan(low)] = 255
    return base64.b64encode(shades.tobytes()).decode()
