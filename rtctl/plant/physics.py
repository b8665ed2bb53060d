"""One substep of the true arm: rigid-body motion, drives, friction with true sticking, brakes and hard stops.

Order of a substep of length dt (drift, kick, drift):

    q_mid = q + dt/2 qd
    M(q_mid) (qd+ - qd) = dt (tau - bias(q_mid, (qd + qd+)/2)) + friction impulse + stop impulse
    q+ = q_mid + dt/2 qd+

Without friction this is second order, and symmetric in time up to the solution of the velocity-dependent bias, which is found by
one prediction and two corrections: the energy error falls with dt^2. Friction, brakes and stops act through impulses that are
solved together with the new velocities, implicitly (first order in dt):

    Coulomb and brake  |p_i| <= c_i, and p_i = -c_i sign(qd+_i) where the joint moves
    viscous            p_i = -dt B_i qd+_i
    hard stop          p_i pushes only, spring at the position that is reached, damper while in contact

Each of them opposes the new velocity (or the stop's spring at the new position), so p . (v_free + qd+)/2 <= 0: none can add
energy. A joint that sticks has velocity 0 exactly and its position does not change by one bit, whatever the other joints do.
The impulses minimise a strictly convex function of the new velocities; the pattern of sliding, sticking and touching joints is
guessed from the velocity before, solved exactly by Cholesky, checked, and corrected by Gauss-Seidel sweeps if the check fails.

Sources (from memory): leapfrog in drift-kick-drift form, Hairer, Lubich, Wanner, Geometric Numerical Integration (2006), ch. I.1;
Coulomb friction as implicit impulse with exact sticking, Moreau, Unilateral contact and dry friction in finite freedom dynamics
(1988); sticking decided by the force balance and not by a small velocity, Karnopp, ASME J. DSMC 107:100-103 (1985).
"""

import math

from rtctl.kernels.cholesky import cholesky, cholesky_solve
from rtctl.kernels.compile import hot
from rtctl.kernels.energy import kinetic_energy, potential_energy
from rtctl.kernels.inertia_matrix import inertia_matrix_at_pose
from rtctl.kernels.inverse_dynamics import bias_torque_at_pose
from rtctl.kernels.kinematics import joint_transforms
from rtctl.kernels.layout import OK
from rtctl.plant.blocks import BRAKE_CLOSED, BRAKE_OPENING

CORRECTIONS = (
    2  # of the velocity in the bias; with one the energy drifts several times faster, a third changes nothing that matters
)
PATTERN_ROUNDS = 24  # corrections of the pattern in one substep; one is rarely needed, three are usual at most
SWEEPS_PER_ROUND = 3
SWEEPS_LAST = 400  # if no pattern fits (rounding at an exact boundary), the sweeps' own answer is used
PATTERN_ROUNDING = 1e-12  # relative; a sticking torque this much beyond the boundary is rounding


@hot
def substep(setup, memory, dt):
    """Advance the true motion by `dt` seconds with the drives asked for `memory["tau_ask"]`. Returns OK, or what a kernel returned.

    Reads and writes q, qd, tau and the bookkeeping of work in PLANT_MEMORY. A failure leaves q and qd as they were.
    """
    model = setup["model"]
    n = model["n"]
    q_mid = memory["q_mid"][:]
    qd_mid = memory["qd_mid"][:]
    M = memory["M"][:]
    _drive_torque(setup, memory, dt)
    for i in range(n):
        q_mid[i] = memory["q"][i] + 0.5 * dt * memory["qd"][i]
    status = joint_transforms(model, q_mid, memory["scratch"])
    if status == OK:
        status = inertia_matrix_at_pose(model, memory["scratch"], M)
    if status != OK:
        return status
    for i in range(n):
        momentum = 0.0
        for j in range(n):
            momentum += M[i, j] * memory["qd"][j]
        memory["momentum"][i] = momentum
        qd_mid[i] = memory["qd"][i]
    _impulse_limits(setup, memory, dt)

    # Predict with the velocity before, then correct with the mean of before and after.
    for _ in range(1 + CORRECTIONS):
        status = bias_torque_at_pose(model, qd_mid, memory["scratch"], memory["bias"][:])
        if status != OK:
            return status
        for i in range(n):
            memory["b"][i] = memory["momentum"][i] + dt * (memory["tau"][i] - memory["bias"][i])
        status = _solve_velocities(setup, memory, dt)
        if status != OK:
            return status
        for i in range(n):
            qd_mid[i] = 0.5 * (memory["qd"][i] + memory["qd_new"][i])

    _count_work(memory, n, dt)
    for i in range(n):
        memory["qd"][i] = memory["qd_new"][i]
        memory["q"][i] = q_mid[i] + 0.5 * dt * memory["qd"][i]
    return OK


@hot
def substeps(setup, memory, dt, count):
    """`count` substeps with the same asked torque, without the driver's duties. Returns OK or the first other status."""
    for _ in range(count):
        status = substep(setup, memory, dt)
        if status != OK:
            return status
    return OK


@hot
def _drive_torque(setup, memory, dt):
    """Saturation and first-order lag of the drives: `tau` follows `tau_ask`."""
    hit = 0
    for i in range(setup["model"]["n"]):
        limit = setup["tau_max"][i]
        tau = memory["tau_ask"][i]
        if tau > limit:
            tau = limit
            hit = 1
        elif tau < -limit:
            tau = -limit
            hit = 1
        lag_s = setup["lag_s"][i]
        if lag_s > 0.0:
            memory["tau"][i] += (tau - memory["tau"][i]) * -math.expm1(-dt / lag_s)
        else:
            memory["tau"][i] = tau
    memory["saturated"] += hit
    return OK


@hot
def _impulse_limits(setup, memory, dt):
    """Bounds of the friction impulses and the line of the nearer hard stop, for one substep; first guess of the pattern."""
    model = setup["model"]
    brake_holds = memory["brake"] == BRAKE_CLOSED or memory["brake"] == BRAKE_OPENING
    for i in range(model["n"]):
        qd = memory["qd"][i]
        torque = model["coulomb"][i]
        if qd == 0.0:
            torque *= setup["stiction_ratio"]
            memory["slip"][i] = 0
        else:
            memory["slip"][i] = 1 if qd > 0.0 else -1
        if brake_holds:
            torque += setup["brake_torque"][i]
        memory["friction_max"][i] = dt * torque

        above = memory["q_mid"][i] - setup["q_max"][i]
        below = setup["q_min"][i] - memory["q_mid"][i]
        depth = above
        side = 1.0
        if below > above:
            depth = below
            side = -1.0
        memory["side"][i] = 0.0
        memory["stop_offset"][i] = 0.0
        memory["stop_slope"][i] = 0.0
        memory["touch"][i] = 0
        if math.isfinite(depth) and setup["stop_stiffness"][i] > 0.0:
            memory["side"][i] = side
            memory["stop_offset"][i] = dt * setup["stop_stiffness"][i] * depth
            slope = dt * dt * setup["stop_stiffness"][i]
            if depth > 0.0:
                slope += dt * setup["stop_damping"][i]
            memory["stop_slope"][i] = slope
            if memory["stop_offset"][i] + slope * side * qd > 0.0:
                memory["touch"][i] = 1
    return OK


@hot
def _solve_velocities(setup, memory, dt):
    """New velocities `qd_new` from `b` = M qd + dt (tau - bias), all impulses in balance. Returns OK or the status of Cholesky.

    Minimises 1/2 v'(M + dt B)v - b'v + sum c|v| + stop energy, which is strictly convex, so the answer is unique.
    """
    n = setup["model"]["n"]
    v = memory["qd_new"][:]
    for i in range(n):
        memory["M"][i, i] += dt * setup["model"]["viscous"][i]
    status = _solve_pattern(memory, n)
    fits = status == OK and _pattern_fits(memory, n)
    rounds = 0
    if status == OK and not fits:
        for i in range(n):
            v[i] = memory["qd"][i]
        while status == OK and not fits and rounds < PATTERN_ROUNDS:
            _sweep(memory, n, SWEEPS_PER_ROUND)
            # The sweeps' iterate is kept aside: they go on from there if the pattern does not fit either.
            for i in range(n):
                memory["qd_aside"][i] = v[i]
            status = _solve_pattern(memory, n)
            fits = status == OK and _pattern_fits(memory, n)
            if not fits:
                for i in range(n):
                    v[i] = memory["qd_aside"][i]
            rounds += 1
        if status == OK and not fits:
            _sweep(memory, n, SWEEPS_LAST)
            memory["unsolved"] += 1
    memory["rounds"] += rounds
    for i in range(n):
        memory["M"][i, i] -= dt * setup["model"]["viscous"][i]
    return status


@hot
def _solve_pattern(memory, n):
    """The velocities if `slip` and `touch` are right: sliding joints feel their full friction, stuck joints stand still."""
    K = memory["K"][:]
    rhs = memory["rhs"][:]
    v = memory["qd_new"][:]
    for i in range(n):
        stuck = memory["slip"][i] == 0 and memory["friction_max"][i] > 0.0
        if stuck:
            for j in range(n):
                K[i, j] = 0.0
                K[j, i] = 0.0
            K[i, i] = 1.0
            rhs[i] = 0.0
        else:
            for j in range(i + 1):
                free = memory["slip"][j] != 0 or memory["friction_max"][j] == 0.0
                value = memory["M"][i, j] if free else 0.0
                K[i, j] = value
                K[j, i] = value
            rhs[i] = memory["b"][i] - memory["friction_max"][i] * memory["slip"][i]
            if memory["touch"][i] == 1:
                K[i, i] += memory["stop_slope"][i]
                rhs[i] -= memory["side"][i] * memory["stop_offset"][i]
    L = memory["L"][:]
    status = cholesky(K, n, L)
    if status != OK:
        return status
    return cholesky_solve(L, n, rhs, v)


@hot
def _pattern_fits(memory, n):
    """True if `qd_new` agrees with the pattern it was solved with."""
    v = memory["qd_new"][:]
    for i in range(n):
        limit = memory["friction_max"][i]
        touches = memory["stop_offset"][i] + memory["stop_slope"][i] * memory["side"][i] * v[i] > 0.0
        if memory["slip"][i] == 0 and limit > 0.0:
            balance = memory["b"][i]
            for j in range(n):
                balance -= memory["M"][i, j] * v[j]
            if touches:
                balance -= memory["side"][i] * memory["stop_offset"][i]
            if not abs(balance) <= limit + PATTERN_ROUNDING * (limit + abs(memory["b"][i])):
                return False
        else:
            if limit > 0.0 and not v[i] * memory["slip"][i] >= 0.0:
                return False
            if touches != (memory["touch"][i] == 1):
                return False
    return True


@hot
def _sweep(memory, n, count):
    """`count` Gauss-Seidel sweeps: each joint takes its exact best velocity for those of the others; sets the pattern reached."""
    v = memory["qd_new"][:]
    for _ in range(count):
        for i in range(n):
            rest = memory["b"][i]
            for j in range(n):
                if j != i:
                    rest -= memory["M"][i, j] * v[j]
            limit = memory["friction_max"][i]
            side = memory["side"][i]
            offset = memory["stop_offset"][i]
            slope = memory["stop_slope"][i]
            at_rest = rest - side * max(0.0, offset)
            v[i] = 0.0
            memory["slip"][i] = 0
            if abs(at_rest) > limit:
                sign = 1 if at_rest > 0.0 else -1
                value = (rest - limit * sign) / memory["M"][i, i]
                if offset + slope * side * value > 0.0:
                    value = (rest - limit * sign - side * offset) / (memory["M"][i, i] + slope)
                v[i] = value
                memory["slip"][i] = sign
            memory["touch"][i] = 1 if offset + slope * side * v[i] > 0.0 else 0
    return OK


@hot
def _count_work(memory, n, dt):
    """Book the work of this substep: drives, stops, and friction as the remainder of the momentum balance."""
    for i in range(n):
        middle = 0.5 * (memory["qd"][i] + memory["qd_new"][i])
        impulse = -memory["momentum"][i] - dt * (memory["tau"][i] - memory["bias"][i])
        for j in range(n):
            impulse += memory["M"][i, j] * memory["qd_new"][j]
        side = memory["side"][i]
        stop = -side * max(0.0, memory["stop_offset"][i] + memory["stop_slope"][i] * side * memory["qd_new"][i])
        memory["work_drive"] += dt * memory["tau"][i] * middle
        memory["work_stop"] += stop * middle
        memory["work_friction"] += (impulse - stop) * middle
    return OK


@hot
def true_energy(setup, memory, out):
    """Energy of the true arm into `out` (3,) J: kinetic, potential, and stored in the hard stops' springs. Returns OK."""
    n = setup["model"]["n"]
    part = memory["rhs"][:]
    status = kinetic_energy(setup["model"], memory["q"][:], memory["qd"][:], memory["scratch"], part)
    if status != OK:
        return status
    out[0] = part[0]
    status = potential_energy(setup["model"], memory["q"][:], memory["scratch"], part)
    if status != OK:
        return status
    out[1] = part[0]
    out[2] = 0.0
    for i in range(n):
        depth = max(memory["q"][i] - setup["q_max"][i], setup["q_min"][i] - memory["q"][i])
        if depth > 0.0:
            out[2] += 0.5 * setup["stop_stiffness"][i] * depth * depth
    return OK
