"""Arm descriptions as Python data for tests: a small correct one to spoil, and random ones that use every key. Invented."""

import copy
from typing import Any

import numpy as np
from scipy.spatial.transform import Rotation

_BODY = {
    "mass_kg": 2.0,
    "center_of_mass_m": [0.1, 0.0, 0.0],
    "inertia_kgm2": [0.01, 0.02, 0.02, 0.0, 0.0, 0.0],
    "inertia_point": "center_of_mass",
}
_TURNING: dict[str, Any] = {
    "drive": {"reflected_inertia_kgm2": 0.1},
    "friction": {"viscous_nm_s_rad": 0.5, "coulomb_nm": 0.4, "smoothing_rad_s": 0.02},
    "limits": {
        "position_min_rad": -2.0,
        "position_max_rad": 2.0,
        "speed_max_rad_s": 3.0,
        "torque_max_nm": 60.0,
        "torque_rate_max_nm_s": 6000.0,
    },
}
_SLIDING: dict[str, Any] = {
    "drive": {"reflected_mass_kg": 1.5},
    "friction": {"viscous_n_s_m": 20.0, "coulomb_n": 5.0, "smoothing_m_s": 0.01},
    "limits": {
        "position_min_m": -0.3,
        "position_max_m": 0.4,
        "speed_max_m_s": 0.8,
        "force_max_n": 400.0,
        "force_rate_max_n_s": 40000.0,
    },
}


def joint(name: str, parent: str = "base", kind: str = "revolute", **values: Any) -> dict[str, Any]:
    """A correct joint of that kind, 0.3 m from its parent along x; `values` change or add keys."""
    keys: dict[str, Any] = {
        "name": name,
        "kind": kind,
        "parent": parent,
        "origin_m": [0.3, 0.0, 0.0],
        "rotation_rad": [0.0, 0.0, 0.0],
        "body": _BODY,
    }
    if kind != "fixed":
        keys |= {"axis": "y"} | (_SLIDING if kind == "prismatic" else _TURNING)
    if kind == "continuous":
        keys["limits"] = {key: value for key, value in _TURNING["limits"].items() if not key.startswith("position")}
    return copy.deepcopy({**keys, **values})


def arm_parts(*joints: dict[str, Any], **values: Any) -> dict[str, Any]:
    """A correct arm of these joints (a shoulder and an elbow when none is given); `values` change or add keys."""
    tables = list(joints) or [joint("shoulder"), joint("elbow", "shoulder")]
    return copy.deepcopy(
        {
            "name": "tester",
            "source": "invented",
            "gravity_m_s2": [0.0, 0.0, -9.80665],
            "joint": tables,
            "rest": {"damping_nm_s_rad": 3.0, "moving_s": 0.5, "still": "brake"},
        }
        | values
    )


def random_parts(seed: int) -> dict[str, Any]:
    """A random arm of 3 to 9 joints: a tree with fixed joints anywhere, oblique axes, both inertia points, frames, payload.

    The joints stand in random order.
    """
    rng = np.random.default_rng([seed, 31])
    names = [f"j{k}" for k in range(int(rng.integers(3, 10)))]
    tables = []
    for k, name in enumerate(names):
        kind = str(rng.choice(["revolute", "continuous", "prismatic", "fixed"], p=[0.4, 0.1, 0.2, 0.3])) if k else "revolute"
        parent = "base" if k == 0 else str(rng.choice(["base", *names[:k]], p=[0.1] + [0.9 / k] * k))
        table = joint(name, parent, kind, origin_m=rng.uniform(-0.4, 0.4, 3), rotation_rad=rng.uniform(-3.0, 3.0, 3))
        table["body"] = random_body(rng)
        if kind != "fixed":
            del table["axis"]
            # each of the six main directions, then any
            main = np.eye(3)[seed % 3] * (1 if seed % 2 else -1)
            table["axis_ratio"] = main if k == 0 else rng.normal(size=3)
        tables.append(table)
    tables[0]["drive"] = {"rotor_inertia_kgm2": 2e-5, "gear_ratio": 100.0}
    frames = [
        {
            "name": f"f{k}",
            "joint": str(rng.choice(["base", *names])),
            "origin_m": rng.uniform(-0.3, 0.3, 3),
            "rotation_rad": [0.4, -0.7, 2.1],
        }
        for k in range(3)
    ]
    frames.append({"name": "grip", "joint": "j0", "origin_m": [0.1, 0.2, 0.3], "rotation_rad": rng.uniform(-3.0, 3.0, 3)})
    body = random_body(rng)
    payload = {"frame": "grip", **{key: body[key] for key in ("mass_kg", "center_of_mass_m", "inertia_kgm2")}}
    if body["inertia_point"] == "joint_frame":
        del payload["center_of_mass_m"]
        payload["center_of_mass_m"] = [0.0, 0.0, 0.0]  # the inertia drawn is then about it
    tables = [tables[k] for k in rng.permutation(len(tables))]
    return arm_parts(*tables, frame=frames, payload=payload, gravity_m_s2=rng.normal(size=3) * 6.0)


def random_body(rng: np.random.Generator) -> dict[str, Any]:
    """A body that can exist, its inertia about the one or the other point, in turned axes."""
    mass = 10.0 ** rng.uniform(-1.0, 1.0)
    points = rng.normal(size=(6, 3)) * 0.1
    c = points.mean(axis=0)
    at_joint = bool(rng.random() < 0.5)
    spread = points if at_joint else points - c
    second = mass / 6.0 * spread.T @ spread
    angles = rng.uniform(-3.0, 3.0, 3)
    R = Rotation.from_euler("xyz", angles).as_matrix()
    inertia = R.T @ (np.trace(second) * np.eye(3) - second) @ R
    return {
        "mass_kg": mass,
        "center_of_mass_m": c,
        "inertia_kgm2": inertia[[0, 1, 2, 0, 0, 1], [0, 1, 2, 1, 2, 2]],
        "inertia_point": "joint_frame" if at_joint else "center_of_mass",
        "inertia_rotation_rad": angles,
    }
