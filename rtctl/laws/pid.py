"""PID: a spring, a damper and an integral of the error at each joint, nothing known about the arm.

    tau = Kp e + Kd e' + Ki int e,  e = q_ref - q

The integral finds gravity and friction that stay, within its bound, and always late when they change.
"""

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from rtctl.kernels.compile import hot
from rtctl.kernels.layout import OK
from rtctl.laws.gains import torque_gains
from rtctl.laws.integral import integral_step
from rtctl.laws.pd import pd_terms

if TYPE_CHECKING:
    from rtctl.arm import Arm

NAME = "pid"
TERMS = ("p", "d", "i")


def prepare(arm: "Arm", gains: Mapping[str, Any]) -> np.void:
    """LAW_PARAMETERS from [gains.pid]; see `rtctl.laws.gains`. Raises ConfigError with all findings."""
    return torque_gains(arm, NAME, gains, integral=True)


@hot
def torque(model, x, parameters, memory, ws, terms):
    """Terms p, d, i; memory holds the integral term of each joint, N m or N. Returns OK."""
    n = model["n"]
    pd_terms(n, x, parameters, terms[0], terms[1])
    for i in range(n):
        terms[2, i] = memory["values"][i]
    integral_step(n, x, parameters, memory["values"][:])
    return OK
