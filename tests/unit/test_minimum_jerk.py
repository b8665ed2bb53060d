"""The minimum-jerk move: its published peaks, and the approach move built on it."""

import numpy as np
import pytest

from rtctl.blocks import REFERENCE_MEMORY, REFERENCE_PARAMETERS, REFERENCE_SAMPLE
from rtctl.kernels.layout import OK, new_block
from rtctl.references.minimum_jerk import NOT_FINITE, PEAK_ACCELERATION, PEAK_SPEED, begin_approach, rest_to_rest
from tests.sources import source

ROUNDING = 1e-14


@source(
    "flash-hogan1985", "eq. for rest to rest: peak speed 1.875 d/T at the middle; peak acceleration 10/sqrt(3) d/T^2 = 5.7735"
)
def test_peaks_are_the_published_ones() -> None:
    """Speed peaks at half time with 15/8, acceleration at 1/2 -+ sqrt(3)/6 with 10/sqrt(3); nowhere is more."""
    assert rest_to_rest(0.5)[1] == pytest.approx(1.875, rel=ROUNDING)
    assert PEAK_SPEED == 1.875
    for u, sign in ((0.5 - np.sqrt(3.0) / 6.0, 1.0), (0.5 + np.sqrt(3.0) / 6.0, -1.0)):
        assert rest_to_rest(u)[2] == pytest.approx(sign * 5.773502691896258, rel=ROUNDING)
    samples = np.array([rest_to_rest(u) for u in np.linspace(0.0, 1.0, 1001)])
    assert np.abs(samples[:, 1]).max() <= PEAK_SPEED * (1 + ROUNDING)
    assert np.abs(samples[:, 2]).max() <= PEAK_ACCELERATION * (1 + ROUNDING)


def test_the_move_starts_and_ends_at_rest() -> None:
    """Position 0 and 1, velocity and acceleration zero at both ends, half-way in the middle."""
    assert rest_to_rest(0.0) == (0.0, 0.0, 0.0)
    assert rest_to_rest(1.0) == (1.0, 0.0, 0.0)
    assert rest_to_rest(0.5)[0] == 0.5


def approach(start: list[float], **values: object) -> tuple[int, np.void]:
    """Status and memory of an approach move of two joints."""
    parameters, memory, sample = new_block(REFERENCE_PARAMETERS), new_block(REFERENCE_MEMORY), new_block(REFERENCE_SAMPLE)
    parameters["n"] = 2
    parameters["qd_max"], parameters["qdd_max"] = 1.0, 2.0
    for name, value in values.items():
        parameters[name] = value
    sample["q_ref"][:2] = start
    return int(begin_approach(parameters, memory, sample)), memory


@source("flash-hogan1985", "T = 15/8 d / v_max, or sqrt(10/sqrt(3) d / a_max)")
def test_limits_decide_the_duration() -> None:
    """The joint that needs longest decides for all: by speed over 4 rad (7.5 s), by acceleration over 0.01 rad."""
    assert approach([4.0, 0.01])[1]["approach_s"] == pytest.approx(7.5, rel=ROUNDING)
    assert approach([0.0, -0.01])[1]["approach_s"] == pytest.approx(np.sqrt(5.773502691896258 * 0.01 / 2.0), rel=ROUNDING)
    assert approach([0.0, 0.0])[1]["approach_s"] == 0.0


def test_end_is_that_of_approach_and_body() -> None:
    """A timed approach of 2 s and a body of 3 s end at 5 s."""
    status, memory = approach([0.4, 0.0], duration_s=2.0, body_duration_s=3.0)
    assert (status, memory["approach_s"], memory["end_s"]) == (OK, 2.0, 5.0)


@pytest.mark.parametrize("bad", [np.nan, np.inf])
def test_a_pose_or_duration_that_is_not_finite_is_a_status(bad: float) -> None:
    """No motion begins from a pose that is not a number, nor without end."""
    assert approach([0.0, bad])[0] == NOT_FINITE
    assert approach([0.0, 1.0], qd_max=0.0)[0] == NOT_FINITE
