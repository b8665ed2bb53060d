"""References made from settings, and the continuity every one of them must have."""

from pathlib import Path
from types import SimpleNamespace
from typing import Any

import numpy as np
import numpy.typing as npt

from rtctl.references import Reference, begin_motion, prepare_reference, sample_motion
from tests.hand_arm import hand_arm
from tests.plants import chain_model

FloatArray = npt.NDArray[np.float64]

START = (0.3, -0.4)  # measured pose, rad

POINT_TO_POINT: dict[str, Any] = {
    "kind": "point_to_point",
    "goal_rad": [1.0, -1.2],
    "duration_s": 2.0,
    "speed_max_rad_s": None,
    "acceleration_max_rad_s2": None,
}
MULTI_SINE: dict[str, Any] = {
    "kind": "multi_sine",
    "center_rad": [0.2, 0.1],
    "approach_duration_s": 1.0,
    "frequency_hz": [0.5, 1.3],
    "amplitude_rad": [[0.3, 0.1], [0.2, 0.05]],
    "phase_rad": [[0.0, 1.0], [2.0, -0.5]],
    "duration_s": 6.0,
    "fade_s": 1.0,
}
WAYPOINTS = "t[s],b[rad],a[rad]\n2.0,0.5,0.0\n2.4,0.4,0.3\n3.1,-0.1,0.5\n4.0,0.2,0.1\n"


def reference(folder: Path, **settings: Any) -> Reference:
    """A reference for two rods; waypoints need their file in `folder`."""
    return prepare_reference(hand_arm(chain_model(2)), SimpleNamespace(**settings), folder)


def write_waypoints(folder: Path, text: str = WAYPOINTS) -> dict[str, Any]:
    """Write a waypoint file; returns the settings that read it."""
    (folder / "motion.csv").write_text(text, encoding="utf-8")
    return {"kind": "waypoints", "file": "motion.csv", "approach_duration_s": 1.5}


def assert_smooth(prepared: Reference, joins: list[float]) -> None:
    """Position, velocity and acceleration fit each other everywhere and have no step, at the joins least of all.

    Central differences over 2 h err by h^2/6 times a third derivative; across a step of the acceleration they would err by the
    step itself. Starts at START at rest, ends at rest and stays.
    """
    h = 1e-5
    end_s = float(begin_motion(prepared, START)["end_s"])
    base = np.concatenate([np.linspace(10 * h, end_s + 0.2, 2000), *[join + h * np.arange(-3, 4) for join in joins]])
    _, q, qd, qdd = sample_motion(prepared, START, base)
    _, q_after, qd_after, qdd_after = sample_motion(prepared, START, base + h)
    _, q_before, qd_before, qdd_before = sample_motion(prepared, START, base - h)
    assert np.abs((q_after - q_before) / (2 * h) - qd).max() < 1e-5  # rounding 1e-16/h, jerk h^2/6
    assert np.abs((qd_after - qd_before) / (2 * h) - qdd).max() < 5e-3  # one-sided jerk times h at the joins
    assert np.abs(qdd_after - qdd_before).max() < 2e-2  # jerk times 2 h; a step would be of order one
    _, q0, qd0, qdd0 = sample_motion(prepared, START, [0.0])
    assert np.allclose(q0, [START], rtol=0, atol=1e-15) and not qd0.any() and not qdd0.any()
    _, q_end, qd_end, qdd_end = sample_motion(prepared, START, [end_s, end_s + 1.0, end_s + 1e6])
    assert np.ptp(q_end, axis=0).max() < 1e-15 and not qd_end.any() and not qdd_end.any()
