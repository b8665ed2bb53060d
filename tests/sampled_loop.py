"""The sampled loop of one joint in matrix form: a double integrator under a torque held over a period T, the unit of time.

    x+ = x + v + u / 2,   v+ = v + u,   z+ = z + Ki x   (used before it is advanced)
    u = -(Kp x + Kd s + z), applied `delay` periods later;  s = v (true velocity) or x - x_before (difference of two positions)

Computed torque on an exact model is this loop in every joint. A linear sampled loop is stable when the spectral radius of its
transition matrix is below 1 (textbook mathematics).
"""

from collections.abc import Callable

import numpy as np

Array = np.ndarray
Gains = tuple[float, float, float]  # Kp, Kd, Ki in units of 1/T^2, 1/T, 1/T^3


def transition(gains: Gains, delay: int, difference: bool) -> Array:
    """Matrix of (x, v, x_before, z, torques on their way) from one period to the next."""
    Kp, Kd, Ki = gains
    size = 4 + delay
    A = np.zeros((size, size))
    A[0, :2], A[1, 1], A[2, 0] = (1.0, 1.0), 1.0, 1.0
    A[3, 0], A[3, 3] = Ki, 1.0
    feedback = np.zeros(size)
    feedback[0], feedback[3] = -Kp, -1.0
    if difference:
        feedback[0], feedback[2] = -Kp - Kd, Kd
    else:
        feedback[1] = -Kd
    # The torque in force is the oldest on its way, or the new one.
    force = feedback if delay == 0 else np.eye(size)[4]
    A[0] += 0.5 * force
    A[1] += force
    for k in range(delay):
        A[4 + k] = feedback if k == delay - 1 else np.eye(size)[5 + k]
    if Ki == 0.0:
        keep = [k for k in range(size) if k != 3]  # without an integral z is no state of the loop
        A = A[np.ix_(keep, keep)]
    return A


def spectral_radius(gains: Gains, delay: int, difference: bool) -> float:
    return float(np.abs(np.linalg.eigvals(transition(gains, delay, difference))).max())


def critically_damped(a: float) -> Gains:
    """Both poles at -a/T."""
    return a * a, 2.0 * a, 0.0


def triple_pole(a: float) -> Gains:
    """Three poles at -a/T."""
    return 3.0 * a * a, 3.0 * a, a**3


def limit(form: Callable[[float], Gains], delay: int, difference: bool) -> float:
    """Least a at which the loop stops being stable, by bisection."""
    low, high = 0.01, 2.0
    for _ in range(60):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if spectral_radius(form(middle), delay, difference) < 1.0 else (low, middle)
    return low
