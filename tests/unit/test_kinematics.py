"""Poses and Jacobians against closed forms."""

import math

import numpy as np
import pytest

from rtctl.dynamics import frame_pose, jacobian, jacobian_rate
from rtctl.kernels import kinematics
from rtctl.kernels.layout import NO_SUCH_FRAME, OK, SCRATCH, new_block
from tests.known_arms import LONG_TWO_LINK, arm6_1986, turntable_slider
from tests.random_arms import random_arm, random_state
from tests.sources import source

ROUNDING = 1e-14  # a few operations on numbers near 1
L1, L2 = LONG_TWO_LINK.l1, LONG_TWO_LINK.l2


@source("siciliano2009", "sec. 2.9.1 and 3.1.3, planar two-link arm")
def test_two_link_tip() -> None:
    """Pose and Jacobian of the tip are the textbook's, and angular rows name the common axis."""
    for q1, q2 in np.random.default_rng(4).uniform(-3, 3, (20, 2)):
        c1, s1, c12, s12 = math.cos(q1), math.sin(q1), math.cos(q1 + q2), math.sin(q1 + q2)
        T = frame_pose(LONG_TWO_LINK.arm, "tip", [q1, q2])
        expected = [[c12, -s12, 0, L1 * c1 + L2 * c12], [s12, c12, 0, L1 * s1 + L2 * s12], [0, 0, 1, 0], [0, 0, 0, 1]]
        assert T == pytest.approx(np.array(expected), abs=ROUNDING)
        J = jacobian(LONG_TWO_LINK.arm, "tip", [q1, q2])
        linear = [[-L1 * s1 - L2 * s12, -L2 * s12], [L1 * c1 + L2 * c12, L2 * c12], [0, 0]]
        assert J == pytest.approx(np.array([*linear, [0, 0], [0, 0], [1, 1]]), abs=ROUNDING)


@source("siciliano2009", "sec. 3.1.3, the planar two-link Jacobian differentiated by hand")
def test_two_link_jacobian_rate() -> None:
    """The rate of the Jacobian is its derivative by hand: -L c w in place of -L s, -L s w in place of L c."""
    q1, q2, w1, w2 = 0.4, -1.1, 1.7, -0.6
    w12 = w1 + w2
    c1, s1, c12, s12 = math.cos(q1), math.sin(q1), math.cos(q1 + q2), math.sin(q1 + q2)
    linear = [[-L1 * c1 * w1 - L2 * c12 * w12, -L2 * c12 * w12], [-L1 * s1 * w1 - L2 * s12 * w12, -L2 * s12 * w12]]
    Jd = jacobian_rate(LONG_TWO_LINK.arm, "tip", [q1, q2], [w1, w2])
    assert Jd == pytest.approx(np.array([*linear, [0, 0], [0, 0], [0, 0], [0, 0]]), abs=ROUNDING)


@source("textbook mechanics", "plane polar coordinates")
def test_slider_on_a_turntable() -> None:
    """The sliding joint's column turns with the table; the turning joint's column grows with the radius."""
    arm = turntable_slider(1.0)
    a, r, w, rd = 0.3, 0.6, 2.0, -0.4
    c, s = math.cos(a), math.sin(a)
    assert frame_pose(arm, "tip", [a, r])[:3, 3] == pytest.approx([r * c, r * s, 0.0], abs=ROUNDING)
    assert jacobian(arm, "tip", [a, r])[:2] == pytest.approx(np.array([[-r * s, c], [r * c, s]]), abs=ROUNDING)
    rate = [[-rd * s - r * c * w, -s * w], [rd * c - r * s * w, c * w]]
    assert jacobian_rate(arm, "tip", [a, r], [w, rd])[:2] == pytest.approx(np.array(rate), abs=ROUNDING)


@source("arm6_1986", "table A1; wrist centres computed from it by a chain of elementary transforms")
@pytest.mark.parametrize(
    ("q", "p"),
    [
        ((0, 0, 0, 0, 0, 0), (0.4115, 0.1501, 0.4331)),
        ((0.3, -0.6, 0.9, 0.5, -0.7, 1.1), (0.399851328254, 0.280805925674, 0.663567913648)),
    ],
)
def test_wrist_centre_of_a_six_joint_arm(q: tuple[float, ...], p: tuple[float, ...]) -> None:
    """The wrist centre of a published arm stands where its table puts it."""
    assert frame_pose(arm6_1986(), "tip", q)[:3, 3] == pytest.approx(p, rel=0, abs=1e-12)


def test_frame_fixed_to_the_base() -> None:
    """A frame of the base stands still: its own pose, zero Jacobian and rate."""
    arm = random_arm(7)
    q, qd, _, _ = random_state(7, arm.n)
    T = frame_pose(arm, "stand", q)
    assert (T[:3, :3] == arm.model["R_body_frame"][0]).all() and (T[:3, 3] == arm.model["p_body_frame"][0]).all()
    assert not jacobian(arm, "stand", q).any() and not jacobian_rate(arm, "stand", q, qd).any()


@pytest.mark.parametrize("frame", [-1, 4, 16])
def test_frame_that_the_model_does_not_have(frame: int) -> None:
    """An index outside the model's frames gives a status and reads nothing."""
    arm = random_arm(7)
    ws, q = new_block(SCRATCH), np.zeros(arm.n)
    assert kinematics.frame_pose(arm.model, frame, q, ws, np.zeros((4, 4))) == NO_SUCH_FRAME
    assert kinematics.jacobian(arm.model, frame, q, ws, np.zeros((6, 16))) == NO_SUCH_FRAME
    assert kinematics.jacobian_rate(arm.model, frame, q, q, ws, np.zeros((6, 16))) == NO_SUCH_FRAME


def test_old_numbers_do_not_survive() -> None:
    """Columns of joints that do not move the frame are set to zero, whatever stood there; columns from n on are left alone."""
    arm = random_arm(8)
    J = np.full((6, 16), 7.0)
    assert kinematics.jacobian(arm.model, 0, np.zeros(arm.n), new_block(SCRATCH), J) == OK
    assert not J[:, : arm.n].any() and (J[:, arm.n :] == 7.0).all()
