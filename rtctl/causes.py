"""The closed table of stop causes: code, name, sentence, likely reasons in order, next step.

The one source for every message about them.

The code of a watch's cause is its index in `rtctl.blocks.WATCH_NAMES` plus one; 0 is no cause.
"""

from dataclasses import dataclass


@dataclass(frozen=True)
class Cause:
    """Why a stop happened, in words for the person at the arm."""

    code: int
    name: str
    sentence: str
    likely: tuple[str, ...]
    next: str
    overridable: str = "no"


_TABLE = (
    (
        "estop",
        "An e-stop was asked for.",
        ("somebody pressed it", "Ctrl-C was pressed twice", "a program called it"),
        "Find out who asked and why, make the cell safe, then reset and start.",
    ),
    (
        "state_invalid",
        "A state message was not usable: a number was not finite, or it came from another arm.",
        (
            "an encoder or its cable failed",
            "the driver divides by zero or sends an uninitialised value",
            "two arms share an endpoint",
        ),
        "Look at q and qd of the last rows of the record; check the driver's conversion.",
    ),
    (
        "clock_jump",
        "The loop was away longer than a torque is valid, or the clocks jumped.",
        ("the computer was suspended", "the process was stopped", "the virtual machine was paused"),
        "Keep the computer from sleeping; reset when the arm is still.",
    ),
    (
        "state_age",
        "No fresh state arrived in time.",
        ("the driver died or hangs", "the computer was busy", "the link is slower than the limit allows"),
        "Check that the driver runs; look at age_ns and late cycles before the stop.",
    ),
    (
        "driver_fault",
        "The driver reported a fault, lost its enable, or its brake did not open or closed while torque was flowing.",
        ("a drive tripped", "the bus voltage is missing", "the brake is not wired"),
        "Read the drive's own fault code; clear it there first.",
    ),
    (
        "stop_chain",
        "The hardware stop chain is open.",
        ("an emergency stop device is pressed", "a guard is open", "the chain's input is not connected, which counts as open"),
        "Close the chain at the device that was actuated, then reset.",
    ),
    (
        "grant",
        "The driver no longer grants this controller the right to command torque.",
        ("the torque arrived too late for the driver", "the driver was restarted", "another controller holds the grant"),
        "Look at loop_delay_ns and holder before the stop; see that only one controller runs.",
    ),
    (
        "position",
        "A joint left its position limits.",
        ("the motion goes too close to the limit", "the controller overshoots", "the limits are tighter than the motion needs"),
        "Move the arm back inside by hand or with the driver's own tools; check the reference against the limits.",
    ),
    (
        "position_glitch",
        "A position jumped further than the joint can move in that time.",
        ("encoder glitch or wrap", "a lost message followed by a late one", "the driver swapped joints"),
        "Look at q around the stop; check the encoder and its wrap.",
    ),
    (
        "speed",
        "A joint was faster than its speed limit.",
        ("the reference is too fast", "unstable gains", "a payload was lost"),
        "Slow the motion down or lower the gains.",
    ),
    (
        "law_status",
        "The control law or the reference failed.",
        ("a parameter is not finite", "the law divides by zero", "the law's compiled code died"),
        "Replay the record; run the law alone with the inputs of the last row.",
    ),
    (
        "tracking_error",
        "A joint stayed further from its reference than allowed.",
        ("the torque limit was reached", "wrong payload or model", "a collision", "gains too low for the motion"),
        "Look at the torque split and the limiters before the stop.",
    ),
    (
        "torque_demand",
        "The law asked more torque than the limit for too long.",
        ("the motion is too fast for the arm", "unstable gains", "a collision", "wrong payload"),
        "Slow the motion down; check the model's gravity torque at the stop pose.",
    ),
    (
        "late_cycles",
        "Too many cycles were late.",
        ("the computer is busy", "no real-time priority", "power saving"),
        "See what was not permitted at start-up; free a core or lower the rate.",
    ),
    (
        "side_thread",
        "The side thread, which takes the operator's requests, was silent.",
        ("a long call holds the interpreter", "the process is out of memory"),
        "Look for other work in the controller's process and move it out.",
    ),
    (
        "loop_delay",
        "The driver's echo shows a longer delay from torque to state than allowed.",
        ("the link or the driver is busy", "the driver does not receive torque messages", "the limit is too tight for this link"),
        "Compare loop_delay_ns with a quiet run.",
    ),
    (
        "brake_deadline",
        "The supervised stop did not come to rest in time, so torque was released.",
        ("too little braking damping", "the model's gravity torque is wrong", "something pushes the arm"),
        "Look at qd during braking; check brake_damping and the model.",
    ),
    (
        "operator_stop",
        "A stop was asked for.",
        ("somebody asked", "the motion or the run time ended"),
        "Start again when wanted; no reset is needed.",
    ),
    (
        "gate",
        "The torque that reached the gate was not fit to leave, so torque was released.",
        ("the model gave a torque that is not finite", "the limits file is inconsistent"),
        "Replay the record and look at the terms of the last row.",
    ),
)

NO_CAUSE = Cause(0, "none", "No cause.", (), "")
CAUSES = (NO_CAUSE, *(Cause(code, *row) for code, row in enumerate(_TABLE, start=1)))


def cause(code: int) -> Cause:
    """The cause with this code. Raises IndexError for a code that does not exist."""
    if not 0 <= code < len(CAUSES):
        raise IndexError(f"cause code must be 0..{len(CAUSES) - 1}, got {code}")
    return CAUSES[code]


def cause_named(name: str) -> Cause:
    """The cause with this name. Raises KeyError for a name that does not exist."""
    for entry in CAUSES:
        if entry.name == name:
            return entry
    raise KeyError(name)
