"""The plain functions: what they accept, what they refuse and in which words, and a published six-joint arm as a whole."""

import math

import numpy as np
import pytest

from rtctl import dynamics
from rtctl.errors import ModelError
from tests.known_arms import arm6_1986, rod_pendulum
from tests.random_arms import random_arm
from tests.sources import source

PRINTED = 1e-7  # nine digits of numbers up to 40
Q = (0.3, -0.6, 0.9, 0.5, -0.7, 1.1)
QD = (0.5, -0.4, 0.8, 1.0, -1.2, 0.6)
QDD = (1.0, 0.5, -1.5, 2.0, 0.7, -0.9)


@source("arm6_1986", "closed-form model with the constants recomputed from its link data, g = 9.81 m/s^2")
def test_six_joint_arm_of_1986() -> None:
    """Inertia, gravity, velocity and motion torques agree with the published closed form of this arm."""
    arm = arm6_1986()
    M = np.diag(dynamics.inertia_matrix(arm, Q))
    assert M == pytest.approx([3.97423271, 7.36377549, 1.16267926, 0.2017239, 0.17964216, 0.19304], rel=0, abs=PRINTED)
    gravity = dynamics.gravity_torque(arm, Q)
    assert gravity == pytest.approx([0, -33.5611471, -2.2517053, -0.00257870989, 0.0117839012, 0], rel=0, abs=PRINTED)
    velocity = [-0.075365137, -0.28604706, -0.12749012, -2.5497636e-5, -3.3420661e-4, -5.6331415e-5]
    assert dynamics.bias_torque(arm, Q, QD) - gravity == pytest.approx(velocity, rel=0, abs=PRINTED)
    tau = [3.8446268, -31.592822, -3.9401388, 0.40126993, 0.13606122, -0.17368288]
    assert dynamics.inverse_dynamics(arm, Q, QD, QDD) == pytest.approx(tau, rel=0, abs=10 * PRINTED)
    assert dynamics.forward_dynamics(arm, Q, QD, dynamics.inverse_dynamics(arm, Q, QD, QDD)) == pytest.approx(QDD, rel=1e-10)


def test_lists_and_whole_numbers_are_welcome() -> None:
    """Any sequence of numbers will do, and the arguments are not changed."""
    arm = random_arm(2)
    q = np.array([1, 2, 3])[::-1]
    assert (dynamics.gravity_torque(arm, q) == dynamics.gravity_torque(arm, (3.0, 2.0, 1.0))).all()
    assert q.tolist() == [3, 2, 1]


def test_all_that_is_wrong_is_said_at_once() -> None:
    """Wrong length, a value that is not finite and a thing that is no number each get their own line."""
    arm = random_arm(2)
    with pytest.raises(ModelError) as error:
        dynamics.inverse_dynamics(arm, [0.0, 0.0], [0.0, math.nan, 0.0], "fast")
    assert str(error.value) == (
        "q: must be 3 numbers, one per joint, got an array of shape (2,).\n"
        "qd[1]: must be finite, got nan.\n"
        "qdd: must be 3 numbers, one per joint, got 'fast'."
    )
    assert [finding.where for finding in error.value.findings] == ["q", "qd[1]", "qdd"]


def test_one_joint_in_the_text() -> None:
    """An arm of one joint wants one number, in a sequence."""
    with pytest.raises(ModelError) as error:
        dynamics.gravity_torque(rod_pendulum(1.0, 1.0), 0.5)
    assert str(error.value) == "q: must be 1 number, got an array of shape ()."


def test_unknown_frame_names_the_nearest() -> None:
    """A misspelt frame is answered with the frames there are and the nearest of them."""
    arm = random_arm(2)
    with pytest.raises(ModelError) as error:
        dynamics.jacobian(arm, "tol", [0.0, 0.0, 0.0])
    assert str(error.value) == (
        "frame: must be a frame of the arm (stand, tool, camera, probe), got 'tol'. Did you mean \"tool\"?"
    )
    with pytest.raises(ModelError) as error:
        dynamics.frame_pose(arm, "xyzzy", [0.0, 0.0, 0.0])
    assert str(error.value) == "frame: must be a frame of the arm (stand, tool, camera, probe), got 'xyzzy'."


def test_arm_without_inertia() -> None:
    """Accelerations of a joint that moves nothing are refused in words."""
    arm = rod_pendulum(1.0, 1.0)
    arm.model["mass"][0], arm.model["I"][0] = 0.0, 0.0
    with pytest.raises(ModelError) as error:
        dynamics.forward_dynamics(arm, [0.0], [0.0], [1.0])
    assert str(error.value) == (
        "inertia: must be positive at every joint, got zero or less at one joint. "
        "A body has no mass or an impossible inertia. Check the arm description."
    )
