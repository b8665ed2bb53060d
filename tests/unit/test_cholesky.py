"""Cholesky factor and solution."""

import math

import numpy as np
import pytest
import scipy.linalg

from rtctl.kernels.cholesky import cholesky, cholesky_solve
from rtctl.kernels.layout import NOT_POSITIVE, OK
from tests.sources import source

ROUNDING = 1e-11  # condition numbers up to 1e4


@source("textbook mathematics", "by hand: L = [2; 6 1; -8 5 3], L L' = M")
def test_factor_with_whole_numbers() -> None:
    """A factor of whole numbers comes out exactly, and the upper half is left alone."""
    M = np.array([[4.0, 12.0, -16.0], [12.0, 37.0, -43.0], [-16.0, -43.0, 98.0]])
    L = np.full((3, 3), 7.0)
    assert cholesky(M, 3, L) == OK
    assert (np.tril(L) == [[2, 0, 0], [6, 1, 0], [-8, 5, 3]]).all() and (L[np.triu_indices(3, 1)] == 7.0).all()
    x = np.zeros(3)
    assert cholesky_solve(L, 3, M @ np.array([1.0, -2.0, 3.0]), x) == OK
    assert x == pytest.approx([1.0, -2.0, 3.0], rel=ROUNDING)


@source("scipy", "linalg.cholesky and linalg.solve")
@pytest.mark.parametrize("n", [1, 2, 5, 10, 16])
def test_against_scipy(n: int) -> None:
    """Factor and solution agree with LAPACK's, in rooms larger than n, also with result and right-hand side in one array."""
    rng = np.random.default_rng(n)
    A = rng.normal(size=(n, n))
    M, b = np.zeros((16, 16)), rng.normal(size=16)
    M[:n, :n] = A @ A.T + 0.1 * np.eye(n)
    expected = scipy.linalg.solve(M[:n, :n], b[:n], assume_a="pos")
    factor = scipy.linalg.cholesky(M[:n, :n], lower=True)
    assert cholesky(M, n, M) == OK
    assert np.tril(M[:n, :n]) == pytest.approx(factor, rel=ROUNDING, abs=ROUNDING)
    rest = b[n:].copy()
    assert cholesky_solve(M, n, b, b) == OK
    assert b[:n] == pytest.approx(expected, rel=ROUNDING, abs=ROUNDING) and (b[n:] == rest).all()


@pytest.mark.parametrize(
    "M", [[[1.0, 2.0], [2.0, 1.0]], [[0.0, 0.0], [0.0, 1.0]], [[math.nan, 0], [0, 1]], [[1, 0], [math.inf, 1]]]
)
def test_not_positive_definite(M: list[list[float]]) -> None:
    """A matrix that is indefinite, singular or not finite is refused with a status."""
    assert cholesky(np.array(M, dtype=np.float64), 2, np.zeros((2, 2))) == NOT_POSITIVE
