"""Numbers for joints: one for all or a list, and what is refused."""

import numpy as np
import pytest

from rtctl.config.joint_values import joint_values


def test_one_number_is_for_all_joints() -> None:
    """A number, whole or not, stands for every joint; a list stands for itself."""
    assert np.array_equal(joint_values("k", 2, 3, "N m")[0], [2.0, 2.0, 2.0])
    values, findings = joint_values("k", [1, 2.5, 0], 3, "N m", least=0.0)
    assert np.array_equal(values, [1.0, 2.5, 0.0]) and findings == []


def test_every_faulty_entry_is_reported() -> None:
    """Each entry that is negative, not finite, text or a boolean has its own finding, and is NaN in the result."""
    values, findings = joint_values("k", [1.0, -1.0, np.nan, "2", True, np.inf], 6, "N m", least=0.0)
    assert [str(finding) for finding in findings] == [
        "k[1]: must be a finite number >= 0 N m, got -1.0.",
        "k[2]: must be a finite number >= 0 N m, got nan.",
        "k[3]: must be a finite number >= 0 N m, got '2'.",
        "k[4]: must be a finite number >= 0 N m, got True.",
        "k[5]: must be a finite number >= 0 N m, got inf.",
    ]
    assert values[0] == 1.0 and np.all(np.isnan(values[1:]))


@pytest.mark.parametrize(
    ("value", "text"),
    [
        ([1.0, 2.0], "k: must be one number or a list of 3 numbers, one per joint, got a list of 2."),
        (0, "k: must be a finite number > 0 rad/s, or a list of 3 of them, got 0."),
        ("fast", "k: must be a finite number > 0 rad/s, or a list of 3 of them, got 'fast'."),
        (None, "k: must be a finite number > 0 rad/s, or a list of 3 of them, got None."),
    ],
)
def test_wrong_shape_or_kind_is_refused(value: object, text: str) -> None:
    """A list of another length, zero where more is needed, and text are refused with the whole expectation."""
    assert [str(finding) for finding in joint_values("k", value, 3, "rad/s", above=0.0)[1]] == [text]
