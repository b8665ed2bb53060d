"""Physics that must hold for every arm, checked on the seeded random trees: one kernel against another, and against derivatives.

Source of all: the equation of motion M(q) qdd + C(q, qd) qd + g(q) = tau of a conservative mechanism.
"""

from collections.abc import Callable, Iterator
from functools import partial

import numpy as np
import pytest
from numpy.typing import NDArray

from rtctl import dynamics
from tests.random_arms import SEEDS, RandomArm, random_arm, random_state

Array = NDArray[np.float64]

ROUNDING = 1e-11  # two orders of summation, and a division by inertias down to 1e-4 of the largest
STEP = 1e-3  # of central differences of fourth order: truncation about 1e-12 times the fifth derivative, rounding 1e-13
DIFFERENCE = 1e-8


def cases() -> Iterator[tuple[RandomArm, Array, Array, Array, Array]]:
    for seed in SEEDS:
        arm = random_arm(seed)
        yield (arm, *random_state(seed, arm.n, motion=1))


def derivative(f: Callable[[Array], Array], q: Array, direction: Array) -> Array:
    """Rate of f(q) while q moves with the velocity `direction`, by central differences of fourth order."""
    one, two = STEP * direction, 2.0 * STEP * direction
    return (8.0 * (f(q + one) - f(q - one)) - (f(q + two) - f(q - two))) / (12.0 * STEP)


def assert_equal(a: Array, b: Array, tolerance: float) -> None:
    scale = max(float(np.max(np.abs(b))), 1e-2)
    assert np.max(np.abs(np.asarray(a) - b)) / scale < tolerance, f"\n{a}\n{b}"


def test_inertia_matrix_is_symmetric_and_positive_definite() -> None:
    """M equals its transpose to the last bit and all its eigenvalues are positive."""
    for arm, q, *_ in cases():
        M = dynamics.inertia_matrix(arm, q)
        assert (M == M.T).all()
        assert np.linalg.eigvalsh(M)[0] > 0.0


def test_equation_of_motion() -> None:
    """M qdd + bias is the torque of the motion: three kernels agree."""
    for arm, q, qd, qdd, _ in cases():
        tau = dynamics.inertia_matrix(arm, q) @ qdd + dynamics.bias_torque(arm, q, qd)
        assert_equal(dynamics.inverse_dynamics(arm, q, qd, qdd), tau, ROUNDING)


def test_forward_undoes_inverse() -> None:
    """The torques of a motion cause that motion."""
    for arm, q, qd, qdd, _ in cases():
        tau = dynamics.inverse_dynamics(arm, q, qd, qdd)
        assert_equal(dynamics.forward_dynamics(arm, q, qd, tau), qdd, 1e-9)


def test_inverse_undoes_forward() -> None:
    """The acceleration that torques cause takes these torques."""
    for arm, q, qd, _, tau in cases():
        qdd = dynamics.forward_dynamics(arm, q, qd, tau)
        assert_equal(dynamics.inverse_dynamics(arm, q, qd, qdd), tau, ROUNDING)


def test_gravity_torque_is_bias_at_rest() -> None:
    """Without velocity only gravity is left."""
    for arm, q, *_ in cases():
        assert_equal(dynamics.gravity_torque(arm, q), dynamics.bias_torque(arm, q, np.zeros(arm.n)), ROUNDING)


def test_gravity_torque_is_the_gradient_of_potential_energy() -> None:
    """Each joint's gravity torque is how the potential energy grows with that joint."""

    def potential(arm: RandomArm, q: Array) -> Array:
        return np.array(dynamics.energy(arm, q, np.zeros(arm.n))[1])

    for arm, q, *_ in cases():
        gradient = [derivative(partial(potential, arm), q, e) for e in np.eye(arm.n)]
        assert_equal(dynamics.gravity_torque(arm, q), np.array(gradient), DIFFERENCE)


def test_kinetic_energy_is_half_the_form_of_the_inertia_matrix() -> None:
    """qd' M qd / 2, by a kernel that never forms M."""
    for arm, q, qd, *_ in cases():
        kinetic, _ = dynamics.energy(arm, q, qd)
        assert kinetic == pytest.approx(0.5 * qd @ dynamics.inertia_matrix(arm, q) @ qd, rel=ROUNDING)


def test_passivity() -> None:
    """qd' (Mdot - 2 C) qd = 0: the velocity torques do as much work as the inertia matrix changes the energy."""
    for arm, q, qd, *_ in cases():
        M_rate = derivative(partial(dynamics.inertia_matrix, arm), q, qd)
        velocity_torque = dynamics.bias_torque(arm, q, qd) - dynamics.gravity_torque(arm, q)
        work = qd @ M_rate @ qd
        assert abs(work - 2.0 * qd @ velocity_torque) < DIFFERENCE * max(1.0, float(np.abs(M_rate).max() * (qd @ qd)))


def test_power_is_the_change_of_energy() -> None:
    """The torques' power qd' tau is the rate of kinetic plus potential energy along the motion."""

    def total(arm: RandomArm, q: Array, qd: Array, qdd: Array, h: Array) -> Array:
        return np.array(sum(dynamics.energy(arm, q + h * qd + 0.5 * h * h * qdd, qd + h * qdd)))

    for arm, q, qd, qdd, _ in cases():
        power = float(qd @ dynamics.inverse_dynamics(arm, q, qd, qdd))
        assert float(derivative(partial(total, arm, q, qd, qdd), np.array(0.0), np.array(1.0))) == pytest.approx(
            power, rel=1e-7, abs=1e-6
        )


def test_jacobian_is_the_derivative_of_the_pose() -> None:
    """Linear rows: the frame's position. Angular rows: the vector of the skew matrix Rdot R'."""
    for arm, q, qd, *_ in cases():
        for frame in arm.frames:
            rate = derivative(partial(dynamics.frame_pose, arm, frame), q, qd)
            turning = rate[:3, :3] @ dynamics.frame_pose(arm, frame, q)[:3, :3].T
            twist = np.array([*rate[:3, 3], turning[2, 1], turning[0, 2], turning[1, 0]])
            assert_equal(dynamics.jacobian(arm, frame, q) @ qd, twist, DIFFERENCE)


def test_jacobian_rate_is_the_derivative_of_the_jacobian() -> None:
    """The rate agrees with finite differences of the Jacobian along the motion, column by column."""
    for arm, q, qd, *_ in cases():
        for frame in arm.frames:
            expected = derivative(partial(dynamics.jacobian, arm, frame), q, qd)
            assert_equal(dynamics.jacobian_rate(arm, frame, q, qd), expected, DIFFERENCE)


def test_gravity_torque_is_the_weight_through_the_jacobian() -> None:
    """A weight at a frame needs J' times its force: a mass added to a body there changes the gravity torque by as much."""
    for arm, q, *_ in cases():
        body = int(arm.model["frame_body"][1])
        p = np.array(arm.model["p_body_frame"][1])
        before = dynamics.gravity_torque(arm, q)
        arm.model["mass"][body] += 2.5
        arm.model["h"][body] += 2.5 * p
        J = dynamics.jacobian(arm, "tool", q)[:3]
        added = -J.T @ (2.5 * np.array(arm.model["gravity"]))
        assert_equal(dynamics.gravity_torque(arm, q), before + added, ROUNDING)
