"""Torque without a law: braking is gravity plus damping; holding adds a bounded spring to the pose reached."""

from rtctl.blocks import MODE_HOLDING
from rtctl.kernels.compile import hot
from rtctl.kernels.inverse_dynamics import gravity_torque
from rtctl.kernels.layout import OK

NAN = float("nan")
HUGE = 1e300  # N m: beyond every torque limit, and its sum with gravity stays finite


@hot
def rest_torque(setup, memory, mode, gravity, tau):  # type: ignore[no-untyped-def]
    """Torque of `braking` or `holding`, written into `tau`; friction is not compensated.

    gravity  (>= n,)  N m   gravity torque at the measured pose (`holding_torque`)
    tau      (>= n,)  N m   result: gravity - brake_damping qd, in holding plus clamp(hold_stiffness (q_hold - q))

    Returns OK. Numbers that are not finite pass through; the gate refuses them.
    """
    limits = setup["limits"]
    link = memory["link"]
    supervisor = memory["supervisor"]
    for i in range(setup["model"]["n"]):
        damping = limits["brake_damping"][i] * link["qd"][i]
        # A speed that is absurd but finite must not overflow: the arm is braked with full torque, not dropped by the gate.
        if damping > HUGE:
            damping = HUGE
        if damping < -HUGE:
            damping = -HUGE
        tau[i] = gravity[i] - damping
        if mode == MODE_HOLDING:
            spring = limits["hold_stiffness"][i] * (supervisor["q_hold"][i] - link["q"][i])
            bound = limits["hold_torque_max"][i]
            if not (bound >= 0.0):
                spring = NAN  # a bound that bounds nothing: the gate refuses it
            if spring > bound:
                spring = bound
            if spring < -bound:
                spring = -bound
            tau[i] += spring
    return OK


@hot
def holding_torque(setup, memory, gravity):  # type: ignore[no-untyped-def]
    """Gravity torque at the measured pose, N m, into `gravity`. Returns OK or the kernel's status."""
    return gravity_torque(setup["model"], memory["link"]["q"][:], memory["scratch"], gravity)


@hot
def holding_fits(setup, gravity):  # type: ignore[no-untyped-def]
    """True when the holding torque leaves the asked margin to every torque limit; False for numbers that are not finite."""
    limits = setup["limits"]
    fits = True
    for i in range(setup["model"]["n"]):
        if not (abs(gravity[i]) <= limits["hold_margin"] * limits["tau_max"][i]):
            fits = False
    return fits
