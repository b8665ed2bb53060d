"""A reference sampled outside the loop."""

from pathlib import Path

import numpy as np
import pytest

from rtctl.references import sample_motion
from rtctl.references.motion import SAMPLES_MAX, time_grid
from tests.reference_stand import POINT_TO_POINT, START, reference


def test_without_times_it_is_sampled_each_millisecond_to_the_end(tmp_path: Path) -> None:
    """A two-second move gives 2001 rows, first and last included."""
    t, q, qd, qdd = sample_motion(reference(tmp_path, **POINT_TO_POINT), START)
    assert (t[0], t[-1], t.size) == (0.0, 2.0, 2001)
    assert q.shape == qd.shape == qdd.shape == (2001, 2)
    assert q[-1] == pytest.approx([1.0, -1.2], abs=1e-15)


def test_the_grid_is_bounded() -> None:
    """A motion of ten hours is sampled more coarsely, a motion without length once at its ends."""
    assert time_grid(36000.0).size == SAMPLES_MAX + 1
    assert np.array_equal(time_grid(0.0), [0.0, 0.0])


def test_a_time_that_is_not_a_number_is_refused(tmp_path: Path) -> None:
    """The failing status of the compiled function becomes an error."""
    with pytest.raises(ValueError, match="failed with status -1"):
        sample_motion(reference(tmp_path, **POINT_TO_POINT), START, [0.0, np.nan])
