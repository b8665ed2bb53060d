"""The closed table of causes."""

import pytest

from rtctl.causes import CAUSES, cause, cause_named


def test_codes_count_from_zero_without_a_gap() -> None:
    """The code of a cause is its place in the table, and 0 is no cause."""
    assert [entry.code for entry in CAUSES] == list(range(len(CAUSES)))
    assert CAUSES[0].name == "none"


def test_every_cause_says_what_why_and_what_next() -> None:
    """Sentences end with a full stop, at least one likely reason each, names unique."""
    for entry in CAUSES[1:]:
        assert entry.sentence.endswith(".")
        assert entry.next.endswith(".")
        assert len(entry.likely) >= 1
    assert len({entry.name for entry in CAUSES}) == len(CAUSES)


def test_a_cause_is_found_by_code_and_by_name() -> None:
    """Both ways lead to the same entry."""
    assert all(cause(entry.code) is cause_named(entry.name) is entry for entry in CAUSES)


@pytest.mark.parametrize("code", [-1, 1000])
def test_an_unknown_code_is_an_error(code: int) -> None:
    """A code outside the table is named with the allowed range, never the last entry by a negative index."""
    with pytest.raises(IndexError, match=f"cause code must be 0..{len(CAUSES) - 1}, got {code}"):
        cause(code)
