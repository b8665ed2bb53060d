"""Joint accelerations that torques cause, by articulated bodies: what the simulated arm integrates.

All quantities are about body origins but in base axes, so that articulated inertias need shifting but no rotation on their way to
the base: half the work of the same recursion in body coordinates, and no worse conditioned.
"""

import numpy as np
from numpy.typing import NDArray

from rtctl.kernels.compile import hot
from rtctl.kernels.kinematics import body_poses
from rtctl.kernels.layout import NOT_POSITIVE, OK, REVOLUTE

Array = NDArray[np.float64]


@hot
def forward_dynamics(model: np.void, q: Array, qd: Array, tau: Array, ws: np.void, qdd: Array) -> int:
    """Joint accelerations under joint torques, qdd = M(q)^-1 (tau - C(q, qd) qd - g(q)), rotor inertia included, friction not.

    q    (n,)  rad or m          joint positions
    qd   (n,)  rad/s or m/s      joint velocities
    tau  (n,)  N m or N          joint torques
    ws                           scratch; everything but M, L, J and the callers' vectors overwritten (base axes)
    qdd  (n,)  rad/s^2 or m/s^2  result

    Returns OK, or NOT_POSITIVE when the inertia seen by a joint is not a positive number; qdd is then incomplete.
    Undoes inverse_dynamics(q, qd, qdd); see tests/identities.
    Source: articulated-body algorithm, Featherstone, Rigid Body Dynamics Algorithms (2008), ch. 7; here with the acceleration
    of the body-fixed origin in place of the spatial acceleration, in base axes.
    """
    body_poses(model, q, ws)
    _rigid_parts(model, qd, ws)
    if _articulate(model, tau, ws) != OK:
        return NOT_POSITIVE
    return _accelerate(model, ws, qdd)


@hot
def _rigid_parts(model: np.void, qd: Array, ws: np.void) -> int:
    """Base to tip: velocities, offsets r, velocity-product accelerations c, rigid inertias IA and their bias pA."""
    Rb, pb, W, c, r = ws["R_base"], ws["p_base"], ws["w"], ws["c"], ws["r"]
    IA, pA, parent, h, II = ws["IA"], ws["pA"], model["parent"], model["h"], model["I"]
    for i in range(model["n"]):
        k = parent[i]
        r00, r01, r02 = Rb[i, 0, 0], Rb[i, 0, 1], Rb[i, 0, 2]
        r10, r11, r12 = Rb[i, 1, 0], Rb[i, 1, 1], Rb[i, 1, 2]
        r20, r21, r22 = Rb[i, 2, 0], Rb[i, 2, 1], Rb[i, 2, 2]
        wx = wy = wz = cx = cy = cz = dx = dy = dz = 0.0
        px, py, pz = pb[i, 0], pb[i, 1], pb[i, 2]
        if k >= 0:
            wx, wy, wz = W[k, 0], W[k, 1], W[k, 2]
            px, py, pz = px - pb[k, 0], py - pb[k, 1], pz - pb[k, 2]
            ux, uy, uz = wy * pz - wz * py, wz * px - wx * pz, wx * py - wy * px
            dx, dy, dz = wy * uz - wz * uy, wz * ux - wx * uz, wx * uy - wy * ux
        r[i, 0], r[i, 1], r[i, 2] = px, py, pz
        # Axis times joint speed, and what turning it with the parent adds.
        zx, zy, zz = r02 * qd[i], r12 * qd[i], r22 * qd[i]
        ux, uy, uz = wy * zz - wz * zy, wz * zx - wx * zz, wx * zy - wy * zx
        if model["kind"][i] == REVOLUTE:
            cx, cy, cz = ux, uy, uz
            wx, wy, wz = wx + zx, wy + zy, wz + zz
        else:
            dx, dy, dz = dx + 2.0 * ux, dy + 2.0 * uy, dz + 2.0 * uz
        W[i, 0], W[i, 1], W[i, 2] = wx, wy, wz
        c[i, 0], c[i, 1], c[i, 2], c[i, 3], c[i, 4], c[i, 5] = cx, cy, cz, dx, dy, dz
        # Inertia about the body origin and first moment, turned into base axes.
        xx, xy, xz, yy, yz, zz = II[i, 0], II[i, 1], II[i, 2], II[i, 3], II[i, 4], II[i, 5]
        a00, a01, a02 = r00 * xx + r01 * xy + r02 * xz, r00 * xy + r01 * yy + r02 * yz, r00 * xz + r01 * yz + r02 * zz
        a10, a11, a12 = r10 * xx + r11 * xy + r12 * xz, r10 * xy + r11 * yy + r12 * yz, r10 * xz + r11 * yz + r12 * zz
        a20, a21, a22 = r20 * xx + r21 * xy + r22 * xz, r20 * xy + r21 * yy + r22 * yz, r20 * xz + r21 * yz + r22 * zz
        xx, xy, xz = a00 * r00 + a01 * r01 + a02 * r02, a00 * r10 + a01 * r11 + a02 * r12, a00 * r20 + a01 * r21 + a02 * r22
        yy, yz, zz = a10 * r10 + a11 * r11 + a12 * r12, a10 * r20 + a11 * r21 + a12 * r22, a20 * r20 + a21 * r21 + a22 * r22
        m = model["mass"][i]
        hx = r00 * h[i, 0] + r01 * h[i, 1] + r02 * h[i, 2]
        hy = r10 * h[i, 0] + r11 * h[i, 1] + r12 * h[i, 2]
        hz = r20 * h[i, 0] + r21 * h[i, 1] + r22 * h[i, 2]
        IA[i, 0], IA[i, 1], IA[i, 2], IA[i, 3], IA[i, 4], IA[i, 5] = xx, xy, xz, yy, yz, zz
        IA[i, 6], IA[i, 7], IA[i, 8] = 0.0, -hz, hy
        IA[i, 9], IA[i, 10], IA[i, 11] = hz, 0.0, -hx
        IA[i, 12], IA[i, 13], IA[i, 14] = -hy, hx, 0.0
        IA[i, 15], IA[i, 16], IA[i, 17], IA[i, 18], IA[i, 19], IA[i, 20] = m, 0.0, 0.0, m, 0.0, m
        # Moment and force that the velocities alone ask for.
        ux, uy, uz = wy * hz - wz * hy, wz * hx - wx * hz, wx * hy - wy * hx
        lx, ly, lz = xx * wx + xy * wy + xz * wz, xy * wx + yy * wy + yz * wz, xz * wx + yz * wy + zz * wz
        pA[i, 0], pA[i, 1], pA[i, 2] = wy * lz - wz * ly, wz * lx - wx * lz, wx * ly - wy * lx
        pA[i, 3], pA[i, 4], pA[i, 5] = wy * uz - wz * uy, wz * ux - wx * uz, wx * uy - wy * ux
    return OK


@hot
def _articulate(model: np.void, tau: Array, ws: np.void) -> int:
    """Tip to base: what each joint feels of the bodies outboard of it, once their joints are free to move."""
    Rb, IA, pA, U, D, u, c, r = ws["R_base"], ws["IA"], ws["pA"], ws["U"], ws["D"], ws["u"], ws["c"], ws["r"]
    parent, kind = model["parent"], model["kind"]
    for i in range(model["n"] - 1, -1, -1):
        zx, zy, zz = Rb[i, 0, 2], Rb[i, 1, 2], Rb[i, 2, 2]
        # Moment block j (symmetric), mixed block g, force block m (symmetric).
        j00, j01, j02, j11, j12, j22 = IA[i, 0], IA[i, 1], IA[i, 2], IA[i, 3], IA[i, 4], IA[i, 5]
        g00, g01, g02 = IA[i, 6], IA[i, 7], IA[i, 8]
        g10, g11, g12 = IA[i, 9], IA[i, 10], IA[i, 11]
        g20, g21, g22 = IA[i, 12], IA[i, 13], IA[i, 14]
        m00, m01, m02, m11, m12, m22 = IA[i, 15], IA[i, 16], IA[i, 17], IA[i, 18], IA[i, 19], IA[i, 20]
        n0, n1, n2, f0, f1, f2 = pA[i, 0], pA[i, 1], pA[i, 2], pA[i, 3], pA[i, 4], pA[i, 5]
        if kind[i] == REVOLUTE:
            u0, u1, u2 = j00 * zx + j01 * zy + j02 * zz, j01 * zx + j11 * zy + j12 * zz, j02 * zx + j12 * zy + j22 * zz
            u3, u4, u5 = g00 * zx + g10 * zy + g20 * zz, g01 * zx + g11 * zy + g21 * zz, g02 * zx + g12 * zy + g22 * zz
            d = u0 * zx + u1 * zy + u2 * zz + model["rotor"][i]
            ui = tau[i] - (zx * n0 + zy * n1 + zz * n2)
        else:
            u0, u1, u2 = g00 * zx + g01 * zy + g02 * zz, g10 * zx + g11 * zy + g12 * zz, g20 * zx + g21 * zy + g22 * zz
            u3, u4, u5 = m00 * zx + m01 * zy + m02 * zz, m01 * zx + m11 * zy + m12 * zz, m02 * zx + m12 * zy + m22 * zz
            d = u3 * zx + u4 * zy + u5 * zz + model["rotor"][i]
            ui = tau[i] - (zx * f0 + zy * f1 + zz * f2)
        if not d > 0.0:
            return NOT_POSITIVE
        U[i, 0], U[i, 1], U[i, 2], U[i, 3], U[i, 4], U[i, 5] = u0, u1, u2, u3, u4, u5
        D[i], u[i] = d, ui
        k = parent[i]
        if k < 0:
            continue
        # Take out what the free joint gives way to: IA - U U' / D.
        e = 1.0 / d
        e0, e1, e2, e3, e4, e5 = e * u0, e * u1, e * u2, e * u3, e * u4, e * u5
        j00, j01, j02, j11, j12, j22 = j00 - e0 * u0, j01 - e0 * u1, j02 - e0 * u2, j11 - e1 * u1, j12 - e1 * u2, j22 - e2 * u2
        g00, g01, g02 = g00 - e0 * u3, g01 - e0 * u4, g02 - e0 * u5
        g10, g11, g12 = g10 - e1 * u3, g11 - e1 * u4, g12 - e1 * u5
        g20, g21, g22 = g20 - e2 * u3, g21 - e2 * u4, g22 - e2 * u5
        m00, m01, m02, m11, m12, m22 = m00 - e3 * u3, m01 - e3 * u4, m02 - e3 * u5, m11 - e4 * u4, m12 - e4 * u5, m22 - e5 * u5
        c0, c1, c2, c3, c4, c5 = c[i, 0], c[i, 1], c[i, 2], c[i, 3], c[i, 4], c[i, 5]
        n0 += j00 * c0 + j01 * c1 + j02 * c2 + g00 * c3 + g01 * c4 + g02 * c5 + e0 * ui
        n1 += j01 * c0 + j11 * c1 + j12 * c2 + g10 * c3 + g11 * c4 + g12 * c5 + e1 * ui
        n2 += j02 * c0 + j12 * c1 + j22 * c2 + g20 * c3 + g21 * c4 + g22 * c5 + e2 * ui
        f0 += g00 * c0 + g10 * c1 + g20 * c2 + m00 * c3 + m01 * c4 + m02 * c5 + e3 * ui
        f1 += g01 * c0 + g11 * c1 + g21 * c2 + m01 * c3 + m11 * c4 + m12 * c5 + e4 * ui
        f2 += g02 * c0 + g12 * c1 + g22 * c2 + m02 * c3 + m12 * c4 + m22 * c5 + e5 * ui
        # Shift to the parent's origin, r away: m stays, k = g + [r] m, j + [r] g' + ([r] k')'.
        x, y, z = r[i, 0], r[i, 1], r[i, 2]
        k00, k01, k02 = g00 + y * m02 - z * m01, g01 + y * m12 - z * m11, g02 + y * m22 - z * m12
        k10, k11, k12 = g10 + z * m00 - x * m02, g11 + z * m01 - x * m12, g12 + z * m02 - x * m22
        k20, k21, k22 = g20 + x * m01 - y * m00, g21 + x * m11 - y * m01, g22 + x * m12 - y * m02
        IA[k, 0] += j00 + y * (g02 + k02) - z * (g01 + k01)
        IA[k, 1] += j01 + y * g12 - z * g11 + z * k00 - x * k02
        IA[k, 2] += j02 + y * g22 - z * g21 + x * k01 - y * k00
        IA[k, 3] += j11 + z * (g10 + k10) - x * (g12 + k12)
        IA[k, 4] += j12 + z * g20 - x * g22 + x * k11 - y * k10
        IA[k, 5] += j22 + x * (g21 + k21) - y * (g20 + k20)
        IA[k, 6] += k00
        IA[k, 7] += k01
        IA[k, 8] += k02
        IA[k, 9] += k10
        IA[k, 10] += k11
        IA[k, 11] += k12
        IA[k, 12] += k20
        IA[k, 13] += k21
        IA[k, 14] += k22
        IA[k, 15] += m00
        IA[k, 16] += m01
        IA[k, 17] += m02
        IA[k, 18] += m11
        IA[k, 19] += m12
        IA[k, 20] += m22
        pA[k, 0] += n0 + y * f2 - z * f1
        pA[k, 1] += n1 + z * f0 - x * f2
        pA[k, 2] += n2 + x * f1 - y * f0
        pA[k, 3] += f0
        pA[k, 4] += f1
        pA[k, 5] += f2
    return OK


@hot
def _accelerate(model: np.void, ws: np.void, qdd: Array) -> int:
    """Base to tip: joint accelerations. Gravity is an upward acceleration of the base."""
    Rb, WD, A, U, c, r = ws["R_base"], ws["wd"], ws["a"], ws["U"], ws["c"], ws["r"]
    for i in range(model["n"]):
        k = model["parent"][i]
        ex, ey, ez = c[i, 0], c[i, 1], c[i, 2]
        ax, ay, az = c[i, 3] - model["gravity"][0], c[i, 4] - model["gravity"][1], c[i, 5] - model["gravity"][2]
        if k >= 0:
            x, y, z = r[i, 0], r[i, 1], r[i, 2]
            dx, dy, dz = WD[k, 0], WD[k, 1], WD[k, 2]
            ex, ey, ez = ex + dx, ey + dy, ez + dz
            ax = c[i, 3] + A[k, 0] + dy * z - dz * y
            ay = c[i, 4] + A[k, 1] + dz * x - dx * z
            az = c[i, 5] + A[k, 2] + dx * y - dy * x
        carried = U[i, 0] * ex + U[i, 1] * ey + U[i, 2] * ez + U[i, 3] * ax + U[i, 4] * ay + U[i, 5] * az
        s = (ws["u"][i] - carried) / ws["D"][i]
        qdd[i] = s
        if model["kind"][i] == REVOLUTE:
            ex, ey, ez = ex + Rb[i, 0, 2] * s, ey + Rb[i, 1, 2] * s, ez + Rb[i, 2, 2] * s
        else:
            ax, ay, az = ax + Rb[i, 0, 2] * s, ay + Rb[i, 1, 2] * s, az + Rb[i, 2, 2] * s
        WD[i, 0], WD[i, 1], WD[i, 2] = ex, ey, ez
        A[i, 0], A[i, 1], A[i, 2] = ax, ay, az
    return OK
