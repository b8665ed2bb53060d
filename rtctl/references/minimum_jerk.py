"""The minimum-jerk move from rest to rest: the approach of every reference, and the whole of a point-to-point motion.

One time for all joints, so that the path in joint space is a straight line.
"""

import math

from rtctl.kernels.compile import hot
from rtctl.kernels.layout import OK

NOT_FINITE = -1  # a measured pose, a time or a duration is not a finite number

PEAK_SPEED = 15.0 / 8.0  # of a move over distance 1 in time 1, reached half-way
PEAK_ACCELERATION = 10.0 / math.sqrt(3.0)  # reached at 1/2 -+ sqrt(3)/6 of the time


@hot
def rest_to_rest(u):
    """Position, first and second derivative by u of the move from 0 to 1 for u in [0, 1]; all end at rest.

    Returns (10 u^3 - 15 u^4 + 6 u^5, 30 u^2 (1 - u)^2, 60 u (1 - u) (1 - 2 u)).
    Source: Flash & Hogan, J. Neuroscience 5(7), 1985, the minimum of the integral of squared jerk.
    """
    rest = 1.0 - u
    position = u * u * u * (10.0 + u * (6.0 * u - 15.0))
    return position, 30.0 * u * u * rest * rest, 60.0 * u * rest * (1.0 - 2.0 * u)


@hot
def begin_approach(parameters, memory, out):
    """Fix start and duration of the approach move from the measured pose in out["q_ref"]; `out` becomes that pose at rest.

    The duration is parameters["duration_s"], or when that is 0 the shortest that keeps "qd_max" and "qdd_max" on every joint:
    15/8 d/T and 10/sqrt(3) d/T^2. memory["end_s"] becomes the end of the approach plus that of the body.

    Returns OK, or NOT_FINITE when the pose or the duration is not a finite number.
    Source of the two peaks: Flash & Hogan, J. Neuroscience 5(7), 1985, by setting the next derivative to zero.
    """
    duration_s = parameters["duration_s"]
    limited = not duration_s > 0.0
    for i in range(parameters["n"]):
        start = out["q_ref"][i]
        memory["q_start"][i] = start
        out["qd_ref"][i] = 0.0
        out["qdd_ref"][i] = 0.0
        if not math.isfinite(start):
            return NOT_FINITE
        if limited:
            distance = abs(parameters["q_goal"][i] - start)
            if distance > 0.0:
                by_speed = PEAK_SPEED * distance / parameters["qd_max"][i]
                by_acceleration = math.sqrt(PEAK_ACCELERATION * distance / parameters["qdd_max"][i])
                duration_s = max(duration_s, by_speed, by_acceleration)
    if not (duration_s >= 0.0 and math.isfinite(duration_s)):
        return NOT_FINITE
    memory["approach_s"] = duration_s
    memory["end_s"] = duration_s + parameters["body_duration_s"]
    return OK


@hot
def sample_approach(parameters, memory, out):
    """Fill `out` at out["t_s"] <= memory["approach_s"] on the move from memory["q_start"] to parameters["q_goal"]."""
    T = memory["approach_s"]
    s, sd, sdd = rest_to_rest(out["t_s"] / T)
    for i in range(parameters["n"]):
        start = memory["q_start"][i]
        distance = parameters["q_goal"][i] - start
        out["q_ref"][i] = start + distance * s
        out["qd_ref"][i] = distance * sd / T
        out["qdd_ref"][i] = distance * sdd / (T * T)
    return OK


@hot
def rest_at_goal(parameters, out):
    """Fill `out` with parameters["q_goal"] at rest."""
    for i in range(parameters["n"]):
        out["q_ref"][i] = parameters["q_goal"][i]
        out["qd_ref"][i] = 0.0
        out["qdd_ref"][i] = 0.0
    return OK
