"""The smoothest motion through given points at given times, from rest to rest: a quintic spline.

Of all motions through the points it has the least integral of squared jerk, so between two points it is the minimum-jerk move.
It is continuous to the fourth derivative, and starts and ends with zero velocity and acceleration.
Through points that change direction sharply it swings past them a little, as every smooth interpolation does.
"""

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]


def spline_coefficients(t: FloatArray, q: FloatArray) -> FloatArray:
    """Coefficients of the spline in u = (t - t[k]) / (t[k+1] - t[k]), constant term first.

    t   (m,)    s         strictly increasing, m >= 2
    q   (m, n)  rad or m  points

    Returns (m - 1, n, 6). Unknown are velocity and acceleration at the inner points; continuity of the third and fourth
    derivative there gives a block-tridiagonal system, solved by block elimination.
    Source: quintic Hermite polynomial on each interval, derivatives by hand; the tests compare with a B-spline library.
    """
    h = np.diff(t)
    D = np.diff(q, axis=0)
    v, a = _inner_derivatives(h, D)
    H = h[:, None]
    v0, v1 = v[:-1] * H, v[1:] * H
    a0, a1 = a[:-1] * H * H / 2.0, a[1:] * H * H / 2.0
    c3 = 10.0 * D - 6.0 * v0 - 4.0 * v1 - 3.0 * a0 + a1
    c4 = -15.0 * D + 8.0 * v0 + 7.0 * v1 + 3.0 * a0 - 2.0 * a1
    c5 = 6.0 * D - 3.0 * (v0 + v1) - a0 + a1
    return np.stack([q[:-1], v0, a0, c3, c4, c5], axis=2)


def _inner_derivatives(h: FloatArray, D: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Velocity and acceleration at all points, (m, n) each; zero at both ends.

    The unknown of point k is x_k = (v_k, a_k); its two rows are continuity of the third and of the fourth derivative:
    A x_(k-1) + B x_k + C x_(k+1) = d.
    """
    m, n = len(h) + 1, D.shape[1]
    x = np.zeros((m, 2, n))
    gains = np.zeros((m, 2, 2))  # of the backward substitution: x_k = x_k - gains_k x_(k+1)
    for k in range(1, m - 1):
        left, right = h[k - 1], h[k]
        # third derivative at the end of the left interval minus that at the start of the right one, fourth likewise
        A = np.array([[-24.0 / left**2, -3.0 / left], [-168.0 / left**3, -24.0 / left**2]])
        B = np.array(
            [
                [-36.0 / left**2 + 36.0 / right**2, 9.0 / left + 9.0 / right],
                [-192.0 / left**3 - 192.0 / right**3, 36.0 / left**2 - 36.0 / right**2],
            ]
        )
        C = np.array([[24.0 / right**2, -3.0 / right], [-168.0 / right**3, 24.0 / right**2]])
        d = np.stack([60.0 * D[k] / right**3 - 60.0 * D[k - 1] / left**3, -360.0 * D[k] / right**4 - 360.0 * D[k - 1] / left**4])
        inverse = np.linalg.inv(B - A @ gains[k - 1])
        gains[k] = inverse @ C
        x[k] = inverse @ (d - A @ x[k - 1])
    for k in range(m - 2, 0, -1):
        x[k] -= gains[k] @ x[k + 1]
    return x[:, 0], x[:, 1]
