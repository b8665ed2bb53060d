"""The quintic spline against a B-spline library, the minimum-jerk move, and its own minimum property."""

import numpy as np
import pytest
from scipy.interpolate import make_interp_spline

from rtctl.references.minimum_jerk import rest_to_rest
from rtctl.references.quintic_spline import FloatArray, spline_coefficients
from tests.sources import source

LIBRARY = 1e-10  # relative to the largest value: two solutions of one linear system


def evaluate(t: FloatArray, coefficients: FloatArray, times: FloatArray) -> FloatArray:
    """Position at times within the spline, (len(times), n)."""
    k = np.clip(np.searchsorted(t, times, side="right") - 1, 0, len(t) - 2)
    u = ((times - t[k]) / np.diff(t)[k])[:, None]
    return np.asarray(sum(coefficients[k, :, j] * u**j for j in range(6)))


@source("scipy", "interpolate.make_interp_spline, k=5, first and second derivative zero at both ends")
@pytest.mark.parametrize("count", [2, 3, 4, 12, 150])
@pytest.mark.parametrize("uneven", [False, True])
def test_spline_agrees_with_a_b_spline_library(count: int, uneven: bool) -> None:
    """Through the same random points, evenly timed or not, both give the same curve."""
    rng = np.random.default_rng(count)
    t = np.cumsum(rng.uniform(0.1, 0.5, count)) if uneven else np.linspace(0.0, 3.0, count)
    q = rng.normal(size=(count, 2))
    rest = [(1, np.zeros(2)), (2, np.zeros(2))]
    library = make_interp_spline(t, q, k=5, bc_type=(rest, rest))
    times = np.linspace(t[0], t[-1], 1000)
    expected = library(times)
    assert np.abs(evaluate(t, spline_coefficients(t, q), times) - expected).max() < LIBRARY * np.abs(expected).max()


@source("flash-hogan1985", "the rest-to-rest move is the minimum of squared jerk")
def test_two_points_make_the_minimum_jerk_move() -> None:
    """Between two points the spline is the polynomial of the approach move."""
    times = np.linspace(0.0, 2.0, 21)
    t, q = np.array([0.0, 2.0]), np.array([[0.5], [1.5]])
    expected = [0.5 + rest_to_rest(u / 2.0)[0] for u in times]
    assert evaluate(t, spline_coefficients(t, q), times)[:, 0] == pytest.approx(expected, abs=1e-14)
