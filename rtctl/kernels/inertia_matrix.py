"""Joint-space inertia matrix by composite rigid bodies, each described by ten numbers in its own body coordinates."""

import numpy as np
from numpy.typing import NDArray

from rtctl.kernels.compile import hot
from rtctl.kernels.kinematics import joint_transforms
from rtctl.kernels.layout import OK, REVOLUTE

Array = NDArray[np.float64]


@hot
def inertia_matrix(model: np.void, q: Array, ws: np.void, M: Array) -> int:
    """Joint-space inertia matrix M(q), rotor inertia on the diagonal, written into `M` (symmetric, both halves filled).

    q   (n,)            rad or m  joint positions
    ws                            scratch; R, p, mass_c, h_c and I_c overwritten
    M   (n, n) or more  kg m^2    result (kg, kg m for prismatic joints); rows and columns from n on are left alone

    Returns OK. Needs nothing computed earlier; no limits are checked here.
    Column i equals inverse_dynamics(q, 0, e_i) - inverse_dynamics(q, 0, 0); see tests/identities.
    Source: composite-rigid-body algorithm, Featherstone, Rigid Body Dynamics Algorithms (2008), ch. 6; here with mass, first moment
    and inertia about the body origin instead of 6 x 6 matrices.
    """
    joint_transforms(model, q, ws)
    return inertia_matrix_at_pose(model, ws, M)


@hot(inline=True)
def inertia_matrix_at_pose(model: np.void, ws: np.void, M: Array) -> int:
    """`inertia_matrix` at the pose for which `joint_transforms` was called last; leaves R and p of the scratch as they are."""
    R, P, mass, h, II = ws["R"], ws["p"], ws["mass_c"], ws["h_c"], ws["I_c"]
    parent, kind = model["parent"], model["kind"]
    n = model["n"]
    for i in range(n):
        mass[i] = model["mass"][i]
        h[i, 0], h[i, 1], h[i, 2] = model["h"][i, 0], model["h"][i, 1], model["h"][i, 2]
        for c in range(6):
            II[i, c] = model["I"][i, c]
    for i in range(n - 1, -1, -1):
        m, hx, hy, hz = mass[i], h[i, 0], h[i, 1], h[i, 2]
        xx, xy, xz, yy, yz, zz = II[i, 0], II[i, 1], II[i, 2], II[i, 3], II[i, 4], II[i, 5]
        # Force and moment that a unit acceleration of joint i takes from everything outboard of it.
        if kind[i] == REVOLUTE:
            fx, fy, fz, tx, ty, tz = -hy, hx, 0.0, xz, yz, zz
            M[i, i] = zz + model["rotor"][i]
        else:
            fx, fy, fz, tx, ty, tz = 0.0, 0.0, m, hy, -hx, 0.0
            M[i, i] = m + model["rotor"][i]
        for j in range(i):
            M[i, j] = M[j, i] = 0.0
        # Carried down to the base, it shows at every joint on the way.
        j = i
        for _ in range(i):
            k = parent[j]
            if k < 0:
                break
            px, py, pz = P[j, 0], P[j, 1], P[j, 2]
            gx = R[j, 0, 0] * fx + R[j, 0, 1] * fy + R[j, 0, 2] * fz
            gy = R[j, 1, 0] * fx + R[j, 1, 1] * fy + R[j, 1, 2] * fz
            gz = R[j, 2, 0] * fx + R[j, 2, 1] * fy + R[j, 2, 2] * fz
            ux = R[j, 0, 0] * tx + R[j, 0, 1] * ty + R[j, 0, 2] * tz
            uy = R[j, 1, 0] * tx + R[j, 1, 1] * ty + R[j, 1, 2] * tz
            uz = R[j, 2, 0] * tx + R[j, 2, 1] * ty + R[j, 2, 2] * tz
            fx, fy, fz = gx, gy, gz
            tx, ty, tz = ux + py * gz - pz * gy, uy + pz * gx - px * gz, uz + px * gy - py * gx
            M[i, k] = M[k, i] = tz if kind[k] == REVOLUTE else fz
            j = k
        k = parent[i]
        if k < 0:
            continue
        # The composite body joins its parent's: rotate the inertia, then shift it with the parallel-axis rule. A multiple of the
        # identity turns into itself, so zz is taken out before and put back after; the trace gives the last element.
        r00, r01, r02 = R[i, 0, 0], R[i, 0, 1], R[i, 0, 2]
        r10, r11, r12 = R[i, 1, 0], R[i, 1, 1], R[i, 1, 2]
        r20, r21, r22 = R[i, 2, 0], R[i, 2, 1], R[i, 2, 2]
        px, py, pz = P[i, 0], P[i, 1], P[i, 2]
        dx, dy = xx - zz, yy - zz
        a00, a01, a02 = r00 * dx + r01 * xy + r02 * xz, r00 * xy + r01 * dy + r02 * yz, r00 * xz + r01 * yz
        a10, a11, a12 = r10 * dx + r11 * xy + r12 * xz, r10 * xy + r11 * dy + r12 * yz, r10 * xz + r11 * yz
        b00 = a00 * r00 + a01 * r01 + a02 * r02
        b11 = a10 * r10 + a11 * r11 + a12 * r12
        gx, gy, gz = r00 * hx + r01 * hy + r02 * hz, r10 * hx + r11 * hy + r12 * hz, r20 * hx + r21 * hy + r22 * hz
        kx, ky, kz = gx + m * px, gy + m * py, gz + m * pz
        sx, sy, sz = px * (gx + kx), py * (gy + ky), pz * (gz + kz)
        II[k, 0] += b00 + zz + sy + sz
        II[k, 1] += a00 * r10 + a01 * r11 + a02 * r12 - gx * py - ky * px
        II[k, 2] += a00 * r20 + a01 * r21 + a02 * r22 - gx * pz - kz * px
        II[k, 3] += b11 + zz + sx + sz
        II[k, 4] += a10 * r20 + a11 * r21 + a12 * r22 - gy * pz - kz * py
        II[k, 5] += dx + dy - b00 - b11 + zz + sx + sy
        mass[k] += m
        h[k, 0] += kx
        h[k, 1] += ky
        h[k, 2] += kz
    return OK
