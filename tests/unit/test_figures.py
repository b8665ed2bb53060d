"""What the figures show, against the rows they come from."""

import re
from pathlib import Path

import numpy as np
import pytest

from rtctl.compare import compare, measure
from rtctl.record.reader import Record, read_record
from rtctl.report.figures import effort_against_error, figure_data, lateness_histogram
from tests.synthetic_record import InventedArm, Motion, motion_record
from tests.unit.test_series import unpack


@pytest.fixture(scope="module")
def records(tmp_path_factory: pytest.TempPathFactory) -> list[Record]:
    """Two invented runs, the second stopped by a tracking error."""
    folder = tmp_path_factory.mktemp("figures")
    arm = InventedArm(n=2, units=("rad", "m"), joint_names=("turn", "slide"))
    motions = {"a": Motion(moving_s=0.5), "b": Motion(moving_s=0.5, error_rad=0.03, stop_s=0.4, cause=12, seed=2)}
    terms = {"a": ("p", "d", "g"), "b": ("x", "y", "z")}
    return [
        read_record(motion_record(folder / f"{name}.record", motion, arm=arm, terms={name: terms[name]}))
        for name, motion in motions.items()
    ]


def test_curves_come_from_the_rows(records: list[Record]) -> None:
    """Positions, errors, torques and their terms have the extremes of their columns; the error only while it counts."""
    data = figure_data(records, compare(records).metrics)
    for record, shown in zip(records, data["records"], strict=True):
        columns = record.columns
        live = (columns["mode"] == 2) & (columns["qd_ref"] != 0.0).any(axis=1)
        for j in range(2):
            error = (columns["q_ref"] - columns["q"])[live, j]
            for packed, values in [
                (shown["position"][j], columns["q"][:, j]),
                (shown["error"][j], error),
                (shown["torque"][j]["out"], columns["tau_out"][:, j]),
                *zip(shown["torque"][j]["terms"], columns["terms"][:, :, j].T, strict=True),
            ]:
                back = unpack(packed)
                span = max(np.ptp(values), 1e-12)
                assert abs(np.nanmin(back) - values.min()) < 1e-4 * span
                assert abs(np.nanmax(back) - values.max()) < 1e-4 * span


def test_accumulated_effort_ends_at_the_metric(records: list[Record]) -> None:
    """The last point of the curve is the number in the table."""
    data = figure_data(records, compare(records).metrics)
    for record, shown in zip(records, data["records"], strict=True):
        assert np.nanmax(unpack(shown["effort"])) == pytest.approx(measure(record).effort_nm2_s, rel=1e-6)


def test_joints_terms_units_limits_and_stops_are_named(records: list[Record]) -> None:
    """The script gets names and units from the header, and one stop mark at its time."""
    data = figure_data(records, compare(records).metrics)
    assert data["joints"] == [
        {"name": "turn", "unit": "rad", "torqueUnit": "N m", "limit": 20.0},
        {"name": "slide", "unit": "m", "torqueUnit": "N", "limit": 20.0},
    ]
    assert [shown["terms"] for shown in data["records"]] == [["p", "d", "g"], ["x", "y", "z"]]
    assert data["records"][0]["stops"] == []
    [(time_s, text)] = data["records"][1]["stops"]
    assert time_s == pytest.approx(0.4, abs=0.002)
    assert text == "tracking_error (category 1)"
    assert data["records"][1]["reference"] is None  # the same reference is drawn once


def test_another_reference_is_drawn_too(records: list[Record]) -> None:
    """Records of different references show each their own."""
    header = records[1].header
    changed = {**header, "hashes": {**header["hashes"], "reference": "0" * 64}}
    pair = [records[0], Record(**{**vars(records[1]), "header": changed})]
    assert all(shown["reference"] for shown in figure_data(pair, compare(pair).metrics)["records"])


def test_effort_against_error_has_a_named_mark_per_record(records: list[Record]) -> None:
    """Units on both axes, a label for each record, and a stopped run says so."""
    svg = effort_against_error(compare(records).metrics)
    assert "effort [N² m² s]" in svg
    assert "RMS tracking error [mrad]" in svg
    assert re.findall(r">(a|b, stopped)</text>", svg) != []
    assert svg.count("fill=") == 2
    assert effort_against_error([]) == ""


def test_the_histogram_counts_every_cycle_and_shows_the_tail(records: list[Record]) -> None:
    """The axis reaches past the latest cycle, and there is a line per record."""
    metrics = compare(records).metrics
    svg = lateness_histogram(records, metrics)
    assert svg.count('class="step"') == 2
    latest_us = max(found.late_max_ns for found in metrics) / 1e3
    ticks = [float(text) for text in re.findall(r'text-anchor="middle">([\d.e+]+)</text>', svg)]
    assert max(ticks) > latest_us
    assert "wake-up after the deadline [µs]" in svg


def test_a_run_without_late_cycles_has_no_histogram(records: list[Record]) -> None:
    """In lock-step there is no lateness to show."""
    columns = {**records[0].columns, "now_ns": records[0].columns["deadline_ns"]}
    record = Record(**{**vars(records[0]), "columns": columns})
    assert lateness_histogram([record], [measure(record)]) == ""


def test_figures_of_an_empty_record_are_empty(tmp_path: Path) -> None:
    """A run without rows still gives a page."""
    record = read_record(motion_record(tmp_path / "e.record", Motion(ready_s=0.0, moving_s=0.0, settled_s=0.0)))
    data = figure_data([record], [measure(record)])
    assert np.isnan(unpack(data["records"][0]["effort"])).all()
