"""Joint friction of the model: what the laws compensate and the report separates. The simulated arm has its own, with stiction."""

import math

import numpy as np
from numpy.typing import NDArray

from rtctl.kernels.compile import hot
from rtctl.kernels.layout import OK

Array = NDArray[np.float64]


@hot
def friction_torque(model: np.void, qd: Array, tau: Array) -> int:
    """Torques that overcome friction, tau = coulomb tanh(qd / friction_speed) + viscous qd.

    qd   (n,)  rad/s or m/s  joint velocities
    tau  (n,)  N m or N      result; same sign as qd, it takes power from the drives

    Returns OK. tanh smooths the Coulomb step, so that a law may use it near standstill: common practice, no source.
    Joints without Coulomb friction need no friction_speed.
    """
    for i in range(model["n"]):
        tau[i] = model["viscous"][i] * qd[i]
        if model["coulomb"][i] != 0.0:
            tau[i] += model["coulomb"][i] * math.tanh(qd[i] / model["friction_speed"][i])
    return OK
