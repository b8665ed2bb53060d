"""The live loop: wait, receive, decode, cycle, encode, send, record, count; one compiled function that holds no interpreter lock.

`run_loop` is called by the hot thread and returns when it is told to leave. It allocates nothing of its own and cannot trigger a
compile. Its only ties to other threads are the words of CONTROL, the flag file, two slots of POINTERS and two slots of rows.
Clock, sockets and descriptors are handed in as addresses in the LOOP block; what a cycle does is `rtctl.cycle`.
"""

import numpy as np

from rtctl.blocks import (
    BIT_ESTOP,
    BIT_LEAVE,
    BIT_RESET,
    BIT_START,
    BIT_STOP,
    BIT_STOP_RELEASE,
    MAX_MESSAGE_BYTES,
    MODE_BRAKING,
    MODE_LIVE,
    POINTERS,
    REQUEST_RELEASE,
    ROW,
    STATE,
)
from rtctl.cycle import cycle
from rtctl.kernels.compile import hot
from rtctl.kernels.external import (
    CLOCK_BOOTTIME,
    CLOCK_MONOTONIC,
    EAGAIN,
    ZMQ_EVENTS,
    ZMQ_POLLIN,
    ZMQ_RCVMORE,
    now_ns,
    receive_bytes,
    send_bytes,
    sleep_until_ns,
    socket_option,
    wait_readable,
)
from rtctl.kernels.layout import OK
from rtctl.kernels.memory import address_of, array_at, atomic_exchange, atomic_load, atomic_store, block_at, call_address
from rtctl.loop.blocks import (
    BIN_NS,
    BINS,
    CYCLE_DIED,
    CYCLES_DONE,
    LEAVE_CYCLES,
    LEAVE_EXTRA_NS,
    LEFT,
    MAX_DRAIN,
    PACING_STATE,
    RUN_ENDED,
    RUN_LIVE,
    offset,
)
from rtctl.loop.flags import ESTOP_BYTE, STOP_BYTE, STOP_RELEASE_BYTE
from rtctl.record.append import ring_append
from rtctl.record.ring import RING
from rtctl.wire.codec import decode_state, encode_torque

_LEAVE, _START, _RESET = offset("leave"), offset("start"), offset("reset")
_SIDE_BEAT, _RUN, _ROW_COUNT = offset("side_beat"), offset("run"), offset("row_count")
_WANTED, _USED = offset("pointer_wanted"), offset("pointer_used")
_POINTERS_BYTES = POINTERS.itemsize
_ROW_BYTES = ROW.itemsize
_ROW_WORDS = _ROW_BYTES // 8
_STATE_WORDS = STATE.itemsize // 8
CATCH_UP = 16  # states may come early by one part in so many of the period, on average: a late one is made up for
MAX_WAKES = 4 * MAX_DRAIN  # of one wait for a state: a descriptor may also wake up for other reasons
assert ROW.itemsize % 8 == 0 and STATE.itemsize % 8 == 0


@hot
def run_loop(loop, setup, memory, inp, torque, row):  # type: ignore[no-untyped-def]
    """Run cycles until told to leave, or up to the cycle limit.

    loop            LOOP    addresses, buffers and counts
    setup           SETUP   constant
    memory          MEMORY  after `begin_memory`
    inp, torque, row        INPUT, TORQUE, ROW of this thread

    Returns LEFT, CYCLES_DONE or CYCLE_DIED. Leaving: a commanded stop while torque flows, then `release`, both bounded in time.
    """
    control = loop["control"]
    scratch = loop["scratch"]
    start_ns = now_ns(CLOCK_MONOTONIC, scratch)
    loop["deadline_ns"] = start_ns + setup["period_ns"]
    loop["last_start_ns"] = start_ns
    loop["leave_count"] = 0
    atomic_store(control + _RUN, RUN_LIVE)
    result = 0
    while result == 0:
        if loop["pacing"] == PACING_STATE:
            _wait_for_state(loop, setup, inp)
        else:
            _wait_for_timer(loop, setup, inp)
        leaving = _take_requests(loop, inp)
        _fill_input(loop, inp)

        pointers = block_at(_pointers_in_force(loop, memory), POINTERS)
        status = cycle(setup, pointers, memory, inp, torque, row)
        if status != OK or _overdue(loop, setup, inp, leaving):
            _force_release(torque, row)
        _send_torque(loop, torque)
        _keep_row(loop, row)
        _count_cycle(loop, setup, inp)

        if status != OK:
            result = CYCLE_DIED
        elif leaving and torque["request"] == REQUEST_RELEASE:
            loop["leave_count"] += 1
            if loop["leave_count"] >= LEAVE_CYCLES:
                result = LEFT
        elif loop["cycle_limit"] > 0 and loop["cycles"] >= loop["cycle_limit"]:
            result = CYCLES_DONE
    atomic_store(control + _RUN, RUN_ENDED)
    return result


@hot
def warm_pointers(setup, pointers, memory, row):  # type: ignore[no-untyped-def]
    """Call the law and the reference once, on blocks that are thrown away: their first call brings their code into memory."""
    sample = address_of(memory["sample"])
    reference = address_of(setup["reference"])
    call_address(pointers["reference_begin"], (reference, address_of(memory["reference"]), sample))
    call_address(pointers["reference_sample"], (reference, address_of(memory["reference"]), sample))
    memory["law_input"]["n"] = setup["model"]["n"]
    return call_address(
        pointers["law"],
        (
            address_of(setup["model"]),
            address_of(memory["law_input"]),
            address_of(pointers["law_parameters"]),
            address_of(memory["law"]),
            address_of(memory["scratch"]),
            row["terms"][:].ctypes.data,
        ),
    )


# ---- waiting and receiving -----------------------------------------------------------------------------------------------------


@hot
def _wait_for_timer(loop, setup, inp):  # type: ignore[no-untyped-def]
    """Sleep to the absolute deadline, then receive. A late cycle skips whole periods and is counted; never a burst."""
    period_ns = setup["period_ns"]
    deadline_ns = loop["deadline_ns"]
    sleep_until_ns(deadline_ns, loop["scratch"])
    woke_ns = now_ns(CLOCK_MONOTONIC, loop["scratch"])
    skipped = 0
    if woke_ns >= deadline_ns + period_ns:
        skipped = (woke_ns - deadline_ns) // period_ns
    inp["now_ns"] = woke_ns
    inp["deadline_ns"] = deadline_ns + skipped * period_ns
    inp["skipped"] = skipped
    loop["deadline_ns"] = inp["deadline_ns"] + period_ns
    loop["woke_ns"] = woke_ns
    _begin_drain(loop, inp)
    _drain(loop, inp)
    return _take_newest(loop, inp)


@hot
def _wait_for_state(loop, setup, inp):  # type: ignore[no-untyped-def]
    """Wait for a new state; one silent period starts a cycle without one.

    A cycle starts no earlier than half a period after the one before counts as started (`paced_start`), so that messages that come
    too often cannot drive the loop; the period of silence counts from there, and jitter of the states does no harm.
    """
    period_ns = setup["period_ns"]
    last_ns = loop["last_start_ns"]
    limit_ns = last_ns + period_ns + period_ns // 2
    sleep_until_ns(last_ns + period_ns // 2, loop["scratch"])
    _begin_drain(loop, inp)
    loop["woke_ns"] = now_ns(CLOCK_MONOTONIC, loop["scratch"])
    _drain(loop, inp)
    for _ in range(MAX_WAKES):
        remaining_ns = limit_ns - loop["woke_ns"]
        if inp["state_new"] == 1 or inp["flooded"] == 1 or remaining_ns <= 0:
            break
        # The descriptor signals a change only: what already waits must be asked for first.
        if socket_option(loop["state_socket"], ZMQ_EVENTS, loop["scratch"]) & ZMQ_POLLIN == 0:
            if wait_readable(loop["state_fd"], remaining_ns, loop["scratch"]) < 0:
                break
        loop["woke_ns"] = now_ns(CLOCK_MONOTONIC, loop["scratch"])
        _drain(loop, inp)
    if inp["state_new"] == 0 or inp["flooded"] == 1:
        sleep_until_ns(limit_ns, loop["scratch"])
        loop["woke_ns"] = now_ns(CLOCK_MONOTONIC, loop["scratch"])
    _take_newest(loop, inp)

    woke_ns = loop["woke_ns"]
    skipped = (woke_ns - last_ns) // period_ns - 1
    if skipped < 0:
        skipped = 0
    inp["now_ns"] = woke_ns
    inp["skipped"] = skipped
    if inp["state_new"] == 1:
        inp["deadline_ns"] = woke_ns
        loop["last_start_ns"] = paced_start(last_ns, woke_ns, period_ns)
    else:
        inp["deadline_ns"] = limit_ns + skipped * period_ns
        loop["last_start_ns"] = inp["deadline_ns"] - period_ns // 2
    return OK


@hot
def paced_start(last_ns, woke_ns, period_ns):  # type: ignore[no-untyped-def]
    """When a cycle that a state started at `woke_ns` counts as started, in ns; `last_ns` is that of the cycle before.

    Every cycle counts a whole period of time, for the reference, the dwells and the torque's rate. So that a driver with a shorter
    period than the run file's cannot make them run fast, starts are on average no closer than a period less one part in
    CATCH_UP.
    """
    earliest_ns = last_ns + period_ns - period_ns // CATCH_UP
    return woke_ns if woke_ns > earliest_ns else earliest_ns


@hot
def _begin_drain(loop, inp):  # type: ignore[no-untyped-def]
    loop["drained"] = 0
    inp["state_new"] = 0
    inp["flooded"] = 0
    inp["refused"] = 0
    return OK


@hot
def _drain(loop, inp):  # type: ignore[no-untyped-def]
    """Receive until nothing is left, at most MAX_DRAIN messages per cycle. The newest valid state goes to loop["newest"].

    Messages longer than the buffer and all parts of multipart messages are refused and counted.
    """
    inbox = loop["inbox"][:]
    while loop["drained"] < MAX_DRAIN:
        length = receive_bytes(loop["state_socket"], inbox)
        if length < 0:
            if length != -EAGAIN:
                _count_error(loop, -length)
            return OK
        loop["drained"] += 1
        more = socket_option(loop["state_socket"], ZMQ_RCVMORE, loop["scratch"])
        part = more != 0 or loop["in_set"] == 1
        loop["in_set"] = 1 if more != 0 else 0
        if part:
            loop["refused_parts"] += 1
            inp["refused"] += 1
        elif not length <= MAX_MESSAGE_BYTES:
            loop["refused_long"] += 1
            inp["refused"] += 1
        else:
            status = decode_state(inbox, length, loop["fresh"])
            if status == OK:
                _copy_words(address_of(loop["fresh"]), address_of(loop["newest"]), _STATE_WORDS)
                loop["states_total"] += 1
                inp["state_new"] = 1
            else:
                loop["refused_last"] = status
                inp["refused"] += 1
    inp["flooded"] = 1
    return OK


@hot
def _take_newest(loop, inp):  # type: ignore[no-untyped-def]
    """Hand the newest state to the cycle; after a flood nothing is used."""
    loop["refused_total"] += inp["refused"]
    if inp["flooded"] == 1:
        loop["flooded_total"] += 1
        inp["state_new"] = 0
    if inp["state_new"] == 1:
        _copy_words(address_of(loop["newest"]), address_of(inp["state"]), _STATE_WORDS)
    else:
        loop["silent_total"] += 1
    return OK


@hot
def _copy_words(source, target, count):  # type: ignore[no-untyped-def]
    words_in = array_at(source, count, np.int64)
    words_out = array_at(target, count, np.int64)
    for k in range(count):
        words_out[k] = words_in[k]
    return OK


@hot
def _count_error(loop, error):  # type: ignore[no-untyped-def]
    loop["socket_errors"] += 1
    loop["socket_errno"] = error
    return OK


# ---- requests and pointers -----------------------------------------------------------------------------------------------------


@hot
def _take_requests(loop, inp):  # type: ignore[no-untyped-def]
    """Take every request word once. Returns True when the loop is to be left: then nothing but a stop or an e-stop counts."""
    control = loop["control"]
    flags = loop["flags"]
    requests = 0
    if atomic_exchange(flags + ESTOP_BYTE, 0) != 0:
        requests |= BIT_ESTOP
    if atomic_exchange(flags + STOP_RELEASE_BYTE, 0) != 0:
        requests |= BIT_STOP_RELEASE
    if atomic_exchange(flags + STOP_BYTE, 0) != 0:
        requests |= BIT_STOP
    start = atomic_exchange(control + _START, 0) != 0
    reset = atomic_exchange(control + _RESET, 0) != 0
    leaving = atomic_load(control + _LEAVE) != 0
    if leaving:
        requests |= BIT_STOP_RELEASE | BIT_LEAVE
        if loop["leave_since_ns"] == 0:
            loop["leave_since_ns"] = inp["now_ns"]
    else:
        if start:
            requests |= BIT_START
        if reset:
            requests |= BIT_RESET
    inp["requests"] = requests
    return leaving


@hot
def _pointers_in_force(loop, memory):  # type: ignore[no-untyped-def]
    """Address of the POINTERS of this cycle. A new slot is taken between motions only."""
    control = loop["control"]
    used = atomic_load(control + _USED)
    wanted = atomic_load(control + _WANTED)
    mode = memory["supervisor"]["mode"]
    if wanted != used and mode != MODE_LIVE and mode != MODE_BRAKING:
        used = wanted & 1
        atomic_store(control + _USED, used)
    return loop["pointers"] + used * _POINTERS_BYTES


@hot
def _overdue(loop, setup, inp, leaving):  # type: ignore[no-untyped-def]
    """True when leaving takes longer than any supervised stop may."""
    if not leaving:
        return False
    return not (inp["now_ns"] - loop["leave_since_ns"] <= setup["limits"]["brake_deadline_ns"] + LEAVE_EXTRA_NS)


@hot
def _force_release(torque, row):  # type: ignore[no-untyped-def]
    torque["request"] = REQUEST_RELEASE
    row["request"] = REQUEST_RELEASE
    for i in range(torque["tau"].size):
        torque["tau"][i] = 0.0
        row["tau_out"][i] = 0.0
    return OK


# ---- input, output, counts -----------------------------------------------------------------------------------------------------


@hot
def _fill_input(loop, inp):  # type: ignore[no-untyped-def]
    scratch = loop["scratch"]
    if inp["state_new"] == 1:
        # What waited in the queue arrived at an unknown time before; counted from here its age is never too small.
        inp["state_arrival_ns"] = inp["now_ns"]
    # Boot time goes on in suspend and monotonic time does not; both are read here, one after the other.
    inp["boot_offset_ns"] = now_ns(CLOCK_BOOTTIME, scratch) - now_ns(CLOCK_MONOTONIC, scratch)
    inp["side_beat"] = atomic_load(loop["control"] + _SIDE_BEAT)
    inp["side_required"] = loop["side_required"]
    inp["cost_ns"] = loop["cost_ns"]
    inp["send_failed"] = loop["send_failed"]
    return OK


@hot
def _send_torque(loop, torque):  # type: ignore[no-untyped-def]
    """Encode and send. A full queue is counted and told to the next cycle; it never waits."""
    outbox = loop["outbox"][:]
    length = encode_torque(torque, outbox)
    failed = 1
    if length > 0:
        status = send_bytes(loop["torque_socket"], outbox, length)
        if status == OK:
            failed = 0
        elif status != -EAGAIN:
            _count_error(loop, -status)
    loop["send_failed"] = failed
    loop["send_failed_total"] += failed
    return OK


@hot
def _keep_row(loop, row):  # type: ignore[no-untyped-def]
    """The row into the ring, and a copy for the side thread into the slot that is not the newest one."""
    if loop["ring"] != 0:
        ring_append(block_at(loop["ring"], RING), row)
    count = atomic_load(loop["control"] + _ROW_COUNT)
    _copy_words(address_of(row), loop["rows"] + (count & 1) * _ROW_BYTES, _ROW_WORDS)
    atomic_store(loop["control"] + _ROW_COUNT, count + 1)
    return OK


@hot
def _bin_of(time_ns):  # type: ignore[no-untyped-def]
    k = time_ns // BIN_NS
    if k < 0:
        return 0
    return k if k < BINS else BINS - 1


@hot
def _count_cycle(loop, setup, inp):  # type: ignore[no-untyped-def]
    late_ns = inp["now_ns"] - inp["deadline_ns"] + inp["skipped"] * setup["period_ns"]
    cost_ns = now_ns(CLOCK_MONOTONIC, loop["scratch"]) - loop["woke_ns"]
    loop["cost_ns"] = cost_ns
    loop["late_bins"][_bin_of(late_ns)] += 1
    loop["cost_bins"][_bin_of(cost_ns)] += 1
    if late_ns > loop["late_max_ns"]:
        loop["late_max_ns"] = late_ns
    if cost_ns > loop["cost_max_ns"]:
        loop["cost_max_ns"] = cost_ns
    loop["skipped_total"] += inp["skipped"]
    loop["cycles"] += 1
    return OK
