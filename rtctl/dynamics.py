"""The arm's mathematics as plain functions: torques, inertia, accelerations, poses, Jacobians and energies of one arm.

For notebooks, studies and the cold jobs. Each call checks its arguments, takes sequences or arrays, and returns new arrays; the
loop calls the compiled functions below `rtctl.kernels` directly. Units are SI; friction is excluded unless the name says so.
"""

import difflib
from typing import Protocol

import numpy as np
from numpy.typing import ArrayLike, NDArray

from rtctl.errors import Finding, ModelError
from rtctl.kernels import energy as _energy
from rtctl.kernels import forward_dynamics as _forward_dynamics
from rtctl.kernels import friction as _friction
from rtctl.kernels import inertia_matrix as _inertia_matrix
from rtctl.kernels import inverse_dynamics as _inverse_dynamics
from rtctl.kernels import kinematics as _kinematics
from rtctl.kernels.layout import OK, SCRATCH, new_block

__all__ = [
    "bias_torque",
    "energy",
    "forward_dynamics",
    "frame_pose",
    "friction_torque",
    "gravity_torque",
    "inertia_matrix",
    "inverse_dynamics",
    "jacobian",
    "jacobian_rate",
]

Array = NDArray[np.float64]


class ArmModel(Protocol):
    """What these functions need of an arm."""

    @property
    def n(self) -> int:
        """Number of moving joints."""

    @property
    def model(self) -> np.void:
        """MODEL block."""

    @property
    def frames(self) -> tuple[str, ...]:
        """Names of the frames; the place in the tuple is the index in the model."""


def inverse_dynamics(arm: ArmModel, q: ArrayLike, qd: ArrayLike, qdd: ArrayLike) -> Array:
    """Joint torques of a motion, tau = M(q) qdd + C(q, qd) qd + g(q), rotor inertia included.

    q    (n,)  rad or m          joint positions
    qd   (n,)  rad/s or m/s      joint velocities
    qdd  (n,)  rad/s^2 or m/s^2  joint accelerations

    Returns tau (n,) in N m or N. Raises ModelError when an argument is not n finite numbers.
    """
    q, qd, qdd = _joint_values(arm, q=q, qd=qd, qdd=qdd)
    tau = np.zeros(arm.n)
    _inverse_dynamics.inverse_dynamics(arm.model, q, qd, qdd, new_block(SCRATCH), tau)
    return tau


def bias_torque(arm: ArmModel, q: ArrayLike, qd: ArrayLike) -> Array:
    """Joint torques at zero acceleration, C(q, qd) qd + g(q): (n,) in N m or N.

    q    (n,)  rad or m      joint positions
    qd   (n,)  rad/s or m/s  joint velocities

    Raises ModelError when an argument is not n finite numbers.
    """
    q, qd = _joint_values(arm, q=q, qd=qd)
    tau = np.zeros(arm.n)
    _inverse_dynamics.bias_torque(arm.model, q, qd, new_block(SCRATCH), tau)
    return tau


def gravity_torque(arm: ArmModel, q: ArrayLike) -> Array:
    """Joint torques that hold the arm at rest against gravity, g(q): (n,) in N m or N.

    q  (n,)  rad or m  joint positions

    Raises ModelError when q is not n finite numbers.
    """
    (q,) = _joint_values(arm, q=q)
    tau = np.zeros(arm.n)
    _inverse_dynamics.gravity_torque(arm.model, q, new_block(SCRATCH), tau)
    return tau


def friction_torque(arm: ArmModel, qd: ArrayLike) -> Array:
    """Joint torques that overcome the friction of the model, same sign as qd: (n,) in N m or N.

    qd  (n,)  rad/s or m/s  joint velocities

    Raises ModelError when qd is not n finite numbers.
    """
    (qd,) = _joint_values(arm, qd=qd)
    tau = np.zeros(arm.n)
    _friction.friction_torque(arm.model, qd, tau)
    return tau


def inertia_matrix(arm: ArmModel, q: ArrayLike) -> Array:
    """Joint-space inertia matrix M(q), rotor inertia included: (n, n), symmetric, in kg m^2 (kg m and kg for prismatic joints).

    q  (n,)  rad or m  joint positions

    Raises ModelError when q is not n finite numbers.
    """
    (q,) = _joint_values(arm, q=q)
    M = np.zeros((arm.n, arm.n))
    _inertia_matrix.inertia_matrix(arm.model, q, new_block(SCRATCH), M)
    return M


def forward_dynamics(arm: ArmModel, q: ArrayLike, qd: ArrayLike, tau: ArrayLike) -> Array:
    """Joint accelerations under joint torques, M(q)^-1 (tau - C(q, qd) qd - g(q)): (n,) in rad/s^2 or m/s^2.

    q    (n,)  rad or m      joint positions
    qd   (n,)  rad/s or m/s  joint velocities
    tau  (n,)  N m or N      joint torques, friction already taken off

    Raises ModelError when an argument is not n finite numbers, or when a joint moves no inertia at all.
    """
    q, qd, tau = _joint_values(arm, q=q, qd=qd, tau=tau)
    qdd = np.zeros(arm.n)
    if _forward_dynamics.forward_dynamics(arm.model, q, qd, tau, new_block(SCRATCH), qdd) != OK:
        raise _error(
            Finding(
                where="inertia",
                expected="positive at every joint",
                got="zero or less at one joint",
                likely="A body has no mass or an impossible inertia.",
                next="Check the arm description.",
            )
        )
    return qdd


def frame_pose(arm: ArmModel, frame: str, q: ArrayLike) -> Array:
    """Pose of a frame in the base: homogeneous matrix (4, 4), rotation and origin in m.

    frame          name of the frame
    q      (n,)    rad or m  joint positions

    Raises ModelError when the arm has no such frame or q is not n finite numbers.
    """
    index = _frame_index(arm, frame)
    (q,) = _joint_values(arm, q=q)
    T = np.zeros((4, 4))
    _kinematics.frame_pose(arm.model, index, q, new_block(SCRATCH), T)
    return T


def jacobian(arm: ArmModel, frame: str, q: ArrayLike) -> Array:
    """Jacobian of a frame, (6, n): J qd is the velocity of its origin (rows 0-2) and its angular velocity (rows 3-5), base axes.

    frame          name of the frame
    q      (n,)    rad or m  joint positions

    Raises ModelError when the arm has no such frame or q is not n finite numbers.
    """
    index = _frame_index(arm, frame)
    (q,) = _joint_values(arm, q=q)
    J = np.zeros((6, arm.n))
    _kinematics.jacobian(arm.model, index, q, new_block(SCRATCH), J)
    return J


def jacobian_rate(arm: ArmModel, frame: str, q: ArrayLike, qd: ArrayLike) -> Array:
    """Rate of change of `jacobian`, (6, n): the frame accelerates by J qdd + Jd qd.

    frame          name of the frame
    q      (n,)    rad or m      joint positions
    qd     (n,)    rad/s or m/s  joint velocities

    Raises ModelError when the arm has no such frame or an argument is not n finite numbers.
    """
    index = _frame_index(arm, frame)
    q, qd = _joint_values(arm, q=q, qd=qd)
    Jd = np.zeros((6, arm.n))
    _kinematics.jacobian_rate(arm.model, index, q, qd, new_block(SCRATCH), Jd)
    return Jd


def energy(arm: ArmModel, q: ArrayLike, qd: ArrayLike) -> tuple[float, float]:
    """Kinetic energy (rotors included) and potential energy (zero with all mass at the base origin), both in J.

    q    (n,)  rad or m      joint positions
    qd   (n,)  rad/s or m/s  joint velocities

    Raises ModelError when an argument is not n finite numbers.
    """
    q, qd = _joint_values(arm, q=q, qd=qd)
    kinetic, potential = np.zeros(1), np.zeros(1)
    _energy.kinetic_energy(arm.model, q, qd, new_block(SCRATCH), kinetic)
    _energy.potential_energy(arm.model, q, new_block(SCRATCH), potential)
    return float(kinetic[0]), float(potential[0])


def _joint_values(arm: ArmModel, **values: ArrayLike) -> list[Array]:
    """Each argument as a fresh float64 array of n finite numbers; all that is wrong is said at once."""
    arrays: list[Array] = []
    findings: list[Finding] = []
    for name, value in values.items():
        try:
            array = np.array(value, dtype=np.float64, order="C")
        except (TypeError, ValueError):
            findings.append(Finding(name, _wanted(arm), repr(value)))
            continue
        if array.shape != (arm.n,):
            findings.append(Finding(name, _wanted(arm), f"an array of shape {array.shape}"))
        elif not np.isfinite(array).all():
            bad = int(np.flatnonzero(~np.isfinite(array))[0])
            findings.append(Finding(f"{name}[{bad}]", "finite", str(array[bad])))
        arrays.append(array)
    if findings:
        raise _error(*findings)
    return arrays


def _wanted(arm: ArmModel) -> str:
    return "1 number" if arm.n == 1 else f"{arm.n} numbers, one per joint"


def _frame_index(arm: ArmModel, frame: str) -> int:
    if frame in arm.frames:
        return arm.frames.index(frame)
    nearest = difflib.get_close_matches(str(frame), arm.frames, n=1)
    raise _error(
        Finding(
            where="frame",
            expected=f"a frame of the arm ({', '.join(arm.frames) or 'it has none'})",
            got=repr(frame),
            likely=f'Did you mean "{nearest[0]}"?' if nearest else "",
        )
    )


def _error(*findings: Finding) -> ModelError:
    return ModelError("\n".join(str(finding) for finding in findings), findings)
