"""Arm files: what is refused, each time with the whole sentence, and what is accepted. All data is invented."""

import math
import random
from pathlib import Path
from typing import Any

import pytest

from rtctl.arm import arm_from_parts, load_arm
from rtctl.errors import ConfigError, ModelError, RtctlError
from tests.arm_parts import arm_parts, joint
from tests.sources import source
from tests.structure.sources_of import TOP

BODY = joint("any")["body"]
LIMITS = joint("any")["limits"]
FRAME = {"name": "tool", "joint": "shoulder", "origin_m": [0.0, 0.0, 0.1], "rotation_rad": [0.0, 0.0, 0.0]}
PAYLOAD = {"frame": "tool", "mass_kg": 1.0, "center_of_mass_m": [0.0, 0.0, 0.0], "inertia_kgm2": [0.1, 0.1, 0.1, 0.0, 0.0, 0.0]}
NAME_RULE = "a name of letters, digits, _ and -, a letter first, at most 48 characters"


def refusal(parts: dict[str, Any]) -> RtctlError:
    with pytest.raises(RtctlError) as caught:
        arm_from_parts(parts)
    assert "\n".join(str(finding) for finding in caught.value.findings) == str(caught.value)
    return caught.value


def without(table: dict[str, Any], *keys: str) -> dict[str, Any]:
    return {key: value for key, value in table.items() if key not in keys}


IMPOSSIBLE = {
    "products of inertia too large": (
        {"body": BODY | {"inertia_kgm2": [0.01, 0.02, 0.02, 0.03, 0.0, 0.0]}},
        "arm: joint[0].body.inertia_kgm2: must be positive definite about the centre of mass, got principal moments -0.01541, "
        "0.02, 0.04541 kg m^2. Products of inertia may be in the wrong place; the order is xx, yy, zz, xy, xz, yz.",
    ),
    "triangle inequality": (
        {"body": BODY | {"inertia_kgm2": [0.01, 0.02, 0.04, 0.0, 0.0, 0.0]}},
        "arm: joint[0].body.inertia_kgm2: must be such that no principal moment exceeds the sum of the other two, got principal "
        "moments 0.01, 0.02, 0.04 kg m^2. No body has such an inertia; a moment is wrong, or it is about another point than "
        "inertia_point says.",
    ),
    "wrong inertia point": (
        {"body": BODY | {"center_of_mass_m": [0.2, 0.0, 0.0], "inertia_point": "joint_frame"}},
        "arm: joint[0].body.inertia_kgm2: must be positive definite about the centre of mass, got principal moments -0.06, -0.06, "
        "0.01 kg m^2. Less the mass times the distance of its centre squared nothing is left: the inertia is probably about the "
        'centre of mass; then inertia_point is "center_of_mass".',
    ),
    "limits exchanged": (
        {"limits": LIMITS | {"position_min_rad": 2.0, "position_max_rad": -2.0}},
        "arm: joint[0].limits.position_min_rad: must be less than position_max_rad (-2 rad), got 2. The two are exchanged.",
    ),
    "limits equal": (
        {"limits": LIMITS | {"position_min_rad": 2.0}},
        "arm: joint[0].limits.position_min_rad: must be less than position_max_rad (2 rad), got 2.",
    ),
}


@pytest.mark.parametrize(("change", "text"), IMPOSSIBLE.values(), ids=IMPOSSIBLE)
@source("textbook mechanics", "moments of inertia are sums of squares of distances")
def test_what_no_arm_can_be(change: dict[str, Any], text: str) -> None:
    """What is physically impossible is a ModelError with the cause."""
    error = refusal(arm_parts(joint("shoulder", **change)))
    assert isinstance(error, ModelError) and str(error) == text


WRONG = {
    "mass zero": ({"body": BODY | {"mass_kg": 0.0}}, "arm: joint[0].body.mass_kg: must be a finite number > 0 kg, got 0.0."),
    "mass negative": ({"body": BODY | {"mass_kg": -1.0}}, "arm: joint[0].body.mass_kg: must be a finite number > 0 kg, got -1.0."),
    "mass not a number": (
        {"body": BODY | {"mass_kg": math.nan}},
        "arm: joint[0].body.mass_kg: must be a finite number > 0 kg, got nan.",
    ),
    "mass missing": (
        {"body": without(BODY, "mass_kg")},
        "arm: joint[0].body.mass_kg: must be given, a finite number > 0 kg, got nothing.",
    ),
    "inertia infinite": (
        {"body": BODY | {"inertia_kgm2": [0.01, math.inf, 0.02, 0.0, 0.0, 0.0]}},
        "arm: joint[0].body.inertia_kgm2[1]: must be a finite number in kg m^2, got inf.",
    ),
    "inertia of five": (
        {"body": BODY | {"inertia_kgm2": [1, 2, 3, 4, 5]}},
        "arm: joint[0].body.inertia_kgm2: must be a list of 6 finite numbers in kg m^2, got [1, 2, 3, 4, 5].",
    ),
    "unknown inertia point": (
        {"body": BODY | {"inertia_point": "origin"}},
        'arm: joint[0].body.inertia_point: must be one of center_of_mass, joint_frame, got "origin".',
    ),
    "degrees": (
        {"rotation_rad": [90.0, 0.0, 0.0]},
        "arm: joint[0].rotation_rad[0]: must be within +/-6.28 rad, got 90. It looks like degrees; 90 degrees are 1.571 rad.",
    ),
    "millimetres": (
        {"origin_m": [300.0, 0.0, 0.0]},
        "arm: joint[0].origin_m[0]: must be within +/-20 m, got 300. It looks like millimetres; 300 mm are 0.3 m.",
    ),
    "limits in degrees": (
        {"limits": LIMITS | {"position_max_rad": 170.0}},
        "arm: joint[0].limits.position_max_rad: must be within +/-37.7 rad, got 170. It looks like degrees; "
        "170 degrees are 2.967 rad. A joint without end is continuous.",
    ),
    "speed limit negative": (
        {"limits": LIMITS | {"speed_max_rad_s": -3.0}},
        "arm: joint[0].limits.speed_max_rad_s: must be a finite number > 0 rad/s, got -3.0.",
    ),
    "two drives": (
        {"drive": {"reflected_inertia_kgm2": 0.1, "gear_ratio": 3.0}},
        "arm: joint[0].drive: must be given as reflected_inertia_kgm2 alone, or as rotor_inertia_kgm2 and gear_ratio, "
        "got reflected_inertia_kgm2 and gear_ratio.",
    ),
    "no drive numbers": (
        {"drive": {}},
        "arm: joint[0].drive: must be given as reflected_inertia_kgm2 alone, or as rotor_inertia_kgm2 and gear_ratio, "
        "got none of them.",
    ),
    "two axes": ({"axis_ratio": [0.0, 0.0, 1.0]}, "arm: joint[0]: must be given an axis as axis or as axis_ratio, got both."),
    "unknown axis": ({"axis": "up"}, 'arm: joint[0].axis: must be one of x, y, z, -x, -y, -z, got "up".'),
    "unknown parent": (
        {"parent": "sholder"},
        'arm: joint[0].parent: must be the name of a joint or base, got "sholder". Known: base.',
    ),
    "own parent": (
        {"parent": "shoulder"},
        "arm: joint[0].parent: must be on a way to the base, got a circle of shoulder -> shoulder.",
    ),
    "name of the base": (
        {"name": "base"},
        'arm: joint[0].name: must be a name other than "base", got "base". It is the name of what stands still.',
    ),
    "bad name": ({"name": "my joint"}, f'arm: joint[0].name: must be {NAME_RULE}, got "my joint".'),
    "unknown kind": (
        {"kind": "rotary"},
        'arm: joint[0].kind: must be one of revolute, continuous, prismatic, fixed, got "rotary".',
    ),
    "keys of another kind": (
        {"friction": {"viscous_n_s_m": 1.0, "coulomb_nm": 0.0, "smoothing_rad_s": 0.02}},
        "arm: joint[0].friction.viscous_nm_s_rad: must be given, a finite number >= 0 N m s/rad, got nothing.\n"
        "arm: joint[0].friction.viscous_n_s_m: must be a known key, got an unknown one. The nearest is viscous_nm_s_rad.",
    ),
    "no smoothing": (
        {"friction": {"viscous_nm_s_rad": 1.0, "coulomb_nm": 1.0, "smoothing_rad_s": 0.0}},
        "arm: joint[0].friction.smoothing_rad_s: must be a finite number > 0 rad/s, got 0.0.",
    ),
}  # fmt: skip


@pytest.mark.parametrize(("change", "text"), WRONG.values(), ids=WRONG)
def test_wrong_values_of_a_joint(change: dict[str, Any], text: str) -> None:
    """Each wrong value has its place, what was expected with the unit, what came, and why where that is likely."""
    error = refusal(arm_parts(joint("shoulder") | change))
    assert isinstance(error, ConfigError) and str(error) == text


ARMS = {
    "circle": (
        arm_parts(joint("a", "c"), joint("b", "a"), joint("c", "b"), joint("d")),
        "arm: joint[0].parent: must be on a way to the base, got a circle of b -> c -> a -> b.",
    ),
    "name used twice": (
        arm_parts(joint("a"), joint("a")),
        'arm: joint[1].name: must be a name used once, got "a" again. joint[0] has it too.',
    ),
    "nothing moves": (arm_parts(joint("a", kind="fixed")), "arm: joint: must be 1 to 16 moving joints, got 0."),
    "too many joints": (
        arm_parts(*[joint(f"j{k}", f"j{k - 1}" if k else "base") for k in range(17)]),
        "arm: joint: must be 1 to 16 moving joints, got 17.",
    ),
    "no mass moves": (
        arm_parts(joint("a"), without(joint("b", "a"), "body")),
        "arm: joint[1]: must be a joint that moves some mass, got none. Neither [joint.body] of b nor a body fixed to it is given.",
    ),
    "fixed joint with a drive": (
        arm_parts(joint("a"), joint("b", "a", "fixed", drive={"reflected_inertia_kgm2": 0.1})),
        "arm: joint[1].drive: must be absent for a fixed joint, got a table of 1 keys.",
    ),
    "continuous joint with an end": (
        arm_parts(joint("a", kind="continuous", limits=LIMITS)),
        "arm: joint[0].limits.position_min_rad: must be absent for a continuous joint, got -2.0. With an end it is revolute.\n"
        "arm: joint[0].limits.position_max_rad: must be absent for a continuous joint, got 2.0. With an end it is revolute.",
    ),
    "tables missing": (
        arm_parts(without(joint("a"), "drive", "friction", "limits")),
        "arm: joint[0].drive: must be given, a table with reflected_inertia_kgm2 (0.0 if it is not known), "
        "got nothing.\n"
        "arm: joint[0].friction: must be given, a table with the viscous and Coulomb friction (0.0 if it is not known), "
        "got nothing.\n"
        "arm: joint[0].limits: must be given, a table with the limits of the hardware, got nothing.",
    ),
    "nearest joint": (
        arm_parts(joint("shoulder"), joint("elbow", "sholder")),
        'arm: joint[1].parent: must be the name of a joint or base, got "sholder". The nearest is shoulder.',
    ),
    "frame on an unknown joint": (
        arm_parts(frame=[FRAME | {"joint": "elbov"}]),
        'arm: frame[0].joint: must be the name of a joint or base, got "elbov". The nearest is elbow.',
    ),
    "frame twice": (arm_parts(frame=[FRAME, FRAME]), 'arm: frame[1].name: must be a name used once, got "tool" again.'),
    "too many frames": (
        arm_parts(frame=[FRAME | {"name": f"f{k}"} for k in range(17)]),
        "arm: frame: must be at most 16 frames, got 17.",
    ),
    "payload on an unknown frame": (
        arm_parts(frame=[FRAME], payload=PAYLOAD | {"frame": "tol"}),
        'arm: payload.frame: must be the name of a frame, got "tol". The nearest is tool.',
    ),
    "payload that does not move": (
        arm_parts(frame=[FRAME | {"joint": "base"}], payload=PAYLOAD),
        'arm: payload.frame: must be a frame that moves, got "tool", which is fixed to the base.',
    ),
    "rest policy": (
        arm_parts(rest={"damping_nm_s_rad": [1.0], "moving_s": 500, "still": "none"}),
        "arm: rest.moving_s: must be a finite number > 0 and <= 10 s, got 500. It looks like milliseconds; 500 ms are 0.5 s.\n"
        'arm: rest.still: must be one of brake, gravity, zero, got "none".',
    ),
    "rest damping": (
        arm_parts(rest={"damping_nm_s_rad": [1.0, -2.0], "moving_s": 0.5, "still": "brake"}),
        "arm: rest.damping_nm_s_rad[1]: must be a finite number >= 0 N m s/rad, got -2.0.",
    ),
    "gravity as a number": (
        arm_parts(gravity_m_s2=-9.81),
        "arm: gravity_m_s2: must be a list of 3 finite numbers in m/s^2, got -9.81. "
        "It is a vector in base coordinates: [0.0, 0.0, -9.80665] when z points up.",
    ),
    "joint is no table": (
        arm_parts(joint("a"), 7),  # type: ignore[arg-type]  # the mistake
        "arm: joint[1]: must be a table (keys: name, kind, parent, origin_m, rotation_rad), got 7.",
    ),
    "empty": (
        {},
        "arm: name: must be given, text, got nothing.\n"
        "arm: source: must be given, text, got nothing.\n"
        "arm: gravity_m_s2: must be given, a list of 3 finite numbers in m/s^2, got nothing.\n"
        "arm: joint: must be given, one table [[joint]] or more, got nothing.\n"
        "arm: rest: must be given, a table [rest] with damping_nm_s_rad, moving_s, still, got nothing.",
    ),
}


@pytest.mark.parametrize(("parts", "text"), ARMS.values(), ids=ARMS)
def test_wrong_arms(parts: dict[str, Any], text: str) -> None:
    """What is wrong between joints, frames and payload is said with the nearest name; what moves the arm has no default."""
    error = refusal(parts)
    assert str(error) == text
    assert isinstance(error, ModelError if "moves some mass" in text else ConfigError)


def test_zero_axis() -> None:
    """A direction has a length."""
    parts = arm_parts(without(joint("a", axis_ratio=[0.0, 0.0, 0.0]), "axis"))
    assert str(refusal(parts)) == "arm: joint[0].axis_ratio: must be a direction, not all zero, got [0.0, 0.0, 0.0]."
    parts = arm_parts(without(joint("a"), "axis"))
    assert str(refusal(parts)) == "arm: joint[0]: must be given an axis as axis or as axis_ratio, got neither."


def test_broken_triangle_for_simulation_only() -> None:
    """Published data that breaks the triangle inequality is let through when asked, with a warning; indefinite data is not."""
    parts = arm_parts(joint("shoulder", body=BODY | {"inertia_kgm2": [0.01, 0.02, 0.04, 0.0, 0.0, 0.0]}))
    assert arm_from_parts(parts, simulation_only=True).warnings == (
        "arm: joint[0].body.inertia_kgm2: must be such that no principal moment exceeds the sum of the other two, got principal "
        "moments 0.01, 0.02, 0.04 kg m^2. No body has it. Accepted for simulation only.",
    )
    with pytest.raises(ModelError):
        arm_from_parts(
            arm_parts(joint("a", body=BODY | {"inertia_kgm2": [-0.01, 0.02, 0.02, 0.0, 0.0, 0.0]})), simulation_only=True
        )


def test_lines_of_a_file(tmp_path: Path) -> None:
    """Problems of form, physics and structure come together, each with its line."""
    text = (TOP / "configs/arms/one_joint.toml").read_text()
    for old, new in (
        ("mass_kg = 1.57", "mass_kg = -1.57"),
        ('frame = "tip"', 'frame = "tipp"'),
        ("position_max_rad = 2.4", "position_max_rad = -2.6"),
        ("coulomb_nm = 0.6", "coulomb_n = 0.6"),
    ):
        assert old in text
        text = text.replace(old, new)
    file = tmp_path / "arm.toml"
    file.write_text(text)
    with pytest.raises(ConfigError) as caught:
        load_arm(file)
    assert str(caught.value) == "\n".join(
        [
            f"{file}:17: joint[0].body.mass_kg: must be a finite number > 0 kg, got -1.57.",
            f"{file}:28: joint[0].friction.coulomb_nm: must be given, a finite number >= 0 N m, got nothing.",
            f"{file}:30: joint[0].friction.coulomb_n: must be a known key, got an unknown one. The nearest is coulomb_nm.",
            f'{file}:49: payload.frame: must be the name of a frame, got "tipp". The nearest is tip.',
            f"{file}:35: joint[0].limits.position_min_rad: must be less than position_max_rad (-2.6 rad), got -2.4. "
            "The two are exchanged.",
        ]
    )


def numbers(value: Any, path: tuple[Any, ...] = ()) -> list[tuple[Any, ...]]:
    """Paths of all numbers."""
    if isinstance(value, dict):
        return [place for key, entry in value.items() for place in numbers(entry, (*path, key))]
    if isinstance(value, list):
        return [place for k, entry in enumerate(value) for place in numbers(entry, (*path, k))]
    return [path] if isinstance(value, float) else []


def test_many_planted_mistakes_are_all_found() -> None:
    """Of 100 mistakes planted at random places of one description, all are found in one pass, each at its place."""
    chance = random.Random(11)
    joints = [joint(f"j{k}", f"j{k - 1}" if k else "base", ("revolute", "prismatic")[k % 2]) for k in range(12)]
    parts = arm_parts(*joints, frame=[FRAME | {"joint": "j1"}], payload=PAYLOAD)
    places = chance.sample([place for place in numbers(parts) if place[0] != "rest"], 100)
    for place in places:
        table: Any = parts
        for part in place[:-1]:
            table = table[part]
        table[place[-1]] = chance.choice([math.nan, "1 kg", True, [1.0]])
    found = {finding.where.removeprefix("arm: ") for finding in refusal(parts).findings}
    assert found == {"".join(f"[{p}]" if isinstance(p, int) else f".{p}" for p in place)[1:] for place in places}
