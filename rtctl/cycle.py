"""One cycle: a state and the time in, a judged torque out. No clock, no socket, no file: the seam for simulation and replay.

Everything a cycle depends on is in its blocks: SETUP (constant), POINTERS (law and reference in force), MEMORY (hidden state) and
INPUT. The same bytes in give the same bytes out.
"""

from rtctl.blocks import (
    BIT_LEAVE,
    LIMITER_RAMP,
    MAX_TERMS,
    MODE_BRAKING,
    MODE_HOLDING,
    MODE_LATCHED,
    MODE_LIVE,
    MODE_OFF,
    REQUEST_ASK,
    REQUEST_DRIVE,
    REQUEST_RELEASE,
    STATUS_BRAKE,
    STOP_FAULT,
    STOP_NOW,
    WATCH_GATE,
    WATCH_GRANT,
    WIRE_VERSION,
)
from rtctl.kernels.compile import hot
from rtctl.kernels.layout import OK
from rtctl.kernels.memory import address_of, call_address
from rtctl.supervisor.decision import ACTION_BEGIN, ACTION_BRAKE, ACTION_CLEAR, ACTION_HOLD, ACTION_RELEASE, decide
from rtctl.supervisor.fold import fold, resolve_requests
from rtctl.supervisor.gate import pass_gate
from rtctl.supervisor.holding import holding_fits, holding_torque, rest_torque
from rtctl.supervisor.observe import forget_link, observe, remember_sent, torque_flows
from rtctl.supervisor.watches import update_checks, update_still, watch

NAN = float("nan")
# What a reset itself brings back: the grant is asked for again in `off`, the gate's refusal is forgotten.
_RETURNS_AFTER_RESET = (1 << WATCH_GATE) | (1 << WATCH_GRANT)


@hot
def begin_memory(memory):  # type: ignore[no-untyped-def]
    """Set a zeroed MEMORY block to the state before the first cycle. Returns OK."""
    memory["cycle"] = 0
    memory["supervisor"]["mode"] = MODE_OFF
    return forget_link(memory)


@hot
def cycle(setup, pointers, memory, inp, torque, row):  # type: ignore[no-untyped-def]
    """Run one cycle: fills the TORQUE message and the ROW of the record from the INPUT.

    Returns OK. The torque message is complete in every mode: `ask` or `release` while no torque flows.
    """
    supervisor = memory["supervisor"]
    mode = supervisor["mode"]
    memory["elapsed_ns"] = setup["period_ns"] * (1 + inp["skipped"])
    used = observe(setup, memory, inp)
    _call_law(setup, pointers, memory, used, row)

    gravity = memory["scratch"]["x0"][:]
    status = holding_torque(setup, memory, gravity)
    hold_fits = status == OK and holding_fits(setup, gravity)

    conditions = watch(setup, memory, inp, row)
    stop_now, cause = fold(conditions, mode, inp["requests"], setup["limits"]["estop_stop"])
    still = update_still(setup, memory, used)
    checks_hold = update_checks(setup, memory, conditions, hold_fits, still)
    ask = resolve_requests(inp["requests"])
    next_mode, stop, action = decide(
        mode, supervisor["stop"], stop_now, checks_hold, still, _cause_gone(setup, memory, conditions), ask
    )
    if stop_now >= STOP_FAULT and supervisor["first_cause"] == 0:
        supervisor["first_cause"] = cause
    _enter(setup, pointers, memory, inp, next_mode, stop, action, gravity)

    tau = memory["scratch"]["x1"][:]
    request = _choose_torque(setup, memory, row, used, gravity, tau)
    if action == ACTION_RELEASE or (request == REQUEST_ASK and inp["requests"] & BIT_LEAVE != 0):
        request = REQUEST_RELEASE
    request = _through_gate(setup, memory, inp, row, used, request, gravity, tau)
    _fill_torque(setup, memory, inp, torque, row, request)
    _fill_row(memory, inp, pointers, row, conditions)
    memory["cycle"] += 1
    return OK


@hot
def _call_law(setup, pointers, memory, used, row):  # type: ignore[no-untyped-def]
    """In `live` with a new state: sample the reference and call the law. Its torque is the ordered sum of its terms."""
    supervisor = memory["supervisor"]
    link = memory["link"]
    sample = memory["sample"]
    x = memory["law_input"]
    n = setup["model"]["n"]
    live = supervisor["mode"] == MODE_LIVE
    if live:
        if link["status"] & STATUS_BRAKE == 0:
            supervisor["live_ns"] += memory["elapsed_ns"]
        elif supervisor["live_ns"] == 0:
            supervisor["brake_wait_ns"] += memory["elapsed_ns"]

    if live and used == 1:
        # The reference waits until the ramp from holding torque to law torque is over.
        t_ns = supervisor["live_ns"] - setup["limits"]["ramp_ns"]
        sample["t_s"] = float(t_ns) * 1e-9 if t_ns > 0 else 0.0
        for i in range(n):
            sample["q_ref"][i] = NAN
            sample["qd_ref"][i] = NAN
            sample["qdd_ref"][i] = NAN
        if supervisor["reference_status"] == OK:  # a `begin` that failed is not forgotten: its motion does not exist
            supervisor["reference_status"] = call_address(
                pointers["reference_sample"],
                (address_of(setup["reference"]), address_of(memory["reference"]), address_of(sample)),
            )
        supervisor["reference_done"] = 1 if sample["t_s"] >= memory["reference"]["end_s"] else 0
        x["n"] = n
        x["dt_s"] = float(setup["period_ns"]) * 1e-9
        x["t_s"] = sample["t_s"]
        for i in range(n):
            x["q"][i] = link["q"][i]
            x["qd"][i] = link["qd"][i]
            x["q_ref"][i] = sample["q_ref"][i]
            x["qd_ref"][i] = sample["qd_ref"][i]
            x["qdd_ref"][i] = sample["qdd_ref"][i]
            x["tau_law_last"][i] = supervisor["tau_law"][i]
            x["tau_out_last"][i] = supervisor["tau_out"][i]
        count = pointers["law_term_count"]
        for k in range(MAX_TERMS):
            for i in range(n):
                row["terms"][k, i] = NAN if k < count else 0.0
        supervisor["law_status"] = 0
        if 1 <= count <= MAX_TERMS:
            supervisor["law_status"] = call_address(
                pointers["law"],
                (
                    address_of(setup["model"]),
                    address_of(x),
                    address_of(pointers["law_parameters"]),
                    address_of(memory["law"]),
                    address_of(memory["scratch"]),
                    row["terms"][:].ctypes.data,
                ),
            )
        else:
            count = 0
        for i in range(n):
            tau = 0.0
            for k in range(count):
                tau += row["terms"][k, i]
            supervisor["tau_law"][i] = tau
    elif not live:
        supervisor["law_status"] = 0
        for i in range(n):
            supervisor["tau_law"][i] = 0.0
            sample["q_ref"][i] = link["q"][i]
            sample["qd_ref"][i] = 0.0
            sample["qdd_ref"][i] = 0.0
        for k in range(MAX_TERMS):
            for i in range(n):
                row["terms"][k, i] = 0.0

    for i in range(n):
        row["q_ref"][i] = sample["q_ref"][i]
        row["qd_ref"][i] = sample["qd_ref"][i]
        row["qdd_ref"][i] = sample["qdd_ref"][i]
        row["tau_law"][i] = supervisor["tau_law"][i]
        row["limiters"][i] = 0


@hot
def _cause_gone(setup, memory, conditions):  # type: ignore[no-untyped-def]
    """True when nothing that would stop a moving arm is present. The grant and the gate's refusal are for the reset to end."""
    remaining = conditions & ~_RETURNS_AFTER_RESET
    return fold(remaining, MODE_LIVE, 0, setup["limits"]["estop_stop"])[0] < STOP_FAULT


@hot
def _enter(setup, pointers, memory, inp, mode, stop, action, gravity):  # type: ignore[no-untyped-def]
    """Put the decision in force and do what its action asks."""
    supervisor = memory["supervisor"]
    n = setup["model"]["n"]
    was_holding = supervisor["mode"] == MODE_HOLDING
    if mode != supervisor["mode"]:
        supervisor["since_ns"] = inp["now_ns"]
        supervisor["checks_ns"] = 0
    if action == ACTION_BRAKE:
        supervisor["still_ns"] = 0
    supervisor["mode"] = mode
    supervisor["stop"] = stop
    if action == ACTION_BEGIN:
        _begin_motion(setup, pointers, memory, gravity, was_holding)
    elif action == ACTION_HOLD:
        for i in range(n):
            supervisor["q_hold"][i] = memory["link"]["q"][i]
    elif action == ACTION_CLEAR:
        supervisor["first_cause"] = 0
        supervisor["gate_refused"] = 0
        supervisor["late_count"] = 0
        memory["link"]["restarted"] = 0
        memory["link"]["identity"] = 0
    if not torque_flows(mode):
        for i in range(n):
            supervisor["tau_out"][i] = 0.0


@hot
def _begin_motion(setup, pointers, memory, gravity, was_holding):  # type: ignore[no-untyped-def]
    """Start from full holding torque: limiter, integrators and reference begin at what is measured now."""
    supervisor = memory["supervisor"]
    link = memory["link"]
    sample = memory["sample"]
    supervisor["grant"] = link["grant"]
    supervisor["live_ns"] = 0
    supervisor["brake_wait_ns"] = 0
    supervisor["reference_done"] = 0
    supervisor["law_status"] = OK
    for i in range(setup["model"]["n"]):
        # From `holding`, torque already flows: it is kept. From `ready`, the first torque is the full holding torque.
        supervisor["tau_hold"][i] = supervisor["tau_out"][i] if was_holding else gravity[i]
        supervisor["tau_out"][i] = supervisor["tau_hold"][i]
        supervisor["tau_law"][i] = supervisor["tau_hold"][i]
        sample["q_ref"][i] = link["q"][i]
        sample["qd_ref"][i] = 0.0
        sample["qdd_ref"][i] = 0.0
    sample["t_s"] = 0.0
    for k in range(memory["law"]["values"].size):
        memory["law"]["values"][k] = 0.0
    supervisor["reference_status"] = call_address(
        pointers["reference_begin"],
        (address_of(setup["reference"]), address_of(memory["reference"]), address_of(sample)),
    )


@hot
def _choose_torque(setup, memory, row, used, gravity, tau):  # type: ignore[no-untyped-def]
    """The torque of the mode, into `tau`; returns the request of the message."""
    supervisor = memory["supervisor"]
    mode = supervisor["mode"]
    n = setup["model"]["n"]
    for i in range(n):
        tau[i] = 0.0
    if mode == MODE_LIVE:
        ramp_ns = setup["limits"]["ramp_ns"]
        share = 1.0
        if supervisor["live_ns"] < ramp_ns:
            share = float(supervisor["live_ns"]) / float(ramp_ns)
        for i in range(n):
            tau[i] = supervisor["tau_law"][i]
            if share < 1.0:
                tau[i] = supervisor["tau_hold"][i] + share * (supervisor["tau_law"][i] - supervisor["tau_hold"][i])
                row["limiters"][i] |= LIMITER_RAMP
        return REQUEST_DRIVE
    if mode == MODE_BRAKING or mode == MODE_HOLDING:
        rest_torque(setup, memory, mode, gravity, tau)
        return REQUEST_DRIVE
    return REQUEST_RELEASE if mode == MODE_LATCHED else REQUEST_ASK


@hot
def _through_gate(setup, memory, inp, row, used, request, gravity, tau):  # type: ignore[no-untyped-def]
    """Pass the torque through the gate, or resend the last one when there is no new state. Returns the request that may leave."""
    supervisor = memory["supervisor"]
    n = setup["model"]["n"]
    if request == REQUEST_DRIVE and used == 0:
        # Nothing new is known: the last torque again, answering the same state, so that the driver's time-out goes on counting.
        for i in range(n):
            tau[i] = supervisor["tau_out"][i]
    for i in range(n):
        row["tau_ramp"][i] = tau[i]
        row["tau_magnitude"][i] = 0.0
        row["tau_out"][i] = 0.0
    if request == REQUEST_DRIVE:
        passed = pass_gate(setup, supervisor["mode"], tau, gravity, supervisor["tau_out"][:], row)
        if passed != OK:
            supervisor["gate_refused"] = 1
            supervisor["mode"] = MODE_LATCHED
            supervisor["stop"] = STOP_NOW
            supervisor["since_ns"] = inp["now_ns"]
            if supervisor["first_cause"] == 0:
                supervisor["first_cause"] = WATCH_GATE + 1
            request = REQUEST_RELEASE
    for i in range(n):
        supervisor["tau_out"][i] = row["tau_out"][i]
    return request


@hot
def _fill_torque(setup, memory, inp, torque, row, request):  # type: ignore[no-untyped-def]
    link = memory["link"]
    supervisor = memory["supervisor"]
    n = setup["model"]["n"]
    torque["version"] = WIRE_VERSION
    torque["arm_key"] = setup["limits"]["arm_key"]
    torque["session"] = setup["session"]
    torque["driver_session"] = link["driver_session"]
    torque["state_sequence"] = link["last_sequence"]
    # A drive counts only with the grant its motion began with; a grant given in between belongs to no motion.
    torque["grant"] = supervisor["grant"] if request == REQUEST_DRIVE else link["grant"]
    torque["request"] = request
    torque["valid_for_ns"] = setup["limits"]["valid_for_ns"]
    torque["n"] = n
    for i in range(n):
        torque["tau"][i] = row["tau_out"][i]
    torque["sequence"] = remember_sent(memory, inp["now_ns"])
    row["request"] = request
    row["torque_sequence"] = torque["sequence"]
    row["answered_sequence"] = torque["state_sequence"]
    row["sent_grant"] = torque["grant"]


@hot
def _fill_row(memory, inp, pointers, row, conditions):  # type: ignore[no-untyped-def]
    supervisor = memory["supervisor"]
    link = memory["link"]
    state = inp["state"]
    row["cycle"] = memory["cycle"]
    row["now_ns"] = inp["now_ns"]
    row["deadline_ns"] = inp["deadline_ns"]
    row["skipped"] = inp["skipped"]
    row["boot_offset_ns"] = inp["boot_offset_ns"]
    row["cost_ns"] = inp["cost_ns"]
    row["state_new"] = inp["state_new"]
    row["state_arrival_ns"] = inp["state_arrival_ns"]
    row["refused"] = inp["refused"]
    row["flooded"] = inp["flooded"]
    row["send_failed"] = inp["send_failed"]
    row["requests"] = inp["requests"]
    row["side_beat"] = inp["side_beat"]
    row["side_required"] = inp["side_required"]
    row["version"] = state["version"]
    row["arm_key"] = state["arm_key"]
    row["driver_session"] = state["session"]
    row["state_sequence"] = state["sequence"]
    row["sample_ns"] = state["sample_ns"]
    row["holder"] = state["holder"]
    row["grant"] = state["grant"]
    row["received_session"] = state["received_session"]
    row["received_sequence"] = state["received_sequence"]
    row["applied_session"] = state["applied_session"]
    row["applied_sequence"] = state["applied_sequence"]
    row["status"] = state["status"]
    row["state_n"] = state["n"]
    row["tau_count"] = state["tau_count"]
    for i in range(row["q"].size):
        row["q"][i] = state["q"][i]
        row["qd"][i] = state["qd"][i]
        row["tau_meas"][i] = state["tau_meas"][i]
    row["age_ns"] = link["age_ns"]
    row["loop_delay_ns"] = link["loop_delay_ns"]
    row["t_s"] = memory["sample"]["t_s"]
    row["law_index"] = pointers["law_index"]
    row["law_status"] = supervisor["law_status"]
    row["mode"] = supervisor["mode"]
    row["stop"] = supervisor["stop"]
    row["first_cause"] = supervisor["first_cause"]
    row["conditions"] = conditions
