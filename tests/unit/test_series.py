"""Reduction to pixel columns: no extreme is lost, and packing costs less than a pixel."""

import base64

import numpy as np

from rtctl.report.series import EMPTY, STEPS, Grid, curve, extremes, pack, pack_margins, shared_grid

RNG = np.random.default_rng(3)


def unpack(packed: dict[str, object]) -> np.ndarray:
    """What the page's script makes of a packed curve."""
    steps = np.frombuffer(base64.b64decode(str(packed["steps"])), "<i2")
    values = float(str(packed["middle"])) + float(str(packed["scale"])) * steps.astype(float)
    return np.where(steps == EMPTY, np.nan, values)


def test_every_column_keeps_its_extremes() -> None:
    """Against a plain loop over the columns, with uneven times."""
    times = np.sort(RNG.uniform(0.0, 10.0, 5000))
    values = RNG.normal(size=5000)
    grid = shared_grid([times], 0.002, most=300)
    low, high = extremes(times, values, grid)
    for k in range(grid.columns):
        inside = values[(times >= grid.edges_s[k]) & (times < grid.edges_s[k + 1])]
        if len(inside):
            assert (low[k], high[k]) == (inside.min(), inside.max())
        else:
            assert np.isnan(low[k])
            assert np.isnan(high[k])


def test_a_single_spike_in_a_million_rows_stays() -> None:
    """One row far out is still at its place and at its height."""
    values = np.zeros(1_000_000)
    values[654_321] = 7.0
    times = np.arange(1_000_000) * 0.001
    points = curve(times, values, shared_grid([times], 0.001))
    assert points.max() == 7.0
    assert np.argmax(points) // 2 == 654_321 * 1500 // 1_000_000


def test_columns_without_rows_are_gaps() -> None:
    """Lost rows are not drawn over, neither at the ends nor in the middle."""
    times = np.concatenate([np.arange(2.0, 4.0, 0.01), np.arange(6.0, 8.0, 0.01)])
    points = curve(times, times, Grid(0.0, 0.1, 100))
    seen = ~np.isnan(points[0::2])
    assert list(np.flatnonzero(seen)) == [*range(20, 40), *range(60, 80)]


def test_rising_and_falling_columns_keep_their_direction() -> None:
    """A sawtooth does not turn into a staircase running backwards."""
    times = np.arange(0.0, 1.0, 0.01)
    grid = Grid(0.0, 0.1, 10)
    assert np.all(np.diff(curve(times, times, grid)) > 0.0)
    assert np.all(np.diff(curve(times, -times, grid)) < 0.0)


def test_short_records_keep_every_row() -> None:
    """With two rows to a column nothing is dropped."""
    times = np.arange(200) * 0.001
    values = np.sin(40.0 * times)
    grid = shared_grid([times], 0.001)
    assert grid.columns == 100
    assert set(curve(times, values, grid)) == set(values)


def test_records_of_different_length_share_a_grid() -> None:
    """The grid covers the earliest and the latest row of all of them; an empty record does not matter."""
    grid = shared_grid([np.array([-1.0, 0.0]), np.array([]), np.array([0.0, 5.0])], 0.001)
    assert grid.edges_s[0] == -1.0
    assert np.isclose(grid.edges_s[-1], 5.001)
    assert shared_grid([np.array([])], 0.001).columns == 1
    assert np.isnan(curve(np.array([]), np.array([]), Grid(0.0, 1.0, 3))).all()


def test_packing_is_exact_to_a_step_and_keeps_gaps() -> None:
    """Every value comes back within half a step; gaps, constants and nothing at all are kept."""
    points = np.concatenate([RNG.normal(size=500), [np.nan], [1e-9]])
    back = unpack(pack(points))
    half_step = np.nanmax(np.abs(points - np.nanmean([np.nanmin(points), np.nanmax(points)]))) / STEPS / 2
    assert np.nanmax(np.abs(back - points)) <= half_step * 1.01
    assert np.array_equal(np.isnan(back), np.isnan(points))
    assert np.array_equal(unpack(pack(np.array([4.0, 4.0]))), [4.0, 4.0])
    assert np.isnan(unpack(pack(np.array([np.nan])))).all()


def test_only_a_margin_at_its_limit_is_black() -> None:
    """0 is kept for a watch at or beyond its limit: the smallest positive margin is not rounded to it."""
    shades = base64.b64decode(pack_margins(np.array([[0.0, -0.5, 1e-6, 0.5, 1.0, np.nan]])))
    assert list(shades) == [0, 0, 1, 127, 254, 255]
