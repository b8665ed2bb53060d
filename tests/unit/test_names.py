"""Names of arms, joints, frames and runs."""

import pytest

from rtctl.config.names import name_findings


@pytest.mark.parametrize("name", ["a", "elbow_2", "Arm-7", "x" * 48])
def test_good_names(name: str) -> None:
    """Letters, digits, _ and -, a letter first."""
    assert name_findings("here", name) == []


@pytest.mark.parametrize("name", ["", "2a", "my arm", "a/b", "../up", "a.b", "ä", "a\n", "_a"])
def test_bad_names(name: str) -> None:
    """Nothing that could leave a folder, break a column header or hide in a file name."""
    assert [str(finding) for finding in name_findings("here", name)] == [
        f'here: must be a name of letters, digits, _ and -, a letter first, at most 48 characters, got "{name}".'
    ]


def test_long_names() -> None:
    """A name is at most 48 characters, as socket paths are short."""
    assert name_findings("here", "x" * 49)[0].got == "49 characters"
