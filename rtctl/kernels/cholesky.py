"""Cholesky factor of a small symmetric positive definite matrix, and the solution of its linear system."""

import math

import numpy as np
from numpy.typing import NDArray

from rtctl.kernels.compile import hot
from rtctl.kernels.layout import NOT_POSITIVE, OK

Array = NDArray[np.float64]


@hot
def cholesky(M: Array, n: int, L: Array) -> int:
    """Lower triangular factor of M = L L', written into the lower half of `L`; the upper half is left alone.

    M   (n, n) or more  symmetric; only the lower half is read
    L   (n, n) or more  result; may be M itself

    Returns OK, or NOT_POSITIVE when M is not positive definite (or not finite); L is then incomplete.
    Source: Golub and Van Loan, Matrix Computations (2013), sec. 4.2 (row by row).
    """
    for i in range(n):
        for j in range(i):
            s = M[i, j]
            for k in range(j):
                s -= L[i, k] * L[j, k]
            L[i, j] = s / L[j, j]
        s = M[i, i]
        for k in range(i):
            s -= L[i, k] * L[i, k]
        if not 0.0 < s < math.inf:
            return NOT_POSITIVE
        L[i, i] = math.sqrt(s)
    return OK


@hot
def cholesky_solve(L: Array, n: int, b: Array, x: Array) -> int:
    """Solution of L L' x = b, written into `x`.

    L   (n, n) or more  lower factor from `cholesky`
    b   (n,)            right-hand side
    x   (n,)            result; may be b itself

    Returns OK.
    """
    for i in range(n):
        s = b[i]
        for k in range(i):
            s -= L[i, k] * x[k]
        x[i] = s / L[i, i]
    for i in range(n - 1, -1, -1):
        s = x[i]
        for k in range(i + 1, n):
            s -= L[k, i] * x[k]
        x[i] = s / L[i, i]
    return OK
