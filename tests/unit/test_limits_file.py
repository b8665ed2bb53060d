"""Limits files: never looser than the arm, and runs only tighter. Invented data."""

import math
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from rtctl.arm import arm_from_parts
from rtctl.blocks import LIMITS, STOP_FAULT, STOP_NOW
from rtctl.config.limits_file import limits_block
from rtctl.config.toml_file import Document, read_toml
from rtctl.errors import Finding
from tests.arm_parts import arm_parts, joint
from tests.structure.sources_of import TOP

ARM = arm_from_parts(arm_parts(), name="arm.toml")

KEYS: dict[str, Any] = {
    "name": "lab",
    "arm": "tester",
    "source": "invented",
    "position_min_rad": -1.5,
    "position_max_rad": [1.4, 1.5],
    "speed_max_rad_s": 2.0,
    "torque_max_nm": [50, 40.0],
    "torque_rate_max_nm_s": 3000.0,
    "braking_torque_rate_max_nm_s": 5000.0,
    "tracking_error_max_rad": 0.2,
    "tracking_error_dwell_s": 0.02,
    "torque_demand_dwell_s": 0.2,
    "state_age_max_s": 0.01,
    "resend_max_count": 4,
    "late_s": 0.001,
    "late_max_count": 5,
    "late_window_count": 500,
    "side_thread_silent_max_s": 0.5,
    "loop_delay_max_s": 0.015,
    "glitch_factor": 3.0,
    "valid_for_s": 0.02,
    "still_speed_rad_s": 0.03,
    "still_dwell_s": 0.05,
    "ready_dwell_s": 0.1,
    "holding_torque_max_ratio": 0.8,
    "start_ramp_s": 0.2,
    "braking_damping_nm_s_rad": [20.0, 0.0],
    "braking_deadline_s": 1.0,
    "holding_stiffness_nm_rad": 100.0,
    "holding_spring_torque_max_nm": [10.0, 5.0],
    "estop": "category 1",
    "torque_clamp": "scaled",
    "gravity_added_allowed": False,
}


def block_and_texts(keys: dict[str, Any], run: dict[str, Any] | None = None, arm: Any = ARM) -> tuple[np.void, list[str]]:
    findings: list[Finding] = []
    document = None if run is None else Document("run", {"limits": run})
    block = limits_block(arm, Document("lim", keys), document, findings)
    return block, [str(finding) for finding in findings]


def texts(keys: dict[str, Any], run: dict[str, Any] | None = None) -> list[str]:
    return block_and_texts(keys, run)[1]


def test_every_field_is_filled() -> None:
    """Each key reaches its field, times as whole nanoseconds, joints beyond the arm's zero."""
    block, problems = block_and_texts(KEYS)
    assert problems == []
    expected = {
        "n": 2,
        "arm_key": ARM.key,
        "q_min": [-1.5, -1.5],
        "q_max": [1.4, 1.5],
        "qd_max": [2.0, 2.0],
        "tau_max": [50.0, 40.0],
        "tau_rate_max": [3000.0, 3000.0],
        "brake_tau_rate_max": [5000.0, 5000.0],
        "error_max": [0.2, 0.2],
        "error_dwell_ns": 20_000_000,
        "demand_dwell_ns": 200_000_000,
        "state_age_max_ns": 10_000_000,
        "resend_max": 4,
        "late_ns": 1_000_000,
        "late_max": 5,
        "late_window": 500,
        "side_silent_ns": 500_000_000,
        "loop_delay_max_ns": 15_000_000,
        "glitch_factor": 3.0,
        "valid_for_ns": 20_000_000,
        "still_qd": [0.03, 0.03],
        "still_dwell_ns": 50_000_000,
        "ready_dwell_ns": 100_000_000,
        "hold_margin": 0.8,
        "ramp_ns": 200_000_000,
        "brake_damping": [20.0, 0.0],
        "brake_deadline_ns": 1_000_000_000,
        "hold_stiffness": [100.0, 100.0],
        "hold_torque_max": [10.0, 5.0],
        "estop_stop": STOP_FAULT,
        "scale_torque": 1,
        "allow_gravity_added": 0,
    }
    assert set(expected) == set(LIMITS.names or ())
    for name, value in expected.items():
        if isinstance(value, list):
            assert list(block[name]) == value + [0.0] * 14, name
        else:
            assert block[name] == value, name


def test_every_key_is_needed() -> None:
    """There is no default: each missing key is named."""
    for key in KEYS:
        problems = texts({name: value for name, value in KEYS.items() if name != key})
        assert len(problems) == 1 and problems[0].startswith(f"lim: {key}: must be given"), problems


def test_continuous_joint_has_infinite_limits() -> None:
    """A joint without end has the limits -inf and inf, and no joint else."""
    arm = arm_from_parts(arm_parts(joint("a", kind="continuous"), joint("b", "a")))
    keys = KEYS | {"position_min_rad": [-math.inf, -1.0], "position_max_rad": [math.inf, 1.0]}
    block, problems = block_and_texts(keys, arm=arm)
    assert problems == [] and list(block["q_max"][:2]) == [math.inf, 1.0]
    _, problems = block_and_texts(keys | {"position_max_rad": [3.0, math.inf]}, arm=arm)
    assert problems == [
        "lim: position_max_rad[0]: must be inf for the continuous joint a, got 3.0.",
        "lim: position_max_rad[1]: must be a finite number in rad, got inf.",
    ]


@pytest.mark.parametrize(
    ("change", "text"),
    [
        ({"torque_max_nm": [50.0, 70.0]}, "lim: torque_max_nm[1] (elbow): must be at most 60 N m as in arm.toml, got 70."),
        (
            {"position_max_rad": [120.0, 1.0]},
            "lim: position_max_rad[0] (shoulder): must be at most 2 rad as in arm.toml, got 120. "
            "It looks like degrees; 120 degrees are 2.094 rad.",
        ),
        ({"position_min_rad": -2.5}, [
            "lim: position_min_rad[0] (shoulder): must be at least -2 rad as in arm.toml, got -2.5.",
            "lim: position_min_rad[1] (elbow): must be at least -2 rad as in arm.toml, got -2.5.",
        ]),
        ({"speed_max_rad_s": [1.0, 3.5]}, "lim: speed_max_rad_s[1] (elbow): must be at most 3 rad/s as in arm.toml, got 3.5."),
        (
            {"braking_torque_rate_max_nm_s": [6001.0, 6000.0]},
            "lim: braking_torque_rate_max_nm_s[0] (shoulder): must be at most 6000 N m/s as in arm.toml, got 6001.",
        ),
        (
            {"holding_spring_torque_max_nm": [10.0, 45.0]},
            "lim: holding_spring_torque_max_nm[1] (elbow): must be at most 40 N m as in torque_max_nm, got 45.",
        ),
        ({"position_min_rad": [1.4, -1.0]}, "lim: position_min_rad[0]: must be less than position_max_rad (1.4 rad), got 1.4."),
        (
            {"speed_max_rad_s": [1.0]},
            "lim: speed_max_rad_s: must be one number or a list of 2 numbers, one per joint, got a list of 1.",
        ),
        (
            {"braking_torque_rate_max_nm_s": [3000.0, 2999.0]},
            "lim: braking_torque_rate_max_nm_s[1] (elbow): must be at least 3000 N m/s as in torque_rate_max_nm_s, got 2999.",
        ),
        (
            {"still_speed_rad_s": [0.2, 1e308]},
            "lim: still_speed_rad_s[1] (elbow): must be at most 0.2 rad/s (a tenth of speed_max_rad_s), got 1e+308.",
        ),
        ({"speed_max_rad_s": 0.0}, "lim: speed_max_rad_s: must be a finite number > 0 rad/s, or a list of 2 of them, got 0.0."),
        ({"torque_max_nm": [-1.0, 1.0]}, [
            "lim: torque_max_nm[0]: must be a finite number > 0 N m, got -1.0.",
        ]),
        (
            {"valid_for_s": 20},
            "lim: valid_for_s: must be a finite number > 0 and <= 1 s, got 20. It looks like milliseconds; 20 ms are 0.02 s.",
        ),
        ({"late_max_count": 600}, "lim: late_max_count: must be at most late_window_count (500), got 600."),
        ({"arm": "tister"}, 'lim: arm: must be "tester", the arm of this run, got "tister".'),
        ({"estop": "category 2"}, 'lim: estop: must be one of category 0, category 1, got "category 2".'),
        ({"glitch_facto": 3.0}, "lim: glitch_facto: must be a known key, got an unknown one. The nearest is glitch_factor."),
    ],
)  # fmt: skip
def test_refused_values(change: dict[str, Any], text: str | list[str]) -> None:
    """A limit looser than the arm's names both values; other mistakes name what was expected."""
    assert texts(KEYS | change) == ([text] if isinstance(text, str) else text)


def test_prismatic_joints_in_metres() -> None:
    """Messages about a sliding joint speak of m and N, whatever the key's name says."""
    arm = arm_from_parts(arm_parts(joint("a", kind="prismatic"), joint("b", "a")), name="arm.toml")
    keys = KEYS | {"position_min_rad": [-0.2, -1.0], "position_max_rad": [0.5, 1.0], "torque_max_nm": [500.0, 10.0]}
    _, problems = block_and_texts(keys | {"speed_max_rad_s": [0.5, 1.0], "holding_spring_torque_max_nm": 1.0}, arm=arm)
    assert problems == [
        "lim: position_max_rad[0] (a): must be at most 0.4 m as in arm.toml, got 0.5.",
        "lim: torque_max_nm[0] (a): must be at most 400 N as in arm.toml, got 500.",
    ]


def test_a_run_may_tighten() -> None:
    """Tighter values of a run file take the place of the limits file's; the others stay."""
    run = {"torque_max_nm": 20.0, "state_age_max_s": 0.005, "start_ramp_s": 0.5, "late_window_count": 1000, "estop": "category 1"}
    block, problems = block_and_texts(KEYS, run)
    assert problems == []
    assert list(block["tau_max"][:2]) == [20.0, 20.0] and list(block["qd_max"][:2]) == [2.0, 2.0]
    assert (block["state_age_max_ns"], block["ramp_ns"], block["late_window"]) == (5_000_000, 500_000_000, 1000)


LOOSER = {
    "position_min_rad": (-1.6, "at least -1.5 rad", "-1.6"),
    "position_max_rad": (1.6, "", ""),
    "speed_max_rad_s": (2.1, "at most 2 rad/s", "2.1"),
    "torque_rate_max_nm_s": (3001.0, "at most 3000 N m/s", "3001"),
    "braking_torque_rate_max_nm_s": (5001.0, "at most 5000 N m/s", "5001"),
    "tracking_error_max_rad": (0.3, "at most 0.2 rad", "0.3"),
    "still_speed_rad_s": (0.04, "at most 0.03 rad/s", "0.04"),
    "holding_stiffness_nm_rad": (99.0, "equal to 100 N m/rad", "99"),
    "tracking_error_dwell_s": (0.03, "at most 0.02 s", "0.03"),
    "torque_demand_dwell_s": (0.3, "at most 0.2 s", "0.3"),
    "state_age_max_s": (0.02, "at most 0.01 s", "0.02"),
    "late_s": (0.002, "at most 0.001 s", "0.002"),
    "side_thread_silent_max_s": (0.6, "at most 0.5 s", "0.6"),
    "loop_delay_max_s": (0.016, "at most 0.015 s", "0.016"),
    "valid_for_s": (0.021, "at most 0.02 s", "0.021"),
    "still_dwell_s": (0.04, "at least 0.05 s", "0.04"),
    "ready_dwell_s": (0.05, "at least 0.1 s", "0.05"),
    "start_ramp_s": (0.1, "at least 0.2 s", "0.1"),
    "braking_deadline_s": (2.0, "at most 1 s", "2"),
    "resend_max_count": (5, "at most 4", "5"),
    "late_max_count": (6, "at most 5", "6"),
    "late_window_count": (400, "at least 500", "400"),
    "glitch_factor": (4.0, "at most 3", "4"),
    "holding_torque_max_ratio": (0.9, "at most 0.8", "0.9"),
    "estop": ("category 0", '"category 1"', '"category 0"'),
    "torque_clamp": ("per joint", '"scaled"', '"per joint"'),
    "gravity_added_allowed": (True, "false", "true"),
}
SEPARATE = {"torque_max_nm", "braking_damping_nm_s_rad", "holding_spring_torque_max_nm", "position_max_rad"}  # differ per joint


@pytest.mark.parametrize("key", [key for key in LOOSER if key not in SEPARATE])
def test_a_run_may_not_loosen(key: str) -> None:
    """Each looser value of a run file is refused, naming both values."""
    value, expected, got = LOOSER[key]
    problems = texts(KEYS, {key: value})
    joints = ["[0] (shoulder)", "[1] (elbow)"] if key.endswith(("_rad", "_rad_s", "_nm_s")) else [""]
    assert problems == [f"run: limits.{key}{place}: must be {expected} as in lim, got {got}." for place in joints]


def test_every_key_has_a_tight_side() -> None:
    """No key of the limits file is forgotten when a run loosens it."""
    assert set(LOOSER) | SEPARATE == set(KEYS) - {"name", "arm", "source"}
    assert texts(KEYS, {"torque_max_nm": [50.0, 41.0], "position_max_rad": [1.4, 1.51]}) == [
        "run: limits.position_max_rad[1] (elbow): must be at most 1.5 rad as in lim, got 1.51.",
        "run: limits.torque_max_nm[1] (elbow): must be at most 40 N m as in lim, got 41.",
    ]
    assert texts(KEYS, {"braking_damping_nm_s_rad": [20.0, 1.0], "holding_spring_torque_max_nm": [10.5, 5.0]}) == [
        "run: limits.braking_damping_nm_s_rad[1] (elbow): must be equal to 0 N m s/rad as in lim, got 1.",
        "run: limits.holding_spring_torque_max_nm[0] (shoulder): must be at most 10 N m as in lim, got 10.5.",
    ]


def test_wrong_table_of_a_run() -> None:
    """Wrong kinds and unknown keys of a run's table are said beside what is too loose."""
    assert texts(KEYS, {"valid_for_s": "20 ms", "still_dwel_s": 1.0, "late_s": 0.5}) == [
        'run: limits.valid_for_s: must be a finite number > 0 and <= 1 s, got "20 ms". '
        "A unit is written beside the number; write the number in s alone.",
        "run: limits.still_dwel_s: must be a known key, got an unknown one. The nearest is still_dwell_s.",
        "run: limits.late_s: must be at most 0.001 s as in lim, got 0.5.",
    ]
    assert texts(KEYS, 3) == ["run: limits: must be a table, got 3."]  # type: ignore[arg-type]  # the mistake


def test_category_0(tmp_path: Path) -> None:
    """An e-stop of category 0 releases at once; a shipped file with that word is read from disk."""
    text = (TOP / "configs/limits/one_joint.toml").read_text()
    file = tmp_path / "limits.toml"
    file.write_text(text.replace('estop = "category 1"', 'estop = "category 0"').replace('"one_joint"', '"tester"'))
    findings: list[Finding] = []
    arm = arm_from_parts(arm_parts(joint("shoulder", limits=LIMITS_OF_RIG)))
    assert limits_block(arm, read_toml(file), None, findings)["estop_stop"] == STOP_NOW
    assert findings == []


LIMITS_OF_RIG = {
    "position_min_rad": -2.4,
    "position_max_rad": 2.4,
    "speed_max_rad_s": 6.0,
    "torque_max_nm": 25.0,
    "torque_rate_max_nm_s": 2500.0,
}
