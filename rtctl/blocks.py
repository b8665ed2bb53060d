"""The fixed memory blocks that travel through one cycle, and the integer codes in them. One place, one meaning.

Every array over joints is `MAX_JOINTS` wide and used up to `n`. Units are SI; a trade symbol carries no suffix, other numbers do.
Blocks hold plain values only: copying the bytes of `MEMORY` and `INPUT` is enough to replay a cycle bit for bit.
"""

from dataclasses import dataclass

import numpy as np

from rtctl.kernels.layout import MAX_JOINTS, MODEL, SCRATCH

MAX_TERMS = 8  # terms a law may split its torque into
MAX_EXTRA = 64  # free parameters of a law
MAX_MEMORY = 128  # floats a law may remember between cycles
MAX_TONES = 8  # sine terms per joint of a multi-sine
MAX_MESSAGE_BYTES = 1024

_J = MAX_JOINTS

# ---- control laws ----------------------------------------------------------------------------------------------------------------

LAW_INPUT = np.dtype(
    [
        ("n", "i8"),
        ("dt_s", "f8"),  # period of the loop
        ("t_s", "f8"),  # time along the reference
        ("q", "f8", _J),  # measured
        ("qd", "f8", _J),
        ("q_ref", "f8", _J),
        ("qd_ref", "f8", _J),
        ("qdd_ref", "f8", _J),
        ("tau_law_last", "f8", _J),  # what the law asked in the last cycle
        ("tau_out_last", "f8", _J),  # what left the gate in the last cycle: integrators compare the two (anti-windup)
    ],
    align=True,
)

LAW_PARAMETERS = np.dtype(
    [
        ("Kp", "f8", _J),  # N m/rad for torque laws, 1/s^2 for laws that act through the inertia matrix
        ("Kd", "f8", _J),  # N m s/rad or 1/s
        ("Ki", "f8", _J),  # N m/(rad s) or 1/s^3
        ("integral_max", "f8", _J),  # bound of the integral term, N m or rad/s^2
        ("extra", "f8", MAX_EXTRA),
    ],
    align=True,
)

LAW_MEMORY = np.dtype([("values", "f8", MAX_MEMORY)], align=True)

# ---- references ------------------------------------------------------------------------------------------------------------------

REFERENCE_PARAMETERS = np.dtype(
    [
        ("n", "i8"),
        ("q_goal", "f8", _J),  # where the approach move ends: the goal, the first waypoint, the centre of the multi-sine
        ("duration_s", "f8"),  # of the approach move; 0 = from the limits below
        ("qd_max", "f8", _J),  # limits of a limit-driven move
        ("qdd_max", "f8", _J),
        ("body_duration_s", "f8"),  # of what follows the approach: waypoints or sines; 0 = nothing follows
        ("tone_count", "i8"),
        ("tone_hz", "f8", MAX_TONES),
        ("amplitude", "f8", (_J, MAX_TONES)),
        ("phase", "f8", (_J, MAX_TONES)),
        ("fade_s", "f8"),  # time in which the sines grow and shrink
        ("data", "i8"),  # address of float64 coefficients (waypoints), 0 = none
        ("data_count", "i8"),
    ],
    align=True,
)

REFERENCE_MEMORY = np.dtype(
    [
        ("q_start", "f8", _J),  # measured when the motion began
        ("approach_s", "f8"),
        ("end_s", "f8"),
    ],
    align=True,
)

REFERENCE_SAMPLE = np.dtype(
    [
        ("t_s", "f8"),  # in: time since the motion began
        ("q_ref", "f8", _J),  # out; for `begin` in: the measured pose
        ("qd_ref", "f8", _J),
        ("qdd_ref", "f8", _J),
    ],
    align=True,
)

# ---- messages --------------------------------------------------------------------------------------------------------------------

WIRE_VERSION = 1
KIND_STATE = 1
KIND_TORQUE = 2

REQUEST_ASK = 0  # asks for the grant, carries no torque
REQUEST_DRIVE = 1  # carries torque, counts only with the current grant
REQUEST_RELEASE = 2  # gives the grant back; the driver's rest policy takes over

STATUS_ENABLED = 1  # drives are powered
STATUS_BRAKE = 2  # brake is closed
STATUS_FAULT = 4
STATUS_STOP_CHAIN_CLOSED = 8  # the hardware stop chain is closed (healthy)
STATUS_GRAVITY_ADDED = 16  # the drive adds gravity torque by itself
STATUS_SIMULATED = 32

STATE = np.dtype(
    [
        ("version", "i8"),
        ("arm_key", "i8"),
        ("session", "i8"),  # of the driver, random at its start
        ("sequence", "i8"),
        ("sample_ns", "i8"),  # driver's monotonic clock
        ("holder", "i8"),  # controller session that holds the grant, 0 = nobody
        ("grant", "i8"),  # number of the grant
        ("received_session", "i8"),  # last torque message received
        ("received_sequence", "i8"),
        ("applied_session", "i8"),  # last torque message applied
        ("applied_sequence", "i8"),
        ("status", "i8"),  # STATUS_ bits
        ("n", "i8"),
        ("q", "f8", _J),
        ("qd", "f8", _J),
        ("tau_count", "i8"),  # n, or 0 when the driver measures no torque
        ("tau_meas", "f8", _J),
    ],
    align=True,
)

TORQUE = np.dtype(
    [
        ("version", "i8"),
        ("arm_key", "i8"),
        ("session", "i8"),  # of the controller, random at its start
        ("sequence", "i8"),
        ("driver_session", "i8"),  # the state it answers
        ("state_sequence", "i8"),
        ("grant", "i8"),
        ("request", "i8"),  # REQUEST_
        ("valid_for_ns", "i8"),  # from the sample time of the answered state, in the driver's clock
        ("n", "i8"),
        ("tau", "f8", _J),
    ],
    align=True,
)

# ---- supervisor ------------------------------------------------------------------------------------------------------------------

MODE_OFF = 0  # nothing checked, no torque
MODE_READY = 1  # all checks hold, no torque
MODE_LIVE = 2  # law torque
MODE_BRAKING = 3  # supervised stop
MODE_HOLDING = 4  # at rest, torque kept
MODE_LATCHED = 5  # torque released to the rest policy until a reset
MODE_NAMES = ("off", "ready", "live", "braking", "holding", "latched")

STOP_NONE = 0  # ordered: a stop only ever gets stricter
STOP_HOLD = 1  # commanded, category 2 of IEC 60204-1: brake, then hold with torque
STOP_RELEASE = 2  # commanded, category 1: brake, then release
STOP_FAULT = 3  # fault or e-stop, category 1: brake, then latch
STOP_NOW = 4  # fault or e-stop, category 0: release at once and latch
STOP_NAMES = ("none", "category 2, commanded", "category 1, commanded", "category 1", "category 0")

ASK_NONE = 0  # what the operator asks, after `stop beats start`
ASK_START = 1
ASK_RESET = 2

BIT_START = 1  # request bits as they reach the cycle
BIT_STOP = 2
BIT_STOP_RELEASE = 4
BIT_ESTOP = 8
BIT_RESET = 16
BIT_LEAVE = 32  # the controller is about to end: `release` instead of `ask` while no torque flows

LIMITER_RAMP = 1  # bits of what changed the torque of a joint
LIMITER_MAGNITUDE = 2
LIMITER_RATE = 4

LIMITS = np.dtype(
    [
        ("n", "i8"),
        ("arm_key", "i8"),
        ("q_min", "f8", _J),  # rad or m; -inf for continuous joints
        ("q_max", "f8", _J),
        ("qd_max", "f8", _J),
        ("tau_max", "f8", _J),
        ("tau_rate_max", "f8", _J),  # N m/s, of the law's torque
        ("brake_tau_rate_max", "f8", _J),  # N m/s, in braking and holding
        ("error_max", "f8", _J),  # rad, tracking error
        ("error_dwell_ns", "i8"),
        ("demand_dwell_ns", "i8"),  # how long the law may ask more torque than the limit
        ("state_age_max_ns", "i8"),
        ("resend_max", "i8"),  # cycles without a new state that resend the last torque
        ("late_ns", "i8"),  # a wake-up later than this is late
        ("late_max", "i8"),  # late cycles allowed within `late_window`
        ("late_window", "i8"),  # cycles
        ("side_silent_ns", "i8"),  # silence of the side thread that stops the arm
        ("loop_delay_max_ns", "i8"),
        ("glitch_factor", "f8"),  # a position step larger than this factor times qd_max dt is a glitch
        ("valid_for_ns", "i8"),
        ("still_qd", "f8", _J),  # rad/s, below it a joint is still
        ("still_dwell_ns", "i8"),
        ("ready_dwell_ns", "i8"),  # how long all checks must hold before `ready`
        ("hold_margin", "f8"),  # holding torque may use at most this part of tau_max at start
        ("ramp_ns", "i8"),  # from holding torque to law torque
        ("brake_damping", "f8", _J),  # N m s/rad
        ("brake_deadline_ns", "i8"),
        ("hold_stiffness", "f8", _J),  # N m/rad
        ("hold_torque_max", "f8", _J),  # N m, bound of the spring
        ("estop_stop", "i8"),  # STOP_FAULT or STOP_NOW
        ("scale_torque", "i8"),  # 0: clamp per joint, 1: scale what exceeds gravity as one
        ("allow_gravity_added", "i8"),  # 1: run although the drive adds gravity by itself
    ],
    align=True,
)


WATCH_NAMES = (
    "estop",
    "state_invalid",
    "clock_jump",
    "state_age",
    "driver_fault",
    "stop_chain",
    "grant",
    "position",
    "position_glitch",
    "speed",
    "law_status",
    "tracking_error",
    "torque_demand",
    "late_cycles",
    "side_thread",
    "loop_delay",
    "brake_deadline",
    "operator_stop",
    "gate",
)
(
    WATCH_ESTOP,
    WATCH_STATE_INVALID,
    WATCH_CLOCK_JUMP,
    WATCH_STATE_AGE,
    WATCH_DRIVER_FAULT,
    WATCH_STOP_CHAIN,
    WATCH_GRANT,
    WATCH_POSITION,
    WATCH_POSITION_GLITCH,
    WATCH_SPEED,
    WATCH_LAW_STATUS,
    WATCH_TRACKING_ERROR,
    WATCH_TORQUE_DEMAND,
    WATCH_LATE_CYCLES,
    WATCH_SIDE_THREAD,
    WATCH_LOOP_DELAY,
    WATCH_BRAKE_DEADLINE,
    WATCH_OPERATOR_STOP,
    WATCH_GATE,
) = range(len(WATCH_NAMES))
WATCH_COUNT = len(WATCH_NAMES)
MAX_WATCHES = 24  # room in the blocks; the cause code of watch w is w + 1, 0 = no cause

# ---- one cycle -------------------------------------------------------------------------------------------------------------------

SETUP = np.dtype(  # constant during a run
    [
        ("model", MODEL),
        ("limits", LIMITS),
        ("reference", REFERENCE_PARAMETERS),
        ("session", "i8"),  # of this controller
        ("period_ns", "i8"),
    ],
    align=True,
)

POINTERS = np.dtype(  # what is in force now: exchanged between cycles, recorded as addresses' indices in the row
    [
        ("law", "i8"),  # address of `int64 law(model, input, parameters, memory, scratch, terms)`
        ("law_index", "i8"),  # which law of the run, for the record
        ("law_term_count", "i8"),
        ("law_parameters", LAW_PARAMETERS),
        ("reference_begin", "i8"),  # address of `int64 begin(parameters, memory, sample)`
        ("reference_sample", "i8"),  # address of `int64 sample(parameters, memory, sample)`
    ],
    align=True,
)

SUPERVISOR_MEMORY = np.dtype(
    [
        ("mode", "i8"),
        ("stop", "i8"),  # the stop in force
        ("first_cause", "i8"),  # kept until reset
        ("since_ns", "i8"),  # when the mode began
        ("conditions", "i8"),  # bit w = watch w, as of the last cycle
        ("dwell_ns", "i8", MAX_WATCHES),  # how long each condition has held
        ("checks_ns", "i8"),  # how long all checks have held
        ("still_ns", "i8"),  # how long all joints have been still
        ("late_count", "i8"),  # leaky: one late cycle adds one, `late_window / late_max` cycles take one off
        ("late_cycle", "i8"),
        ("boot_offset_ns", "i8"),
        ("side_beat", "i8"),
        ("side_ns", "i8"),  # when the side thread's heartbeat last changed
        ("q_hold", "f8", _J),  # pose reached, for holding
        ("tau_hold", "f8", _J),  # holding torque at the start of `live`
        ("tau_out", "f8", _J),  # what left the gate in the last cycle
        ("tau_law", "f8", _J),
        ("live_ns", "i8"),  # time in live since the brake opened
        ("brake_wait_ns", "i8"),  # time in live with the brake still closed
        ("grant", "i8"),  # number of the grant this motion started with
        ("reference_done", "i8"),
        ("reference_status", "i8"),  # OK or what `begin` or `sample` returned
        ("law_status", "i8"),
        ("gate_refused", "i8"),  # 1: the last torque was not fit to leave
    ],
    align=True,
)

LINK_MEMORY = np.dtype(  # what the controller remembers about the driver
    [
        ("have_state", "i8"),  # a valid state has been seen
        ("driver_session", "i8"),
        ("last_sequence", "i8"),
        ("last_sample_ns", "i8"),
        ("arrival_ns", "i8"),  # of the newest valid state
        ("offset_min_ns", "i8"),  # least (arrival - sample) of this driver session
        ("age_ns", "i8"),
        ("loop_delay_ns", "i8"),  # from the echo, -1 unknown
        ("echoed", "i8"),  # newest own sequence seen as received
        ("grant", "i8"),  # number of the grant this controller holds, 0 = none
        ("resend_count", "i8"),
        ("sequence", "i8"),  # of the next torque message
        ("answer_sequence", "i8"),  # state sequence the last torque answered
        ("dropped", "i8"),  # states with an old sequence number
        ("identity", "i8"),  # 0 unknown, 1 the right arm and joint count, -1 not
        ("finite", "i8"),  # 1: all numbers of the newest state are finite
        ("restarted", "i8"),  # 1: the driver's session changed while torque was flowing
        ("q_before", "f8", _J),  # of the state before the newest, for the glitch watch
        ("before_sample_ns", "i8"),
        ("sent_ns", "i8", 256),  # when sequence % 256 was sent
        ("q", "f8", _J),  # of the newest valid state
        ("qd", "f8", _J),
        ("status", "i8"),
        ("simulated", "i8"),
    ],
    align=True,
)

MEMORY = np.dtype(  # all hidden state of a cycle
    [
        ("cycle", "i8"),
        ("elapsed_ns", "i8"),  # since the cycle before: one period and what was skipped
        ("supervisor", SUPERVISOR_MEMORY),
        ("link", LINK_MEMORY),
        ("law", LAW_MEMORY),
        ("law_input", LAW_INPUT),
        ("reference", REFERENCE_MEMORY),
        ("sample", REFERENCE_SAMPLE),
        ("scratch", SCRATCH),
    ],
    align=True,
)

INPUT = np.dtype(  # everything a cycle may know about the world
    [
        ("now_ns", "i8"),  # monotonic, after waking up
        ("deadline_ns", "i8"),  # when it should have woken up
        ("skipped", "i8"),  # periods skipped because the last cycle was late
        ("boot_offset_ns", "i8"),  # boot time clock minus monotonic clock: grows in suspend
        ("state_new", "i8"),  # 1: `state` is new and well-formed
        ("state_arrival_ns", "i8"),
        ("state", STATE),
        ("refused", "i8"),  # messages refused by the decoder since the last cycle
        ("flooded", "i8"),  # 1: the drain bound was reached, nothing used
        ("requests", "i8"),  # BIT_
        ("side_beat", "i8"),  # counter of the side thread
        ("side_required", "i8"),  # 0 in lock-step, where there is no side thread
        ("cost_ns", "i8"),  # of the last cycle
        ("send_failed", "i8"),  # 1: the last torque could not be sent
    ],
    align=True,
)


@dataclass(frozen=True)
class Column:
    """One column of the record: `per` is "cycle" (one value), "joint" (n), "term" (terms x n) or "watch" (one per watch)."""

    name: str
    kind: str  # "i8" or "f8"
    per: str
    unit: str
    meaning: str

    @property
    def shape(self) -> tuple[int, ...]:
        """Shape in the full-width row block."""
        return {"cycle": (), "joint": (_J,), "term": (MAX_TERMS, _J), "watch": (MAX_WATCHES,)}[self.per]


COLUMNS = (
    Column("cycle", "i8", "cycle", "1", "number of the cycle"),
    Column("now_ns", "i8", "cycle", "ns", "controller's monotonic clock after waking up"),
    Column("deadline_ns", "i8", "cycle", "ns", "when the cycle was due"),
    Column("skipped", "i8", "cycle", "1", "periods skipped before this cycle"),
    Column("boot_offset_ns", "i8", "cycle", "ns", "boot-time clock minus monotonic clock"),
    Column("cost_ns", "i8", "cycle", "ns", "time the cycle before this one took from waking up to the record"),
    Column("state_new", "i8", "cycle", "1", "1: a new state was used"),
    Column("state_arrival_ns", "i8", "cycle", "ns", "when the newest state was received"),
    Column("refused", "i8", "cycle", "1", "messages refused since the cycle before"),
    Column("flooded", "i8", "cycle", "1", "1: too many messages waited, none was used"),
    Column("send_failed", "i8", "cycle", "1", "1: the torque of the cycle before could not be sent"),
    Column("requests", "i8", "cycle", "bits", "requests: 1 start, 2 stop, 4 stop and release, 8 e-stop, 16 reset, 32 leave"),
    Column("side_beat", "i8", "cycle", "1", "heartbeat counter of the side thread"),
    Column("side_required", "i8", "cycle", "1", "1: a silent side thread stops the arm"),
    Column("version", "i8", "cycle", "1", "version of the state message"),
    Column("arm_key", "i8", "cycle", "1", "arm key in the state message"),
    Column("driver_session", "i8", "cycle", "1", "session of the driver"),
    Column("state_sequence", "i8", "cycle", "1", "sequence of the newest state"),
    Column("sample_ns", "i8", "cycle", "ns", "sample time of the newest state, driver's clock"),
    Column("holder", "i8", "cycle", "1", "controller session that holds the grant"),
    Column("grant", "i8", "cycle", "1", "number of the grant"),
    Column("received_session", "i8", "cycle", "1", "session of the last torque the driver received"),
    Column("received_sequence", "i8", "cycle", "1", "sequence of the last torque the driver received"),
    Column("applied_session", "i8", "cycle", "1", "session of the last torque the driver applied"),
    Column("applied_sequence", "i8", "cycle", "1", "sequence of the last torque the driver applied"),
    Column(
        "status",
        "i8",
        "cycle",
        "bits",
        "driver: 1 enabled, 2 brake closed, 4 fault, 8 stop chain closed, 16 gravity added, 32 simulated",
    ),
    Column("state_n", "i8", "cycle", "1", "joints in the state message"),
    Column("tau_count", "i8", "cycle", "1", "measured torques in the state message"),
    Column("q", "f8", "joint", "rad|m", "measured position"),
    Column("qd", "f8", "joint", "rad/s|m/s", "measured velocity"),
    Column("tau_meas", "f8", "joint", "N m|N", "measured torque"),
    Column("age_ns", "i8", "cycle", "ns", "age of the state when used, above the least seen in this driver session"),
    Column("loop_delay_ns", "i8", "cycle", "ns", "delay from sending a torque to seeing it echoed, -1 unknown"),
    Column("t_s", "f8", "cycle", "s", "time along the reference"),
    Column("q_ref", "f8", "joint", "rad|m", "reference position"),
    Column("qd_ref", "f8", "joint", "rad/s|m/s", "reference velocity"),
    Column("qdd_ref", "f8", "joint", "rad/s^2|m/s^2", "reference acceleration"),
    Column("law_index", "i8", "cycle", "1", "which law of the run was in force"),
    Column("law_status", "i8", "cycle", "1", "1: the law succeeded; 0: not called or died"),
    Column("terms", "f8", "term", "N m|N", "terms of the law's torque, in the order of their sum"),
    Column("tau_law", "f8", "joint", "N m|N", "torque the law asked: the ordered sum of its terms"),
    Column("tau_ramp", "f8", "joint", "N m|N", "after the start ramp, or the braking or holding torque"),
    Column("tau_magnitude", "f8", "joint", "N m|N", "after the torque limit"),
    Column("tau_out", "f8", "joint", "N m|N", "after the rate limit: what left the gate"),
    Column("limiters", "i8", "joint", "bits", "what changed the torque: 1 ramp, 2 magnitude, 4 rate"),
    Column("mode", "i8", "cycle", "1", "0 off, 1 ready, 2 live, 3 braking, 4 holding, 5 latched"),
    Column("stop", "i8", "cycle", "1", "stop in force: 0 none, 1 category 2, 2 category 1 commanded, 3 category 1, 4 category 0"),
    Column("first_cause", "i8", "cycle", "1", "code of the first cause, kept until reset"),
    Column("conditions", "i8", "cycle", "bits", "bit w: watch w trips now"),
    Column("margins", "f8", "watch", "1", "1 far from the limit of the watch, 0 at or beyond it"),
    Column("request", "i8", "cycle", "1", "sent: 0 ask, 1 drive, 2 release"),
    Column("torque_sequence", "i8", "cycle", "1", "sequence of the torque message sent"),
    Column("answered_sequence", "i8", "cycle", "1", "state sequence the torque message answers"),
    Column("sent_grant", "i8", "cycle", "1", "grant number in the torque message"),
)

ROW = np.dtype([(column.name, column.kind, column.shape) for column in COLUMNS], align=True)
