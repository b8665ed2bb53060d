"""The decision function: a pure, finite function from (mode, stop in force, inputs) to (next mode, next stop, action).

It is small enough to be enumerated completely; tests/unit/test_decision.py walks every input and every reachable sequence.
The cause of a stop passes by it unread. The same compiled function runs live.
"""

from rtctl.blocks import (
    ASK_RESET,
    ASK_START,
    MODE_BRAKING,
    MODE_HOLDING,
    MODE_LATCHED,
    MODE_LIVE,
    MODE_OFF,
    MODE_READY,
    STOP_FAULT,
    STOP_HOLD,
    STOP_NONE,
    STOP_NOW,
    STOP_RELEASE,
)
from rtctl.kernels.compile import hot

ACTION_NONE = 0
ACTION_BEGIN = 1  # first cycle of `live`: holding torque, reference from the measured pose
ACTION_BRAKE = 2  # first cycle of `braking`
ACTION_HOLD = 3  # first cycle of `holding`: remember the pose
ACTION_RELEASE = 4  # torque is given back in this cycle
ACTION_CLEAR = 5  # a reset: forget the cause
ACTION_NAMES = ("none", "begin", "brake", "hold", "release", "clear")


@hot
def decide(mode, stop, stop_now, checks_hold, still, cause_gone, ask):  # type: ignore[no-untyped-def]
    """Next (mode, stop in force, action).

    mode         MODE_   mode of the last cycle
    stop         STOP_   stop in force
    stop_now     STOP_   strictest stop asked for in this cycle (`fold`)
    checks_hold  bool    all checks for torque have held long enough
    still        bool    all joints have been still long enough
    cause_gone   bool    no condition that would stop the arm is present
    ask          ASK_    the operator's start or reset (`resolve_requests`: a stop beats both)

    A deadline of the braking is a watch and arrives as `stop_now` = STOP_NOW.
    """
    if mode == MODE_LIVE or mode == MODE_BRAKING or mode == MODE_HOLDING:
        worst = stop_now if stop_now > stop else stop
        if worst >= STOP_NOW:
            return MODE_LATCHED, STOP_NOW, ACTION_RELEASE

        if mode == MODE_LIVE:
            if worst == STOP_NONE:
                return MODE_LIVE, STOP_NONE, ACTION_NONE
            return MODE_BRAKING, worst, ACTION_BRAKE

        if mode == MODE_BRAKING:
            if not still:
                return MODE_BRAKING, worst, ACTION_NONE
            if worst == STOP_FAULT:
                return MODE_LATCHED, STOP_FAULT, ACTION_RELEASE
            if worst == STOP_RELEASE:
                return MODE_READY, STOP_NONE, ACTION_RELEASE
            return MODE_HOLDING, STOP_HOLD, ACTION_HOLD

        if worst > STOP_HOLD:
            return MODE_BRAKING, worst, ACTION_BRAKE
        if ask == ASK_START and stop_now == STOP_NONE and checks_hold and still:
            return MODE_LIVE, STOP_NONE, ACTION_BEGIN
        return MODE_HOLDING, STOP_HOLD, ACTION_NONE

    if mode == MODE_OFF or mode == MODE_READY:
        if stop_now >= STOP_FAULT:
            return MODE_LATCHED, stop_now, ACTION_RELEASE
        if not checks_hold:
            return MODE_OFF, STOP_NONE, ACTION_NONE
        if mode == MODE_READY and ask == ASK_START and stop_now == STOP_NONE and still:
            return MODE_LIVE, STOP_NONE, ACTION_BEGIN
        return MODE_READY, STOP_NONE, ACTION_NONE

    if mode == MODE_LATCHED and ask == ASK_RESET and cause_gone and still and stop_now < STOP_FAULT:
        return MODE_OFF, STOP_NONE, ACTION_CLEAR
    worst = stop_now if stop_now > stop else stop
    return MODE_LATCHED, worst, ACTION_NONE
