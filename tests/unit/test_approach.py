"""How an approach move is asked for, and distances as people read them."""

import pytest

from rtctl.blocks import REFERENCE_PARAMETERS
from rtctl.kernels.layout import new_block
from rtctl.references.approach import SETTLING_SPEED, in_degrees, set_approach, start_distance_max


def test_duration_or_settling_limits() -> None:
    """A duration is used as it is; none means the gentle settling move."""
    parameters = new_block(REFERENCE_PARAMETERS)
    assert set_approach(parameters, 2.5) == [] and parameters["duration_s"] == 2.5
    parameters = new_block(REFERENCE_PARAMETERS)
    assert set_approach(parameters, None) == [] and parameters["duration_s"] == 0.0
    assert parameters["qd_max"][0] == SETTLING_SPEED


@pytest.mark.parametrize("bad", [0.0, -1.0, float("nan"), float("inf")])
def test_a_duration_that_is_not_positive_is_refused(bad: float) -> None:
    """The finding names the key."""
    (finding,) = set_approach(new_block(REFERENCE_PARAMETERS), bad)
    assert str(finding) == f"reference.approach_duration_s: must be a finite number > 0 s, got {bad!r}."


def test_distances_are_said_in_the_unit_of_the_joint() -> None:
    """Angles in degrees, lengths in millimetres."""
    assert in_degrees(1.0995574, "rad") == "63 deg"
    assert in_degrees(0.0123, "m") == "12.3 mm"
    assert start_distance_max("m") < start_distance_max("rad")
