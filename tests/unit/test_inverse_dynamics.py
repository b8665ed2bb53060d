"""Inverse dynamics, bias torque and gravity torque against closed forms."""

import math

import numpy as np
import pytest

from rtctl.dynamics import bias_torque, gravity_torque, inverse_dynamics
from rtctl.kernels import inverse_dynamics as kernels
from rtctl.kernels.layout import OK, SCRATCH, new_block
from tests.known_arms import (
    DIRECT_DRIVE,
    LONG_TWO_LINK,
    STANDARD_GRAVITY,
    TwoLink,
    rod_pendulum,
    spherical_pendulum,
    turntable_slider,
)
from tests.sources import source

ROUNDING = 1e-13  # a few tens of operations in float64
PRINTED = 1e-9  # the vectors are given to ten digits behind the point


@source("kelly2005", "ch. 5: parameters of table 5.1; vectors computed from its closed form")
@pytest.mark.parametrize(
    ("q", "qd", "qdd", "tau"),
    [
        ((math.pi / 10, math.pi / 30), (0, 0), (0, 0), (3.7430410133, 0.1869308428)),
        ((math.pi / 2, 0), (0, 0), (0, 0), (11.9674011717, 0.4595869242)),
        ((0.5, -1.0), (1, -2), (3, 4), (6.4191916072, -0.1221337729)),
        ((math.pi / 2, math.pi / 2), (2, 1), (0, 0), (11.4469107815, 0.0487227728)),
    ],
)
def test_published_two_link_arm(q: tuple[float, float], qd: tuple[int, int], qdd: tuple[int, int], tau: list[float]) -> None:
    """The torques of a published direct-drive arm come out to every printed digit."""
    assert inverse_dynamics(DIRECT_DRIVE.arm, q, qd, qdd) == pytest.approx(tau, rel=0, abs=PRINTED)


@source("kelly2005", "ch. 5: gravity and velocity torque apart")
def test_published_two_link_arm_in_parts() -> None:
    """Gravity torque and velocity torque of the published arm add up to the bias torque."""
    q, qd = (0.5, -1.0), (1.0, -2.0)
    gravity = gravity_torque(DIRECT_DRIVE.arm, q)
    assert gravity == pytest.approx([5.2968023351, -0.2203377087], rel=0, abs=PRINTED)
    assert bias_torque(DIRECT_DRIVE.arm, q, qd) - gravity == pytest.approx([0.0, -0.0102496999], rel=0, abs=PRINTED)


@source("siciliano2009", "sec. 7.3.2, planar two-link arm")
@pytest.mark.parametrize("two_link", [DIRECT_DRIVE, LONG_TWO_LINK])
def test_two_link_closed_form(two_link: TwoLink) -> None:
    """tau = M qdd + C qd + g with the textbook's expressions, rotor inertia on the diagonal."""
    rng = np.random.default_rng(1)
    for _ in range(20):
        q, qd, qdd = rng.uniform(-3, 3, 2), rng.normal(size=2) * 3, rng.normal(size=2) * 5
        bias = two_link.coriolis_torque(q, qd) + two_link.gravity_torque(q)
        assert gravity_torque(two_link.arm, q) == pytest.approx(two_link.gravity_torque(q), rel=ROUNDING, abs=ROUNDING)
        assert bias_torque(two_link.arm, q, qd) == pytest.approx(bias, rel=1e-12, abs=ROUNDING)
        tau = two_link.inertia_matrix(q) @ qdd + bias
        assert inverse_dynamics(two_link.arm, q, qd, qdd) == pytest.approx(tau, rel=1e-12, abs=1e-12)


@source("cgpm1901", "standard gravity 9.80665 m/s^2")
def test_gravity_torque_of_a_level_rod() -> None:
    """A uniform rod held level needs m g L/2 at its end, by the balance of moments."""
    tau = gravity_torque(rod_pendulum(mass_kg=2.0, length_m=0.5), [math.pi / 2])
    assert tau == pytest.approx([2.0 * 9.80665 * 0.25], rel=ROUNDING)


@source("textbook mechanics", "conical pendulum: w^2 = g / (L cos theta)")
@pytest.mark.parametrize("theta", [math.radians(30), math.radians(60)])
def test_conical_pendulum_turns_without_torque(theta: float) -> None:
    """A pendulum that circles at the speed sqrt(g / (L cos theta)) needs no torque at its level axis."""
    arm = spherical_pendulum(mass_kg=1.3, length_m=1.0)
    speed = math.sqrt(STANDARD_GRAVITY / math.cos(theta))
    assert abs(bias_torque(arm, [0.4, theta], [speed, 0.0])[1]) < 1e-12
    assert abs(bias_torque(arm, [0.4, theta], [1.01 * speed, 0.0])[1]) > 0.1


@source("textbook mechanics", "acceleration in plane polar coordinates")
def test_slider_on_a_turntable() -> None:
    """Torque m (r^2 wd + 2 r rd w) and force m (rdd - r w^2), and each rotor only feels its own joint."""
    arm = turntable_slider(mass_kg=2.0, rotor=(0.7, 0.3))
    r, rd, rdd, w, wd = 0.6, -0.4, 1.5, 2.0, 0.9
    tau = inverse_dynamics(arm, [0.3, r], [w, rd], [wd, rdd])
    expected = [2.0 * (r**2 * wd + 2.0 * r * rd * w) + 0.7 * wd, 2.0 * (rdd - r * w**2) + 0.3 * rdd]
    assert tau == pytest.approx(expected, rel=ROUNDING)


def test_bias_is_inverse_dynamics_at_rest_of_acceleration() -> None:
    """The vector of zeros that bias_torque uses is still zero after other kernels have used the scratch."""
    model, ws, tau, same = LONG_TWO_LINK.arm.model, new_block(SCRATCH), np.zeros(16), np.zeros(16)
    q, qd, qdd = np.array([0.3, 0.8]), np.array([1.0, -2.0]), np.array([3.0, 4.0])
    assert kernels.inverse_dynamics(model, q, qd, qdd, ws, tau) == OK
    assert kernels.bias_torque(model, q, qd, ws, tau) == OK
    assert kernels.inverse_dynamics(model, q, qd, np.zeros(2), ws, same) == OK
    assert (tau == same).all() and not ws["zero"].any()


def test_not_a_number_goes_through() -> None:
    """A measured value that is not a finite number is never turned into a torque that looks sane."""
    model, ws, tau = LONG_TWO_LINK.arm.model, new_block(SCRATCH), np.zeros(16)
    kernels.gravity_torque(model, np.array([math.nan, 0.1]), ws, tau)
    assert np.isnan(tau[:2]).all()
    for bad in (math.nan, math.inf):
        with np.errstate(invalid="ignore"):  # uncompiled, numpy warns of inf times zero
            kernels.bias_torque(model, np.array([0.1, 0.1]), np.array([bad, 0.0]), ws, tau)
        assert not np.isfinite(tau[1])


def test_only_n_elements_are_written() -> None:
    """The elements of the result behind the last joint keep what the caller had there."""
    ws, tau = new_block(SCRATCH), np.full(16, 7.0)
    kernels.gravity_torque(LONG_TWO_LINK.arm.model, np.zeros(2), ws, tau)
    kernels.bias_torque(LONG_TWO_LINK.arm.model, np.zeros(2), np.zeros(2), ws, tau)
    assert (tau[2:] == 7.0).all()
