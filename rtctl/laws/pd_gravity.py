"""PD with gravity compensation at the measured pose.

    tau = g(q) + Kp (q_ref - q) + Kd (qd_ref - qd)

With an exact gravity model any positive gains hold a pose without error.
Source: Takegaki & Arimoto, ASME J. Dynamic Systems, Measurement and Control 103, 1981.
"""

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from rtctl.kernels.compile import hot
from rtctl.kernels.inverse_dynamics import gravity_torque
from rtctl.laws.gains import torque_gains
from rtctl.laws.pd import pd_terms

if TYPE_CHECKING:
    from rtctl.arm import Arm

NAME = "pd_gravity"
TERMS = ("gravity", "p", "d")


def prepare(arm: "Arm", gains: Mapping[str, Any]) -> np.void:
    """LAW_PARAMETERS from [gains.pd_gravity]; see `rtctl.laws.gains`. Raises ConfigError with all findings."""
    return torque_gains(arm, NAME, gains)


@hot
def torque(model, x, parameters, memory, ws, terms):
    """Terms gravity, p, d. Returns the status of the gravity torque."""
    pd_terms(model["n"], x, parameters, terms[1], terms[2])
    return gravity_torque(model, x["q"][:], ws, terms[0])
