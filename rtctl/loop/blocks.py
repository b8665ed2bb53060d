"""Memory blocks of the live loop: LOOP belongs to the hot thread, CONTROL is the words it shares with the side thread.

Every word of CONTROL has one writing side, except the request words: the side thread sets them, the loop exchanges them with 0.
"""

import numpy as np

from rtctl.blocks import MAX_MESSAGE_BYTES, STATE
from rtctl.kernels.external import EXTERNAL_SCRATCH

PACING_TIMER = 0  # absolute deadlines
PACING_STATE = 1  # each new state starts a cycle
PACING_NAMES = ("timer", "state")

MAX_DRAIN = 64  # messages received in one cycle at most
LEAVE_CYCLES = 3  # cycles that send `release` before the loop returns: one message may meet a full queue
LEAVE_EXTRA_NS = 1_000_000_000  # beyond the braking deadline; then the loop releases whatever the supervisor says
BINS = 1024  # of a histogram, 1 us each; the last one counts everything beyond
BIN_NS = 1000

RUN_STARTING = 0
RUN_LIVE = 1
RUN_ENDED = 2

LEFT = 1  # returned by the loop: left in order. 0 is never returned: compiled code that dies returns 0
CYCLES_DONE = 2  # the cycle limit was reached
CYCLE_DIED = 3  # the cycle returned another status than OK; the torque was released

CONTROL = np.dtype(
    [
        ("leave", "i8"),  # side: 1 = stop, release and return
        ("start", "i8"),  # requests, exchanged with 0 by the loop
        ("reset", "i8"),
        ("side_beat", "i8"),  # side thread: counts up as long as it lives
        ("pointer_wanted", "i8"),  # side: slot of the POINTERS that should be in force
        (
            "pointer_used",
            "i8",
        ),  # loop: slot in force. The side thread writes only into the other one, and only when both are equal
        ("run", "i8"),  # loop: RUN_
        ("row_count", "i8"),  # loop: rows published so far; the newest is in slot (row_count - 1) % 2
    ],
    align=True,
)

LOOP = np.dtype(
    [
        # ---- set at start-up, constant during a run
        ("state_socket", "i8"),  # addresses of libzmq sockets; only the loop touches them
        ("torque_socket", "i8"),
        ("state_fd", "i8"),  # descriptor of the state socket
        ("pacing", "i8"),  # PACING_
        ("pointers", "i8"),  # address of two POINTERS
        ("control", "i8"),  # address of CONTROL
        ("flags", "i8"),  # address of the mapped flag file
        ("ring", "i8"),  # address of the RING block, 0 = no record
        ("rows", "i8"),  # address of two ROWs for the side thread
        ("side_required", "i8"),  # 1: a silent side thread stops the arm
        ("cycle_limit", "i8"),  # return after that many cycles, 0 = none (warm-up, tests)
        # ---- the loop's own
        ("inbox", "u1", MAX_MESSAGE_BYTES),
        ("outbox", "u1", MAX_MESSAGE_BYTES),
        ("fresh", STATE),  # decoded last
        ("newest", STATE),  # newest valid one of this cycle
        ("scratch", EXTERNAL_SCRATCH),
        ("deadline_ns", "i8"),  # timer pacing: of the next cycle
        ("last_start_ns", "i8"),  # state pacing: when the last cycle was due
        ("woke_ns", "i8"),
        ("drained", "i8"),  # messages taken in this cycle
        ("in_set", "i8"),  # 1: the next message is a later part of a multipart message
        ("cost_ns", "i8"),  # of the last cycle
        ("send_failed", "i8"),  # 1: the last torque could not be sent
        ("leave_since_ns", "i8"),
        ("leave_count", "i8"),  # `release` messages sent while leaving
        # ---- counts, read by the side thread as they are
        ("cycles", "i8"),
        ("skipped_total", "i8"),
        ("late_max_ns", "i8"),
        ("cost_max_ns", "i8"),
        ("states_total", "i8"),  # well-formed state messages
        ("refused_total", "i8"),
        ("refused_parts", "i8"),  # of them parts of multipart messages
        ("refused_long", "i8"),  # of them longer than the buffer
        ("refused_last", "i8"),  # code of the last one that the decoder refused
        ("flooded_total", "i8"),
        ("silent_total", "i8"),  # cycles without a state
        ("send_failed_total", "i8"),
        ("socket_errors", "i8"),
        ("socket_errno", "i8"),  # of the last one
        ("late_bins", "i8", BINS),
        ("cost_bins", "i8", BINS),
    ],
    align=True,
)


def offset(name: str) -> int:
    """Byte of a word in CONTROL."""
    assert CONTROL.fields is not None
    return int(CONTROL.fields[name][1])
