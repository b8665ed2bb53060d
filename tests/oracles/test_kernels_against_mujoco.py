"""Inertia matrix, bias torque and inverse dynamics against the physics engine `mujoco`, a second independent library.

The arm is written as the engine's XML. The engine turns every body's inertia into principal axes by itself, which costs digits.
"""

import mujoco
import numpy as np
from numpy.typing import NDArray

from rtctl import dynamics
from rtctl.kernels.layout import REVOLUTE
from tests.oracles.pin_arm import symmetric
from tests.random_arms import SEEDS, random_arm, random_state
from tests.sources import source

Array = NDArray[np.float64]

LIBRARY = 1e-9  # its principal axes are found by iteration to about 1e-12, and XML text carries 17 digits


def text(values: Array) -> str:
    return " ".join(repr(float(x)) for x in np.ravel(values))


def quaternion(R: Array) -> Array:
    out = np.zeros(4)
    mujoco.mju_mat2Quat(out, np.ravel(R))
    return out


def arm_xml(model: np.void) -> str:
    """The bodies nested as in the model block, one joint each, named by index."""

    def body(i: int) -> str:
        mass = float(model["mass"][i])
        centre = model["h"][i] / mass
        I_centre = symmetric(model["I"][i]) - mass * (centre @ centre * np.eye(3) - np.outer(centre, centre))
        full = I_centre[[0, 1, 2, 0, 0, 1], [0, 1, 2, 1, 2, 2]]
        kind = "hinge" if model["kind"][i] == REVOLUTE else "slide"
        inside = "".join(body(j) for j in range(int(model["n"])) if model["parent"][j] == i)
        return (
            f'<body pos="{text(model["p_parent"][i])}" quat="{text(quaternion(model["R_parent"][i]))}">'
            f'<joint name="j{i}" type="{kind}" axis="0 0 1" armature="{float(model["rotor"][i])!r}"/>'
            f'<inertial mass="{mass!r}" pos="{text(centre)}" fullinertia="{text(full)}"/>{inside}</body>'
        )

    bodies = "".join(body(i) for i in range(int(model["n"])) if model["parent"][i] < 0)
    gravity = text(model["gravity"])
    return f'<mujoco><option gravity="{gravity}"/><compiler angle="radian"/><worldbody>{bodies}</worldbody></mujoco>'


@source("mujoco", "mj_fullM, qfrc_bias, mj_inverse with joint armature")
def test_inertia_bias_and_inverse() -> None:
    """Inertia matrix, bias torque and motion torque of all random arms agree with the engine."""
    for seed in SEEDS:
        arm = random_arm(seed)
        engine = mujoco.MjModel.from_xml_string(arm_xml(arm.model))
        data = mujoco.MjData(engine)
        where = [int(engine.joint(f"j{i}").dofadr[0]) for i in range(arm.n)]
        q, qd, qdd, _ = random_state(seed, arm.n)
        data.qpos[where], data.qvel[where] = q, qd
        mujoco.mj_forward(engine, data)
        M = np.zeros((arm.n, arm.n))
        mujoco.mj_fullM(engine, data, M)
        bias = data.qfrc_bias[where].copy()
        data.qacc[where] = qdd
        mujoco.mj_inverse(engine, data)
        pairs = {
            "inertia matrix": (dynamics.inertia_matrix(arm, q), M[np.ix_(where, where)]),
            "bias": (dynamics.bias_torque(arm, q, qd), bias),
            "inverse": (dynamics.inverse_dynamics(arm, q, qd, qdd), data.qfrc_inverse[where]),
        }
        for name, (ours, theirs) in pairs.items():
            error = np.max(np.abs(ours - theirs)) / max(float(np.max(np.abs(theirs))), 1e-3)
            assert error < LIBRARY, f"seed {seed}, {name}: relative error {error:.2e}\nours\n{ours}\nengine\n{theirs}"
