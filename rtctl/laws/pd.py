"""PD: a spring and a damper to the reference at each joint, nothing known about the arm.

    tau = Kp (q_ref - q) + Kd (qd_ref - qd)

At rest it leaves Kp e = g(q): gravity is held only by an error. Source: any textbook of control.
"""

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from rtctl.kernels.compile import hot
from rtctl.kernels.layout import OK
from rtctl.laws.gains import torque_gains

if TYPE_CHECKING:
    from rtctl.arm import Arm

NAME = "pd"
TERMS = ("p", "d")


def prepare(arm: "Arm", gains: Mapping[str, Any]) -> np.void:
    """LAW_PARAMETERS from [gains.pd]; see `rtctl.laws.gains`. Raises ConfigError with all findings."""
    return torque_gains(arm, NAME, gains)


@hot
def pd_terms(n, x, parameters, p, d):
    """Spring and damper torque, N m or N, into p and d (>= n,)."""
    for i in range(n):
        p[i] = parameters["Kp"][i] * (x["q_ref"][i] - x["q"][i])
        d[i] = parameters["Kd"][i] * (x["qd_ref"][i] - x["qd"][i])


@hot
def torque(model, x, parameters, memory, ws, terms):
    """Terms p, d. Returns OK."""
    pd_terms(model["n"], x, parameters, terms[0], terms[1])
    return OK
