"""Where the bodies and frames are, and how fast joints move them: poses, Jacobian and its rate of change."""

import math

import numpy as np
from numpy.typing import NDArray

from rtctl.kernels.compile import hot
from rtctl.kernels.layout import NO_SUCH_FRAME, OK, REVOLUTE

Array = NDArray[np.float64]


@hot
def joint_transforms(model: np.void, q: Array, ws: np.void) -> int:
    """Pose of every body in its parent's coordinates, written into ws["R"] and ws["p"].

    q   (n,)  rad or m  joint positions
    ws                  scratch; R and p overwritten

    Returns OK. R = R_parent Rz(q) for a revolute joint, p = p_parent + q times the axis for a prismatic one.
    """
    R0, p0, R, p = model["R_parent"], model["p_parent"], ws["R"], ws["p"]
    for i in range(model["n"]):
        x00, x01, x02 = R0[i, 0, 0], R0[i, 0, 1], R0[i, 0, 2]
        x10, x11, x12 = R0[i, 1, 0], R0[i, 1, 1], R0[i, 1, 2]
        x20, x21, x22 = R0[i, 2, 0], R0[i, 2, 1], R0[i, 2, 2]
        c, s, d = 1.0, 0.0, q[i]
        if model["kind"][i] == REVOLUTE:
            c, s, d = math.cos(q[i]), math.sin(q[i]), 0.0
        R[i, 0, 0], R[i, 0, 1], R[i, 0, 2] = x00 * c + x01 * s, x01 * c - x00 * s, x02
        R[i, 1, 0], R[i, 1, 1], R[i, 1, 2] = x10 * c + x11 * s, x11 * c - x10 * s, x12
        R[i, 2, 0], R[i, 2, 1], R[i, 2, 2] = x20 * c + x21 * s, x21 * c - x20 * s, x22
        p[i, 0], p[i, 1], p[i, 2] = p0[i, 0] + x02 * d, p0[i, 1] + x12 * d, p0[i, 2] + x22 * d
    return OK


@hot
def body_poses(model: np.void, q: Array, ws: np.void) -> int:
    """Pose of every body in the base, written into ws["R_base"] and ws["p_base"].

    q   (n,)  rad or m  joint positions
    ws                  scratch; R, p, R_base and p_base overwritten

    Returns OK.
    """
    joint_transforms(model, q, ws)
    R, p, Rb, pb = ws["R"], ws["p"], ws["R_base"], ws["p_base"]
    for i in range(model["n"]):
        k = model["parent"][i]
        if k < 0:
            for r in range(3):
                pb[i, r] = p[i, r]
                for c in range(3):
                    Rb[i, r, c] = R[i, r, c]
            continue
        for r in range(3):
            a, b, c = Rb[k, r, 0], Rb[k, r, 1], Rb[k, r, 2]
            pb[i, r] = pb[k, r] + a * p[i, 0] + b * p[i, 1] + c * p[i, 2]
            Rb[i, r, 0] = a * R[i, 0, 0] + b * R[i, 1, 0] + c * R[i, 2, 0]
            Rb[i, r, 1] = a * R[i, 0, 1] + b * R[i, 1, 1] + c * R[i, 2, 1]
            Rb[i, r, 2] = a * R[i, 0, 2] + b * R[i, 1, 2] + c * R[i, 2, 2]
    return OK


@hot
def frame_pose(model: np.void, frame: int, q: Array, ws: np.void, T: Array) -> int:
    """Pose of a frame in the base as a homogeneous matrix, written into `T`.

    frame                index of the frame in the model
    q     (n,)  rad or m joint positions
    ws                   scratch; R, p, R_base and p_base overwritten
    T     (4,4) -, m     result: rotation (frame to base coordinates), origin in base coordinates, last row 0 0 0 1

    Returns OK or NO_SUCH_FRAME.
    """
    if not 0 <= frame < model["frame_count"]:
        return NO_SUCH_FRAME
    body_poses(model, q, ws)
    i = model["frame_body"][frame]
    Rf, pf, Rb, pb = model["R_body_frame"], model["p_body_frame"], ws["R_base"], ws["p_base"]
    for r in range(3):
        if i < 0:
            T[r, 0], T[r, 1], T[r, 2], T[r, 3] = Rf[frame, r, 0], Rf[frame, r, 1], Rf[frame, r, 2], pf[frame, r]
        else:
            a, b, c = Rb[i, r, 0], Rb[i, r, 1], Rb[i, r, 2]
            for j in range(3):
                T[r, j] = a * Rf[frame, 0, j] + b * Rf[frame, 1, j] + c * Rf[frame, 2, j]
            T[r, 3] = pb[i, r] + a * pf[frame, 0] + b * pf[frame, 1] + c * pf[frame, 2]
        T[3, r] = 0.0
    T[3, 3] = 1.0
    return OK


@hot
def _body_point(model: np.void, frame: int, ws: np.void) -> tuple[float, float, float]:
    """From the origin of the frame's body to the frame's origin, in base axes; needs body_poses."""
    i = model["frame_body"][frame]
    Rb, pf = ws["R_base"], model["p_body_frame"]
    a, b, c = pf[frame, 0], pf[frame, 1], pf[frame, 2]
    return (
        Rb[i, 0, 0] * a + Rb[i, 0, 1] * b + Rb[i, 0, 2] * c,
        Rb[i, 1, 0] * a + Rb[i, 1, 1] * b + Rb[i, 1, 2] * c,
        Rb[i, 2, 0] * a + Rb[i, 2, 1] * b + Rb[i, 2, 2] * c,
    )


@hot
def jacobian(model: np.void, frame: int, q: Array, ws: np.void, J: Array) -> int:
    """Jacobian of a frame: J qd is the velocity of its origin (rows 0-2) and its angular velocity (rows 3-5), in base axes.

    frame                              index of the frame in the model
    q     (n,)              rad or m   joint positions
    ws                                 scratch; R, p, R_base and p_base overwritten
    J     (6, n or more)    m or -, 1  result; columns from n on are left alone

    Returns OK or NO_SUCH_FRAME. The linear part is the gradient of the frame's position; see tests/identities.
    Source: Siciliano et al., Robotics: Modelling, Planning and Control (2009), sec. 3.1.3.
    """
    if not 0 <= frame < model["frame_count"]:
        return NO_SUCH_FRAME
    n = model["n"]
    for j in range(n):
        for r in range(6):
            J[r, j] = 0.0
    i = model["frame_body"][frame]
    if i < 0:
        return OK
    body_poses(model, q, ws)
    Rb, pb = ws["R_base"], ws["p_base"]
    bx, by, bz = _body_point(model, frame, ws)
    fx, fy, fz = pb[i, 0] + bx, pb[i, 1] + by, pb[i, 2] + bz
    for _ in range(n):
        if i < 0:
            break
        zx, zy, zz = Rb[i, 0, 2], Rb[i, 1, 2], Rb[i, 2, 2]
        if model["kind"][i] == REVOLUTE:
            dx, dy, dz = fx - pb[i, 0], fy - pb[i, 1], fz - pb[i, 2]
            J[0, i], J[1, i], J[2, i] = zy * dz - zz * dy, zz * dx - zx * dz, zx * dy - zy * dx
            J[3, i], J[4, i], J[5, i] = zx, zy, zz
        else:
            J[0, i], J[1, i], J[2, i] = zx, zy, zz
        i = model["parent"][i]
    return OK


@hot
def body_velocities(model: np.void, qd: Array, ws: np.void) -> int:
    """Angular velocity and velocity of the origin of every body, base axes, written into ws["w"], ws["v"]; offsets in ws["r"].

    qd   (n,)  rad/s or m/s  joint velocities
    ws                       scratch; w, v and r overwritten

    Returns OK. Needs body_poses.
    """
    W, V, r, Rb, pb = ws["w"], ws["v"], ws["r"], ws["R_base"], ws["p_base"]
    for i in range(model["n"]):
        k = model["parent"][i]
        zx, zy, zz = Rb[i, 0, 2] * qd[i], Rb[i, 1, 2] * qd[i], Rb[i, 2, 2] * qd[i]
        wx = wy = wz = vx = vy = vz = 0.0
        rx, ry, rz = pb[i, 0], pb[i, 1], pb[i, 2]
        if k >= 0:
            rx, ry, rz = rx - pb[k, 0], ry - pb[k, 1], rz - pb[k, 2]
            wx, wy, wz = W[k, 0], W[k, 1], W[k, 2]
            vx = V[k, 0] + wy * rz - wz * ry
            vy = V[k, 1] + wz * rx - wx * rz
            vz = V[k, 2] + wx * ry - wy * rx
        if model["kind"][i] == REVOLUTE:
            wx, wy, wz = wx + zx, wy + zy, wz + zz
        else:
            vx, vy, vz = vx + zx, vy + zy, vz + zz
        W[i, 0], W[i, 1], W[i, 2] = wx, wy, wz
        V[i, 0], V[i, 1], V[i, 2] = vx, vy, vz
        r[i, 0], r[i, 1], r[i, 2] = rx, ry, rz
    return OK


@hot
def jacobian_rate(model: np.void, frame: int, q: Array, qd: Array, ws: np.void, Jd: Array) -> int:
    """Rate of change of the Jacobian: the frame accelerates by J qdd + Jd qd.

    frame                                index of the frame in the model
    q     (n,)           rad or m        joint positions
    qd    (n,)           rad/s or m/s    joint velocities
    ws                                   scratch; R, p, R_base, p_base, w, v and r overwritten
    Jd    (6, n or more) m/s or 1/s      result; same rows, axes and point as `jacobian`; columns from n on are left alone

    Returns OK or NO_SUCH_FRAME.
    Own derivation: d/dt of the columns (z x (p_f - p_j), z), with zd = w x z and the velocities of both points.
    """
    if not 0 <= frame < model["frame_count"]:
        return NO_SUCH_FRAME
    n = model["n"]
    for j in range(n):
        for r in range(6):
            Jd[r, j] = 0.0
    i = model["frame_body"][frame]
    if i < 0:
        return OK
    body_poses(model, q, ws)
    body_velocities(model, qd, ws)
    W, V, Rb, pb = ws["w"], ws["v"], ws["R_base"], ws["p_base"]
    bx, by, bz = _body_point(model, frame, ws)
    fx, fy, fz = pb[i, 0] + bx, pb[i, 1] + by, pb[i, 2] + bz
    wx, wy, wz = W[i, 0], W[i, 1], W[i, 2]
    gx, gy, gz = V[i, 0] + wy * bz - wz * by, V[i, 1] + wz * bx - wx * bz, V[i, 2] + wx * by - wy * bx
    for _ in range(n):
        if i < 0:
            break
        zx, zy, zz = Rb[i, 0, 2], Rb[i, 1, 2], Rb[i, 2, 2]
        wx, wy, wz = W[i, 0], W[i, 1], W[i, 2]
        ex, ey, ez = wy * zz - wz * zy, wz * zx - wx * zz, wx * zy - wy * zx
        if model["kind"][i] == REVOLUTE:
            dx, dy, dz = fx - pb[i, 0], fy - pb[i, 1], fz - pb[i, 2]
            ux, uy, uz = gx - V[i, 0], gy - V[i, 1], gz - V[i, 2]
            Jd[0, i] = ey * dz - ez * dy + zy * uz - zz * uy
            Jd[1, i] = ez * dx - ex * dz + zz * ux - zx * uz
            Jd[2, i] = ex * dy - ey * dx + zx * uy - zy * ux
            Jd[3, i], Jd[4, i], Jd[5, i] = ex, ey, ez
        else:
            Jd[0, i], Jd[1, i], Jd[2, i] = ex, ey, ez
        i = model["parent"][i]
    return OK
