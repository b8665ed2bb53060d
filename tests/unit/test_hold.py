"""Hold: the measured pose, for ever."""

from pathlib import Path

import numpy as np
import pytest

from rtctl.references import begin_motion, sample_motion
from tests.reference_stand import START, reference


def test_pose_is_kept_without_end(tmp_path: Path) -> None:
    """At any time the reference is the pose measured at the start, at rest."""
    prepared = reference(tmp_path, kind="hold")
    assert np.isinf(begin_motion(prepared, START)["end_s"])
    _, q, qd, qdd = sample_motion(prepared, START, [0.0, 0.001, 5.0, 1e6])
    assert np.array_equal(q, [START] * 4)
    assert not qd.any() and not qdd.any()


def test_a_pose_that_is_not_a_number_is_not_kept(tmp_path: Path) -> None:
    """A measured NaN begins nothing."""
    with pytest.raises(ValueError, match="must be finite"):
        begin_motion(reference(tmp_path, kind="hold"), [0.0, np.nan])
