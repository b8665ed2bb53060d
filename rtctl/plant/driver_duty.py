"""What the simulated arm's driver does with torque messages and by itself: grant, age, limits, rest policy, brakes, echo.

No socket and no clock in here: `now_ns` is an argument, so the same calls give the same answers in lock-step and in real time.
The rules are those of `drivers/WIRE.md`; every refusal has a code and is counted, none is ever an error.

    plant_receive   one decoded torque message has arrived
    plant_advance   driver duties and motion up to now
    plant_retire    the driver is about to end
    plant_state     the newest state that has passed the delay line
"""

import math

from rtctl.blocks import (
    REQUEST_ASK,
    REQUEST_DRIVE,
    REQUEST_RELEASE,
    STATUS_BRAKE,
    STATUS_ENABLED,
    STATUS_FAULT,
    STATUS_GRAVITY_ADDED,
    STATUS_SIMULATED,
    STATUS_STOP_CHAIN_CLOSED,
    WIRE_VERSION,
)
from rtctl.kernels.compile import hot
from rtctl.kernels.inverse_dynamics import gravity_torque
from rtctl.kernels.layout import OK
from rtctl.plant.blocks import (
    BRAKE_CLOSED,
    BRAKE_CLOSING,
    BRAKE_OPEN,
    BRAKE_OPENING,
    HISTORY,
    LINE,
    NO_STATE_YET,
    PHASE_CLOSING,
    PHASE_DRIVE,
    PHASE_MOVING,
    PHASE_STILL,
    REFUSED_ANSWER,
    REFUSED_DRIVER_SESSION,
    REFUSED_GRANT,
    REFUSED_HOLDER,
    REFUSED_IDENTITY,
    REFUSED_LENGTH,
    REFUSED_LIMIT,
    REFUSED_NOT_FINITE,
    REFUSED_OLD,
    REFUSED_QUEUE,
    REFUSED_REQUEST,
    REFUSED_SEQUENCE,
    REST_BRAKE,
    REST_GRAVITY,
)
from rtctl.plant.physics import substep

CATCH_UP_MAX_NS = 2_000_000_000  # a process that stood still for longer does not integrate the time it missed


# ---- messages ------------------------------------------------------------------------------------------------------------------


@hot
def plant_receive(setup, memory, torque, now_ns):
    """Take one TORQUE message. Returns OK if it counts, else a REFUSED_ code; with a transport delay: OK if it is on its way.

    Nothing in here can start motion by itself: torque counts only from the holder of the current grant, for this driver session,
    with a newer sequence, within its validity, finite and within the driver's own limits.
    """
    status = OK
    if setup["torque_delay"] <= 0:
        status = _judge(setup, memory, torque, now_ns)
    elif memory["queue_count"] >= LINE:
        status = REFUSED_QUEUE
    else:
        place = (memory["queue_head"] + memory["queue_count"]) % LINE
        _copy_torque(torque, memory["queue"][place])
        memory["queue_due"][place] = memory["step"] + setup["torque_delay"]
        memory["queue_count"] += 1
    if status != OK:
        memory["refused"][-status] += 1
    return status


@hot
def _deliver(setup, memory):
    """Judge the delayed messages that are due at this step."""
    while memory["queue_count"] > 0 and memory["queue_due"][memory["queue_head"]] <= memory["step"]:
        status = _judge(setup, memory, memory["queue"][memory["queue_head"]], memory["time_ns"])
        memory["queue_head"] = (memory["queue_head"] + 1) % LINE
        memory["queue_count"] -= 1
        if status != OK:
            memory["refused"][-status] += 1
    return OK


@hot
def _judge(setup, memory, torque, now_ns):
    """Identity and order first, then what is asked."""
    if torque["version"] != WIRE_VERSION or torque["arm_key"] != setup["arm_key"] or torque["session"] <= 0:
        return REFUSED_IDENTITY
    if torque["n"] != setup["model"]["n"]:
        return REFUSED_LENGTH
    if torque["driver_session"] != setup["session"]:
        return REFUSED_DRIVER_SESSION
    # A lapse is noticed before the message is judged: a torque that comes too late must not revive its grant.
    _check_lapse(setup, memory, now_ns)
    held = memory["holder"] != 0
    if held and torque["session"] != memory["holder"]:
        return REFUSED_HOLDER
    if torque["session"] == memory["received_session"] and torque["sequence"] <= memory["received_sequence"]:
        return REFUSED_SEQUENCE
    memory["received_session"] = torque["session"]
    memory["received_sequence"] = torque["sequence"]
    if held:
        memory["holder_heard_ns"] = now_ns

    if torque["request"] == REQUEST_ASK:
        if not held and _may_grant(setup, memory, now_ns):
            memory["grant"] += 1
            memory["grants"] += 1
            memory["holder"] = torque["session"]
            memory["holder_heard_ns"] = now_ns
        return OK
    if torque["request"] == REQUEST_RELEASE:
        if held:
            _end_grant(setup, memory, now_ns, True)
        return OK
    if torque["request"] == REQUEST_DRIVE:
        return _judge_drive(setup, memory, torque, now_ns)
    return REFUSED_REQUEST


@hot
def _judge_drive(setup, memory, torque, now_ns):
    """The torque itself: grant, age by the state it answers, finite, within the driver's own limits. Applied if all hold."""
    if memory["holder"] == 0:
        return REFUSED_HOLDER
    if torque["grant"] != memory["grant"]:
        return REFUSED_GRANT
    answered = torque["state_sequence"]
    if answered < 1 or answered > memory["sequence"] or memory["sequence"] - answered >= HISTORY:
        return REFUSED_ANSWER
    valid_ns = torque["valid_for_ns"]
    if valid_ns > setup["valid_for_max_ns"]:
        valid_ns = setup["valid_for_max_ns"]
    deadline_ns = memory["sample_ns"][answered % HISTORY] + valid_ns
    if now_ns >= deadline_ns:
        return REFUSED_OLD
    n = setup["model"]["n"]
    for i in range(n):
        if not math.isfinite(torque["tau"][i]):
            return REFUSED_NOT_FINITE
    for i in range(n):
        if not -setup["tau_max"][i] <= torque["tau"][i] <= setup["tau_max"][i]:
            return REFUSED_LIMIT

    for i in range(n):
        memory["tau_command"][i] = torque["tau"][i]
    memory["deadline_ns"] = deadline_ns
    memory["applied_session"] = torque["session"]
    memory["applied_sequence"] = torque["sequence"]
    memory["accepted"] += 1
    if memory["phase"] != PHASE_DRIVE:
        _set_phase(memory, PHASE_DRIVE, now_ns)
        if memory["brake"] != BRAKE_OPEN:
            _set_brake(memory, BRAKE_OPENING, now_ns)
    return OK


@hot
def _may_grant(setup, memory, now_ns):
    """Granted only when the still part of the rest policy is in force, all joints are still and nothing is wrong."""
    return (
        memory["phase"] == PHASE_STILL
        and _is_still(setup, memory, now_ns)
        and memory["retired"] == 0
        and memory["fault"] == 0
        and memory["stop_chain_closed"] == 1
    )


# ---- phases --------------------------------------------------------------------------------------------------------------------


@hot
def _is_still(setup, memory, now_ns):
    return memory["sequence"] >= 1 and now_ns - memory["moving_since_ns"] >= setup["still_dwell_ns"]


@hot
def _set_phase(memory, phase, now_ns):
    memory["phase"] = phase
    memory["phase_since_ns"] = now_ns
    return OK


@hot
def _set_brake(memory, brake, now_ns):
    memory["brake"] = brake
    memory["brake_since_ns"] = now_ns
    return OK


@hot
def _end_grant(setup, memory, now_ns, by_release):
    """The grant is over for good; after a release at rest the last torque is kept while the brakes close."""
    memory["holder"] = 0
    if memory["phase"] != PHASE_DRIVE:
        return OK
    memory["kept"] = 1 if by_release and _is_still(setup, memory, now_ns) else 0
    if memory["brake"] == BRAKE_OPENING:
        # The brakes never let go.
        _set_brake(memory, BRAKE_CLOSED, now_ns)
        _set_phase(memory, PHASE_STILL, now_ns)
    else:
        _set_phase(memory, PHASE_MOVING, now_ns)
    return OK


@hot
def _check_lapse(setup, memory, now_ns):
    """End the grant whose torque has run out, or whose holder is silent before its first torque."""
    if memory["holder"] == 0:
        return OK
    if memory["phase"] == PHASE_DRIVE:
        lapsed = now_ns >= memory["deadline_ns"]
    else:
        lapsed = now_ns - memory["holder_heard_ns"] >= setup["silent_max_ns"]
    if lapsed:
        memory["lapses"] += 1
        _end_grant(setup, memory, now_ns, False)
    return OK


@hot
def _speed_allowed(setup, memory):
    """True if every measured speed is within the driver's own limit."""
    for i in range(setup["model"]["n"]):
        if not abs(memory["qd_meas"][i]) <= setup["qd_max"][i]:
            return False
    return True


@hot
def _update_phase(setup, memory, now_ns):
    """Lapse, fault, overspeed, brakes and the parts of the rest policy, as time goes on."""
    _check_lapse(setup, memory, now_ns)
    if memory["holder"] != 0 and (memory["fault"] != 0 or memory["stop_chain_closed"] == 0):
        _end_grant(setup, memory, now_ns, False)
    if memory["holder"] != 0 and not _speed_allowed(setup, memory):
        memory["overspeeds"] += 1
        _end_grant(setup, memory, now_ns, False)
    if memory["brake"] == BRAKE_OPENING and now_ns - memory["brake_since_ns"] >= setup["brake_open_ns"]:
        _set_brake(memory, BRAKE_OPEN, now_ns)
    if memory["brake"] == BRAKE_CLOSING and now_ns - memory["brake_since_ns"] >= setup["brake_close_ns"]:
        _set_brake(memory, BRAKE_CLOSED, now_ns)

    if memory["phase"] == PHASE_MOVING:
        unpowered = memory["fault"] != 0 or memory["stop_chain_closed"] == 0
        timed_out = now_ns - memory["phase_since_ns"] >= setup["rest_moving_ns"]
        if unpowered or timed_out or _is_still(setup, memory, now_ns):
            if setup["rest_still"] == REST_BRAKE:
                _set_brake(memory, BRAKE_CLOSING, now_ns)
                _set_phase(memory, PHASE_CLOSING, now_ns)
            else:
                _set_phase(memory, PHASE_STILL, now_ns)
    if memory["phase"] == PHASE_CLOSING and memory["brake"] == BRAKE_CLOSED:
        _set_phase(memory, PHASE_STILL, now_ns)
    return OK


@hot
def _ask_torque(setup, memory):
    """What the driver asks of the drives now, into `tau_ask`. Returns OK or what the gravity kernel returned."""
    n = setup["model"]["n"]
    phase = memory["phase"]
    ask = memory["tau_ask"][:]
    powered = memory["fault"] == 0 and memory["stop_chain_closed"] == 1
    # After a release at rest the last torque holds the arm until the brakes do.
    commanded = phase == PHASE_DRIVE or (phase == PHASE_CLOSING and memory["kept"] == 1)
    gravity_held = setup["rest_still"] == REST_GRAVITY and phase != PHASE_DRIVE
    damped = phase == PHASE_MOVING or phase == PHASE_CLOSING or gravity_held
    for i in range(n):
        ask[i] = 0.0
        if powered and commanded:
            ask[i] = memory["tau_command"][i]
        elif powered and damped:
            ask[i] = -setup["rest_damping"][i] * memory["qd_meas"][i]
    if powered and (gravity_held or setup["gravity_added"] == 1):
        gravity = memory["rhs"][:]
        status = gravity_torque(setup["model"], memory["q_meas"][:], memory["scratch"], gravity)
        if status != OK:
            return status
        for i in range(n):
            ask[i] += gravity[i]
    return OK


# ---- time ----------------------------------------------------------------------------------------------------------------------


@hot
def plant_start(setup, memory, now_ns):
    """Begin at `now_ns`: the arm stands at `q_start` in the still part of its rest policy; the first state is sampled."""
    for i in range(setup["model"]["n"]):
        memory["q"][i] = setup["q_start"][i]
        memory["qd"][i] = 0.0
        memory["tau"][i] = 0.0
        memory["q_meas"][i] = _encoder(setup, memory["q"][i], i)
    memory["time_ns"] = now_ns
    memory["started"] = 1
    memory["phase"] = PHASE_STILL
    memory["phase_since_ns"] = now_ns
    memory["brake"] = BRAKE_CLOSED if setup["rest_still"] == REST_BRAKE else BRAKE_OPEN
    memory["brake_since_ns"] = now_ns
    memory["stop_chain_closed"] = 1
    memory["moving_since_ns"] = now_ns
    return _sample(setup, memory)


@hot
def plant_retire(setup, memory, now_ns):
    """The driver is about to end: the grant is over, the rest policy takes over, and nobody gets a grant any more. Returns OK."""
    memory["retired"] = 1
    if memory["holder"] != 0:
        _end_grant(setup, memory, now_ns, True)
    return OK


@hot
def plant_advance(setup, memory, now_ns):
    """Driver duties and motion up to `now_ns`, in whole substeps; the first call starts. Returns OK or what a kernel returned."""
    if memory["started"] == 0:
        return plant_start(setup, memory, now_ns)
    period_ns = setup["period_ns"]
    behind_ns = now_ns - memory["time_ns"]
    if behind_ns > CATCH_UP_MAX_NS:
        # Whole periods, so that sample times stay on their grid; the last one is lived through, so that what has lapsed is noticed.
        skip_ns = (behind_ns // period_ns - 1) * period_ns
        memory["time_ns"] += skip_ns
        memory["skipped_ns"] += skip_ns
        memory["moving_since_ns"] += skip_ns
    # A period that its substeps do not divide has substeps that differ by a nanosecond, never a drifting grid.
    while True:
        done_ns = period_ns * memory["substep"] // setup["substeps"]
        substep_ns = period_ns * (memory["substep"] + 1) // setup["substeps"] - done_ns
        if memory["time_ns"] + substep_ns > now_ns:
            return OK
        if memory["substep"] == 0:
            _deliver(setup, memory)
        _update_phase(setup, memory, memory["time_ns"])
        status = _ask_torque(setup, memory)
        if status == OK:
            status = substep(setup, memory, float(substep_ns) * 1e-9)
        if status != OK:
            return status
        memory["time_ns"] += substep_ns
        memory["substep"] += 1
        if memory["substep"] >= setup["substeps"]:
            memory["substep"] = 0
            memory["step"] += 1
            _sample(setup, memory)


@hot
def _encoder(setup, q, i):
    """Position as the encoder of joint i counts it."""
    quantum = setup["encoder_quantum"][i]
    if quantum > 0.0:
        return math.floor(q / quantum + 0.5) * quantum
    return q


@hot
def _sample(setup, memory):
    """Measure and write the next state into the delay line: positions in encoder counts, velocities by difference."""
    n = setup["model"]["n"]
    period_s = float(setup["period_ns"]) * 1e-9
    now_ns = memory["time_ns"]
    _update_phase(setup, memory, now_ns)
    sequence = memory["sequence"] + 1
    memory["sequence"] = sequence
    memory["sample_ns"][sequence % HISTORY] = now_ns
    state = memory["states"][sequence % LINE]
    for i in range(n):
        q = _encoder(setup, memory["q"][i], i)
        qd = (q - memory["q_meas"][i]) / period_s
        memory["q_meas"][i] = q
        memory["qd_meas"][i] = qd
        if not abs(qd) <= setup["still_qd"][i]:
            memory["moving_since_ns"] = now_ns
        state["q"][i] = q
        state["qd"][i] = qd
        state["tau_meas"][i] = memory["tau"][i] if setup["tau_measured"] == 1 else 0.0
    state["version"] = WIRE_VERSION
    state["arm_key"] = setup["arm_key"]
    state["session"] = setup["session"]
    state["sequence"] = sequence
    state["sample_ns"] = now_ns
    state["holder"] = memory["holder"]
    state["grant"] = memory["grant"]
    state["received_session"] = memory["received_session"]
    state["received_sequence"] = memory["received_sequence"]
    state["applied_session"] = memory["applied_session"]
    state["applied_sequence"] = memory["applied_sequence"]
    state["status"] = _status_bits(setup, memory)
    state["n"] = n
    state["tau_count"] = n if setup["tau_measured"] == 1 else 0
    return OK


@hot
def _status_bits(setup, memory):
    bits = STATUS_SIMULATED
    if memory["stop_chain_closed"] == 1:
        bits |= STATUS_STOP_CHAIN_CLOSED
        if memory["fault"] == 0:
            bits |= STATUS_ENABLED
    if memory["fault"] != 0:
        bits |= STATUS_FAULT
    if memory["brake"] == BRAKE_CLOSED or memory["brake"] == BRAKE_OPENING:
        bits |= STATUS_BRAKE
    if setup["gravity_added"] == 1:
        bits |= STATUS_GRAVITY_ADDED
    return bits


@hot
def plant_state(setup, memory, now_ns, state):
    """Fill `state` with the newest state that has passed the delay line at `now_ns`. Returns OK or NO_STATE_YET.

    A second call within the same period gives the same state (same sequence).
    """
    sequence = memory["sequence"] - setup["state_delay"]
    if memory["started"] == 0 or sequence < 1 or now_ns < memory["sample_ns"][sequence % HISTORY]:
        return NO_STATE_YET
    _copy_state(memory["states"][sequence % LINE], state)
    return OK


@hot
def _copy_torque(source, target):
    target["version"] = source["version"]
    target["arm_key"] = source["arm_key"]
    target["session"] = source["session"]
    target["sequence"] = source["sequence"]
    target["driver_session"] = source["driver_session"]
    target["state_sequence"] = source["state_sequence"]
    target["grant"] = source["grant"]
    target["request"] = source["request"]
    target["valid_for_ns"] = source["valid_for_ns"]
    target["n"] = source["n"]
    for i in range(source["tau"].size):
        target["tau"][i] = source["tau"][i]
    return OK


@hot
def _copy_state(source, target):
    target["version"] = source["version"]
    target["arm_key"] = source["arm_key"]
    target["session"] = source["session"]
    target["sequence"] = source["sequence"]
    target["sample_ns"] = source["sample_ns"]
    target["holder"] = source["holder"]
    target["grant"] = source["grant"]
    target["received_session"] = source["received_session"]
    target["received_sequence"] = source["received_sequence"]
    target["applied_session"] = source["applied_session"]
    target["applied_sequence"] = source["applied_sequence"]
    target["status"] = source["status"]
    target["n"] = source["n"]
    target["tau_count"] = source["tau_count"]
    for i in range(source["q"].size):
        target["q"][i] = source["q"][i]
        target["qd"][i] = source["qd"][i]
        target["tau_meas"][i] = source["tau_meas"][i]
    return OK
