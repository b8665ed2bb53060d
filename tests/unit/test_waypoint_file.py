"""Waypoint files: what is read, and the text of every refusal."""

from pathlib import Path

import numpy as np
import pytest

from rtctl.errors import ConfigError
from rtctl.references.waypoint_file import read_waypoints

JOINTS, UNITS = ("hip", "slide"), ("rad", "m")


def refusal(tmp_path: Path, text: str) -> list[str]:
    """Lines of the refusal of a file with this text, its folder left out."""
    (tmp_path / "w.csv").write_text(text, encoding="utf-8")
    with pytest.raises(ConfigError) as refused:
        read_waypoints(tmp_path / "w.csv", JOINTS, UNITS)
    return str(refused.value).replace(str(tmp_path) + "/", "").splitlines()


def test_columns_come_in_the_order_of_the_arm(tmp_path: Path) -> None:
    """Columns may stand in any order, with spaces, empty lines and a byte-order mark; times count from the first row."""
    (tmp_path / "w.csv").write_text("\ufeffslide[m], t[s] ,hip [rad]\n0.1,5.0,1.0\n\n0.2,5.5,1.5\n", encoding="utf-8")
    waypoints = read_waypoints(tmp_path / "w.csv", JOINTS, UNITS)
    assert np.array_equal(waypoints.t, [0.0, 0.5])
    assert np.array_equal(waypoints.q, [[1.0, 0.1], [1.5, 0.2]])


def test_units_other_than_si_are_refused_with_the_way_out(tmp_path: Path) -> None:
    """Degrees, millimetres and milliseconds are named, each with its factor."""
    assert refusal(tmp_path, "t[ms],hip[deg],slide[mm]\n0,0,0\n1,1,1\n") == [
        "w.csv: column 1: must be t[s], got 't[ms]'. Divide by 1000 and write s.",
        "w.csv: column 2: must be hip[rad], got 'hip[deg]'. Multiply by pi/180 and write rad.",
        "w.csv: column 3: must be slide[m], got 'slide[mm]'. Divide by 1000 and write m.",
    ]


def test_a_header_without_units_is_refused(tmp_path: Path) -> None:
    """A bare name leaves the unit open."""
    assert refusal(tmp_path, "t,hip[rad],slide\n0,0,0\n1,1,1\n") == [
        "w.csv: column 1: must be t[s], got 't'. Write s.",
        "w.csv: column 3: must be slide[m], got 'slide'. Write m.",
    ]


def test_unknown_double_and_missing_columns_are_refused_together(tmp_path: Path) -> None:
    """Each column has its own finding, with the nearest name, and what is missing is listed."""
    assert refusal(tmp_path, "t[s],hipp[rad],t[s]\n0,0,0\n1,1,1\n") == [
        "w.csv: column 2: must be t or a joint of the arm (hip, slide), got 'hipp'. The nearest is hip.",
        "w.csv: column 3: must be a column of its own, got t again (first in column 1).",
        "w.csv: header: must be complete: missing hip[rad], slide[m], got t[s],hipp[rad],t[s].",
    ]


def test_bad_cells_are_named_by_row_and_column(tmp_path: Path) -> None:
    """Text, infinity and rows of another length are named; rows count from 1 below the header."""
    assert refusal(tmp_path, "t[s],hip[rad],slide[m]\n0,x,0\n1,inf,\n2,1\n") == [
        "w.csv: row 1, column 2: must be a finite number, got 'x'.",
        "w.csv: row 2, column 2: must be a finite number, got 'inf'.",
        "w.csv: row 2, column 3: must be a finite number, got ''.",
        "w.csv: row 3: must be 3 cells, as in the header, got 2.",
    ]


def test_a_file_full_of_mistakes_is_summed_up(tmp_path: Path) -> None:
    """After ten cells the rest is a number."""
    lines = refusal(tmp_path, "t[s],hip[rad],slide[m]\n" + "".join(f"{k},x,0\n" for k in range(500)))
    assert len(lines) == 11
    assert lines[-1] == "w.csv: rows: must be numbers with a point as decimal sign, got 490 more cells that are not."


@pytest.mark.parametrize(
    ("times", "text"),
    [
        ("0 1 1", "w.csv: row 3: must be later than row 2 (t > 1 s), got 1 s. The same instant twice."),
        (
            "0 2 1",
            "w.csv: row 3: must be later than row 2 (t > 2 s), got 1 s. Rows are out of order, or two recordings were joined.",
        ),
    ],
)
def test_times_must_increase(tmp_path: Path, times: str, text: str) -> None:
    """The first row that is not later than the one before is named."""
    assert refusal(tmp_path, "t[s],hip[rad],slide[m]\n" + "".join(f"{t},0,0\n" for t in times.split())) == [text]


def test_one_row_or_none_is_no_motion(tmp_path: Path) -> None:
    """At least two rows are needed; an empty file says so."""
    assert refusal(tmp_path, "t[s],hip[rad],slide[m]\n0,0,0\n") == ["w.csv: rows: must be at least 2 below the header, got 1."]
    assert refusal(tmp_path, "") == [
        "w.csv: header: must be complete: missing t[s], hip[rad], slide[m], got nothing. The file is empty.",
        "w.csv: rows: must be at least 2 below the header, got 0.",
    ]


def test_a_missing_file_is_refused(tmp_path: Path) -> None:
    """The path is named with the system's reason."""
    with pytest.raises(ConfigError) as refused:
        read_waypoints(tmp_path / "none.csv", JOINTS, UNITS)
    assert str(refused.value) == (
        f"{tmp_path}/none.csv: must be a CSV file that can be read, got No such file or directory. Check the path in the run file."
    )


def test_a_file_that_is_not_text_is_refused(tmp_path: Path) -> None:
    """Bytes that are no UTF-8 are named, not guessed."""
    (tmp_path / "w.csv").write_bytes(b"t[s],hip[rad]\xff\n")
    with pytest.raises(ConfigError, match="must be CSV text in UTF-8"):
        read_waypoints(tmp_path / "w.csv", JOINTS, UNITS)
