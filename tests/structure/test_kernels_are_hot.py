"""Kernels inside compiled code: no allocation per call, and one compiled variant each, whoever calls."""

from collections.abc import Callable
from typing import Any

import numba
import numpy as np
import pytest
from numba.core.runtime import _nrt_python, rtsys

from rtctl import dynamics
from rtctl.kernels.cholesky import cholesky, cholesky_solve
from rtctl.kernels.energy import kinetic_energy, potential_energy
from rtctl.kernels.forward_dynamics import forward_dynamics
from rtctl.kernels.friction import friction_torque
from rtctl.kernels.inertia_matrix import inertia_matrix
from rtctl.kernels.inverse_dynamics import bias_torque, gravity_torque, inverse_dynamics
from rtctl.kernels.kinematics import body_poses, frame_pose, jacobian, jacobian_rate
from rtctl.kernels.layout import OK, SCRATCH, new_block
from tests.random_arms import random_arm, random_state


def call_all(model, ws, q, out, T, frame, count):  # type: ignore[no-untyped-def]
    """Every kernel `count` times, vectors and matrices from the fields of the scratch as the cycle passes them.

    The frame is a variable: a constant there compiles a variant of its own.
    """
    qd, qdd, tau = ws["x0"][:], ws["x1"][:], ws["x2"][:]
    M, L, J, n = ws["M"][:], ws["L"][:], ws["J"][:], model["n"]
    good = 0
    for _ in range(count):
        good += inverse_dynamics(model, q, qd, qdd, ws, tau)
        good += bias_torque(model, q, qd, ws, tau)
        good += gravity_torque(model, q, ws, tau)
        good += friction_torque(model, qd, tau)
        good += forward_dynamics(model, q, qd, tau, ws, qdd)
        good += inertia_matrix(model, q, ws, M)
        good += cholesky(M, n, L) + cholesky_solve(L, n, tau, qdd)
        good += body_poses(model, q, ws) + frame_pose(model, frame, q, ws, T)
        good += jacobian(model, frame, q, ws, J) + jacobian_rate(model, frame, q, qd, ws, J)
        good += kinetic_energy(model, q, qd, ws, out) + potential_energy(model, q, ws, out)
    return good


KERNELS: tuple[Any, ...] = (
    inverse_dynamics,
    bias_torque,
    gravity_torque,
    friction_torque,
    forward_dynamics,
    inertia_matrix,
    cholesky,
    cholesky_solve,
    body_poses,
    frame_pose,
    jacobian,
    jacobian_rate,
    kinetic_energy,
    potential_energy,
)


def allocations(function: Callable[..., Any], *arguments: Any) -> int:
    before = rtsys.get_allocation_stats()
    function(*arguments)
    return int(rtsys.get_allocation_stats().alloc - before.alloc)


@pytest.fixture(scope="module")
def loop() -> Any:
    """The compiled loop over all kernels, warm, with the allocation counter on."""
    compiled = numba.njit(error_model="numpy")(call_all)
    compiled(*arguments(), 1)
    _nrt_python.memsys_enable_stats()
    return compiled


def arguments() -> tuple[Any, ...]:
    arm, ws = random_arm(6), new_block(SCRATCH)
    q, qd, qdd, _ = random_state(6, arm.n)
    ws["x0"][: arm.n], ws["x1"][: arm.n] = qd, qdd
    return arm.model, ws, q, np.zeros(1), np.zeros((4, 4)), 1


def test_the_counter_counts(loop: Any) -> None:
    """A loop that makes an array per round is seen, so that the next test looks at something."""

    @numba.njit
    def allocates(count: int) -> float:
        total = 0.0
        for i in range(count):
            total += np.full(i % 7 + 1, 2.0).sum()
        return total

    allocates(1)
    assert allocations(allocates, 1001) - allocations(allocates, 1) >= 1000


def test_kernels_allocate_nothing(loop: Any) -> None:
    """A thousand more calls of every kernel make no more allocations."""
    once, often = allocations(loop, *arguments(), 1), allocations(loop, *arguments(), 1001)
    assert once == often


def test_every_kernel_succeeds(loop: Any) -> None:
    """All the calls above are real ones: each returns OK."""
    assert loop(*arguments(), 3) == 3 * OK * len(KERNELS)


def test_one_compiled_variant_each(loop: Any) -> None:
    """Arrays of the interpreter and fields of blocks in compiled code are the same kind: no second variant is compiled."""
    arm = random_arm(6)
    q, qd, qdd, tau = random_state(6, arm.n)
    arm.model.setflags(write=False)
    for name, values in {
        "inverse_dynamics": (q, qd, qdd),
        "bias_torque": (q, qd),
        "gravity_torque": (q,),
        "friction_torque": (qd,),
        "forward_dynamics": (q, qd, tau),
        "inertia_matrix": (q,),
        "energy": (q, qd),
    }.items():
        getattr(dynamics, name)(arm, *values)
    for frame in arm.frames:
        dynamics.frame_pose(arm, frame, q)
        dynamics.jacobian(arm, frame, q)
        dynamics.jacobian_rate(arm, frame, q, qd)
    variants = {kernel.__name__: len(kernel.signatures) for kernel in KERNELS}
    assert variants == dict.fromkeys(variants, 1)
