"""The check of a motion before anything moves."""

from pathlib import Path
from typing import Any

import numpy as np

from rtctl.blocks import LIMITS
from rtctl.kernels.layout import new_block
from rtctl.references import check_reference
from tests.hand_arm import hand_arm
from tests.plants import chain_model
from tests.reference_stand import MULTI_SINE, POINT_TO_POINT, START, reference, write_waypoints

LAST = 2001  # rows of a two-second motion


def findings(folder: Path, q_start: Any = START, **settings: Any) -> list[str]:
    """Texts of all findings with the limits of the hand-made arm."""
    arm = hand_arm(chain_model(2))
    limits = new_block(LIMITS)
    for name in ("q_min", "q_max", "qd_max"):
        limits[name][:2] = getattr(arm, name)
    found = check_reference(reference(folder, **settings), arm, limits, q_start)
    return [str(finding).replace(str(folder) + "/", "") for finding in found]


def test_a_motion_within_its_limits_has_no_findings(tmp_path: Path) -> None:
    """Every kind passes when it fits; a goal on the limit itself fits."""
    assert findings(tmp_path, kind="hold") == []
    assert findings(tmp_path, **POINT_TO_POINT) == []
    assert findings(tmp_path, **MULTI_SINE) == []
    assert findings(tmp_path, **write_waypoints(tmp_path)) == []
    assert findings(tmp_path, **{**POINT_TO_POINT, "goal_rad": [2.5, -2.0], "duration_s": 5.0}) == []


def test_position_limits_are_reported_with_the_first_time(tmp_path: Path) -> None:
    """From 0.3 to 2.7 rad in 10 s the limit of 2.5 rad is first passed at 7.563 s, by the minimum-jerk polynomial."""
    s = np.polynomial.Polynomial([0.0, 0.0, 0.0, 10.0, -15.0, 6.0])
    u = min(root.real for root in (s - (2.5 - 0.3) / 2.4).roots() if abs(root.imag) < 1e-9 and 0.0 < root.real < 1.0)
    first_s = np.ceil(u * 10.0 * 1e3) / 1e3
    lines = findings(tmp_path, **{**POINT_TO_POINT, "goal_rad": [2.7, 0.0], "duration_s": 10.0})
    assert lines == [
        "reference: position of joint 1 (a): must be within -2 and 2.5 rad, "
        f"got {0.3 + 2.4 * s(first_s / 10.0):.4g} rad at {first_s:.3f} s (worst 2.7)."
    ]


def test_speed_limits_are_reported_for_each_joint(tmp_path: Path) -> None:
    """1.6 and 0.7 rad in 0.4 s peak at 7.5 and 3.281 rad/s, by 15/8 d/T; the limit is 3 rad/s."""
    lines = findings(tmp_path, **{**POINT_TO_POINT, "goal_rad": [1.9, 0.3], "duration_s": 0.4})
    assert [line.split(", got ")[0] for line in lines] == [
        "reference: speed of joint 1 (a): must be at most 3 rad/s",
        "reference: speed of joint 2 (b): must be at most 3 rad/s",
    ]
    assert [line.split("(worst ")[1] for line in lines] == ["7.5).", "3.281)."]


def test_a_first_row_far_from_the_arm_is_refused_without_approach(tmp_path: Path) -> None:
    """The distance is said in degrees, with the way out."""
    settings = {**write_waypoints(tmp_path), "approach_duration_s": None}
    assert findings(tmp_path, q_start=(0.0, -0.5995574), **settings) == [
        "reference: row 1 of motion.csv, joint 2 (b): must be within 1.15 deg of the arm, got 63 deg from it. "
        "Ask for an approach move with reference.approach_duration_s, or bring the arm there."
    ]
    assert findings(tmp_path, q_start=(0.01, 0.49), **settings) == []


def test_a_distance_of_more_than_a_turn_looks_like_degrees(tmp_path: Path) -> None:
    """A first pose many turns away is more likely a unit than a place."""
    (line,) = findings(tmp_path, **{**MULTI_SINE, "center_rad": [30.0, -0.4], "approach_duration_s": None})
    assert line == (
        "reference: center_rad, joint 1 (a): must be within 1.15 deg of the arm, got 1.7e+03 deg from it. It looks like degrees. "
        "Ask for an approach move with reference.approach_duration_s, or bring the arm there."
    )


def test_a_start_pose_that_is_not_finite_is_a_finding(tmp_path: Path) -> None:
    """Nothing is sampled from a pose that is not a number."""
    assert findings(tmp_path, q_start=(0.0, np.nan), **POINT_TO_POINT) == [
        "start pose: must be 2 finite numbers, got [0.0, nan]."
    ]
