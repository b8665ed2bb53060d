"""The simulated arm in real time: wake up, advance the motion, take torque messages, publish the state; compiled, without the
interpreter lock. Sockets and the stop word are handed in as addresses; what the driver must do is in `rtctl.plant.driver_duty`.
"""

import numpy as np

from rtctl.blocks import MAX_MESSAGE_BYTES, REQUEST_RELEASE, STATE, TORQUE
from rtctl.kernels.compile import hot
from rtctl.kernels.external import (
    CLOCK_MONOTONIC,
    EAGAIN,
    EXTERNAL_SCRATCH,
    ZMQ_EVENTS,
    ZMQ_FD,
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
from rtctl.kernels.memory import atomic_load
from rtctl.plant.blocks import NO_STATE_YET, PHASE_STILL
from rtctl.plant.driver_duty import plant_advance, plant_receive, plant_retire, plant_start, plant_state
from rtctl.wire.codec import decode_torque, encode_state

MAX_DRAIN = 64  # torque messages taken at one wake-up at most
MAX_WAKES = 16  # for torque messages, within one period
LEAVE_MAX_NS = 4_000_000_000  # an arm that does not come to rest by then is left as it is

STOPPED = 1  # returned by the loop: the stop word was set
TIME_OVER = 2
EPOCH_LEAD_NS = 1_000_000_000  # of the driver's clock at its start: 0 means `never` in its memory

PLANT_DIED = 3  # a kernel returned another status than OK

PLANT_LOOP = np.dtype(
    [
        # ---- set at start-up
        ("state_socket", "i8"),  # addresses of libzmq sockets; only the loop touches them
        ("torque_socket", "i8"),
        ("stop", "i8"),  # address of the stop word
        ("duration_ns", "i8"),  # 0 = until stopped
        # ---- the loop's own
        ("inbox", "u1", MAX_MESSAGE_BYTES),
        ("outbox", "u1", MAX_MESSAGE_BYTES),
        ("messages", TORQUE, MAX_DRAIN),
        ("state", STATE),
        ("scratch", EXTERNAL_SCRATCH),
        ("torque_fd", "i8"),  # descriptor of the torque socket
        ("epoch_ns", "i8"),  # monotonic time at which the driver's own clock stood at 0
        ("leave_since_ns", "i8"),  # when it was told to end, 0 = not yet
        ("in_set", "i8"),  # 1: the next message is a later part of a multipart message
        # ---- counts
        ("periods", "i8"),
        ("skipped", "i8"),  # periods skipped because a wake-up was late
        ("late_max_ns", "i8"),
        ("sent", "i8"),
        ("send_failed", "i8"),
        ("received", "i8"),  # well-formed torque messages
        ("refused", "i8"),  # by the decoder, too long, or parts of multipart messages
        ("refused_last", "i8"),  # code of the last one that the decoder refused
        ("flooded", "i8"),  # wake-ups at which the bound was reached
        ("socket_errno", "i8"),  # of the last error that is not a full or empty queue
    ],
    align=True,
)


@hot
def run_plant(setup, memory, loop):  # type: ignore[no-untyped-def]
    """Run the simulated arm from now on until the stop word is set or the time is over.

    setup, memory   PLANT_SETUP, PLANT_MEMORY (zeroed)
    loop            PLANT_LOOP

    Returns STOPPED, TIME_OVER or PLANT_DIED; before the first two the arm is brought to the still part of its rest policy.
    A torque message wakes it up, so that it acts from its arrival on; states leave on the period's grid. Late wake-ups skip;
    the motion always catches up, the clock is never stretched.
    """
    scratch = loop["scratch"]
    period_ns = setup["period_ns"]
    loop["leave_since_ns"] = 0
    loop["torque_fd"] = socket_option(loop["torque_socket"], ZMQ_FD, scratch)
    # The driver's clock counts from its start: the computer's leaves the range of the messages after 104 days.
    loop["epoch_ns"] = now_ns(CLOCK_MONOTONIC, scratch) - EPOCH_LEAD_NS
    begin_ns = _clock_ns(loop)
    deadline_ns = begin_ns
    published = 0
    if plant_start(setup, memory, begin_ns) != OK:
        return PLANT_DIED
    while True:
        woke_ns = _clock_ns(loop)
        late_ns = woke_ns - deadline_ns
        if late_ns > loop["late_max_ns"]:
            loop["late_max_ns"] = late_ns
        loop["periods"] += 1
        if plant_advance(setup, memory, woke_ns) != OK:
            return PLANT_DIED
        leaving = _leave(setup, memory, loop, woke_ns, begin_ns)
        _take_torques(setup, memory, loop, woke_ns)
        published = _publish(setup, memory, loop, woke_ns, published)
        deadline_ns += period_ns
        skip = (woke_ns - deadline_ns) // period_ns
        if skip > 0:
            loop["skipped"] += skip
            deadline_ns += skip * period_ns
        if leaving and (memory["phase"] == PHASE_STILL or woke_ns - loop["leave_since_ns"] >= LEAVE_MAX_NS):
            return STOPPED if atomic_load(loop["stop"]) != 0 else TIME_OVER
        if _wait(setup, memory, loop, deadline_ns) != OK:
            return PLANT_DIED


@hot
def _clock_ns(loop):  # type: ignore[no-untyped-def]
    """The driver's own clock."""
    return now_ns(CLOCK_MONOTONIC, loop["scratch"]) - loop["epoch_ns"]


@hot
def _leave(setup, memory, loop, woke_ns, begin_ns):  # type: ignore[no-untyped-def]
    """True once the driver is to end: the grant is over, no new one is given, and the rest policy brings the arm to rest first."""
    if loop["leave_since_ns"] == 0:
        time_over = loop["duration_ns"] > 0 and woke_ns - begin_ns >= loop["duration_ns"]
        if time_over or atomic_load(loop["stop"]) != 0:
            loop["leave_since_ns"] = woke_ns
            plant_retire(setup, memory, woke_ns)
    return loop["leave_since_ns"] != 0


@hot
def _wait(setup, memory, loop, deadline_ns):  # type: ignore[no-untyped-def]
    """Wait for the next period, and wake up for torque messages until then; a flood of them is left for the period's end."""
    scratch = loop["scratch"]
    for _ in range(MAX_WAKES):
        remaining_ns = deadline_ns - _clock_ns(loop)
        if remaining_ns <= 0:
            return OK
        # The descriptor signals a change only: what already waits must be asked for first.
        if socket_option(loop["torque_socket"], ZMQ_EVENTS, scratch) & ZMQ_POLLIN == 0:
            ready = wait_readable(loop["torque_fd"], remaining_ns, scratch)
            if ready < 0:
                break
            if ready == 0 or socket_option(loop["torque_socket"], ZMQ_EVENTS, scratch) & ZMQ_POLLIN == 0:
                continue
        woke_ns = _clock_ns(loop)
        status = plant_advance(setup, memory, woke_ns)
        if status != OK:
            return status
        _take_torques(setup, memory, loop, woke_ns)
    sleep_until_ns(deadline_ns + loop["epoch_ns"], scratch)
    return OK


@hot
def _take_torques(setup, memory, loop, woke_ns):  # type: ignore[no-untyped-def]
    """Drain to empty and hand every well-formed message to the driver. After a flood nothing but a release counts."""
    messages = loop["messages"][:]
    count = 0
    taken = 0
    while taken < MAX_DRAIN:
        status = _receive(loop, messages[count])
        if status == -EAGAIN:
            break
        taken += 1
        if status == OK:
            count += 1
    flooded = taken >= MAX_DRAIN
    if flooded:
        loop["flooded"] += 1
    loop["received"] += count
    for k in range(count):
        if not flooded or messages[k]["request"] == REQUEST_RELEASE:
            plant_receive(setup, memory, messages[k], woke_ns)
    return OK


@hot
def _receive(loop, torque):  # type: ignore[no-untyped-def]
    """One message. Returns OK, -EAGAIN if nothing waits, or 0 if it was refused; any other failure counts as nothing there."""
    inbox = loop["inbox"][:]
    length = receive_bytes(loop["torque_socket"], inbox)
    if length < 0:
        if length != -EAGAIN:
            loop["socket_errno"] = -length
        return -EAGAIN
    more = socket_option(loop["torque_socket"], ZMQ_RCVMORE, loop["scratch"])
    part = more != 0 or loop["in_set"] == 1
    loop["in_set"] = 1 if more != 0 else 0
    status = 0
    if not part and length <= MAX_MESSAGE_BYTES:
        status = decode_torque(inbox, length, torque)
        if status != OK:
            loop["refused_last"] = status
            status = 0
    if status != OK:
        loop["refused"] += 1
    return status


@hot
def _publish(setup, memory, loop, woke_ns, published):  # type: ignore[no-untyped-def]
    """Send the newest state if it is not sent yet; returns the sequence sent last. A full queue is counted, never waited for."""
    status = plant_state(setup, memory, woke_ns, loop["state"])
    sequence = loop["state"]["sequence"]
    if status == NO_STATE_YET or sequence <= published:
        return published
    outbox = loop["outbox"][:]
    length = encode_state(loop["state"], outbox)
    status = -EAGAIN
    if length > 0:
        status = send_bytes(loop["state_socket"], outbox, length)
    if status == OK:
        loop["sent"] += 1
    else:
        loop["send_failed"] += 1
        if status != -EAGAIN:
            loop["socket_errno"] = -status
    return sequence
