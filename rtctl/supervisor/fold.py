"""From the conditions and requests of one cycle to one stop and its cause, and from request bits to what the operator asks."""

import numpy as np

from rtctl.blocks import (
    ASK_NONE,
    ASK_RESET,
    ASK_START,
    BIT_ESTOP,
    BIT_RESET,
    BIT_START,
    BIT_STOP,
    BIT_STOP_RELEASE,
    MODE_NAMES,
    STOP_FAULT,
    STOP_HOLD,
    STOP_NONE,
    STOP_NOW,
    STOP_RELEASE,
    WATCH_COUNT,
    WATCH_ESTOP,
    WATCH_NAMES,
    WATCH_OPERATOR_STOP,
)
from rtctl.kernels.compile import hot

_N, _F, _0 = STOP_NONE, STOP_FAULT, STOP_NOW

# What each watch demands in each mode (off, ready, live, braking, holding, latched). In off and ready a condition needs no stop:
# it fails the checks. The e-stop's category comes from the limits file and acts in every mode; the operator's is in the request.
_TABLE = {
    "estop": (_F, _F, _F, _F, _F, _F),
    "state_invalid": (_N, _N, _0, _0, _0, _N),
    "clock_jump": (_N, _N, _0, _0, _0, _N),
    "state_age": (_N, _N, _0, _0, _0, _N),
    "driver_fault": (_N, _N, _0, _0, _0, _N),
    "stop_chain": (_N, _N, _0, _0, _0, _N),
    "grant": (_N, _N, _0, _0, _0, _N),
    "position": (_N, _N, _F, _N, _F, _N),
    "position_glitch": (_N, _N, _0, _0, _0, _N),
    "speed": (_N, _N, _F, _N, _F, _N),
    "law_status": (_N, _N, _F, _N, _N, _N),
    "tracking_error": (_N, _N, _F, _N, _N, _N),
    "torque_demand": (_N, _N, _F, _N, _N, _N),
    "late_cycles": (_N, _N, _F, _F, _F, _N),
    "side_thread": (_N, _N, _F, _F, _F, _N),
    "loop_delay": (_N, _N, _F, _F, _F, _N),
    "brake_deadline": (_N, _N, _N, _0, _N, _N),
    "operator_stop": (_N, _N, STOP_HOLD, STOP_HOLD, STOP_HOLD, _N),
    "gate": (_N, _N, _0, _0, _0, _N),
}
ACTS = np.array([_TABLE[name] for name in WATCH_NAMES], dtype=np.int64)
ACTS.flags.writeable = False
assert ACTS.shape == (WATCH_COUNT, len(MODE_NAMES))


@hot
def fold(conditions, mode, requests, estop_stop):  # type: ignore[no-untyped-def]
    """(strictest stop, code of its first cause) of this cycle.

    conditions  bit w = watch w trips
    mode        MODE_   mode of the last cycle
    requests    BIT_    as they reached the cycle
    estop_stop  STOP_FAULT or STOP_NOW, from the limits file
    """
    worst = STOP_NONE
    cause = 0
    for w in range(WATCH_COUNT):
        if (conditions >> w) & 1 == 0:
            continue
        stop = ACTS[w, mode]
        if w == WATCH_ESTOP:
            stop = STOP_NOW if estop_stop != STOP_FAULT else STOP_FAULT
        elif w == WATCH_OPERATOR_STOP and stop == STOP_HOLD and requests & BIT_STOP_RELEASE != 0:
            stop = STOP_RELEASE
        if stop > worst:
            worst = stop
            cause = w + 1
    return worst, cause


@hot
def resolve_requests(requests):  # type: ignore[no-untyped-def]
    """What the operator asks: a stop beats a reset, and a reset beats a start, so no reset ever starts a motion."""
    if requests & (BIT_STOP | BIT_STOP_RELEASE | BIT_ESTOP) != 0:
        return ASK_NONE
    if requests & BIT_RESET != 0:
        return ASK_RESET
    if requests & BIT_START != 0:
        return ASK_START
    return ASK_NONE
