"""What the controller concludes from a state message: identity, order, age by echo, grant. No clock is compared with another.

The driver's clock and the controller's run apart. A state's age is how much (arrival - sample time) has grown above its least value
in this driver session; the least value may rise slowly, so that two clocks that drift apart do not look like a growing delay.
"""

import math

from rtctl.blocks import MODE_BRAKING, MODE_HOLDING, MODE_LIVE, STATUS_SIMULATED, WIRE_VERSION
from rtctl.kernels.compile import hot
from rtctl.kernels.layout import OK

CLOCK_DRIFT = 1e-4  # allowed drift of two clocks, s/s (crystal oscillators stay within 100 ppm: common practice, no source)
SENT = 256  # torque messages whose sending time is remembered
UNKNOWN = -1


@hot
def torque_flows(mode):  # type: ignore[no-untyped-def]
    """True in the modes in which torque is commanded."""
    return mode == MODE_LIVE or mode == MODE_BRAKING or mode == MODE_HOLDING


@hot
def observe(setup, memory, inp):  # type: ignore[no-untyped-def]
    """Update the link memory from this cycle's input. Returns 1 if a new state is to be used, else 0 (never a failure).

    A state of another arm, version or joint count is not used and marks the identity as wrong. An old or repeated sequence
    number is dropped and counted. A new driver session is adopted; while torque flows it is remembered as a restart.
    """
    link = memory["link"]
    now_ns = inp["now_ns"]
    used = 0
    if inp["state_new"] == 1:
        used = _accept(setup, memory, inp)
    if used == 0:
        link["resend_count"] += 1
    if link["have_state"] == 1:
        # The newest state ages while nothing newer comes.
        link["age_ns"] = now_ns - link["last_sample_ns"] - link["offset_min_ns"]
        link["offset_min_ns"] += int(setup["period_ns"] * CLOCK_DRIFT)
    if link["echoed"] >= 0:
        waiting = link["sequence"] - 1 - link["echoed"]
        if waiting > 0:
            # The driver has not shown a later torque than `echoed`: the delay is at least this long.
            oldest = link["echoed"] + 1
            if waiting >= SENT:
                oldest = link["sequence"] - SENT
            delay_ns = now_ns - link["sent_ns"][oldest % SENT]
            if delay_ns > link["loop_delay_ns"]:
                link["loop_delay_ns"] = delay_ns
    return used


@hot
def _accept(setup, memory, inp):  # type: ignore[no-untyped-def]
    link = memory["link"]
    state = inp["state"]
    n = setup["model"]["n"]
    if state["version"] != WIRE_VERSION or state["arm_key"] != setup["limits"]["arm_key"] or state["n"] != n:
        link["identity"] = -1
        return 0
    fresh_session = link["have_state"] == 0 or state["session"] != link["driver_session"]
    if not fresh_session and state["sequence"] <= link["last_sequence"]:
        link["dropped"] += 1
        return 0

    link["identity"] = 1
    arrival_ns = inp["state_arrival_ns"]
    offset_ns = arrival_ns - state["sample_ns"]
    if fresh_session:
        if link["have_state"] == 1 and torque_flows(memory["supervisor"]["mode"]):
            link["restarted"] = 1
        memory["supervisor"]["grant"] = 0  # a driver numbers its grants anew in each session
        link["have_state"] = 1
        link["driver_session"] = state["session"]
        link["offset_min_ns"] = offset_ns
        link["echoed"] = UNKNOWN
        link["loop_delay_ns"] = UNKNOWN
        link["before_sample_ns"] = 0
    elif offset_ns < link["offset_min_ns"]:
        link["offset_min_ns"] = offset_ns
    if not fresh_session:
        link["before_sample_ns"] = link["last_sample_ns"]
    link["last_sequence"] = state["sequence"]
    link["last_sample_ns"] = state["sample_ns"]
    link["arrival_ns"] = arrival_ns
    link["resend_count"] = 0
    link["status"] = state["status"]
    link["simulated"] = 1 if state["status"] & STATUS_SIMULATED != 0 else 0
    link["grant"] = state["grant"] if state["holder"] == setup["session"] else 0

    if state["received_session"] == setup["session"]:
        echoed = state["received_sequence"]
        if echoed > link["echoed"] and 0 <= echoed < link["sequence"] and link["sequence"] - echoed <= SENT:
            link["echoed"] = echoed
            link["loop_delay_ns"] = arrival_ns - link["sent_ns"][echoed % SENT]

    finite = 1
    for i in range(n):
        if not (math.isfinite(state["q"][i]) and math.isfinite(state["qd"][i])):
            finite = 0
        link["q_before"][i] = state["q"][i] if fresh_session else link["q"][i]
        link["q"][i] = state["q"][i]
        link["qd"][i] = state["qd"][i]
    link["finite"] = finite
    return 1


@hot
def remember_sent(memory, now_ns):  # type: ignore[no-untyped-def]
    """Note that the torque message with the current sequence number leaves at `now_ns`, and count on. Returns its number."""
    link = memory["link"]
    sequence = link["sequence"]
    link["sent_ns"][sequence % SENT] = now_ns
    link["sequence"] = sequence + 1
    return sequence


@hot
def forget_link(memory):  # type: ignore[no-untyped-def]
    """Set the link memory to `nothing seen yet`."""
    link = memory["link"]
    link["have_state"] = 0
    link["identity"] = 0
    link["echoed"] = UNKNOWN
    link["loop_delay_ns"] = UNKNOWN
    link["grant"] = 0
    link["sequence"] = 1
    return OK
