"""Multi-sine: the sum of sines, its window, its refusals."""

from pathlib import Path
from typing import Any

import numpy as np
import pytest

from rtctl.errors import ConfigError
from rtctl.references import sample_motion
from tests.reference_stand import MULTI_SINE, START, assert_smooth, reference

ROUNDING = 1e-12


def refusal(tmp_path: Path, **settings: Any) -> list[str]:
    """Lines of the refusal."""
    with pytest.raises(ConfigError) as refused:
        reference(tmp_path, **{**MULTI_SINE, **settings})
    return str(refused.value).splitlines()


def test_motion_is_smooth_over_all_its_joins(tmp_path: Path) -> None:
    """Approach, fade in, full sines, fade out and rest join without a step in acceleration."""
    assert_smooth(reference(tmp_path, **MULTI_SINE), [1.0, 2.0, 6.0, 7.0])


def test_without_approach_the_arm_settles_onto_the_centre(tmp_path: Path) -> None:
    """A small distance at the start is closed smoothly although no approach move is asked for."""
    near = {**MULTI_SINE, "approach_duration_s": None, "center_rad": [0.31, -0.405]}
    assert_smooth(reference(tmp_path, **near), [])


def test_between_the_fades_it_is_the_plain_sum_of_sines(tmp_path: Path) -> None:
    """Position, velocity and acceleration at full size agree with the sum written out; time counts from the end of the approach."""
    t = np.array([1.0, 2.5, 3.7, 5.0])
    _, q, qd, qdd = sample_motion(reference(tmp_path, **MULTI_SINE), START, t + 1.0)
    rate = 2.0 * np.pi * np.array(MULTI_SINE["frequency_hz"])
    for i in range(2):
        A, phase = np.array(MULTI_SINE["amplitude_rad"][i]), np.array(MULTI_SINE["phase_rad"][i])
        angle = np.outer(t, rate) + phase
        assert q[:, i] == pytest.approx(MULTI_SINE["center_rad"][i] + np.sin(angle) @ A, abs=ROUNDING)
        assert qd[:, i] == pytest.approx(np.cos(angle) @ (A * rate), abs=ROUNDING)
        assert qdd[:, i] == pytest.approx(-np.sin(angle) @ (A * rate**2), abs=1e-10)


def test_ends_at_the_centre(tmp_path: Path) -> None:
    """After the fade-out the arm rests at the centre pose."""
    _, q, _, _ = sample_motion(reference(tmp_path, **MULTI_SINE), START, [7.0, 9.0])
    assert np.array_equal(q, [MULTI_SINE["center_rad"]] * 2)


def test_every_problem_is_reported_at_once(tmp_path: Path) -> None:
    """Centre, frequency, amplitude, phase, fade and approach are all named."""
    settings = {
        "approach_duration_s": 0.0,
        "center_rad": [0.2],
        "frequency_hz": [0.5, 0.0],
        "amplitude_rad": [[0.3], 0.2],
        "phase_rad": [[0.0, "x"]],
        "fade_s": 4.0,
    }
    assert refusal(tmp_path, **settings) == [
        "reference.approach_duration_s: must be a finite number > 0 s, got 0.0.",
        "reference.center_rad: must be one number or a list of 2 numbers, one per joint, got a list of 1.",
        "reference.fade_s: must be at most half of duration_s (3 s), got 4 s. The sines grow and shrink within the duration.",
        "reference.frequency_hz[1]: must be a finite number > 0 Hz, got 0.0.",
        "reference.amplitude_rad[0]: must be a list of 2 numbers, one per frequency, got a list of 1.",
        "reference.amplitude_rad[1]: must be a list of 2 numbers, one per frequency, got 0.2.",
        "reference.phase_rad: must be a list of 2 lists, one per joint, of 2 numbers each, got a list of 1.",
    ]


def test_numbers_inside_the_lists_are_checked(tmp_path: Path) -> None:
    """An amplitude that is not finite is named by joint and tone."""
    assert refusal(tmp_path, amplitude_rad=[[0.3, 0.1], [float("inf"), 0.05]]) == [
        "reference.amplitude_rad[1][0]: must be a finite number in rad, got inf."
    ]


def test_number_of_tones_is_bounded(tmp_path: Path) -> None:
    """None and nine are refused."""
    for count in (0, 9):
        assert refusal(tmp_path, frequency_hz=[1.0] * count) == [
            f"reference.frequency_hz: must be a list of 1 to 8 numbers, got a list of {count}."
        ]
