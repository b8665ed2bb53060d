"""Waypoints: through every row, from rest to rest, and files that cannot be meant."""

from pathlib import Path

import numpy as np
import pytest

from rtctl.errors import ConfigError
from rtctl.references import sample_motion
from tests.reference_stand import START, assert_smooth, reference, write_waypoints

ROUNDING = 1e-12


def refusal(tmp_path: Path, text: str) -> list[str]:
    """Lines of the refusal of a file with this text, its folder left out."""
    with pytest.raises(ConfigError) as refused:
        reference(tmp_path, **write_waypoints(tmp_path, text))
    return str(refused.value).replace(str(tmp_path) + "/", "").splitlines()


def test_motion_is_smooth_over_all_its_joins(tmp_path: Path) -> None:
    """Approach, every row and the final rest join without a step in acceleration."""
    assert_smooth(reference(tmp_path, **write_waypoints(tmp_path)), [1.5, 1.9, 2.6, 3.5])


def test_every_row_is_passed_at_its_time(tmp_path: Path) -> None:
    """Times count from the first row, after the approach move; columns are matched by name."""
    _, q, _, _ = sample_motion(reference(tmp_path, **write_waypoints(tmp_path)), START, 1.5 + np.array([0.0, 0.4, 1.1, 2.0, 9.0]))
    assert q == pytest.approx(np.array([[0.0, 0.5], [0.3, 0.4], [0.5, -0.1], [0.1, 0.2], [0.1, 0.2]]), abs=ROUNDING)


def test_a_dense_recording_is_followed_between_its_rows(tmp_path: Path) -> None:
    """Through rows of a smooth motion every 10 ms, position and acceleration between the rows are those of the motion."""
    t = np.linspace(0.0, 2.0, 201)

    def motion(t: np.ndarray) -> np.ndarray:
        return 0.4 * (1.0 - np.cos(np.pi * t)) ** 2

    rows = "".join(f"{x!r},{float(motion(np.array(x)))!r},0.0\n" for x in t.tolist())
    prepared = reference(tmp_path, **write_waypoints(tmp_path, "t[s],a[rad],b[rad]\n" + rows))
    middle = t[20:180] + 0.005
    _, q, _, qdd = sample_motion(prepared, START, 1.5 + middle)
    acceleration = 0.8 * np.pi**2 * (np.cos(np.pi * middle) - np.cos(2.0 * np.pi * middle))
    assert q[:, 0] == pytest.approx(motion(middle), abs=1e-9)  # sixth order in 10 ms
    assert qdd[:, 0] == pytest.approx(acceleration, abs=1e-3)  # fourth order in 10 ms


def test_a_column_in_degrees_is_recognised(tmp_path: Path) -> None:
    """A span no limited joint can turn is named with its likely unit."""
    assert refusal(tmp_path, "t[s],a[rad],b[rad]\n0,-88,0\n5,90,0\n") == [
        "motion.csv: column of a: must be in rad, within the 4.5 rad and 3 rad/s of the joint, got up to 35.6 rad/s. "
        "The column spans 178: it looks like degrees. Multiply by pi/180."
    ]


def test_a_file_that_ends_in_motion_is_refused(tmp_path: Path) -> None:
    """Rows every millisecond that stop at 0.8 rad/s would need a stop within one of them; the torque limit says no."""
    rows = "".join(f"{k / 1000},{0.4 * (k / 1000) ** 2},0\n" for k in range(1001))
    lines = refusal(tmp_path, "t[s],a[rad],b[rad]\n" + rows)
    assert len(lines) == 1
    assert lines[0].startswith("motion.csv: row 1001, a: must be at rest within the ")
    assert "that tau_max can give, got 0.8 rad/s over the 1 ms beside it, which takes " in lines[0]
    assert lines[0].endswith(
        "The file begins or ends in the middle of a motion. Add rows in which the joint starts from or comes to rest."
    )


def test_a_file_that_starts_in_motion_is_refused(tmp_path: Path) -> None:
    """The same at the first row."""
    rows = "".join(f"{k / 1000},{-0.4 * (1 - k / 1000) ** 2},0\n" for k in range(1001))
    lines = refusal(tmp_path, "t[s],a[rad],b[rad]\n" + rows)
    assert len(lines) == 1
    assert lines[0].startswith("motion.csv: row 1, a: must be at rest")
