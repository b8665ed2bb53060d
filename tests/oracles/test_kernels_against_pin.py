"""Every dynamics kernel against the rigid-body library `pin` on the seeded random trees."""

from collections.abc import Callable

import numpy as np
import pytest
from numpy.typing import NDArray

from rtctl import dynamics
from tests.oracles.pin_arm import PinArm
from tests.random_arms import SEEDS, RandomArm, random_arm, random_state
from tests.sources import source

Array = NDArray[np.float64]

# Two different orders of summation over at most 10 bodies, each good to about 1e-15 of the largest number that takes part; the
# forward dynamics divides by inertias that may be 1e-4 of the largest.
LIBRARY = 1e-10
FRAMES = range(4)


def arms() -> list[RandomArm]:
    return [random_arm(seed) for seed in SEEDS]


def assert_close(ours: Array, theirs: Array, seed: int) -> None:
    """Relative to the largest element, so that an element that should be zero is held to the same absolute error."""
    scale = max(float(np.max(np.abs(theirs))), 1e-3)
    error = float(np.max(np.abs(np.asarray(ours) - theirs))) / scale
    assert error < LIBRARY, f"seed {seed}: relative error {error:.2e}\nours\n{ours}\nlibrary\n{theirs}"


def test_the_random_arms_cover_what_kernels_branch_on() -> None:
    """At least 60 trees: all sizes, both joint kinds, real branches, with and without rotor inertia."""
    models = [arm.model for arm in arms()]
    assert len(models) >= 60
    assert {int(m["n"]) for m in models} == set(range(1, 11))
    assert {int(k) for m in models for k in m["kind"][: int(m["n"])]} == {0, 1}
    branched = [m for m in models if any(m["parent"][i] != i - 1 for i in range(int(m["n"])))]
    assert len(branched) > 30
    assert any(m["rotor"][0] > 0.0 for m in models) and any(m["rotor"][0] == 0.0 for m in models)


def joint_space(name: str) -> Callable[[RandomArm, PinArm, int], tuple[Array, Array]]:
    def both(arm: RandomArm, other: PinArm, seed: int) -> tuple[Array, Array]:
        q, qd, qdd, tau = random_state(seed, arm.n)
        arguments = {
            "inverse_dynamics": (q, qd, qdd),
            "bias_torque": (q, qd),
            "gravity_torque": (q,),
            "inertia_matrix": (q,),
            "forward_dynamics": (q, qd, tau),
            "energy": (q, qd),
        }[name]
        return np.array(getattr(dynamics, name)(arm, *arguments)), np.array(getattr(other, name)(*arguments))

    return both


@source("pin", "rnea, nonLinearEffects, computeGeneralizedGravity, crba, aba, computeKineticEnergy, computePotentialEnergy")
@pytest.mark.parametrize(
    "name", ["inverse_dynamics", "bias_torque", "gravity_torque", "inertia_matrix", "forward_dynamics", "energy"]
)
def test_dynamics(name: str) -> None:
    """Torques, inertia matrix, accelerations and energies of all random arms agree with the library."""
    for seed in SEEDS:
        arm = random_arm(seed)
        ours, theirs = joint_space(name)(arm, PinArm(arm.model), seed)
        assert_close(ours, theirs, seed)


@source("pin", "framesForwardKinematics, computeFrameJacobian, getFrameJacobianTimeVariation, axes of the world")
def test_frames() -> None:
    """Pose, Jacobian and rate of the Jacobian of every frame agree with the library, base-fixed frames too."""
    for seed in SEEDS:
        arm = random_arm(seed)
        other = PinArm(arm.model)
        q, qd, _, _ = random_state(seed, arm.n)
        for k in FRAMES:
            name = arm.frames[k]
            assert_close(dynamics.frame_pose(arm, name, q), other.frame_pose(k, q), seed)
            assert_close(dynamics.jacobian(arm, name, q), other.jacobian(k, q), seed)
            assert_close(dynamics.jacobian_rate(arm, name, q, qd), other.jacobian_rate(k, q, qd), seed)
