"""Writing a report: the page and its numbers beside it, and places that cannot take it."""

import json
from pathlib import Path

import pytest

from rtctl.compare import compare
from rtctl.errors import ConfigError
from rtctl.record.reader import Record, read_record
from rtctl.report import write_report
from tests.synthetic_record import Motion, motion_record


@pytest.fixture(scope="module")
def record(tmp_path_factory: pytest.TempPathFactory) -> Record:
    """One short run."""
    return read_record(motion_record(tmp_path_factory.mktemp("report") / "run.record", Motion(moving_s=0.3)))


def test_page_json_and_csv_are_written(record: Record, tmp_path: Path) -> None:
    """Three files with the same numbers."""
    written = write_report([record], tmp_path / "night.html")
    assert written == [tmp_path / name for name in ("night.html", "night.json", "night.csv")]
    assert written[0].read_text(encoding="utf-8").startswith("<!doctype html>")
    comparison = compare([record])
    assert json.loads(written[1].read_text()) == json.loads(json.dumps(comparison.as_json()))
    assert written[2].read_text() == comparison.as_csv()


def test_a_folder_that_does_not_exist_is_refused(record: Record, tmp_path: Path) -> None:
    """One sentence instead of a traceback."""
    place = tmp_path / "none" / "report.html"
    with pytest.raises(ConfigError) as caught:
        write_report([record], place)
    assert (
        str(caught.value) == f"{place}: must be a file that can be written, got No such file or directory. Name another folder."
    )


def test_another_ending_is_refused(record: Record, tmp_path: Path) -> None:
    """The numbers beside the page take its name, so the page must not take theirs."""
    with pytest.raises(ConfigError) as caught:
        write_report([record], tmp_path / "report.json")
    assert str(caught.value) == f"{tmp_path / 'report.json'}: must be a file name that ends in .html, got .json."
    with pytest.raises(ConfigError) as caught:
        write_report([record], tmp_path / "report")
    assert str(caught.value) == f"{tmp_path / 'report'}: must be a file name that ends in .html, got no ending."
