"""Arm descriptions against the physics engine `mujoco`, which is given the same description in its own terms.

Fixed joints, oblique axes, payload and frames are handed over as they stand in the description; the engine lumps and turns them by
itself. So this judges the whole way from the description to the model.
"""

from typing import Any

import mujoco
import numpy as np
from scipy.spatial.transform import Rotation

from rtctl import dynamics
from rtctl.arm import arm_from_parts
from tests.arm_parts import random_parts
from tests.sources import source

LIBRARY = 1e-9  # its principal axes are found by iteration to about 1e-12, and XML text carries 17 digits
SEEDS = range(40)


def text(values: Any) -> str:
    return " ".join(repr(float(x)) for x in np.ravel(values))


def pose(block: dict[str, Any]) -> str:
    quaternion = Rotation.from_euler("xyz", block["rotation_rad"]).as_quat()  # small letters: about fixed axes; x, y, z, w
    return f'pos="{text(block["origin_m"])}" quat="{text(np.roll(quaternion, 1))}"'


def inertial(block: dict[str, Any]) -> str:
    """The engine takes inertia about the centre of mass in the body's axes: turned, then the parallel-axis theorem by element."""
    m, (x, y, z) = block["mass_kg"], block["center_of_mass_m"]
    at_joint = block.get("inertia_point") == "joint_frame"
    shift = np.array([y * y + z * z, x * x + z * z, x * x + y * y, -x * y, -x * z, -y * z]) * (m if at_joint else 0.0)
    xx, yy, zz, xy, xz, yz = block["inertia_kgm2"]
    R = Rotation.from_euler("xyz", block.get("inertia_rotation_rad", (0.0, 0.0, 0.0))).as_matrix()
    turned = R @ np.array([[xx, xy, xz], [xy, yy, yz], [xz, yz, zz]]) @ R.T
    full = turned[[0, 1, 2, 0, 0, 1], [0, 1, 2, 1, 2, 2]] - shift
    return f'<inertial mass="{m!r}" pos="{text(block["center_of_mass_m"])}" fullinertia="{text(full)}"/>'


def rotor(drive: dict[str, float]) -> float:
    if "gear_ratio" in drive:
        return drive["rotor_inertia_kgm2"] * drive["gear_ratio"] ** 2
    return drive.get("reflected_inertia_kgm2", drive.get("reflected_mass_kg", 0.0))


def arm_xml(parts: dict[str, Any]) -> str:
    """Bodies nested as the description says, a joint for each that moves, the payload as a body on its frame."""

    def body(table: dict[str, Any]) -> str:
        inner = inertial(table["body"])
        if table["kind"] != "fixed":
            kind = "slide" if table["kind"] == "prismatic" else "hinge"
            armature = rotor(table["drive"])
            inner += f'<joint name="{table["name"]}" type="{kind}" axis="{text(table["axis_ratio"])}" armature="{armature!r}"/>'
        return f"<body {pose(table)}>{inner}{below(table['name'])}</body>"

    def below(name: str) -> str:
        inner = "".join(body(table) for table in parts["joint"] if table["parent"] == name)
        for frame in parts["frame"]:
            if frame["joint"] == name:
                inner += f'<site name="{frame["name"]}" {pose(frame)}/>'
                if frame["name"] == parts["payload"]["frame"]:
                    inner += f"<body {pose(frame)}>{inertial(parts['payload'])}</body>"
        return inner

    option = f'<option gravity="{text(parts["gravity_m_s2"])}"/><compiler angle="radian" autolimits="true"/>'
    return f"<mujoco>{option}<worldbody>{below('base')}</worldbody></mujoco>"


@source("mujoco", "mj_fullM, qfrc_bias, site poses")
def test_random_descriptions() -> None:
    """Inertia matrix, bias torque and frame poses of random descriptions agree with the engine's reading of them."""
    fixed_count = 0
    for seed in SEEDS:
        parts = random_parts(seed)
        fixed_count += sum(table["kind"] == "fixed" for table in parts["joint"])
        arm = arm_from_parts(parts)
        engine = mujoco.MjModel.from_xml_string(arm_xml(parts))
        data = mujoco.MjData(engine)
        where = [int(engine.joint(name).dofadr[0]) for name in arm.joint_names]
        rng = np.random.default_rng(seed)
        q, qd = rng.uniform(-1.5, 1.5, arm.n), rng.normal(size=arm.n)
        data.qpos[where], data.qvel[where] = q, qd
        mujoco.mj_forward(engine, data)
        M = np.zeros((arm.n, arm.n))
        mujoco.mj_fullM(engine, data, M)
        pairs = [
            ("inertia matrix", dynamics.inertia_matrix(arm, q), M[np.ix_(where, where)]),
            ("bias", dynamics.bias_torque(arm, q, qd), data.qfrc_bias[where]),
        ]
        for name in arm.frames:
            theirs = np.eye(4)
            theirs[:3, :3], theirs[:3, 3] = data.site(name).xmat.reshape(3, 3), data.site(name).xpos
            pairs.append((f"frame {name}", dynamics.frame_pose(arm, name, q), theirs))
        for name, ours, theirs in pairs:
            error = np.max(np.abs(ours - theirs)) / max(float(np.max(np.abs(theirs))), 1e-3)
            assert error < LIBRARY, f"seed {seed}, {name}: relative error {error:.2e}\nours\n{ours}\nengine\n{theirs}"
    assert fixed_count > 40
