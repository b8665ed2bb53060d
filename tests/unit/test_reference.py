"""References made ready from settings."""

from pathlib import Path

import numpy as np
import pytest

from rtctl.errors import ConfigError
from rtctl.references import KINDS
from tests.reference_stand import MULTI_SINE, POINT_TO_POINT, reference, write_waypoints


def test_an_unknown_kind_is_refused(tmp_path: Path) -> None:
    """The kinds are listed."""
    with pytest.raises(ConfigError) as refused:
        reference(tmp_path, kind="sine")
    assert str(refused.value) == (
        "reference.kind: must be one of hold, point_to_point, waypoints, multi_sine, got 'sine'."
    )  # fmt: skip


def test_every_kind_is_made_ready(tmp_path: Path) -> None:
    """Each kind gives parameters for its joints, two addresses, and data that outlives the call."""
    settings = ({"kind": "hold"}, POINT_TO_POINT, write_waypoints(tmp_path), MULTI_SINE)
    assert tuple(entry["kind"] for entry in settings) == KINDS
    for entry in settings:
        prepared = reference(tmp_path, **entry)
        assert prepared.kind == entry["kind"]
        assert prepared.parameters["n"] == 2
        assert prepared.begin.address != prepared.sample.address != 0
        assert prepared.approach_asked
        if prepared.data.size:
            assert prepared.parameters["data"] == prepared.data.ctypes.data
            assert prepared.parameters["data_count"] == prepared.data.size
            assert not prepared.data.flags.writeable


def test_approach_is_known_to_be_asked_for(tmp_path: Path) -> None:
    """Without approach_duration_s the arm must already be near, and the check must know."""
    assert not reference(tmp_path, **{**MULTI_SINE, "approach_duration_s": None}).approach_asked


def test_a_relative_file_counts_from_the_run_file(tmp_path: Path) -> None:
    """The folder given is that of the run file; an absolute path stands alone."""
    settings = write_waypoints(tmp_path)
    near = reference(tmp_path, **settings)
    far = reference(Path("/"), **{**settings, "file": str(tmp_path / "motion.csv")})
    assert np.array_equal(near.data, far.data)
