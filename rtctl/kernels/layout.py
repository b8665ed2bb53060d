"""Memory layout of the arm model and of the kernels' scratch, fixed at 16 joints: every kernel is compiled once for all arms.

Compiled constants for every stride make the recursive kernels as fast as straight-line code for one arm (DEVELOPERS.md, Decisions).
The model is written once by `rtctl.arm` and never again; a test checks that no compiled function writes into it.

Body frames: body i moves with joint i; its frame has its origin on the joint axis and its z axis along the positive joint axis.
Fixed links are lumped into the body they are fixed to. Index -1 is the base.
"""

import numpy as np

MAX_JOINTS = 16
MAX_FRAMES = 16

OK = 1  # status of success; compiled code that dies returns 0, so 0 is never success
NOT_POSITIVE = -1  # a pivot of an inertia is not positive (or not a number): the model or the state is unusable
NO_SUCH_FRAME = -2

REVOLUTE = 0  # continuous joints are revolute joints without position limits
PRISMATIC = 1

_J = MAX_JOINTS
_F = MAX_FRAMES

MODEL = np.dtype(
    [
        ("n", "i8"),  # number of moving joints
        ("parent", "i8", _J),  # body the joint sits on, -1 = base; parent[i] < i
        ("kind", "i8", _J),  # REVOLUTE or PRISMATIC
        ("R_parent", "f8", (_J, 3, 3)),  # body coordinates at q = 0 to parent coordinates
        ("p_parent", "f8", (_J, 3)),  # m, origin of the body frame at q = 0, in parent coordinates
        ("mass", "f8", _J),  # kg
        ("h", "f8", (_J, 3)),  # kg m, mass times centre of mass, in body coordinates
        ("I", "f8", (_J, 6)),  # kg m^2, xx xy xz yy yz zz (tensor elements) about the body origin, in body coordinates
        ("rotor", "f8", _J),  # kg m^2 (kg for prismatic), rotor inertia reflected to the joint
        ("viscous", "f8", _J),  # N m s/rad (N s/m)
        ("coulomb", "f8", _J),  # N m (N)
        ("friction_speed", "f8", _J),  # rad/s (m/s), speed below which the Coulomb term of the model is smoothed (tanh)
        ("gravity", "f8", 3),  # m/s^2, gravity vector in base coordinates
        ("frame_count", "i8"),
        ("frame_body", "i8", _F),  # body the frame is fixed to, -1 = base
        ("R_body_frame", "f8", (_F, 3, 3)),  # frame coordinates to body coordinates
        ("p_body_frame", "f8", (_F, 3)),  # m, origin of the frame in body coordinates
    ],
    align=True,
)

SCRATCH = np.dtype(
    [
        ("R", "f8", (_J, 3, 3)),  # body to parent coordinates
        ("p", "f8", (_J, 3)),  # m, body origin in parent coordinates
        ("R_base", "f8", (_J, 3, 3)),  # body to base coordinates
        ("p_base", "f8", (_J, 3)),  # m, body origin in base coordinates
        ("w", "f8", (_J, 3)),  # rad/s, angular velocity; each kernel says in which axes
        ("wd", "f8", (_J, 3)),  # rad/s^2
        ("a", "f8", (_J, 3)),  # m/s^2, acceleration of the body origin minus gravity
        ("force", "f8", (_J, 3)),  # N
        ("moment", "f8", (_J, 3)),  # N m, about the body origin
        ("mass_c", "f8", _J),  # kg, composite mass
        ("h_c", "f8", (_J, 3)),  # kg m, composite first moment
        ("I_c", "f8", (_J, 6)),  # kg m^2, composite inertia
        ("IA", "f8", (_J, 21)),  # articulated-body inertia: 6 of the moment block, 9 of the mixed block, 6 of the force block
        ("pA", "f8", (_J, 6)),  # articulated-body bias, moment then force
        ("c", "f8", (_J, 6)),  # acceleration of a body relative to its parent at qdd = 0, angular then linear
        ("r", "f8", (_J, 3)),  # m, body origin from the parent's, base axes
        ("U", "f8", (_J, 6)),  # articulated-body inertia times joint axis
        ("D", "f8", _J),  # joint-space part of U, with rotor inertia
        ("u", "f8", _J),  # joint torque minus bias
        ("v", "f8", (_J, 3)),  # m/s, velocity of the body origin
        ("zero", "f8", _J),  # never written
        ("M", "f8", (_J, _J)),  # joint-space inertia matrix
        ("L", "f8", (_J, _J)),  # its Cholesky factor
        ("J", "f8", (6, _J)),  # Jacobian
        ("x0", "f8", _J),  # vectors for callers of kernels: laws, supervisor, plant
        ("x1", "f8", _J),
        ("x2", "f8", _J),
        ("x3", "f8", _J),
        ("x4", "f8", _J),
        ("x5", "f8", _J),
    ],
    align=True,
)


def new_block(layout: np.dtype) -> np.void:
    """One zeroed record of `layout`: a view that compiled functions read and write by reference."""
    return np.zeros(1, layout)[0]  # type: ignore[no-any-return]
