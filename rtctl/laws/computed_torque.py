"""Computed torque: feedback acts as acceleration through the inertia matrix, the rest of the dynamics is cancelled.

    tau = M(q) (qdd_ref + Kd e' + Kp e + Ki int e) + C(q, qd) qd + g(q) + friction(qd_ref),  e = q_ref - q

With an exact model each joint obeys e''' + Kd e'' + Kp e' + Ki e = 0 (PD: e'' + Kd e' + Kp e = 0), the same in every pose.
It is PD when no integral gain is given. Friction is that of the reference velocity: compensating it at the measured velocity makes
the arm creep and chatter around zero speed.
Source: Luh, Walker & Paul, IEEE Trans. Automatic Control 25(3), 1980 (there in task space); Craig, Introduction to Robotics;
Siciliano et al., Robotics, 2009.
"""

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from rtctl.kernels.cholesky import cholesky
from rtctl.kernels.compile import hot
from rtctl.kernels.friction import friction_torque
from rtctl.kernels.inertia_matrix import inertia_matrix_at_pose
from rtctl.kernels.inverse_dynamics import bias_torque_at_pose, gravity_torque_at_pose
from rtctl.kernels.kinematics import joint_transforms
from rtctl.kernels.layout import OK
from rtctl.laws.gains import acceleration_gains
from rtctl.laws.integral import integral_step

if TYPE_CHECKING:
    from rtctl.arm import Arm

NAME = "computed_torque"
TERMS = ("gravity", "velocity", "inertia_reference", "p", "d", "i", "friction")


def prepare(arm: "Arm", gains: Mapping[str, Any]) -> np.void:
    """LAW_PARAMETERS from [gains.computed_torque]; see `rtctl.laws.gains`. Raises ConfigError with all findings."""
    return acceleration_gains(arm, NAME, gains)


@hot
def torque(model, x, parameters, memory, ws, terms):
    """Terms gravity, velocity, inertia_reference (M qdd_ref), p, d, i (M times the acceleration part), friction.

    Memory holds the integral acceleration of each joint, rad/s^2 or m/s^2.
    Returns OK, or the status of the kernel that failed; an inertia matrix that is not positive definite is a failure.
    """
    n = model["n"]
    bias, M = ws["x0"][:], ws["M"][:]
    status = joint_transforms(model, x["q"][:], ws)
    if status == OK:
        status = gravity_torque_at_pose(model, ws, terms[0])
    if status == OK:
        status = bias_torque_at_pose(model, x["qd"][:], ws, bias)
    if status == OK:
        status = friction_torque(model, x["qd_ref"][:], terms[6])
    if status == OK:
        status = inertia_matrix_at_pose(model, ws, M)
    if status == OK:
        status = cholesky(M, n, ws["L"][:])
    if status != OK:
        return status
    for i in range(n):
        terms[1, i] = bias[i] - terms[0, i]
        reference, p, d, integral = 0.0, 0.0, 0.0, 0.0
        for j in range(n):
            reference += M[i, j] * x["qdd_ref"][j]
            p += M[i, j] * (parameters["Kp"][j] * (x["q_ref"][j] - x["q"][j]))
            d += M[i, j] * (parameters["Kd"][j] * (x["qd_ref"][j] - x["qd"][j]))
            integral += M[i, j] * memory["values"][j]
        terms[2, i] = reference
        terms[3, i] = p
        terms[4, i] = d
        terms[5, i] = integral
    integral_step(n, x, parameters, memory["values"][:])
    return OK
