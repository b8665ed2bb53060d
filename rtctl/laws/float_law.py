"""Float: gravity compensation and damping, no reference. The arm can be moved by hand and stays where it is left.

    tau = g(q) - Kd qd

It holds nothing: an error of the gravity model makes it drift, slowed by the damping only.
"""

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np

from rtctl.kernels.compile import hot
from rtctl.kernels.inverse_dynamics import gravity_torque
from rtctl.laws.gains import damping_gains

if TYPE_CHECKING:
    from rtctl.arm import Arm

NAME = "float"
TERMS = ("gravity", "damping")


def prepare(arm: "Arm", gains: Mapping[str, Any]) -> np.void:
    """LAW_PARAMETERS from [gains.float], key kd_nm_s_rad. Raises ConfigError with all findings."""
    return damping_gains(arm, NAME, gains)


@hot
def torque(model, x, parameters, memory, ws, terms):
    """Terms gravity, damping. Returns the status of the gravity torque."""
    for i in range(model["n"]):
        terms[1, i] = -parameters["Kd"][i] * x["qd"][i]
    return gravity_torque(model, x["q"][:], ws, terms[0])
