"""Friction torque of the model."""

import math

import numpy as np
import pytest

from rtctl.dynamics import friction_torque
from tests.random_arms import RandomArm, random_arm
from tests.sources import source

ROUNDING = 1e-14


def one_joint(viscous: float, coulomb: float, friction_speed: float) -> RandomArm:
    arm = random_arm(0, n=1)
    arm.model["viscous"][0], arm.model["coulomb"][0], arm.model["friction_speed"][0] = viscous, coulomb, friction_speed
    return arm


@source("common practice", "Coulomb and viscous friction, the step smoothed by tanh")
def test_far_from_standstill_it_is_coulomb_plus_viscous() -> None:
    """Well above the smoothing speed the torque is coulomb + viscous qd, with the sign of the speed."""
    arm = one_joint(0.5, 3.0, 0.01)
    assert friction_torque(arm, [2.0]) == pytest.approx([4.0], rel=ROUNDING)
    assert friction_torque(arm, [-2.0]) == pytest.approx([-4.0], rel=ROUNDING)


@source("textbook mathematics", "tanh 1 = (e^2 - 1) / (e^2 + 1)")
def test_at_the_smoothing_speed() -> None:
    """At the smoothing speed the Coulomb part has the share tanh 1; at standstill there is none."""
    arm = one_joint(0.0, 3.0, 0.05)
    assert friction_torque(arm, [0.05]) == pytest.approx([3.0 * (math.e**2 - 1) / (math.e**2 + 1)], rel=ROUNDING)
    assert friction_torque(arm, [0.0])[0] == 0.0


def test_joint_without_coulomb_friction_needs_no_smoothing_speed() -> None:
    """A smoothing speed of zero does no harm where there is nothing to smooth."""
    assert friction_torque(one_joint(0.5, 0.0, 0.0), [0.0])[0] == 0.0
    assert friction_torque(one_joint(0.5, 0.0, 0.0), [2.0])[0] == 1.0


def test_friction_takes_power() -> None:
    """The torque that overcomes friction has the sign of the speed at every joint."""
    arm = random_arm(9)
    for qd in np.random.default_rng(5).normal(size=(20, arm.n)):
        assert (friction_torque(arm, qd) * qd > 0.0).all()
