"""Feedforward with PD: the model's torque along the reference, plus a spring and a damper to it.

    tau = g(q_ref) + C(q_ref, qd_ref) qd_ref + M(q_ref) qdd_ref + friction(qd_ref) + Kp (q_ref - q) + Kd (qd_ref - qd)

The model part depends on the reference alone: noise of the measurement does not pass through the model.
Source: An, Atkeson & Hollerbach, Model-Based Control of a Robot Manipulator, 1988.
"""

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from rtctl.kernels.compile import hot
from rtctl.laws.feedforward import reference_terms
from rtctl.laws.gains import torque_gains
from rtctl.laws.pd import pd_terms

if TYPE_CHECKING:
    from rtctl.arm import Arm

NAME = "feedforward_pd"
TERMS = ("gravity", "velocity", "inertia", "friction", "p", "d")


def prepare(arm: "Arm", gains: Mapping[str, Any]) -> np.void:
    """LAW_PARAMETERS from [gains.feedforward_pd]; see `rtctl.laws.gains`. Raises ConfigError with all findings."""
    return torque_gains(arm, NAME, gains)


@hot
def torque(model, x, parameters, memory, ws, terms):
    """Terms gravity, velocity, inertia, friction, p, d. Returns OK or the status of the kernel that failed."""
    pd_terms(model["n"], x, parameters, terms[4], terms[5])
    return reference_terms(model, x, ws, terms[0], terms[1], terms[2], terms[3])
