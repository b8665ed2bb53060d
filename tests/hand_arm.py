"""An arm made by hand for tests of laws and references: the fields of `rtctl.arm.Arm` they read. Invented values."""

from types import SimpleNamespace
from typing import Any

import numpy as np


def hand_arm(model: np.void, **values: Any) -> Any:
    """Joints a, b, c, ...; range -2 to 2.5, 3 per second, 60 N m or N; `values` change fields."""
    n = int(model["n"])
    fields = {
        "n": n,
        "model": model,
        "joint_names": tuple("abcdefghijklmnop"[:n]),
        "units": tuple("rad" if kind == 0 else "m" for kind in model["kind"][:n]),
        "q_min": np.full(n, -2.0),
        "q_max": np.full(n, 2.5),
        "qd_max": np.full(n, 3.0),
        "tau_max": np.full(n, 60.0),
    }
    return SimpleNamespace(**{**fields, **values})
