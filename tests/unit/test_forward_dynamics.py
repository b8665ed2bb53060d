"""Joint accelerations against closed forms."""

import math

import numpy as np
import pytest

from rtctl.dynamics import forward_dynamics
from rtctl.kernels.forward_dynamics import forward_dynamics as kernel
from rtctl.kernels.layout import NOT_POSITIVE, OK, SCRATCH, new_block
from tests.known_arms import DIRECT_DRIVE, LONG_TWO_LINK, STANDARD_GRAVITY, TwoLink, rod_pendulum, turntable_slider
from tests.sources import source

ROUNDING = 1e-12  # the outer link's inertia is 1/30 of the whole


@source("siciliano2009", "sec. 7.3.2, planar two-link arm")
@pytest.mark.parametrize("two_link", [DIRECT_DRIVE, LONG_TWO_LINK])
def test_two_link_closed_form(two_link: TwoLink) -> None:
    """qdd solves the textbook's M qdd = tau - C qd - g."""
    rng = np.random.default_rng(3)
    for _ in range(20):
        q, qd, tau = rng.uniform(-3, 3, 2), rng.normal(size=2) * 3, rng.normal(size=2) * 5
        right = tau - two_link.coriolis_torque(q, qd) - two_link.gravity_torque(q)
        expected = np.linalg.solve(two_link.inertia_matrix(q), right)
        assert forward_dynamics(two_link.arm, q, qd, tau) == pytest.approx(expected, rel=ROUNDING, abs=1e-10)


@source("textbook mechanics", "compound pendulum: m g d / I = 3 g / (2 L) for a uniform rod")
def test_rod_let_go_level() -> None:
    """A uniform rod let go level starts with 3 g / (2 L), downwards."""
    qdd = forward_dynamics(rod_pendulum(2.0, 0.5), [math.pi / 2], [0.0], [0.0])
    assert qdd == pytest.approx([-1.5 * STANDARD_GRAVITY / 0.5], rel=ROUNDING)


@source("textbook mechanics", "acceleration in plane polar coordinates")
def test_slider_on_a_turntable() -> None:
    """A free slider is flung out with r w^2, less by its rotor inertia; the table turns slower meanwhile."""
    arm = turntable_slider(2.0, rotor=(0.7, 0.3))
    wd, rdd = forward_dynamics(arm, [0.3, 0.6], [2.0, -0.4], [0.0, 0.0])
    assert rdd == pytest.approx(2.0 * 0.6 * 4.0 / 2.3, rel=ROUNDING)
    assert wd == pytest.approx(-2.0 * 2.0 * 0.6 * -0.4 * 2.0 / (2.0 * 0.36 + 0.7), rel=ROUNDING)


@pytest.mark.parametrize("mass", [0.0, -1.0, math.nan])
def test_no_inertia_is_refused(mass: float) -> None:
    """A joint that moves no positive inertia gives a status, not an infinite acceleration."""
    arm = rod_pendulum(2.0, 0.5)
    arm.model["mass"][0], arm.model["I"][0] = mass, mass
    ws, qdd = new_block(SCRATCH), np.zeros(1)
    assert kernel(arm.model, np.zeros(1), np.zeros(1), np.ones(1), ws, qdd) == NOT_POSITIVE


def test_not_a_number_goes_through() -> None:
    """A speed that is not a number is never turned into an acceleration that looks sane."""
    arm = LONG_TWO_LINK.arm
    ws, qdd = new_block(SCRATCH), np.zeros(2)
    assert kernel(arm.model, np.array([0.1, 0.2]), np.array([math.nan, 0.0]), np.zeros(2), ws, qdd) == OK
    assert np.isnan(qdd).all()
