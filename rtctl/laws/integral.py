"""The integral of the tracking error, bounded and kept from winding up: the memory of every law with an integral term.

The memory is the integral term itself (Ki times the integral), so that a bound has the unit of what it bounds.
"""

from rtctl.kernels.compile import hot

EXCESS_FLOOR_RATIO = 1e-9  # of the torque: what the start ramp changes by rounding is not saturation
EXCESS_FLOOR = 1e-12  # N m or N


@hot
def integral_step(n, x, parameters, integral):
    """Advance the integral terms (>= n,) by one period with the present error. To be called after they have been used.

    A joint does not integrate while the limiters of the last cycle cut its torque and the error would drive it further beyond
    them (conditional integration): growth is refused when (tau_law_last - tau_out_last) times the step is > 0. For laws that act
    through M the same test, joint by joint, keeps the excess w from growing in the norm w' M^-1 w, since w' M^-1 M dz = w' dz.
    A number that is not finite is not integrated. Source: conditional integration, Astrom & Hagglund, PID Controllers, 1995,
    section 3.5.
    """
    for i in range(n):
        step = parameters["Ki"][i] * (x["q_ref"][i] - x["q"][i]) * x["dt_s"]
        excess = x["tau_law_last"][i] - x["tau_out_last"][i]
        if abs(excess) <= EXCESS_FLOOR + EXCESS_FLOOR_RATIO * abs(x["tau_law_last"][i]):
            excess = 0.0
        if excess * step <= 0.0:  # false for NaN: it must not enter the memory
            bound = parameters["integral_max"][i]
            integral[i] = min(max(integral[i] + step, -bound), bound)
