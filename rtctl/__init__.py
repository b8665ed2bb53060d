"""Model-based torque control of robot arms at a fixed rate, behind a safety supervisor.

The names below are loaded on first use, so that `import rtctl` stays quick: the compiler and the sockets come when they are needed.
"""

import importlib
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from rtctl.arm import load_arm
    from rtctl.dynamics import (
        bias_torque,
        energy,
        forward_dynamics,
        frame_pose,
        friction_torque,
        gravity_torque,
        inertia_matrix,
        inverse_dynamics,
        jacobian,
        jacobian_rate,
    )

__version__ = "0.1.0"

__all__ = [
    "__version__",
    "bias_torque",
    "energy",
    "forward_dynamics",
    "frame_pose",
    "friction_torque",
    "gravity_torque",
    "inertia_matrix",
    "inverse_dynamics",
    "jacobian",
    "jacobian_rate",
    "load_arm",
]


def __getattr__(name: str) -> Any:
    if name not in __all__:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    value = getattr(importlib.import_module("rtctl.arm" if name == "load_arm" else "rtctl.dynamics"), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted({*globals(), *__all__})
