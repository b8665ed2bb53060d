"""The watches: every signal against its limit, each cycle, as a condition bit and a margin in [0, 1].

Every test is written positively (`not (x <= limit)`), so that a number that is not finite trips it. A margin is 1 far
from the limit and 0 at or beyond it. What a condition leads to in which mode is the table in `fold.py`; nothing here decides.
"""

import math

from rtctl.blocks import (
    BIT_ESTOP,
    BIT_STOP,
    BIT_STOP_RELEASE,
    MODE_BRAKING,
    MODE_LIVE,
    MODE_OFF,
    STATUS_BRAKE,
    STATUS_ENABLED,
    STATUS_FAULT,
    STATUS_GRAVITY_ADDED,
    STATUS_STOP_CHAIN_CLOSED,
    WATCH_BRAKE_DEADLINE,
    WATCH_CLOCK_JUMP,
    WATCH_COUNT,
    WATCH_DRIVER_FAULT,
    WATCH_ESTOP,
    WATCH_GATE,
    WATCH_GRANT,
    WATCH_LATE_CYCLES,
    WATCH_LAW_STATUS,
    WATCH_LOOP_DELAY,
    WATCH_OPERATOR_STOP,
    WATCH_POSITION,
    WATCH_POSITION_GLITCH,
    WATCH_SIDE_THREAD,
    WATCH_SPEED,
    WATCH_STATE_AGE,
    WATCH_STATE_INVALID,
    WATCH_STOP_CHAIN,
    WATCH_TORQUE_DEMAND,
    WATCH_TRACKING_ERROR,
)
from rtctl.kernels.compile import hot
from rtctl.kernels.layout import OK
from rtctl.supervisor.observe import torque_flows

BOOT_STEP_NS = 20_000_000  # a step of (boot time - monotonic) beyond this is a suspend; two clock reads differ by far less
TINY = 1e-300  # keeps a margin defined when a limit is 0


@hot
def margin(value, limit):  # type: ignore[no-untyped-def]
    """1 - value / limit, kept in [0, 1]; 0 when it is not a number."""
    m = 1.0 - value / (limit + TINY)
    if not (m >= 0.0):
        return 0.0
    return m if m <= 1.0 else 1.0


@hot
def _put(row, w, tripped, m):  # type: ignore[no-untyped-def]
    row["margins"][w] = 0.0 if tripped else m
    return (1 << w) if tripped else 0


@hot
def watch(setup, memory, inp, row):  # type: ignore[no-untyped-def]
    """Evaluate every watch. Returns the condition bits; fills row["margins"].

    Needs the link observed and, in `live`, the law called in this cycle (`row` holds q_ref and tau_law).
    """
    bits = 0
    for w in range(WATCH_COUNT):
        row["margins"][w] = 1.0
    bits |= _watch_requests(inp, row)
    bits |= _watch_state(setup, memory, row)
    bits |= _watch_driver(setup, memory, row)
    bits |= _watch_joints(setup, memory, row)
    bits |= _watch_law(setup, memory, row)
    bits |= _watch_time(setup, memory, inp, row)
    return bits


@hot
def _watch_requests(inp, row):  # type: ignore[no-untyped-def]
    bits = _put(row, WATCH_ESTOP, inp["requests"] & BIT_ESTOP != 0, 1.0)
    bits |= _put(row, WATCH_OPERATOR_STOP, inp["requests"] & (BIT_STOP | BIT_STOP_RELEASE) != 0, 1.0)
    return bits


@hot
def _watch_state(setup, memory, row):  # type: ignore[no-untyped-def]
    """Identity and finiteness, age, and a step in position that no joint could make."""
    link = memory["link"]
    limits = setup["limits"]
    n = setup["model"]["n"]
    seen = link["have_state"] == 1
    bits = _put(row, WATCH_STATE_INVALID, link["identity"] == -1 or (seen and link["finite"] != 1), 1.0)

    # An age below zero is a clock that ran backwards.
    young = seen and 0 <= link["age_ns"] <= limits["state_age_max_ns"]
    too_old = not (young and link["resend_count"] <= limits["resend_max"])
    m = margin(float(link["age_ns"]), float(limits["state_age_max_ns"]))
    m_count = margin(float(link["resend_count"]), float(limits["resend_max"]) + 1.0)
    bits |= _put(row, WATCH_STATE_AGE, too_old, m_count if m_count < m else m)

    glitch = False
    worst = 1.0
    if seen and link["before_sample_ns"] != 0:
        dt_ns = link["last_sample_ns"] - link["before_sample_ns"]
        # The driver's clock must not widen the reach: states further apart than this are too old anyway.
        if dt_ns > limits["state_age_max_ns"] + setup["period_ns"]:
            dt_ns = limits["state_age_max_ns"] + setup["period_ns"]
        if dt_ns < setup["period_ns"]:
            dt_ns = setup["period_ns"]
        for i in range(n):
            reach = limits["glitch_factor"] * limits["qd_max"][i] * float(dt_ns) * 1e-9
            step = abs(link["q"][i] - link["q_before"][i])
            if not (step <= reach):
                glitch = True
            m = margin(step, reach)
            worst = m if m < worst else worst
    bits |= _put(row, WATCH_POSITION_GLITCH, glitch, worst)
    return bits


@hot
def _watch_driver(setup, memory, row):  # type: ignore[no-untyped-def]
    """Driver status, hardware stop chain, grant, and the delay by echo."""
    link = memory["link"]
    supervisor = memory["supervisor"]
    limits = setup["limits"]
    seen = link["have_state"] == 1
    flows = torque_flows(supervisor["mode"])
    status = link["status"]

    # An open stop chain takes the enable away: that is the chain's cause, not the drive's.
    enabled = status & (STATUS_ENABLED | STATUS_STOP_CHAIN_CLOSED) != STATUS_STOP_CHAIN_CLOSED
    fault = not (seen and enabled and status & STATUS_FAULT == 0)
    if status & STATUS_GRAVITY_ADDED != 0 and limits["allow_gravity_added"] != 1:
        fault = True
    if flows and status & STATUS_BRAKE != 0:
        # Closed at the start is normal until it opens; after that, or for too long, it is a fault.
        if supervisor["live_ns"] > 0 or supervisor["brake_wait_ns"] > limits["brake_deadline_ns"]:
            fault = True
    bits = _put(row, WATCH_DRIVER_FAULT, fault, 1.0)
    bits |= _put(row, WATCH_STOP_CHAIN, not (seen and status & STATUS_STOP_CHAIN_CLOSED != 0), 1.0)
    # A restarted driver has no grant of ours, whatever it says.
    lost = link["grant"] == 0 or link["restarted"] == 1
    # A motion has one grant and a grant one motion: after its release a number is over, although late states still show it.
    if flows != (link["grant"] == supervisor["grant"]):
        lost = True
    bits |= _put(row, WATCH_GRANT, lost, 1.0)

    delay = link["loop_delay_ns"]
    bits |= _put(
        row,
        WATCH_LOOP_DELAY,
        not (0 <= delay <= limits["loop_delay_max_ns"]),
        margin(float(delay), float(limits["loop_delay_max_ns"])),
    )
    return bits


@hot
def _watch_joints(setup, memory, row):  # type: ignore[no-untyped-def]
    """Position and speed limits."""
    link = memory["link"]
    limits = setup["limits"]
    n = setup["model"]["n"]
    outside = False
    fast = False
    m_position = 1.0
    m_speed = 1.0
    for i in range(n):
        q = link["q"][i]
        qd = link["qd"][i]
        low = limits["q_min"][i]
        high = limits["q_max"][i]
        if not (low <= q <= high):
            outside = True
        half = 0.5 * (high - low)
        if half < 1e300:  # a joint without limits has no margin to lose
            m = margin(abs(q - 0.5 * (high + low)), half)
            m_position = m if m < m_position else m_position
        if not (abs(qd) <= limits["qd_max"][i]):
            fast = True
        m = margin(abs(qd), limits["qd_max"][i])
        m_speed = m if m < m_speed else m_speed
    bits = _put(row, WATCH_POSITION, outside, m_position)
    bits |= _put(row, WATCH_SPEED, fast, m_speed)
    return bits


@hot
def _dwell(supervisor, w, now_bad, elapsed_ns):  # type: ignore[no-untyped-def]
    """Time for which a condition has held without a break, in ns."""
    supervisor["dwell_ns"][w] = supervisor["dwell_ns"][w] + elapsed_ns if now_bad else 0
    return supervisor["dwell_ns"][w]


@hot
def _watch_law(setup, memory, row):  # type: ignore[no-untyped-def]
    """Law and reference status, tracking error, torque demand: all only while the law is in charge."""
    supervisor = memory["supervisor"]
    limits = setup["limits"]
    link = memory["link"]
    n = setup["model"]["n"]
    live = supervisor["mode"] == MODE_LIVE
    failed = live and (supervisor["law_status"] != OK or supervisor["reference_status"] != OK)
    if live:
        for i in range(n):  # a torque that is no number is the law's failure: the arm is braked, before the gate would drop it
            if not (math.isfinite(row["tau_law"][i]) and math.isfinite(row["q_ref"][i])):
                failed = True
    bits = _put(row, WATCH_LAW_STATUS, failed, 1.0)
    bits |= _put(row, WATCH_GATE, supervisor["gate_refused"] != 0, 1.0)

    far = False
    greedy = False
    m_error = 1.0
    m_demand = 1.0
    if live:
        for i in range(n):
            error = abs(row["q_ref"][i] - link["q"][i])
            if not (error <= limits["error_max"][i]):
                far = True
            m = margin(error, limits["error_max"][i])
            m_error = m if m < m_error else m_error
            demand = abs(row["tau_law"][i])
            if not (demand <= limits["tau_max"][i]):
                greedy = True
            m = margin(demand, limits["tau_max"][i])
            m_demand = m if m < m_demand else m_demand
    far_ns = _dwell(supervisor, WATCH_TRACKING_ERROR, far, memory["elapsed_ns"])
    greedy_ns = _dwell(supervisor, WATCH_TORQUE_DEMAND, greedy, memory["elapsed_ns"])
    bits |= _put(row, WATCH_TRACKING_ERROR, far_ns > limits["error_dwell_ns"], m_error)
    bits |= _put(row, WATCH_TORQUE_DEMAND, greedy_ns > limits["demand_dwell_ns"], m_demand)
    return bits


@hot
def _watch_time(setup, memory, inp, row):  # type: ignore[no-untyped-def]
    """Late cycles, clock jumps, the side thread's heartbeat, the deadline of a stop."""
    supervisor = memory["supervisor"]
    limits = setup["limits"]
    now_ns = inp["now_ns"]
    first = memory["cycle"] == 0
    late_ns = now_ns - inp["deadline_ns"] + inp["skipped"] * setup["period_ns"]

    supervisor["late_cycle"] += 1
    # Bounded, so that a window of good cycles is enough to forget a bad hour; with no late cycle allowed one takes a window too.
    if not (late_ns <= limits["late_ns"]) and supervisor["late_count"] < 2 * (limits["late_max"] + 1):
        supervisor["late_count"] += 1
    if supervisor["late_cycle"] * max(limits["late_max"], 1) >= limits["late_window"]:
        supervisor["late_cycle"] = 0
        if supervisor["late_count"] > 0:
            supervisor["late_count"] -= 1
    bits = _put(
        row,
        WATCH_LATE_CYCLES,
        supervisor["late_count"] > limits["late_max"],
        margin(float(supervisor["late_count"]), float(limits["late_max"]) + 1.0),
    )

    stepped = not first and not (abs(inp["boot_offset_ns"] - supervisor["boot_offset_ns"]) <= BOOT_STEP_NS)
    supervisor["boot_offset_ns"] = inp["boot_offset_ns"]
    away = not (-limits["valid_for_ns"] <= late_ns <= limits["valid_for_ns"])
    bits |= _put(row, WATCH_CLOCK_JUMP, stepped or away, margin(float(late_ns), float(limits["valid_for_ns"])))

    if first or inp["side_beat"] != supervisor["side_beat"]:
        supervisor["side_beat"] = inp["side_beat"]
        supervisor["side_ns"] = now_ns
    silent_ns = now_ns - supervisor["side_ns"]
    silent = inp["side_required"] == 1 and not (silent_ns <= limits["side_silent_ns"])
    m = margin(float(silent_ns), float(limits["side_silent_ns"])) if inp["side_required"] == 1 else 1.0
    bits |= _put(row, WATCH_SIDE_THREAD, silent, m)

    braking_ns = now_ns - supervisor["since_ns"]
    over = supervisor["mode"] == MODE_BRAKING and not (braking_ns <= limits["brake_deadline_ns"])
    m = margin(float(braking_ns), float(limits["brake_deadline_ns"])) if supervisor["mode"] == MODE_BRAKING else 1.0
    bits |= _put(row, WATCH_BRAKE_DEADLINE, over, m)
    return bits


@hot
def update_still(setup, memory, used):  # type: ignore[no-untyped-def]
    """True when every joint has been slower than its still speed for the still dwell. Counts only on new states."""
    supervisor = memory["supervisor"]
    limits = setup["limits"]
    link = memory["link"]
    slow = link["have_state"] == 1
    for i in range(setup["model"]["n"]):
        if not (abs(link["qd"][i]) <= limits["still_qd"][i]):
            slow = False
    if not slow:
        supervisor["still_ns"] = 0
    elif used == 1:
        supervisor["still_ns"] += memory["elapsed_ns"]
    return supervisor["still_ns"] > limits["still_dwell_ns"]


@hot
def update_checks(setup, memory, conditions, hold_fits, still):  # type: ignore[no-untyped-def]
    """True when no condition is present, the arm is still and the holding torque fits, long enough to leave `off`."""
    supervisor = memory["supervisor"]
    requests = (1 << WATCH_ESTOP) | (1 << WATCH_OPERATOR_STOP)
    clear = conditions & ~requests == 0 and hold_fits and still
    if not clear:
        supervisor["checks_ns"] = 0
    else:
        supervisor["checks_ns"] += memory["elapsed_ns"]
    if supervisor["mode"] == MODE_OFF:
        return supervisor["checks_ns"] > setup["limits"]["ready_dwell_ns"]
    return clear
