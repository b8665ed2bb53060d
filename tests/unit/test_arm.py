"""From a description to the model: closed forms, equivalent descriptions, order, key. Random arms are in tests/oracles."""

import hashlib
import math
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from rtctl.arm import arm_from_parts, arm_key, load_arm
from rtctl.dynamics import bias_torque, frame_pose, gravity_torque, inertia_matrix
from rtctl.errors import ModelError
from tests.arm_parts import arm_parts, joint, random_parts
from tests.sources import source
from tests.structure.sources_of import TOP

ROUNDING = 1e-12  # some tens of products and sums of numbers near 1
GRAVITY = 9.80665  # m/s^2


def rod(mass_kg: float, length_m: float) -> dict[str, Any]:
    """A uniform thin rod along x from the joint, with a diameter that the inertia hardly shows."""
    cross = mass_kg * length_m**2 / 12
    return {
        "mass_kg": mass_kg,
        "center_of_mass_m": [length_m / 2, 0.0, 0.0],
        "inertia_kgm2": [1e-6, cross, cross, 0.0, 0.0, 0.0],
        "inertia_point": "center_of_mass",
    }


@source("textbook mechanics", "uniform rod: inertia m l^2 / 3 about its end, moment m g l / 2 when level")
@pytest.mark.parametrize("axis", ["y", "-y"])
def test_level_rod(axis: str) -> None:
    """A level rod needs m g l / 2, positive about the axis that lifts it; its inertia is m l^2 / 3 plus the geared rotor's."""
    drive = {"rotor_inertia_kgm2": 2e-5, "gear_ratio": 50.0}
    arm = arm_from_parts(arm_parts(joint("a", axis=axis, body=rod(2.0, 0.5), drive=drive)))
    lifting = -1.0 if axis == "y" else 1.0  # a positive turn about +y takes x towards -z
    assert gravity_torque(arm, [0.0]) == pytest.approx([lifting * 2.0 * GRAVITY * 0.25], rel=ROUNDING)
    assert inertia_matrix(arm, [0.7]) == pytest.approx(2.0 * 0.5**2 / 3 + 2e-5 * 50.0**2, rel=ROUNDING)


@source("textbook mechanics", "planar double pendulum")
def test_planar_two_joint_demo_arm() -> None:
    """The planar demo arm follows the closed form of two links in a vertical plane, with the numbers of its file."""
    arm = load_arm(TOP / "configs/arms/planar_two.toml")
    m1, c1, I1, m2, c2, I2, length = 3.2, 0.24, 0.052, 1.4, 0.15, 0.015, 0.4
    r1, r2 = 4.0e-5 * 80.0**2, 1.6e-5 * 80.0**2
    a, b = 0.4, -1.1
    g1 = (m1 * c1 + m2 * length) * GRAVITY * math.cos(a) + m2 * c2 * GRAVITY * math.cos(a + b)
    assert gravity_torque(arm, [a, b]) == pytest.approx([g1, m2 * c2 * GRAVITY * math.cos(a + b)], rel=ROUNDING)
    M22 = I2 + m2 * c2**2
    M12 = M22 + m2 * length * c2 * math.cos(b)
    M11 = I1 + m1 * c1**2 + M22 + m2 * (length**2 + 2 * length * c2 * math.cos(b))
    assert inertia_matrix(arm, [a, b]) == pytest.approx(np.array([[M11 + r1, M12], [M12, M22 + r2]]), rel=ROUNDING)
    expected = [
        [math.cos(a + b), 0.4 * math.cos(a) + 0.35 * math.cos(a + b)],
        [math.sin(a + b), 0.8 + 0.4 * math.sin(a) + 0.35 * math.sin(a + b)],
    ]
    pose = frame_pose(arm, "tool", [a, b])
    assert [[pose[0, 0], pose[0, 3]], [pose[2, 0], pose[2, 3]]] == pytest.approx(np.array(expected), rel=ROUNDING)


def test_prismatic_joint() -> None:
    """A rising slide carries its weight; drive mass counts as given, or as rotor inertia times the turn per metre squared."""
    slide = joint("lift", kind="prismatic", axis="z")
    arm = arm_from_parts(arm_parts(slide))
    assert arm.units == ("m",) and (arm.q_min[0], arm.q_max[0], arm.tau_max[0]) == (-0.3, 0.4, 400.0)
    assert gravity_torque(arm, [0.1]) == pytest.approx([2.0 * GRAVITY], rel=ROUNDING)
    assert inertia_matrix(arm, [0.1]) == pytest.approx(2.0 + 1.5, rel=ROUNDING)
    geared = arm_from_parts(arm_parts(slide | {"drive": {"rotor_inertia_kgm2": 1e-5, "gear_rad_m": 400.0}}))
    assert inertia_matrix(geared, [0.1]) == pytest.approx(2.0 + 1e-5 * 400.0**2, rel=ROUNDING)


def test_continuous_joint_has_no_position_limits() -> None:
    """A joint without end turns like any other and has infinite limits."""
    arm = arm_from_parts(arm_parts(joint("a", kind="continuous")))
    assert (arm.q_min[0], arm.q_max[0]) == (-math.inf, math.inf) and arm.units == ("rad",)


def same_motion(one: Any, other: Any, signs: np.ndarray) -> None:
    """Two arms whose joints differ by their positive sense only have the same torques and inertias, up to those signs."""
    rng = np.random.default_rng(1)
    for _ in range(3):
        q, qd = rng.uniform(-1.0, 1.0, one.n), rng.normal(size=one.n)
        assert bias_torque(other, signs * q, signs * qd) == pytest.approx(signs * bias_torque(one, q, qd), rel=1e-10, abs=1e-10)
        M = inertia_matrix(other, signs * q)
        assert M == pytest.approx(np.outer(signs, signs) * inertia_matrix(one, q), rel=1e-10, abs=1e-10)


def test_axis_turned_around() -> None:
    """With an axis turned around, positions and torques of that joint change their sign, and nothing else."""
    for seed in range(10):
        parts = random_parts(seed)
        plain = arm_from_parts(parts)
        signs = np.ones(plain.n)
        for table in parts["joint"]:
            if table["kind"] != "fixed" and table["name"] != plain.joint_names[0]:
                table["axis_ratio"] = -2.5 * np.asarray(table["axis_ratio"])  # the length of a direction does not matter
                signs[plain.joint_names.index(table["name"])] = -1.0
        turned = arm_from_parts(parts)
        same_motion(plain, turned, signs)
        q = np.linspace(-1.0, 1.0, plain.n)
        for frame in plain.frames:
            assert frame_pose(turned, frame, signs * q) == pytest.approx(frame_pose(plain, frame, q), abs=1e-12)


def test_fixed_joint_in_between_changes_nothing() -> None:
    """An elbow on a fixed flange is the same arm as one whose pose includes the flange's and whose upper arm carries its mass."""
    flange = joint("flange", "shoulder", "fixed", origin_m=[0.0, 0.1, 0.0], rotation_rad=[0.0, 0.0, math.pi / 2])
    with_flange = arm_from_parts(arm_parts(joint("shoulder"), flange, joint("elbow", "flange")))
    direct = arm_parts(
        joint("shoulder"), joint("elbow", "shoulder", origin_m=[0.0, 0.4, 0.0], rotation_rad=[0.0, 0.0, math.pi / 2])
    )
    # the same flange as a payload: at the shoulder's frame turned the same way
    direct["frame"] = [
        {"name": "seat", "joint": "shoulder", "origin_m": [0.0, 0.1, 0.0], "rotation_rad": [0.0, 0.0, math.pi / 2]}
    ]
    direct["payload"] = {"frame": "seat"} | {key: flange["body"][key] for key in ("mass_kg", "center_of_mass_m", "inertia_kgm2")}
    same_motion(with_flange, arm_from_parts(direct), np.ones(2))


def test_base_links_have_no_effect() -> None:
    """Bodies fixed to the base are checked but carry nothing."""
    plain = arm_from_parts(arm_parts(joint("a", origin_m=[0.0, 0.0, 0.5])))
    pedestal = joint("pedestal", kind="fixed", origin_m=[0.0, 0.0, 0.2])
    standing = arm_from_parts(arm_parts(pedestal, joint("a", "pedestal", origin_m=[0.0, 0.0, 0.3])))
    assert standing.n == 1
    for name in plain.model.dtype.names or ():
        assert np.allclose(plain.model[name], standing.model[name], rtol=1e-15, atol=1e-16), name


def test_order_of_joints() -> None:
    """Joints are numbered as in the file, except that parents come before their children."""
    tables = [joint("tip", "elbow"), joint("head"), joint("elbow", "shoulder"), joint("shoulder")]
    arm = arm_from_parts(arm_parts(*tables))
    assert arm.joint_names == ("shoulder", "elbow", "tip", "head")
    assert list(arm.model["parent"][:4]) == [-1, 0, 1, -1]


@source("fips180-4", "computed with the standard library's hashlib")
def test_key() -> None:
    """The key is the start of a SHA-256 over lines of text, as the message contract says with this example, below 2^48."""
    assert arm_key("two-joint example", ("shoulder", "slide"), ("rad", "m")) == 12040475670550
    digest = hashlib.sha256(b"tester\nshoulder rad\nelbow rad").hexdigest()
    assert arm_from_parts(arm_parts()).key == int(digest[:12], 16)


def test_key_and_hash_tell_arms_apart() -> None:
    """Another name, order or unit is another key; any other number is another hash but the same key."""
    arm = arm_from_parts(arm_parts())
    others = [
        arm_parts(name="other"),
        arm_parts(joint("elbow"), joint("shoulder", "elbow")),
        arm_parts(joint("shoulder", kind="prismatic"), joint("elbow", "shoulder")),
    ]
    assert len({arm.key, *(arm_from_parts(other).key for other in others)}) == 4
    heavier = arm_parts()
    heavier["joint"][1]["body"]["mass_kg"] = 2.1
    assert arm_from_parts(heavier).key == arm.key and arm_from_parts(heavier).hash != arm.hash


def test_comments_do_not_change_the_hash(tmp_path: Path) -> None:
    """The hash is of the content: a comment or an empty line is none."""
    text = (TOP / "configs/arms/one_joint.toml").read_text()
    file = tmp_path / "arm.toml"
    file.write_text("# another comment\n\n" + text)
    assert load_arm(file).hash == load_arm(TOP / "configs/arms/one_joint.toml").hash


def test_nothing_can_be_changed() -> None:
    """Model and limits are read-only."""
    arm = arm_from_parts(arm_parts())
    for array in (arm.q_min, arm.tau_max, arm.rest.damping, arm.model["mass"]):
        with pytest.raises(ValueError, match="read-only"):
            array[0] = 1.0


def test_fields_of_a_loaded_arm() -> None:
    """Friction, limits, rest policy and path are those of the description, joint by joint."""
    arm = arm_from_parts(arm_parts(rest={"damping_nm_s_rad": [3.0, 4.0], "moving_s": 0.5, "still": "gravity"}), name="here")
    assert (arm.name, arm.n, arm.path, arm.frames) == ("tester", 2, "here", ())
    assert [list(values) for values in (arm.q_min, arm.q_max, arm.qd_max)] == [[-2.0, -2.0], [2.0, 2.0], [3.0, 3.0]]
    assert list(arm.tau_max) == [60.0, 60.0] and list(arm.tau_rate_max) == [6000.0, 6000.0]
    assert (list(arm.rest.damping), arm.rest.moving_s, arm.rest.still) == ([3.0, 4.0], 0.5, "gravity")
    model = arm.model
    assert [list(model[name][:2]) for name in ("viscous", "coulomb", "friction_speed")] == [[0.5, 0.5], [0.4, 0.4], [0.02, 0.02]]


def test_unknown_frame() -> None:
    """A frame that is not there is refused with the nearest name."""
    arm = load_arm(TOP / "configs/arms/planar_two.toml")
    assert arm.frame_index("tool") == 0
    with pytest.raises(ModelError) as caught:
        arm.frame_index("tol")
    assert str(caught.value) == 'planar_two: must be given the name of one of its frames, got "tol". The nearest is tool.'
