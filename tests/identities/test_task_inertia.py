"""What an arm weighs at its tool: the inertia in task space, formed from M and J and held to what the arm then does.

Lambda = (J M^-1 J')^-1 and the generalised inverse Jbar = M^-1 J' Lambda. Accelerations come from the forward dynamics, which never
forms M, and from the rate of the Jacobian; so the identities bind five kernels together.
"""

from collections.abc import Iterator

import numpy as np
import pytest

from rtctl import dynamics
from tests.known_arms import STANDARD_GRAVITY, Body, arm6_1986, known_arm
from tests.random_arms import RandomArm, random_arm, random_state
from tests.sources import source

Array = np.ndarray

ROUNDING = 1e-8  # times the condition of J M^-1 J', which is kept below 1e5
CONDITION = 1e5


def cases() -> Iterator[tuple[RandomArm, Array, Array, Array, Array, Array]]:
    """Arms of 7 to 10 joints in poses where the tool moves freely: arm, q, qd, J, Lambda, Jbar."""
    found = 0
    for seed in range(40):
        arm = random_arm(seed, n=7 + seed % 4, chain=True)
        q, qd, _, _ = random_state(seed, arm.n)
        J, M = dynamics.jacobian(arm, "tool", q), dynamics.inertia_matrix(arm, q)
        mobility = J @ np.linalg.solve(M, J.T)
        if np.linalg.cond(mobility) > CONDITION:
            continue
        found += 1
        Lambda = np.linalg.inv(mobility)
        yield arm, q, qd, J, Lambda, np.linalg.solve(M, J.T) @ Lambda
    assert found >= 15


def tool_acceleration(arm: RandomArm, q: Array, qd: Array, tau: Array) -> Array:
    """J qdd + Jd qd under these torques, by the forward dynamics."""
    qdd = dynamics.forward_dynamics(arm, q, qd, tau)
    return dynamics.jacobian(arm, "tool", q) @ qdd + dynamics.jacobian_rate(arm, "tool", q, qd) @ qd


@source("khatib1987", "Lambda = (J M^-1 J')^-1 is what a force at the tool accelerates")
def test_a_force_at_the_tool_accelerates_the_task_inertia() -> None:
    """Gravity and velocity torques balanced, a force F through J' gives the acceleration with Lambda a = F, beside Jd qd."""
    for arm, q, qd, J, Lambda, _ in cases():
        F = np.array([3.0, -2.0, 5.0, 0.4, -0.7, 0.2])
        free = dynamics.jacobian_rate(arm, "tool", q, qd) @ qd
        a = tool_acceleration(arm, q, qd, dynamics.bias_torque(arm, q, qd) + J.T @ F) - free
        assert Lambda @ a == pytest.approx(F, rel=ROUNDING, abs=ROUNDING * float(np.abs(Lambda).max() * np.abs(a).max()))


@source("khatib1987", "torques (1 - J' Jbar') tau give the tool no acceleration: J M^-1 (1 - J' Jbar') = 0; J Jbar = 1")
def test_null_space_torques_do_not_move_the_tool() -> None:
    """Random torques through the projection move the arm but not its tool, to rounding."""
    for arm, q, qd, J, _, Jbar in cases():
        assert J @ Jbar == pytest.approx(np.eye(6), abs=ROUNDING * CONDITION * 1e-3)
        tau = random_state(3, arm.n)[3]
        bias = dynamics.bias_torque(arm, q, qd)
        still = tool_acceleration(arm, q, qd, bias)
        inside = tau - J.T @ (Jbar.T @ tau)
        moved = np.abs(tool_acceleration(arm, q, qd, bias + tau) - still).max()
        assert np.abs(tool_acceleration(arm, q, qd, bias + inside) - still).max() < ROUNDING * moved
        if arm.n > 6:
            qdd = dynamics.forward_dynamics(arm, q, qd, bias + inside)
            assert np.abs(qdd).max() > 1e-3


@source("textbook mechanics", "a point mass weighs the same in every direction, whatever massless links carry it")
def test_a_point_mass_at_the_tip_weighs_its_mass() -> None:
    """Two links without mass and 1.7 kg at the tip: Lambda is 1.7 kg times the unit matrix in every pose that is not stretched."""
    nothing = {"mass": 0.0, "centre": (0.0, 0.0, 0.0), "I_centre": (0.0, 0.0, 0.0)}
    point = Body(0, 1.7, (0.5, 0.0, 0.0), (0.0, 0.0, 0.0), p=(0.4, 0.0, 0.0))
    arm = known_arm([Body(-1, **nothing), point], (STANDARD_GRAVITY, 0.0, 0.0), tip=(0.5, 0.0, 0.0))
    for q in ((0.3, 1.0), (-1.2, 2.0), (2.0, -0.7)):
        J = dynamics.jacobian(arm, "tip", q)[:2]
        Lambda = np.linalg.inv(J @ np.linalg.solve(dynamics.inertia_matrix(arm, q), J.T))
        assert Lambda == pytest.approx(1.7 * np.eye(2), rel=1e-12, abs=1e-12)


@source("khatib1987", "kinetic energy of the tool's motion that the arm cannot go below: v' Lambda v / 2; arm of arm6_1986")
def test_task_inertia_is_the_least_energy() -> None:
    """Of all joint velocities with one tip velocity, Jbar v has the least kinetic energy, and that is v' Lambda v / 2."""
    arm = arm6_1986()
    rng = np.random.default_rng(8)
    for q in rng.uniform(-1.5, 1.5, (20, 6)):
        J, M = dynamics.jacobian(arm, "tip", q)[:3], dynamics.inertia_matrix(arm, q)
        Lambda = np.linalg.inv(J @ np.linalg.solve(M, J.T))
        v = rng.normal(size=3)
        least = np.linalg.solve(M, J.T) @ Lambda @ v
        energy, _ = dynamics.energy(arm, q, least)
        assert energy == pytest.approx(0.5 * v @ Lambda @ v, rel=1e-9)
        _, _, directions = np.linalg.svd(J)
        for other in directions[3:]:  # joint motions that leave the tip where it is
            assert dynamics.energy(arm, q, least + 0.1 * other)[0] > energy
