"""Joint torques of a motion: inverse dynamics, and its two parts of every cycle, bias torque and gravity torque.

Scalars are written out: numba keeps them in registers, small arrays it does not. Friction is not in here: `rtctl.kernels.friction`.
The functions `.._at_pose` leave out what all kernels begin with, the sines and cosines of `joint_transforms`: for callers that need
several kernels at one pose.
"""

import numpy as np
from numpy.typing import NDArray

from rtctl.kernels.compile import hot
from rtctl.kernels.kinematics import joint_transforms
from rtctl.kernels.layout import OK, REVOLUTE

Array = NDArray[np.float64]


@hot
def inverse_dynamics(model: np.void, q: Array, qd: Array, qdd: Array, ws: np.void, tau: Array) -> int:
    """Joint torques of a motion, tau = M(q) qdd + C(q, qd) qd + g(q), rotor inertia included, friction not.

    q    (n,)  rad or m          joint positions
    qd   (n,)  rad/s or m/s      joint velocities
    qdd  (n,)  rad/s^2 or m/s^2  joint accelerations
    ws                           scratch; R, p, w, wd, a, force and moment overwritten (body coordinates)
    tau  (n,)  N m or N          result; may not be qd or qdd

    Returns OK. Needs nothing computed earlier; no limits are checked here.
    Equals inertia_matrix(q) qdd + bias_torque(q, qd); see tests/identities.
    Source: recursive Newton-Euler algorithm, Luh, Walker and Paul (1980); here about body origins instead of centres of mass.
    Rotor inertia acts on the joint's own acceleration only: gyroscopic torque of the spinning rotors is neglected, as usual.
    """
    joint_transforms(model, q, ws)
    return inverse_dynamics_at_pose(model, qd, qdd, ws, tau)


@hot(inline=True)
def inverse_dynamics_at_pose(model: np.void, qd: Array, qdd: Array, ws: np.void, tau: Array) -> int:
    """`inverse_dynamics` at the pose for which `joint_transforms` was called last; leaves R and p of the scratch as they are."""
    R, P, W, WD, A, F, N = ws["R"], ws["p"], ws["w"], ws["wd"], ws["a"], ws["force"], ws["moment"]
    parent, kind, H, II = model["parent"], model["kind"], model["h"], model["I"]
    n = model["n"]
    for i in range(n):
        k = parent[i]
        # Velocity and acceleration of the parent, at this body's origin, in the parent's coordinates. Gravity is an upward
        # acceleration of the base.
        wx = wy = wz = dx = dy = dz = 0.0
        ax, ay, az = -model["gravity"][0], -model["gravity"][1], -model["gravity"][2]
        if k >= 0:
            px, py, pz = P[i, 0], P[i, 1], P[i, 2]
            wx, wy, wz = W[k, 0], W[k, 1], W[k, 2]
            dx, dy, dz = WD[k, 0], WD[k, 1], WD[k, 2]
            ux, uy, uz = wy * pz - wz * py, wz * px - wx * pz, wx * py - wy * px
            ax = A[k, 0] + dy * pz - dz * py + wy * uz - wz * uy
            ay = A[k, 1] + dz * px - dx * pz + wz * ux - wx * uz
            az = A[k, 2] + dx * py - dy * px + wx * uy - wy * ux
        # The same in body coordinates, plus what the joint adds along its z axis.
        r00, r01, r02 = R[i, 0, 0], R[i, 0, 1], R[i, 0, 2]
        r10, r11, r12 = R[i, 1, 0], R[i, 1, 1], R[i, 1, 2]
        r20, r21, r22 = R[i, 2, 0], R[i, 2, 1], R[i, 2, 2]
        vx, vy, vz = r00 * wx + r10 * wy + r20 * wz, r01 * wx + r11 * wy + r21 * wz, r02 * wx + r12 * wy + r22 * wz
        ex, ey, ez = r00 * dx + r10 * dy + r20 * dz, r01 * dx + r11 * dy + r21 * dz, r02 * dx + r12 * dy + r22 * dz
        bx, by, bz = r00 * ax + r10 * ay + r20 * az, r01 * ax + r11 * ay + r21 * az, r02 * ax + r12 * ay + r22 * az
        if kind[i] == REVOLUTE:
            ex, ey, ez = ex + vy * qd[i], ey - vx * qd[i], ez + qdd[i]
            vz += qd[i]
        else:
            bx, by, bz = bx + 2.0 * vy * qd[i], by - 2.0 * vx * qd[i], bz + qdd[i]
        W[i, 0], W[i, 1], W[i, 2] = vx, vy, vz
        WD[i, 0], WD[i, 1], WD[i, 2] = ex, ey, ez
        A[i, 0], A[i, 1], A[i, 2] = bx, by, bz
        # Force and moment about the body origin that this motion of the body takes.
        m, hx, hy, hz = model["mass"][i], H[i, 0], H[i, 1], H[i, 2]
        ux, uy, uz = vy * hz - vz * hy, vz * hx - vx * hz, vx * hy - vy * hx
        F[i, 0] = m * bx + ey * hz - ez * hy + vy * uz - vz * uy
        F[i, 1] = m * by + ez * hx - ex * hz + vz * ux - vx * uz
        F[i, 2] = m * bz + ex * hy - ey * hx + vx * uy - vy * ux
        xx, xy, xz, yy, yz, zz = II[i, 0], II[i, 1], II[i, 2], II[i, 3], II[i, 4], II[i, 5]
        lx, ly, lz = xx * vx + xy * vy + xz * vz, xy * vx + yy * vy + yz * vz, xz * vx + yz * vy + zz * vz
        N[i, 0] = xx * ex + xy * ey + xz * ez + vy * lz - vz * ly + hy * bz - hz * by
        N[i, 1] = xy * ex + yy * ey + yz * ez + vz * lx - vx * lz + hz * bx - hx * bz
        N[i, 2] = xz * ex + yz * ey + zz * ez + vx * ly - vy * lx + hx * by - hy * bx
    for i in range(n - 1, -1, -1):
        # What the joint carries along its axis; the rest goes to the parent.
        tau[i] = (N[i, 2] if kind[i] == REVOLUTE else F[i, 2]) + model["rotor"][i] * qdd[i]
        k = parent[i]
        if k < 0:
            continue
        px, py, pz = P[i, 0], P[i, 1], P[i, 2]
        fx = R[i, 0, 0] * F[i, 0] + R[i, 0, 1] * F[i, 1] + R[i, 0, 2] * F[i, 2]
        fy = R[i, 1, 0] * F[i, 0] + R[i, 1, 1] * F[i, 1] + R[i, 1, 2] * F[i, 2]
        fz = R[i, 2, 0] * F[i, 0] + R[i, 2, 1] * F[i, 1] + R[i, 2, 2] * F[i, 2]
        F[k, 0] += fx
        F[k, 1] += fy
        F[k, 2] += fz
        N[k, 0] += R[i, 0, 0] * N[i, 0] + R[i, 0, 1] * N[i, 1] + R[i, 0, 2] * N[i, 2] + py * fz - pz * fy
        N[k, 1] += R[i, 1, 0] * N[i, 0] + R[i, 1, 1] * N[i, 1] + R[i, 1, 2] * N[i, 2] + pz * fx - px * fz
        N[k, 2] += R[i, 2, 0] * N[i, 0] + R[i, 2, 1] * N[i, 1] + R[i, 2, 2] * N[i, 2] + px * fy - py * fx
    return OK


@hot
def bias_torque(model: np.void, q: Array, qd: Array, ws: np.void, tau: Array) -> int:
    """Torques at zero joint acceleration, tau = C(q, qd) qd + g(q), friction not included.

    q    (n,)  rad or m      joint positions
    qd   (n,)  rad/s or m/s  joint velocities
    ws                       scratch; overwritten as by `inverse_dynamics`
    tau  (n,)  N m or N      result

    Returns OK. Equals inverse_dynamics(q, qd, 0).
    """
    return inverse_dynamics(model, q, qd, ws["zero"][:], ws, tau)


@hot(inline=True)
def bias_torque_at_pose(model: np.void, qd: Array, ws: np.void, tau: Array) -> int:
    """`bias_torque` at the pose for which `joint_transforms` was called last; leaves R and p of the scratch as they are."""
    return inverse_dynamics_at_pose(model, qd, ws["zero"][:], ws, tau)


@hot
def gravity_torque(model: np.void, q: Array, ws: np.void, tau: Array) -> int:
    """Torques that hold the arm at rest against gravity, g(q).

    q    (n,)  rad or m  joint positions
    ws                   scratch; R, p, a, mass_c and h_c overwritten
    tau  (n,)  N m or N  result

    Returns OK. Equals inverse_dynamics(q, 0, 0) and the gradient of potential_energy(q); see tests/identities.
    Own derivation: everything outboard of a joint, at rest, weighs on it like one rigid body: only its mass and first moment count.
    """
    joint_transforms(model, q, ws)
    return gravity_torque_at_pose(model, ws, tau)


@hot(inline=True)
def gravity_torque_at_pose(model: np.void, ws: np.void, tau: Array) -> int:
    """`gravity_torque` at the pose for which `joint_transforms` was called last; leaves R and p of the scratch as they are."""
    R, P, A, h, mass = ws["R"], ws["p"], ws["a"], ws["h_c"], ws["mass_c"]
    parent, kind = model["parent"], model["kind"]
    n = model["n"]
    for i in range(n):
        k = parent[i]
        ax, ay, az = -model["gravity"][0], -model["gravity"][1], -model["gravity"][2]
        if k >= 0:
            ax, ay, az = A[k, 0], A[k, 1], A[k, 2]
        A[i, 0] = R[i, 0, 0] * ax + R[i, 1, 0] * ay + R[i, 2, 0] * az
        A[i, 1] = R[i, 0, 1] * ax + R[i, 1, 1] * ay + R[i, 2, 1] * az
        A[i, 2] = R[i, 0, 2] * ax + R[i, 1, 2] * ay + R[i, 2, 2] * az
        mass[i] = model["mass"][i]
        h[i, 0], h[i, 1], h[i, 2] = model["h"][i, 0], model["h"][i, 1], model["h"][i, 2]
    for i in range(n - 1, -1, -1):
        hx, hy, hz, m = h[i, 0], h[i, 1], h[i, 2], mass[i]
        tau[i] = hx * A[i, 1] - hy * A[i, 0] if kind[i] == REVOLUTE else m * A[i, 2]
        k = parent[i]
        if k < 0:
            continue
        mass[k] += m
        h[k, 0] += R[i, 0, 0] * hx + R[i, 0, 1] * hy + R[i, 0, 2] * hz + m * P[i, 0]
        h[k, 1] += R[i, 1, 0] * hx + R[i, 1, 1] * hy + R[i, 1, 2] * hz + m * P[i, 1]
        h[k, 2] += R[i, 2, 0] * hx + R[i, 2, 1] * hy + R[i, 2, 2] * hz + m * P[i, 2]
    return OK
