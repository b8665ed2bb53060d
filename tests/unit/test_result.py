"""The JSON a verb prints: one valid object whatever the numbers are."""

import json
from pathlib import Path

import numpy as np

from rtctl.cli.result import Result, json_text
from tests.sources import source


@source("rfc8259", "section 6: infinity and NaN are not permitted")
def test_numbers_that_are_not_finite_become_null() -> None:
    """A NaN in a metric does not make the output unreadable."""
    text = json_text({"a": float("nan"), "b": [float("inf"), 1.5], "c": np.float64(-np.inf)})
    assert json.loads(text) == {"a": None, "b": [None, 1.5], "c": None}


def test_values_of_numpy_and_paths_become_plain_ones() -> None:
    """Arrays become lists, numpy numbers numbers, paths text."""
    text = json_text({"q": np.array([1.0, 2.0]), "n": np.int64(3), "on": np.bool_(True), "path": Path("a/b"), "t": (1, None)})
    assert json.loads(text) == {"q": [1.0, 2.0], "n": 3, "on": True, "path": "a/b", "t": [1, None]}


def test_a_result_passes_unless_it_says_otherwise() -> None:
    """The exit code of a result is 0 unless a verb says that the verdict is negative."""
    assert Result({}, "").exit_code == 0
