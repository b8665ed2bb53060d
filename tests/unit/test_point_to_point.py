"""Point to point: timed and limit-driven moves."""

from pathlib import Path
from typing import Any

import numpy as np
import pytest

from rtctl.errors import ConfigError
from rtctl.references import begin_motion, sample_motion
from tests.reference_stand import POINT_TO_POINT, START, assert_smooth, reference
from tests.sources import source

BY_LIMITS = {**POINT_TO_POINT, "duration_s": None, "speed_max_rad_s": [0.8, 0.5], "acceleration_max_rad_s2": 4.0}
FINE = 1e-6  # a peak between samples of 1 ms


def refusal(tmp_path: Path, **settings: Any) -> list[str]:
    """Lines of the refusal."""
    with pytest.raises(ConfigError) as refused:
        reference(tmp_path, **{**POINT_TO_POINT, **settings})
    return str(refused.value).splitlines()


def test_motion_is_smooth_from_start_to_rest(tmp_path: Path) -> None:
    """Position, velocity and acceleration are continuous throughout and at the end."""
    assert_smooth(reference(tmp_path, **POINT_TO_POINT), [2.0])


def test_goal_is_reached_in_the_time_asked(tmp_path: Path) -> None:
    """All joints arrive together after duration_s, half-way at half time."""
    prepared = reference(tmp_path, **POINT_TO_POINT)
    assert begin_motion(prepared, START)["end_s"] == 2.0
    _, q, _, _ = sample_motion(prepared, START, [1.0, 2.0])
    assert q == pytest.approx(np.array([[0.65, -0.8], [1.0, -1.2]]), abs=1e-15)


@source("flash-hogan1985", "peak speed 15/8 d/T, peak acceleration 10/sqrt(3) d/T^2")
def test_limits_are_used_fully_and_kept(tmp_path: Path) -> None:
    """Joint 2 moves 0.8 rad at 0.5 rad/s at most: T = 3 s, its speed reaches the limit and nothing passes one."""
    prepared = reference(tmp_path, **BY_LIMITS)
    assert begin_motion(prepared, START)["end_s"] == pytest.approx(15.0 / 8.0 * 0.8 / 0.5, rel=1e-14)
    _, _, qd, qdd = sample_motion(prepared, START)
    assert np.abs(qd).max(axis=0) == pytest.approx([0.7 / 0.8 * 0.5, 0.5], abs=FINE)
    assert np.abs(qdd).max() <= 10.0 / np.sqrt(3.0) * 0.8 / 9.0 * (1 + FINE)


@source("flash-hogan1985", "peak acceleration 10/sqrt(3) d/T^2")
def test_acceleration_limit_decides_for_short_moves(tmp_path: Path) -> None:
    """With a low acceleration limit the peak acceleration reaches it and the speed stays below its limit."""
    prepared = reference(tmp_path, **{**BY_LIMITS, "acceleration_max_rad_s2": 0.1, "speed_max_rad_s": 2.0})
    _, _, qd, qdd = sample_motion(prepared, START)
    assert np.abs(qdd).max() == pytest.approx(0.1, rel=1e-5)
    assert np.abs(qd).max() < 2.0


def test_at_the_goal_already_nothing_moves(tmp_path: Path) -> None:
    """A move over no distance by limits ends at once, at rest."""
    prepared = reference(tmp_path, **{**BY_LIMITS, "goal_rad": list(START)})
    assert begin_motion(prepared, START)["end_s"] == 0.0
    _, q, qd, qdd = sample_motion(prepared, START, [0.0, 1.0])
    assert np.array_equal(q, [START] * 2) and not qd.any() and not qdd.any()


def test_time_or_limits_never_both(tmp_path: Path) -> None:
    """One of the two ways to give the speed is asked for, completely."""
    expected = "reference: must be given either duration_s or both speed_max_rad_s and acceleration_max_rad_s2, got "
    assert refusal(tmp_path, duration_s=None) == [expected + "none of them."]
    assert refusal(tmp_path, duration_s=None, speed_max_rad_s=1.0) == [expected + "speed_max_rad_s."]
    assert refusal(tmp_path, speed_max_rad_s=1.0, acceleration_max_rad_s2=1.0) == [
        expected + "duration_s and speed_max_rad_s and acceleration_max_rad_s2."
    ]


def test_every_problem_is_reported_at_once(tmp_path: Path) -> None:
    """Duration and goal are both named."""
    assert refusal(tmp_path, duration_s=-1.0, goal_rad=[0.0, float("nan")]) == [
        "reference.duration_s: must be a finite number > 0 s, got -1.0.",
        "reference.goal_rad[1]: must be a finite number in rad, got nan.",
    ]


def test_limits_must_be_positive(tmp_path: Path) -> None:
    """A speed of zero never arrives."""
    settings = {**BY_LIMITS, "speed_max_rad_s": [0.8, 0.0]}
    with pytest.raises(ConfigError) as refused:
        reference(tmp_path, **settings)
    assert str(refused.value) == "reference.speed_max_rad_s[1]: must be a finite number > 0 rad/s, got 0.0."
