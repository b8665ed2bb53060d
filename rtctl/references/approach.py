"""How the approach move of a reference with a body of its own is set from the run file."""

import math

import numpy as np

from rtctl.config.joint_values import number_fault
from rtctl.errors import Finding

# Without an approach move in the run file the arm must already stand within this distance of the body's first pose.
START_DISTANCE_MAX_RAD = 0.02
START_DISTANCE_MAX_M = 0.005
# What remains is closed by a move this gentle (rad/s, rad/s^2; m/s, m/s^2), so that the motion still begins where the arm is.
SETTLING_SPEED = 0.1
SETTLING_ACCELERATION = 0.2


def set_approach(parameters: np.void, duration_s: float | None) -> list[Finding]:
    """Set the duration of the approach move, or the settling move's limits when `duration_s` is None."""
    if duration_s is None:
        parameters["qd_max"] = SETTLING_SPEED
        parameters["qdd_max"] = SETTLING_ACCELERATION
        return []
    if number_fault(duration_s, above=0.0):
        return [Finding("reference.approach_duration_s", "a finite number > 0 s", repr(duration_s))]
    parameters["duration_s"] = duration_s
    return []


def start_distance_max(unit: str) -> float:
    """How far a joint may stand from the first pose when no approach move is asked for, by its unit."""
    return START_DISTANCE_MAX_M if unit == "m" else START_DISTANCE_MAX_RAD


def in_degrees(distance: float, unit: str) -> str:
    """A distance as people read it: `63 deg`, `12 mm`."""
    return f"{1000.0 * distance:.3g} mm" if unit == "m" else f"{math.degrees(distance):.3g} deg"
