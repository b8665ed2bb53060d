"""Hold the measured pose, without end."""

import math
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from rtctl.blocks import REFERENCE_PARAMETERS
from rtctl.kernels.compile import hot
from rtctl.kernels.layout import OK, new_block
from rtctl.references.minimum_jerk import NOT_FINITE

if TYPE_CHECKING:
    from rtctl.arm import Arm

KIND = "hold"


def prepare(arm: "Arm", config: object, folder: Path) -> tuple[np.void, npt.NDArray[np.float64]]:
    """Parameters and (no) data; the pose is measured when the motion begins."""
    parameters = new_block(REFERENCE_PARAMETERS)
    parameters["n"] = arm.n
    return parameters, np.zeros(0)


@hot
def begin(parameters, memory, out):
    """Keep the measured pose in out["q_ref"]; memory["end_s"] is infinite. Returns OK, or NOT_FINITE."""
    memory["approach_s"] = 0.0
    memory["end_s"] = math.inf
    for i in range(parameters["n"]):
        memory["q_start"][i] = out["q_ref"][i]
        out["qd_ref"][i] = 0.0
        out["qdd_ref"][i] = 0.0
        if not math.isfinite(out["q_ref"][i]):
            return NOT_FINITE
    return OK


@hot
def sample(parameters, memory, out):
    """Fill `out` with the pose kept, at rest. Returns OK."""
    for i in range(parameters["n"]):
        out["q_ref"][i] = memory["q_start"][i]
        out["qd_ref"][i] = 0.0
        out["qdd_ref"][i] = 0.0
    return OK
