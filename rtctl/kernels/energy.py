"""Kinetic and potential energy of the arm."""

import numpy as np
from numpy.typing import NDArray

from rtctl.kernels.compile import hot
from rtctl.kernels.kinematics import body_poses, joint_transforms
from rtctl.kernels.layout import OK, REVOLUTE

Array = NDArray[np.float64]


@hot
def kinetic_energy(model: np.void, q: Array, qd: Array, ws: np.void, out: Array) -> int:
    """Kinetic energy of bodies and rotors, written into out[0].

    q    (n,)  rad or m      joint positions
    qd   (n,)  rad/s or m/s  joint velocities
    ws                       scratch; R, p, w and v overwritten (body coordinates)
    out  (1,)  J             result

    Returns OK. Equals qd' M(q) qd / 2; see tests/identities.
    """
    joint_transforms(model, q, ws)
    R, P, W, V, h, II = ws["R"], ws["p"], ws["w"], ws["v"], model["h"], model["I"]
    twice = 0.0
    for i in range(model["n"]):
        k = model["parent"][i]
        wx = wy = wz = vx = vy = vz = 0.0
        if k >= 0:
            ax, ay, az = W[k, 0], W[k, 1], W[k, 2]
            px, py, pz = P[i, 0], P[i, 1], P[i, 2]
            bx = V[k, 0] + ay * pz - az * py
            by = V[k, 1] + az * px - ax * pz
            bz = V[k, 2] + ax * py - ay * px
            wx = R[i, 0, 0] * ax + R[i, 1, 0] * ay + R[i, 2, 0] * az
            wy = R[i, 0, 1] * ax + R[i, 1, 1] * ay + R[i, 2, 1] * az
            wz = R[i, 0, 2] * ax + R[i, 1, 2] * ay + R[i, 2, 2] * az
            vx = R[i, 0, 0] * bx + R[i, 1, 0] * by + R[i, 2, 0] * bz
            vy = R[i, 0, 1] * bx + R[i, 1, 1] * by + R[i, 2, 1] * bz
            vz = R[i, 0, 2] * bx + R[i, 1, 2] * by + R[i, 2, 2] * bz
        if model["kind"][i] == REVOLUTE:
            wz += qd[i]
        else:
            vz += qd[i]
        W[i, 0], W[i, 1], W[i, 2] = wx, wy, wz
        V[i, 0], V[i, 1], V[i, 2] = vx, vy, vz
        lx = II[i, 0] * wx + II[i, 1] * wy + II[i, 2] * wz
        ly = II[i, 1] * wx + II[i, 3] * wy + II[i, 4] * wz
        lz = II[i, 2] * wx + II[i, 4] * wy + II[i, 5] * wz
        hx, hy, hz = h[i, 0], h[i, 1], h[i, 2]
        cx, cy, cz = wy * hz - wz * hy, wz * hx - wx * hz, wx * hy - wy * hx
        twice += model["mass"][i] * (vx * vx + vy * vy + vz * vz) + 2.0 * (vx * cx + vy * cy + vz * cz)
        twice += wx * lx + wy * ly + wz * lz + model["rotor"][i] * qd[i] * qd[i]
    out[0] = 0.5 * twice
    return OK


@hot
def potential_energy(model: np.void, q: Array, ws: np.void, out: Array) -> int:
    """Energy of the moving bodies in the field of gravity, written into out[0]; zero when all mass is at the base origin.

    q    (n,)  rad or m  joint positions
    ws                   scratch; R, p, R_base and p_base overwritten
    out  (1,)  J         result

    Returns OK. Its gradient is gravity_torque(q); see tests/identities.
    """
    body_poses(model, q, ws)
    Rb, pb, h = ws["R_base"], ws["p_base"], model["h"]
    energy = 0.0
    for i in range(model["n"]):
        for r in range(3):
            moment = Rb[i, r, 0] * h[i, 0] + Rb[i, r, 1] * h[i, 1] + Rb[i, r, 2] * h[i, 2]
            energy -= model["gravity"][r] * (moment + model["mass"][i] * pb[i, r])
    out[0] = energy
    return OK
