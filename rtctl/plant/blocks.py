"""Memory blocks of the simulated arm: PLANT_SETUP is constant during a run, PLANT_MEMORY is everything that changes.

Copying the bytes of PLANT_MEMORY is a snapshot of the arm: the same bytes and the same calls give the same motion bit for bit.
Trade symbols are in SI; joints are revolute (rad, N m) or prismatic (m, N).
"""

import numpy as np

from rtctl.blocks import STATE, TORQUE
from rtctl.kernels.layout import MAX_JOINTS, MODEL, SCRATCH

HISTORY = 256  # states whose sample time the driver remembers
LINE = 64  # length of the delay lines; delays are at most LINE - 1 steps

REST_BRAKE = 0  # still part of the rest policy: the brakes hold
REST_GRAVITY = 1  # the drives hold the arm against gravity
REST_ZERO = 2  # no torque (an arm that gravity does not move)

PHASE_STILL = 0  # rest policy, still part
PHASE_MOVING = 1  # rest policy, moving part: damping
PHASE_CLOSING = 2  # rest policy, brakes closing: torque overlaps until they hold
PHASE_DRIVE = 3  # the holder's torque
PHASE_NAMES = ("rest, still", "rest, moving", "rest, brakes closing", "drive")

BRAKE_CLOSED = 0
BRAKE_OPENING = 1  # still holds
BRAKE_OPEN = 2
BRAKE_CLOSING = 3  # does not hold yet

NO_STATE_YET = -1  # returned by `plant_state` until the first state has passed the delay line

REFUSED_IDENTITY = -1  # version, arm key or session number
REFUSED_LENGTH = -2  # not one torque per joint
REFUSED_DRIVER_SESSION = -3  # meant for the driver before its restart
REFUSED_SEQUENCE = -4  # not newer than the last one of this session
REFUSED_REQUEST = -5  # unknown request
REFUSED_HOLDER = -6  # torque from somebody who does not hold the grant
REFUSED_GRANT = -7  # torque with a number that is not the current grant
REFUSED_ANSWER = -8  # answers a state that was never sent or is too long ago
REFUSED_OLD = -9  # the validity has run out before it arrived
REFUSED_NOT_FINITE = -10
REFUSED_LIMIT = -11  # over the driver's own torque limit
REFUSED_QUEUE = -12  # the delay line is full
REFUSAL_NAMES = (
    "none",
    "identity",
    "length",
    "driver session",
    "sequence",
    "request",
    "holder",
    "grant",
    "answered state",
    "too old",
    "not finite",
    "over limit",
    "queue full",
)

_J = MAX_JOINTS

PLANT_SETUP = np.dtype(
    [
        ("model", MODEL),  # of the true arm: masses, payload and friction may differ from the controller's model
        # ---- identity and timing
        ("arm_key", "i8"),
        ("session", "i8"),  # of this driver, below 2^53, new at every start
        ("period_ns", "i8"),  # of the state messages
        ("substeps", "i8"),  # integration steps per period
        ("state_delay", "i8"),  # transport, in periods
        ("torque_delay", "i8"),
        # ---- the driver's own rules
        ("tau_max", "f8", _J),  # N m (N): drives saturate here, torque messages beyond are refused
        ("qd_max", "f8", _J),  # rad/s (m/s), measured; faster than this ends the grant
        ("valid_for_max_ns", "i8"),  # the driver's own bound of a torque's validity
        ("silent_max_ns", "i8"),  # a holder that has not driven yet and is silent for longer loses the grant
        ("still_qd", "f8", _J),  # rad/s (m/s), measured; below it a joint is still
        ("still_dwell_ns", "i8"),
        ("rest_damping", "f8", _J),  # N m s/rad (N s/m), of the moving part
        ("rest_moving_ns", "i8"),  # the moving part ends after this time even if the arm still moves
        ("rest_still", "i8"),  # REST_
        ("gravity_added", "i8"),  # 1: the drives add gravity torque to every torque by themselves
        ("tau_measured", "i8"),  # 1: the state carries the drives' torque
        # ---- hardware
        ("q_min", "f8", _J),  # rad (m), hard stops; -inf, inf for continuous joints
        ("q_max", "f8", _J),
        ("stop_stiffness", "f8", _J),  # N m/rad (N/m)
        ("stop_damping", "f8", _J),  # N m s/rad (N s/m)
        ("stiction_ratio", "f8"),  # breakaway over Coulomb friction, >= 1
        ("lag_s", "f8", _J),  # time constant of the drives' torque, 0 = none
        ("encoder_quantum", "f8", _J),  # rad (m) per count, 0 = exact
        ("brake_torque", "f8", _J),  # N m (N) that a closed brake can hold
        ("brake_open_ns", "i8"),
        ("brake_close_ns", "i8"),
        ("q_start", "f8", _J),
    ],
    align=True,
)

PLANT_MEMORY = np.dtype(
    [
        # ---- true motion
        ("q", "f8", _J),
        ("qd", "f8", _J),
        ("tau", "f8", _J),  # delivered by the drives
        ("time_ns", "i8"),  # up to here the motion is integrated
        ("started", "i8"),
        ("substep", "i8"),  # within the period
        ("step", "i8"),  # periods since the start
        # ---- brakes, rest policy, grant
        ("brake", "i8"),  # BRAKE_
        ("brake_since_ns", "i8"),
        ("phase", "i8"),  # PHASE_
        ("phase_since_ns", "i8"),
        ("kept", "i8"),  # 1: while the brakes close after a release at rest, the last torque is kept
        ("moving_since_ns", "i8"),  # last sample at which a joint moved
        ("holder", "i8"),
        ("grant", "i8"),  # number of the last grant
        ("holder_heard_ns", "i8"),
        ("deadline_ns", "i8"),  # of the torque in force
        ("tau_command", "f8", _J),  # last accepted torque
        ("stop_chain_closed", "i8"),  # tests and drills open it
        ("retired", "i8"),  # 1: the driver is about to end and grants nothing
        ("fault", "i8"),  # 1: the driver reports a fault and gives no torque
        # ---- measured at the last sample
        ("sequence", "i8"),
        ("q_meas", "f8", _J),
        ("qd_meas", "f8", _J),
        ("sample_ns", "i8", HISTORY),  # of sequence % HISTORY
        # ---- echo
        ("received_session", "i8"),
        ("received_sequence", "i8"),
        ("applied_session", "i8"),
        ("applied_sequence", "i8"),
        # ---- delay lines
        ("states", STATE, LINE),  # of sequence % LINE
        ("queue", TORQUE, LINE),
        ("queue_due", "i8", LINE),  # step at which the message is delivered
        ("queue_head", "i8"),
        ("queue_count", "i8"),
        # ---- bookkeeping
        ("work_drive", "f8"),  # J, done by the drives on the arm
        ("work_friction", "f8"),  # J, by friction and brakes (never positive in sum)
        ("work_stop", "f8"),  # J, by the hard stops
        ("accepted", "i8"),  # drive messages
        ("refused", "i8", 16),  # by -REFUSED_ code
        ("lapses", "i8"),
        ("overspeeds", "i8"),
        ("grants", "i8"),
        ("saturated", "i8"),  # substeps with a drive at its limit
        ("skipped_ns", "i8"),  # time jumped over because the process stood still too long
        ("rounds", "i8"),  # extra rounds of the friction solver
        ("unsolved", "i8"),  # substeps in which it met its bound
        # ---- work space of a substep
        ("tau_ask", "f8", _J),
        ("M", "f8", (_J, _J)),
        ("K", "f8", (_J, _J)),
        ("L", "f8", (_J, _J)),
        ("q_mid", "f8", _J),
        ("qd_mid", "f8", _J),
        ("qd_new", "f8", _J),
        ("qd_aside", "f8", _J),
        ("bias", "f8", _J),
        ("momentum", "f8", _J),  # M qd at the start of the kick
        ("b", "f8", _J),
        ("rhs", "f8", _J),
        ("friction_max", "f8", _J),  # impulse bound, N m s
        ("side", "f8", _J),  # +1 upper stop, -1 lower stop, 0 none
        ("stop_offset", "f8", _J),  # N m s
        ("stop_slope", "f8", _J),  # N m s per rad/s
        ("slip", "i8", _J),  # sign of motion, 0 = stuck
        ("touch", "i8", _J),  # 1: the hard stop pushes
        ("scratch", SCRATCH),
    ],
    align=True,
)
