"""The gate: the only code whose output can reach the socket. No input whatever yields a torque outside the limits.

Order: finite, magnitude, rate, and once more both as a pair. Integrators see what left the gate, not what was asked.
"""

import math

from rtctl.blocks import LIMITER_MAGNITUDE, LIMITER_RATE, MODE_LIVE
from rtctl.kernels.compile import hot
from rtctl.kernels.layout import OK

REFUSED = -1


@hot
def _clamp(x, bound):  # type: ignore[no-untyped-def]
    """x within +/- bound. Only for finite x: a clamp turns NaN into full torque."""
    if x > bound:
        return bound
    if x < -bound:
        return -bound
    return x


@hot
def pass_gate(setup, mode, tau, gravity, tau_last, row):  # type: ignore[no-untyped-def]
    """Bring `tau` within the limits of the mode, into row["tau_magnitude"] and row["tau_out"].

    tau       (>= n,)  N m   torque asked: law, braking or holding
    gravity   (>= n,)  N m   holding torque, which has priority when the limits file asks for scaling
    tau_last  (>= n,)  N m   what left the gate in the last cycle

    Returns OK, or REFUSED with row["tau_out"] all zero when a number is not finite or a limit cannot be kept.
    """
    limits = setup["limits"]
    n = setup["model"]["n"]
    for i in range(n):
        row["tau_out"][i] = 0.0
        row["tau_magnitude"][i] = 0.0
    for i in range(n):
        rate = limits["tau_rate_max"][i] if mode == MODE_LIVE else limits["brake_tau_rate_max"][i]
        if not (math.isfinite(tau[i]) and math.isfinite(tau_last[i]) and limits["tau_max"][i] >= 0.0 and rate >= 0.0):
            return REFUSED

    scale = 1.0
    if limits["scale_torque"] == 1:
        scale = _common_scale(limits, n, tau, gravity)
        if not (0.0 <= scale <= 1.0):
            return REFUSED
    period_s = float(setup["period_ns"]) * 1e-9
    for i in range(n):
        bound = limits["tau_max"][i]
        wanted = tau[i] if scale == 1.0 else gravity[i] + scale * (tau[i] - gravity[i])
        row["tau_magnitude"][i] = _clamp(wanted, bound)
        if row["tau_magnitude"][i] != tau[i]:
            row["limiters"][i] |= LIMITER_MAGNITUDE

        rate = limits["tau_rate_max"][i] if mode == MODE_LIVE else limits["brake_tau_rate_max"][i]
        step = rate * period_s
        out = tau_last[i] + _clamp(row["tau_magnitude"][i] - tau_last[i], step)
        row["tau_out"][i] = _clamp(out, bound)
        if row["tau_out"][i] != row["tau_magnitude"][i]:
            row["limiters"][i] |= LIMITER_RATE

    for i in range(n):
        bound = limits["tau_max"][i]
        if not (math.isfinite(row["tau_out"][i]) and -bound <= row["tau_out"][i] <= bound):
            for j in range(n):
                row["tau_out"][j] = 0.0
            return REFUSED
    return OK


@hot
def _common_scale(limits, n, tau, gravity):  # type: ignore[no-untyped-def]
    """Largest factor in [0, 1] that brings gravity + factor (tau - gravity) inside every limit; gravity alone must fit."""
    scale = 1.0
    for i in range(n):
        bound = limits["tau_max"][i]
        g = gravity[i]
        if not (-bound <= g <= bound):
            continue  # the clamp per joint holds this joint; scaling the others would not help it
        extra = tau[i] - g
        room = bound - g if extra > 0.0 else bound + g
        size = abs(extra)
        if size > room and room / size < scale:
            scale = room / size
    return scale
