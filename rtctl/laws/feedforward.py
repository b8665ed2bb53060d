"""Feedforward: the model's torque along the reference, blind to what the arm does.

    tau = g(q_ref) + C(q_ref, qd_ref) qd_ref + M(q_ref) qdd_ref + friction(qd_ref)

It corrects nothing: an error of the model or of the start stays and grows. It shows what the model alone is worth.
"""

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from rtctl.kernels.compile import hot
from rtctl.kernels.friction import friction_torque
from rtctl.kernels.inverse_dynamics import bias_torque_at_pose, gravity_torque_at_pose, inverse_dynamics_at_pose
from rtctl.kernels.kinematics import joint_transforms
from rtctl.kernels.layout import OK
from rtctl.laws.gains import no_gains

if TYPE_CHECKING:
    from rtctl.arm import Arm

NAME = "feedforward"
TERMS = ("gravity", "velocity", "inertia", "friction")


def prepare(arm: "Arm", gains: Mapping[str, Any]) -> np.void:
    """LAW_PARAMETERS; [gains.feedforward] must be empty, there is nothing to tune. Raises ConfigError."""
    return no_gains(arm, NAME, gains)


@hot
def reference_terms(model, x, ws, gravity, velocity, inertia, friction):
    """The model's torque along the reference, N m or N, split into four (>= n,) arrays.

    velocity and inertia are differences of whole torques: bias - gravity, and inverse dynamics - bias. Their sum with gravity
    and friction is the whole torque to rounding. Returns OK or the status of the kernel that failed.
    """
    n = model["n"]
    bias, whole = ws["x0"][:], ws["x1"][:]
    status = joint_transforms(model, x["q_ref"][:], ws)
    if status == OK:
        status = gravity_torque_at_pose(model, ws, gravity)
    if status == OK:
        status = bias_torque_at_pose(model, x["qd_ref"][:], ws, bias)
    if status == OK:
        status = inverse_dynamics_at_pose(model, x["qd_ref"][:], x["qdd_ref"][:], ws, whole)
    if status == OK:
        status = friction_torque(model, x["qd_ref"][:], friction)
    if status != OK:
        return status
    for i in range(n):
        velocity[i] = bias[i] - gravity[i]
        inertia[i] = whole[i] - bias[i]
    return OK


@hot
def torque(model, x, parameters, memory, ws, terms):
    """Terms gravity, velocity, inertia, friction. Returns OK or the status of the kernel that failed."""
    return reference_terms(model, x, ws, terms[0], terms[1], terms[2], terms[3])
